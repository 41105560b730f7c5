"""Quadrature under a calibrated coefficient: conditioned on the mass, everything else is a narrow kernel.

    ln Y = w . ln obs + a(M) + b(M) ln R + e + ln f(q, M)

Given the normal score z of the mass, ln R, e and the other inputs enter linearly (ln f to second order in q); the sum
over z is a trapezoid whose spacing follows the slope of the kernel's mean over its width, spectrally accurate. A
half-normal spread towards the end of the main sequence adds nodes of its own, and so does an input too far from normal
for the expansion of the kernel.
"""

from dataclasses import dataclass, field
from functools import cached_property, lru_cache

import numpy as np
from scipy.special import ndtri

from stellerg.binding import Kind
from stellerg.engines.answer import REPORTED
from stellerg.engines.carried import Carried, along, carried_forms, input_cumulants
from stellerg.engines.kernels import Kernels, expansion_error
from stellerg.measured import Shape
from stellerg.problem import Problem
from stellerg.status import Status

__all__ = ["CalibratedAnswer", "calibrated_refusal"]

_SPACING = 1.2  # of the nodes in normal scores, for a kernel much wider than the slope: exp(-2 pi^2/1.2^2) = 1e-6
_REACH = 4.7  # normal scores covered: 3e-6 lies outside
_WHERE_SLOPE_COUNTS = 3.5  # normal scores within which the slope sets the spacing
_COUNTS = np.array([8, 10, 12, 14, 16, 20, 24, 28, 32, 40, 48, 56, 64, 80, 96, 128, 160, 192, 256, 320, 384, 512])
_VALUES = 2**17  # star-node pairs treated together: bounds memory, changes no bit
# The bound on what the expansion leaves out exceeds the error 16 times or more (normal errors of 5 to 10 %, against
# nodes for every input): above the first an input gets nodes of its own (errors of the mass up to 5.5 %, and beyond),
# above the second the star is refused.
_GUARD = (3e-4, 1.6e-3)
_SMALL = 0.055
_WORST = 1.6e-3
_BOUND_OVER_ERROR = 16.0
_CURVED_ABOVE = np.log(6.0)  # ln M: below, the curvature of ln f moves the cumulative by less than 1e-5
_STEP = 0.05  # in ln w, ln R and ln mu, for derivatives of the share; the share is smooth on this scale
_ON_A_SIDE = 0.8  # Gauss-Legendre nodes on a side of a kink, for each of a trapezoid over both
_HALF, _HALF_WEIGHT = np.polynomial.legendre.leggauss(40)
_HALF_REACH = 6.0  # half-normal scales covered: 2e-9 lies outside


def calibrated_refusal(problem: Problem) -> np.ndarray:
    """Why stars are refused, (star,): 0 if they are not.

    1: the mass is a sum of terms that are not all normal; 2: errors too far from normal for the expansion.
    """
    of_mass = np.broadcast_to(
        problem.latent_input_weights[:, problem.latent("mass")], (len(problem), len(problem.inputs))
    )
    other = (of_mass != 0.0) & ~problem.log_normal
    refusal = np.where(other.any(axis=1) & ((of_mass != 0.0).sum(axis=1) > 1), 1, 0)
    left = np.flatnonzero(refusal == 0)
    if left.size and not problem.log_normal.all():
        _, error = _own_nodes(problem.take(left))
        refusal[left] = np.where((error > _WORST).any(axis=1), 2, 0)
    return refusal


def _own_nodes(problem: Problem) -> tuple[np.ndarray, np.ndarray]:
    """Input that needs nodes of its own (-1: none), and the error of the expansion that is left, (star, output)."""
    if problem.log_normal.all():
        return np.full((len(problem), len(problem.outputs)), -1), np.zeros((len(problem), len(problem.outputs)))
    carried = carried_forms(problem)
    counts = len(problem.outputs)
    beside = np.einsum("sff->sf", carried.covariance)[:, :counts]
    scatter = np.minimum(problem.interior.relation.scatter, problem.interior.relation.convective_sd)
    sd = np.sqrt(np.maximum(beside, 0.0) + scatter[:, None] ** 2)
    free = (np.arange(len(problem.inputs)) != carried.through[:, None])[:, None, :]
    # ln R enters with a slope between those with and without the coefficient's
    bare = carried.forms[:, :counts]
    radius = carried.forms[:, [counts]]
    weights = np.maximum(np.abs(bare), np.abs(bare + radius)) * free
    cumulants = input_cumulants(problem)
    powers = np.stack([weights**k for k in range(3, 7)])
    standard = sd ** np.arange(3, 7)[:, None, None]
    each = powers * cumulants[:, :, None, :] / standard[..., None]
    whole = expansion_error(np.abs(each).sum(axis=-1))
    if not problem.inputs:
        return np.full(whole.shape, -1), whole
    single = expansion_error(np.abs(each))
    worst = np.argmax(single, axis=2)
    rest = np.where(np.arange(len(problem.inputs)) == worst[:, :, None], 0.0, each)
    of_mass = problem.latent_input_weights[:, problem.latent("mass")]
    small = np.sqrt(problem.variance_of(np.broadcast_to(of_mass, (len(problem), len(problem.inputs))))) <= _SMALL
    needs = whole > np.where(small, *_GUARD)[:, None]
    left = expansion_error(np.abs(rest).sum(axis=-1))
    return np.where(needs, worst, -1), np.where(needs, left, whole)


@dataclass(frozen=True)
class CalibratedAnswer:
    """Distributions under a calibration of outputs that carry structure. See `stellerg.engines.answer.Answer`."""

    problem: Problem
    diagnostics: dict = field(default_factory=dict)

    def take(self, which: np.ndarray) -> "CalibratedAnswer":
        """Return some of the stars."""
        return CalibratedAnswer(self.problem.take(which))

    def failure(self, star: int) -> str:
        """Nothing fails."""
        return ""

    @property
    def status(self) -> np.ndarray:
        """Always OK, (star,)."""
        return np.full(len(self.problem), Status.OK, np.uint8)

    @property
    def log_mean(self) -> np.ndarray:
        """Mean of ln Y, (star, output)."""
        return self._moments[0]

    @property
    def log_sd(self) -> np.ndarray:
        """Standard deviation of ln Y, (star, output)."""
        return self._moments[1]

    @cached_property
    def _moments(self) -> np.ndarray:
        out = np.empty((2, len(self.problem), len(self.problem.outputs)))
        for rows, output, kernels in self._kernels():
            out[0, rows, output], out[1, rows, output] = kernels.moments
        return out

    @cached_property
    def numerical_error(self) -> np.ndarray:
        """Estimated error of the cumulative, (star, output): against half as many nodes, and of the expansion."""
        p = np.array(REPORTED)
        error = _own_nodes(self.problem)[1] / _BOUND_OVER_ERROR
        quantiles = self.quantile(p)
        for rows, output, kernels in self._kernels(coarser=2):
            below, _ = kernels.evaluate(quantiles[rows, output])
            # the error of a spectral rule falls with the square of the number of nodes in the exponent
            error[rows, output] += np.abs(below - p).max(axis=1) ** 2 + 1e-7
        return error

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """ln Y at cumulative probabilities p (m,): (star, output, m)."""
        p = np.atleast_1d(np.asarray(p, float))
        out = np.empty((len(self.problem), len(self.problem.outputs), len(p)))
        for rows, output, kernels in self._kernels():
            out[rows, output] = kernels.quantile(p)
        return out

    def cumulative(self, log_value: np.ndarray) -> np.ndarray:
        """Cumulative probability at ln Y (star, output, m)."""
        return self._evaluate(log_value, 0)

    def density(self, log_value: np.ndarray) -> np.ndarray:
        """Density over ln Y at (star, output, m)."""
        return self._evaluate(log_value, 1)

    def _evaluate(self, log_value, which):
        out = np.empty(log_value.shape)
        for rows, output, kernels in self._kernels():
            out[rows, output] = kernels.evaluate(log_value[rows, output])[which]
        return out

    def _kernels(self, coarser: int = 1):
        """Yield (rows, output, Kernels) of stars with as many nodes of each sort."""
        problem = self.problem
        own = _own_nodes(problem)[0]
        alone = (own >= 0).any(axis=1)  # an input gets nodes of its own for one output, and not for another
        for rows in (np.flatnonzero(~alone),) if (~alone).any() else ():
            for some, output, kernels in _sorted(problem.take(rows), own[rows, 0], coarser):
                yield rows[some], output, kernels
        rows = np.flatnonzero(alone)
        for output in range(len(problem.outputs)) if rows.size else ():
            for some, _, kernels in _sorted(problem.take(rows).only(np.array([output])), own[rows, output], coarser):
                yield rows[some], output, kernels


def _sorted(problem: Problem, own: np.ndarray, coarser: int):
    """Yield (rows, output, Kernels) of stars in groups alike."""
    relation, carried = problem.interior.relation, carried_forms(problem)
    first, second = _plan(problem, carried, own)
    sorts = [first, second, own + 1, relation.widening > 0.0, carried.through + 1, relation.convective > 0.0]
    sorts += [relation.convective < 1.0, _curved(problem)]
    sorts += [~np.isnan(_kinks(problem, named)) for named in (carried.through, own)]
    for rows, sort in _alike(sorts):
        counts = (int(sort[0]), int(sort[1]))
        size = max(1, _VALUES // (counts[0] * counts[1] * (len(_HALF) if sort[3] else 1)))
        for start in range(0, len(rows), size):
            some = rows[start : start + size]
            work = _Nodes(problem.take(some), carried.take(some), counts, int(sort[2]) - 1, bool(sort[7]), coarser)
            for output in range(len(problem.outputs)):
                yield some, output, work.kernels(output)


def _alike(sorts: list[np.ndarray]):
    """Yield (rows, values) of stars that agree in several small whole numbers, (star,) each."""
    code, scale = np.zeros(len(sorts[0]), np.int64), 1
    for values in sorts:
        code += scale * values
        scale *= int(values.max(initial=0)) + 1
    order = np.argsort(code, kind="stable")
    starts = np.flatnonzero(np.diff(code[order], prepend=-1))
    for rows in np.split(order, starts[1:]):
        yield rows, [int(values[rows[0]]) for values in sorts]


def _curved(problem: Problem) -> np.ndarray:
    """Whether a kernel of a star is not normal, (star,): inputs that are not log-normal, or a curved share."""
    other = (~problem.log_normal).any(axis=1)
    return other | (~problem.binding.constant & (problem.interior.relation.log_mass > _CURVED_ABOVE))


def _plan(problem: Problem, carried: Carried, own: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """How many nodes over the score of the mass and of the input with nodes of its own, (star,) each."""
    relation = problem.interior.relation
    score = np.linspace(-_WHERE_SLOPE_COUNTS, _WHERE_SLOPE_COUNTS, 11)[None, :]
    count, outputs = len(problem), len(problem.outputs)
    log_mass, shift = along(problem, carried, score)
    height, slope = relation.line(log_mass)
    radius = carried.mean[:, outputs, None] + shift[:, outputs]
    mean = shift[:, :outputs] + (height + slope * radius)[:, None, :]
    steepest = np.abs(np.diff(mean, axis=2)).max(axis=2) / (score[0, 1] - score[0, 0])
    beside = carried.covariance
    straight = np.einsum("sff->sf", beside)[:, :outputs, None]
    follow = slope[:, None, :]
    variance = straight + 2.0 * follow * beside[:, :outputs, outputs, None]
    variance = variance + follow**2 * beside[:, outputs, outputs][:, None, None]
    scatter = np.where(
        relation.convective > 0.0, np.minimum(relation.scatter, relation.convective_sd), relation.scatter
    )
    variance = variance.min(axis=2) + scatter[:, None] ** 2
    ratio = (steepest / np.sqrt(variance)).max(axis=1)
    moving = (carried.mass_slope > 0.0) | (carried.through >= 0)
    first = np.where(moving, _count(ratio), 1)
    second = np.ones(count, int)
    for j in np.unique(own[own >= 0]):
        rows = np.flatnonzero(own == j)
        form = carried.forms[rows, :, j]
        size = np.abs(form[:, :outputs]) + np.abs(form[:, [outputs]] * np.abs(slope[rows]).max(axis=1)[:, None])
        step = problem.measured[j].take(rows).log_quantile(score)
        steep = np.abs(np.diff(step, axis=1)).max(axis=1) / (score[0, 1] - score[0, 0])
        left = variance[rows] - form[:, :outputs] ** 2 * problem.log_sd[rows, j, None] ** 2
        left = np.maximum(left, scatter[rows, None] ** 2)
        second[rows] = _count((size * steep[:, None] / np.sqrt(left)).max(axis=1))
    return first, second


def _count(ratio: np.ndarray) -> np.ndarray:
    wanted = 2.0 * _REACH / _SPACING * np.hypot(1.0, ratio)
    return _COUNTS[np.minimum(np.searchsorted(_COUNTS, wanted), len(_COUNTS) - 1)]


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
        score = np.linspace(-_REACH, _REACH, count // coarser)[None, :]
        weight = np.exp(-0.5 * score**2)
    else:
        node, share = _legendre(int(_ON_A_SIDE * count) // coarser)
        sides = [(-_REACH, kink[:, None]), (kink[:, None], _REACH)]
        score = np.concatenate([0.5 * (a + b) + 0.5 * (b - a) * node for a, b in sides], axis=1)
        weight = np.concatenate([0.5 * (b - a) * share for a, b in sides], axis=1) * np.exp(-0.5 * score**2)
    return score, weight / weight.sum(axis=1, keepdims=True)


def _kinks(problem: Problem, through: np.ndarray) -> np.ndarray:
    """Score of the kink of the input that each star names, (star,); NaN where its distribution is smooth."""
    kink = np.full(len(problem), np.nan)
    for j in np.unique(through[through >= 0]):
        measured = problem.measured[j]
        rows = np.flatnonzero((through == j) & (measured.shape == Shape.SPLIT_NORMAL))
        kink[rows] = ndtri(measured.lower[rows] / (measured.lower[rows] + measured.upper[rows]))
    return kink


class _Nodes:
    """The nodes of stars of one sort, shared by their outputs."""

    def __init__(self, problem: Problem, carried: Carried, counts, own: int, curved: bool, coarser: int):
        self.problem, self.carried, self.curved, self.own = problem, carried, curved, own
        relation = problem.interior.relation
        kinks = [_kinks(problem, named) for named in (carried.through, np.full(len(problem), own))]
        kinks = [None if np.isnan(kink).any() else kink for kink in kinks]
        score, weight = _rule(counts[0], coarser, kinks[0])
        second, second_weight = _rule(counts[1], coarser, kinks[1])
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
            part = self._part(output, *nodes, relation.scatter[:, None], gain)
            parts.append(((1.0 - share) * weight, *part))
        if (relation.convective > 0.0).any():
            height = np.broadcast_to(relation.log_convective[:, None], self.log_mass.shape)
            part = self._part(output, self.log_mass, height, 0.0 * height, self.mean, relation.convective_sd, 0.0)
            parts.append((share * self.weight, *part))
        if len(parts) == 1:
            return Kernels.of(*parts[0])
        weight, mean, sd = (np.concatenate([part[k] for part in parts], axis=1) for k in range(3))
        cumulants = None if parts[0][3] is None else np.concatenate([part[3] for part in parts], axis=2)
        return Kernels.of(weight, mean, sd, cumulants)

    def _part(self, output, log_mass, height, slope, means, scatter, gain):
        """Mean, standard deviation and cumulants of the kernels of one component."""
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
            return mean, sd, None
        shared = slope * (v[one, r] + on_radius * v[r, r] + gm * v[r, m]) + (1.0 + gq) * scatter**2
        cumulants = [3.0 * gqq * shared**2 + 0.0 * sd, 0.0 * sd, 0.0 * sd]
        forms = self.carried.forms
        for j in np.flatnonzero((self.cumulants[0] != 0.0).any(axis=0)):
            weight = forms[:, one, j, None] + on_radius * forms[:, r, j, None] + gm * forms[:, m, j, None]
            power = weight * weight
            for k in range(3):
                power = power * weight
                cumulants[k] = cumulants[k] + power * self.cumulants[k][:, j, None]
        return mean, sd, np.stack(cumulants)

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
