"""The nodes over which quadrature under a calibrated coefficient sums, and the kernels at them."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy.special import ndtri

from stellerg.binding import Kind
from stellerg.engines.carried import Carried, along, input_cumulants
from stellerg.engines.kernels import Kernels
from stellerg.measured import Shape
from stellerg.problem import Problem

__all__ = ["GAIN_NODES", "REACH", "Nodes", "kinks"]

REACH = 4.7  # normal scores covered: 3e-6 lies outside
_ON_A_SIDE = 0.8  # Gauss-Legendre nodes on a side of a kink, for each of a trapezoid over both
_HALF, _HALF_WEIGHT = np.polynomial.legendre.leggauss(40)
_HALF_REACH = 6.0  # half-normal scales covered: 2e-9 lies outside
_STEP = 0.05  # in ln w, ln R and ln mu, for derivatives of the share; the share is smooth on this scale
GAIN_NODES = len(_HALF)
_LEGENDRE, _LEGENDRE_WEIGHT = np.polynomial.legendre.leggauss(24)
_SEARCH, _ROUNDS = 17, 4  # points, and rounds, of a search for where prior and likelihood of ln w overlap
_WIDEST = 9.0  # standard deviations of the prior that are searched
_DROP = 25.0  # in the logarithm: 1e-11


@lru_cache(maxsize=64)
def _legendre(count: int) -> tuple[np.ndarray, np.ndarray]:
    return np.polynomial.legendre.leggauss(count)


def _rule(count: int, coarser: int, kink: np.ndarray | None) -> tuple[np.ndarray, np.ndarray]:
    """Scores and weights, (1, node) or (star, node): one node for what does not vary.

    A trapezoid; where a distribution has a kink (at a score, (star,)), Gauss-Legendre on either side of it.
    """
    if count == 1:
        return np.zeros((1, 1)), np.ones((1, 1))
    if kink is None:
        score = np.linspace(-REACH, REACH, count // coarser)[None, :]
        weight = np.exp(-0.5 * score**2)
    else:
        node, share = _legendre(int(_ON_A_SIDE * count) // coarser)
        sides = [(-REACH, kink[:, None]), (kink[:, None], REACH)]
        score = np.concatenate([0.5 * (a + b) + 0.5 * (b - a) * node for a, b in sides], axis=1)
        weight = np.concatenate([0.5 * (b - a) * share for a, b in sides], axis=1) * np.exp(-0.5 * score**2)
    return score, weight / weight.sum(axis=1, keepdims=True)


def kinks(problem: Problem, through: np.ndarray) -> np.ndarray:
    """Score of the kink of the input that each star names, (star,); NaN where its distribution is smooth."""
    kink = np.full(len(problem), np.nan)
    for j in np.unique(through[through >= 0]):
        measured = problem.measured[j]
        rows = np.flatnonzero((through == j) & (measured.shape == Shape.SPLIT_NORMAL))
        kink[rows] = ndtri(measured.lower[rows] / (measured.lower[rows] + measured.upper[rows]))
    return kink


class Nodes:
    """The nodes of stars of one sort, shared by their outputs."""

    def __init__(self, problem: Problem, carried: Carried, counts, own: int, curved: bool, coarser: int):
        self.problem, self.carried, self.curved, self.own = problem, carried, curved, own
        relation = problem.interior.relation
        split = [kinks(problem, named) for named in (carried.through, np.full(len(problem), own))]
        split = [None if np.isnan(kink).any() else kink for kink in split]
        score, weight = _rule(counts[0], coarser, split[0])
        second, second_weight = _rule(counts[1], coarser, split[1])
        log_mass, shift = along(problem, carried, score)
        height, slope = relation.line(log_mass)
        repeat = second.shape[1]
        # the node axis: score of the mass, then score of the input with nodes of its own
        self.log_mass, self.height, self.slope = (np.repeat(v, repeat, axis=1) for v in (log_mass, height, slope))
        both = (weight[:, :, None] * second_weight[:, None, :]).reshape(max(len(weight), len(second_weight)), -1)
        self.weight = np.broadcast_to(both, self.log_mass.shape)
        self.mean = carried.mean[:, :, None] + np.repeat(shift, repeat, axis=2)
        self.covariance = carried.covariance
        self.cumulants = input_cumulants(problem)
        free = (np.arange(len(problem.inputs)) != carried.through[:, None]) & (np.arange(len(problem.inputs)) != own)
        self.cumulants = np.where(free[None], self.cumulants, 0.0)
        if own >= 0:
            measured = problem.measured[own]
            moved = measured.log_quantile(second) - measured.log_mean[:, None]
            moved = np.tile(moved, (1, score.shape[1]))
            self.mean = self.mean + carried.forms[:, :, own, None] * moved[:, None, :]
            form = carried.forms[:, :, own]
            variance = problem.log_sd[:, own] ** 2
            self.covariance = self.covariance - variance[:, None, None] * form[:, :, None] * form[:, None, :]
        self.gain, self.gain_weight = None, None
        if (relation.widening > 0.0).any():
            x = 0.5 * _HALF_REACH * (_HALF + 1.0)
            share = np.exp(-0.5 * x**2) * _HALF_WEIGHT
            self.gain, self.gain_weight = relation.widening[:, None] * x, share / share.sum()

    def kernels(self, output: int) -> Kernels:
        """Kernels of one output."""
        relation = self.problem.interior.relation
        share = relation.convective[:, None]
        parts = []
        if (relation.convective < 1.0).any():
            weight, gain = self.weight, 0.0
            nodes = [self.log_mass, self.height, self.slope, self.mean]
            if self.gain is not None:
                more = self.gain.shape[1]
                nodes = [np.repeat(v, more, axis=-1) for v in nodes]
                weight = (weight[:, :, None] * self.gain_weight).reshape(len(weight), -1)
                gain = np.tile(self.gain, (1, self.log_mass.shape[1]))
            *part, evidence = self._part(output, *nodes, relation.scatter[:, None], gain, self._usual)
            parts.append(((1.0 - share) * weight, *part, evidence))
        if (relation.convective > 0.0).any():
            height = np.broadcast_to(relation.log_convective[:, None], self.log_mass.shape)
            nodes = (self.log_mass, height, 0.0 * height, self.mean)
            *part, evidence = self._part(output, *nodes, relation.convective_sd, 0.0, self._convective)
            parts.append((share * self.weight, *part, evidence))
        weight, mean, sd = (np.concatenate([part[k] for part in parts], axis=1) for k in range(3))
        cumulants = None if parts[0][3] is None else np.concatenate([part[3] for part in parts], axis=2)
        if parts[0][4] is not None:
            evidence = np.concatenate([part[4] for part in parts], axis=1)
            weight = weight * np.exp(evidence - evidence.max(axis=1, keepdims=True))
            weight = weight / weight.sum(axis=1, keepdims=True)
        return Kernels.of(weight, mean, sd, cumulants)

    def _usual(self, q: np.ndarray) -> np.ndarray:
        """Log likelihood of the structure observables at ln w."""
        return self.problem.interior.likelihood(q)

    def _convective(self, q: np.ndarray) -> np.ndarray:
        """The same of fully convective stars."""
        return self.problem.interior.convective_likelihood(q)

    def _part(self, output, log_mass, height, slope, means, scatter, gain, likelihood):
        """Mean, standard deviation, cumulants and log evidence of the kernels of one component."""
        problem, radius = self.problem, len(self.problem.outputs)
        kind = Kind(int(problem.kinds[output]))
        one, r, m = output, radius, radius + 1
        cov = self.covariance[..., None, None]
        v = {pair: cov[:, pair[0], pair[1], :, 0] for pair in ((one, one), (one, r), (one, m), (r, r), (r, m), (m, m))}
        mean = means[:, one]
        q = height + slope * means[:, r] + gain
        g, gq, gqq, gr, gm = self._share(kind, q, log_mass, means[:, r], means[:, m])
        on_radius = (1.0 + gq) * slope + gr
        own = ((1.0 + gq) * scatter) ** 2
        variance = v[one, one] + 2.0 * on_radius * v[one, r] + on_radius**2 * v[r, r] + own
        variance = variance + 2.0 * gm * (v[one, m] + on_radius * v[r, m]) + gm**2 * v[m, m]
        sd = np.sqrt(variance)
        mean = mean + q + g + 0.5 * gqq * (slope**2 * v[r, r] + scatter**2)
        if not self.curved:
            return mean, sd, None, None
        shared = slope * (v[one, r] + on_radius * v[r, r] + gm * v[r, m]) + (1.0 + gq) * scatter**2
        cumulants = [3.0 * gqq * shared**2 + 0.0 * sd, 0.0 * sd, 0.0 * sd, 0.0 * sd]
        forms = self.carried.forms
        for j in np.flatnonzero((self.cumulants[0] != 0.0).any(axis=0)):
            weight = forms[:, one, j, None] + on_radius * forms[:, r, j, None] + gm * forms[:, m, j, None]
            power = weight * weight
            for k in range(4):
                power = power * weight
                cumulants[k] = cumulants[k] + power * self.cumulants[k][:, j, None]
        if problem.interior.observed is None:
            return mean, sd, np.stack(cumulants), None
        own = slope**2 * v[r, r] + scatter**2  # variance of ln w
        informed = _inform(likelihood, q, own + 0.0 * q)
        follows = shared / own
        sd = np.sqrt(np.maximum(variance - follows**2 * (own - informed.variance), 1e-14))
        # what ln f bends, it bends over the narrower density of ln w
        kept = informed.variance / own
        cumulants[0] = cumulants[0] + follows**3 * informed.third + 3.0 * gqq * shared**2 * (kept**2 - 1.0)
        mean = mean - 0.5 * gqq * (own - informed.variance)
        return mean + follows * (informed.mean - q), sd, np.stack(cumulants), informed.log_evidence

    def _share(self, kind: Kind, q, log_mass, log_radius, log_molecular):
        """ln f with its derivatives in q (two), ln R and ln mu."""
        if kind == Kind.COEFFICIENT or self.problem.binding.constant:
            return 0.0, 0.0, 0.0, 0.0, 0.0

        def at(dq=0.0, dr=0.0, dm=0.0):
            here = (q + dq, log_mass, log_radius + dr, log_molecular + dm)
            return self.problem.binding.log_share(kind, *here)

        centre, up, down = at(), at(dq=_STEP), at(dq=-_STEP)
        slope_radius = 0.0
        if self.problem.binding.ionisation is not None:
            slope_radius = (at(dr=_STEP) - at(dr=-_STEP)) / (2.0 * _STEP)
        slope_molecular = 0.0
        if self.covariance[:, -1, -1].any():
            slope_molecular = (at(dm=_STEP) - at(dm=-_STEP)) / (2.0 * _STEP)
        return centre, (up - down) / (2.0 * _STEP), (up - 2.0 * centre + down) / _STEP**2, slope_radius, slope_molecular


@dataclass(frozen=True)
class _Informed:
    """ln w at nodes after structure observables: moments, and the logarithm of the mean likelihood."""

    mean: np.ndarray
    variance: np.ndarray
    third: np.ndarray
    log_evidence: np.ndarray


def _inform(likelihood, q: np.ndarray, variance: np.ndarray) -> _Informed:
    """Weigh a normal density of ln w with a likelihood: moments by Gauss-Legendre where their product counts."""
    sd = np.sqrt(variance)
    low, high = q - _WIDEST * sd, q + _WIDEST * sd

    def log_product(at):
        flat = likelihood(at.reshape(len(q), -1)).reshape(at.shape)
        return flat - 0.5 * ((at - q[..., None]) / sd[..., None]) ** 2

    for _ in range(_ROUNDS):
        step = (high - low) / (_SEARCH - 1)
        value = log_product(low[..., None] + step[..., None] * np.arange(_SEARCH))
        counts = value >= value.max(axis=-1, keepdims=True) - _DROP
        first = np.argmax(counts, axis=-1)
        last = _SEARCH - 1 - np.argmax(counts[..., ::-1], axis=-1)
        low, high = low + step * np.maximum(first - 1, 0), low + step * np.minimum(last + 1, _SEARCH - 1)
    half = 0.5 * (high - low)
    at = 0.5 * (high + low)[..., None] + half[..., None] * _LEGENDRE
    value = log_product(at)
    top = value.max(axis=-1)
    share = np.exp(value - top[..., None]) * _LEGENDRE_WEIGHT
    total = share.sum(axis=-1)
    share = share / total[..., None]
    mean = (share * at).sum(axis=-1)
    off = at - mean[..., None]
    evidence = top + np.log(total * half / (sd * np.sqrt(2.0 * np.pi)))
    return _Informed(mean, (share * off**2).sum(axis=-1), (share * off**3).sum(axis=-1), evidence)
