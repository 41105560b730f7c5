"""Quadrature over densities of ln w star by star: after structure observables, or where the binding energy is curved.

    ln Y = w . ln obs + q + ln f(q, M, R, mu)

Given q the rest is a narrow kernel (ln f to second order about the means of the measured quantities). The density of q
is piecewise linear, so each cell has a closed integral, in the kernel's cumulative and its first and second integrals
over the score: exact for kernels much narrower and much wider than a cell.
"""

from dataclasses import dataclass, field
from functools import cached_property

import numpy as np
from numpy.polynomial import hermite_e
from scipy.special import ndtr, ndtri

from stellerg.binding import MEAN_MOLECULAR_WEIGHT, Kind
from stellerg.engines.answer import REPORTED
from stellerg.engines.intervals import mass_score
from stellerg.engines.kernels import expansion_error
from stellerg.problem import Problem
from stellerg.status import Status
from stellerg.structure.informed import Cells, cells_of

__all__ = ["CellsAnswer", "cells_refusal"]

_ROOT_2PI = np.sqrt(2.0 * np.pi)
_STARS = 128  # treated together: bounds memory, changes no bit
_STEPS = 100
_TOLERANCE = 1e-11
_NARROWEST = 1e-7  # of a kernel, in ln Y: an exact one is taken for this wide
_STEP = 0.02  # in the logarithms of mass, radius and molecular weight: for derivatives of the share
_WORST = 2e-4  # bound on the error of the cumulative above which a star is refused; the error is some times smaller
_FOLLOWED = ("mass", "radius", "mean_molecular_weight")
_ORDERS = (2, 3, 4, 5, 6, 8)


def _polynomial(order: int) -> np.ndarray:
    return np.pad(hermite_e.herme2poly([0.0] * order + [1.0]), (0, 8 - order))


_HE = {order: _polynomial(order) for order in range(9)}


@dataclass(frozen=True)
class CellsAnswer:
    """Distributions by cells of ln w. See `stellerg.engines.answer.Answer`."""

    problem: Problem
    diagnostics: dict = field(default_factory=dict)

    def take(self, which: np.ndarray) -> "CellsAnswer":
        """Return some of the stars."""
        return CellsAnswer(self.problem.take(which))

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
        for rows, output, sums in self._sums():
            out[0, rows, output], out[1, rows, output] = sums.moments
        return out

    @cached_property
    def numerical_error(self) -> np.ndarray:
        """Estimated error of the cumulative, (star, output): of the cells (against half as many) and the expansions."""
        p = np.array(REPORTED)
        quantiles = self.quantile(p)
        error = _expansion_error(self.problem)
        for rows, output, sums in self._sums(coarser=True):
            below, _ = sums.evaluate(quantiles[rows, output])
            # a rule of second order: half as many cells have four times the error
            error[rows, output] += np.abs(below - p).max(axis=1) / 3.0
        return error + 1e-9

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """ln Y at cumulative probabilities p (m,): (star, output, m)."""
        p = np.atleast_1d(np.asarray(p, float))
        out = np.empty((len(self.problem), len(self.problem.outputs), len(p)))
        for rows, output, sums in self._sums():
            out[rows, output] = sums.quantile(p)
        return out

    def cumulative(self, log_value: np.ndarray) -> np.ndarray:
        """Cumulative probability at ln Y (star, output, m)."""
        return self._evaluate(log_value, 0)

    def density(self, log_value: np.ndarray) -> np.ndarray:
        """Density over ln Y at (star, output, m)."""
        return self._evaluate(log_value, 1)

    def _evaluate(self, log_value, which):
        out = np.empty(log_value.shape)
        for rows, output, sums in self._sums():
            out[rows, output] = sums.evaluate(log_value[rows, output])[which]
        return out

    def _sums(self, coarser: bool = False):
        """Yield (rows, output, _Sums)."""
        for rows, cells in _densities(self.problem):
            for start in range(0, len(rows), _STARS):
                some = rows[start : start + _STARS]
                here = cells.take(np.arange(start, start + len(some)))
                part = self.problem.take(some)
                for output in range(len(part.outputs)):
                    yield some, output, _Sums.of(part, output, here.halved() if coarser else here)


def _densities(problem: Problem):
    """Yield (rows, cells) of stars whose mass lies in one interval of the model."""
    interval = mass_score(problem).interval
    for number, piece in enumerate(problem.interior.intervals):
        rows = np.flatnonzero(interval == number)
        if not rows.size:
            continue
        if problem.interior.cells:
            yield rows, problem.interior.cells[number].take(rows)
        else:
            yield rows, cells_of(piece.mixture, None, len(rows))


def cells_refusal(problem: Problem) -> np.ndarray:
    """Why stars are refused, (star,): 0 not, 1 the mass lies in several intervals, 2 the expansions are too coarse."""
    straddles = mass_score(problem).interval < 0
    coarse = (_expansion_error(problem) > _WORST).any(axis=1)
    return np.where(straddles, 1, np.where(coarse, 2, 0))


@dataclass(frozen=True)
class _Share:
    """ln f of one output at ln w, and its derivatives in the inputs, (star, m[, input])."""

    value: np.ndarray
    slope: np.ndarray
    curved: np.ndarray  # what the second order adds to the mean, (star, m)
    skew: np.ndarray  # and to the third cumulant, (star, m)


def _share(problem: Problem, output: int, q: np.ndarray) -> _Share:
    """Expand ln f about the means of the measured quantities."""
    zero = np.zeros(q.shape)
    kind = Kind(int(problem.kinds[output]))
    slope = np.broadcast_to(problem.output_weights(output)[:, None, :], (*q.shape, len(problem.inputs)))
    if problem.binding.constant or kind in (Kind.NONE, Kind.COEFFICIENT):
        return _Share(zero, slope, zero, zero)
    latents = problem.log_latents(problem.log_mean)
    known = {"mean_molecular_weight": np.full((len(q), 1), np.log(MEAN_MOLECULAR_WEIGHT)), "radius": None}
    known |= {name: latents[:, k, None] for k, name in enumerate(problem.latents)}

    def at(**moved):
        here = [known[name] if name not in moved else known[name] + moved[name] for name in _FOLLOWED]
        return problem.binding.log_share(kind, q, *here)

    names = [n for n in _FOLLOWED if n in problem.latents and (n != "radius" or problem.binding.ionisation is not None)]
    value = at()
    first = {n: (at(**{n: _STEP}) - at(**{n: -_STEP})) / (2.0 * _STEP) for n in names}
    forms = {
        n: np.broadcast_to(problem.latent_input_weights[:, problem.latent(n)], (len(q), len(problem.inputs)))
        for n in names
    }
    for name in names:
        slope = slope + first[name][:, :, None] * forms[name][:, None, :]
    covariance = problem.log_covariance
    along = {n: np.einsum("smj,sjk,sk->sm", slope, covariance, forms[n]) for n in names}
    mean, skew = zero, zero
    for a, one in enumerate(names):
        for two in names[a:]:
            if one == two:
                second = (at(**{one: _STEP}) - 2.0 * value + at(**{one: -_STEP})) / _STEP**2
                times = 1.0
            else:
                second = at(**{one: _STEP, two: _STEP}) - at(**{one: _STEP, two: -_STEP})
                second = (second - at(**{one: -_STEP, two: _STEP}) + at(**{one: -_STEP, two: -_STEP})) / (4 * _STEP**2)
                times = 2.0
            shared = np.einsum("sj,sjk,sk->s", forms[one], covariance, forms[two])
            mean = mean + 0.5 * times * second * shared[:, None]
            skew = skew + 3.0 * times * second * along[one] * along[two]
    return _Share(value, slope, mean, skew)


def _cumulants(problem: Problem) -> np.ndarray:
    if not problem.inputs:
        return np.zeros((4, len(problem), 0))
    return np.stack([m.log_cumulants for m in problem.measured], axis=2)


def _expansion_error(problem: Problem) -> np.ndarray:
    """Bound on the error of the expansions, (star, output)."""
    cumulants = _cumulants(problem)
    error = np.zeros((len(problem), len(problem.outputs)))
    for output in range(len(problem.outputs)):
        q = np.full((len(problem), 1), 0.25)
        share = _share(problem, output, q)
        weight = share.slope[:, 0]
        variance = np.maximum(problem.variance_of(weight), 1e-30)
        powers = np.stack([weight**k for k in range(3, 7)])
        whole = (powers * cumulants).sum(axis=-1)
        whole[0] += share.skew[:, 0]
        narrow = np.sqrt(variance) < _NARROWEST
        standard = whole / np.sqrt(variance) ** np.arange(3, 7)[:, None]
        sd = np.sqrt(variance)
        # a density of ln w wider than the kernel damps what is left out, most at its sharp ends by this
        width = np.hypot(sd, _spread(problem) if problem.structured[output] else 0.0)
        # third derivatives of ln f: the second order changes by about a third of itself within one relative error of
        # what it follows; 0.4 is the height of a normal density
        widest = np.abs(problem.log_sd).max(axis=1, initial=0.0)
        left_out = expansion_error(standard) * sd / width + 0.4 * np.abs(share.curved[:, 0]) * widest / (3.0 * width)
        error[:, output] = np.where(narrow, 0.0, left_out)
    return error


def _spread(problem: Problem) -> np.ndarray:
    """Standard deviation of ln w, (star,); 0 where the mass lies in several intervals."""
    interval, spread = mass_score(problem).interval, np.zeros(len(problem))
    for number, piece in enumerate(problem.interior.intervals):
        rows = np.flatnonzero(interval == number)
        own = problem.interior.cells
        spread[rows] = own[number].take(rows).moments[1] if own else piece.mixture.moments[1]
    return spread


@dataclass(frozen=True)
class _Sums:
    """Kernels smeared over cells of y = q + ln f, (star, cell) each; `series` (star, 9) of the kernel's expansion."""

    low: np.ndarray
    high: np.ndarray
    at_low: np.ndarray
    at_high: np.ndarray
    sd: np.ndarray
    skew: np.ndarray
    series: dict[int, np.ndarray]

    @classmethod
    def of(cls, problem: Problem, output: int, cells: Cells) -> "_Sums":
        """Put the cells of ln w of one output into ln Y."""
        mean = problem.log_outputs(problem.log_mean)[:, output, None]
        if not problem.structured[output]:
            point = np.full((len(problem), 1), 1e-9)
            cells = Cells(-point, point, 0.5 / point, 0.5 / point, np.zeros(len(problem)))
            ends = (cells.low, cells.high)
            share = _share(problem, output, 0.0 * cells.low)
        else:
            edges = [_share(problem, output, q) for q in (cells.low, cells.high)]
            ends = tuple(q + s.value + s.curved for q, s in zip((cells.low, cells.high), edges, strict=True))
            share = _share(problem, output, 0.5 * (cells.low + cells.high))
        stretch = (cells.high - cells.low) / (ends[1] - ends[0])
        variance = np.einsum("smj,sjk,smk->sm", share.slope, problem.log_covariance, share.slope)
        sd = np.sqrt(np.maximum(variance, _NARROWEST**2))
        # cumulants of the inputs at the middle of the density: they vary with ln w by less than ln f does
        middle = share.slope[:, share.slope.shape[1] // 2]
        three, four, five = (
            (middle ** (k + 3) * _cumulants(problem)[k]).sum(axis=-1)[:, None] / sd ** (k + 3) for k in range(3)
        )
        three = three + share.skew / sd**3
        series = {}
        if np.abs(np.stack([three, four + 0.0 * three, five + 0.0 * three])).max() > 0.0:
            series = {
                2: three / 6.0,
                3: four / 24.0,
                5: three**2 / 72.0,
                4: five / 120.0,
                6: three * four / 144.0,
                8: three**3 / 1296.0,
            }
        return cls(
            mean + ends[0], mean + ends[1], cells.at_low * stretch, cells.at_high * stretch, sd, share.skew, series
        )

    def take(self, rows):
        """Return some of the stars."""
        parts = {name: getattr(self, name) for name in self.__dataclass_fields__}
        series = {k: v[rows] for k, v in parts.pop("series").items()}
        return _Sums(**{name: value[rows] for name, value in parts.items()}, series=series)

    @property
    def moments(self) -> tuple[np.ndarray, np.ndarray]:
        """Mean and standard deviation, (star,) each."""
        width, middle = self.high - self.low, 0.5 * (self.high + self.low)
        mass = 0.5 * width * (self.at_low + self.at_high)
        tilt = (self.at_high - self.at_low) * width**2 / 12.0
        mean = (mass * middle + tilt).sum(axis=-1)
        off = middle - mean[:, None]
        second = (mass * (off**2 + width**2 / 12.0 + self.sd**2) + 2.0 * off * tilt).sum(axis=-1)
        return mean, np.sqrt(second)

    def evaluate(self, t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Cumulative and density at t, (star, m) each."""
        cumulative, density = np.empty(t.shape), np.empty(t.shape)
        width = self.high - self.low
        slope = (self.at_high - self.at_low) / width
        for m in range(t.shape[1]):
            upper = self._integrals((t[:, m, None] - self.low) / self.sd)
            lower = self._integrals((t[:, m, None] - self.high) / self.sd)
            sd = self.sd
            # integrals over a cell of K and of (y - low) K, y rising as the score falls
            flat = sd * (upper[1] - lower[1])
            tilted = sd**2 * (upper[2] - lower[2]) - width * sd * lower[1]
            cumulative[:, m] = (self.at_low * flat + slope * tilted).sum(axis=-1)
            here = self.at_low * (upper[0] - lower[0]) + slope * (sd * (upper[1] - lower[1]) - width * lower[0])
            density[:, m] = here.sum(axis=-1)
        return np.clip(cumulative, 0.0, 1.0), np.maximum(density, 0.0)

    def _integrals(self, x: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """The kernel's cumulative at a score, and its first and second integrals from minus infinity."""
        below, bell = ndtr(x), np.exp(-0.5 * x * x) / _ROOT_2PI
        once = x * below + bell
        twice = 0.5 * ((x * x + 1.0) * below + x * bell)
        for order, size in self.series.items():
            # the integral of phi He_k is -phi He_(k-1)
            below = below - size * bell * _value(order, x)
            once = once + size * bell * _value(order - 1, x)
            twice = twice - size * bell * _value(order - 2, x)
        return below, once, twice

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """Values at cumulative probabilities p (m,): (star, m), by Newton's method kept inside a bracket."""
        mean, sd = self.moments
        low = np.repeat((self.low - 9.0 * self.sd).min(axis=1)[:, None], len(p), axis=1)
        high = np.repeat((self.high + 9.0 * self.sd).max(axis=1)[:, None], len(p), axis=1)
        t = np.clip(mean[:, None] + sd[:, None] * ndtri(p), low, high)
        active = np.arange(len(t))
        miss = np.full(t.shape, np.inf)
        for _ in range(_STEPS):
            here = self if len(active) == len(t) else self.take(active)
            cumulative, density = here.evaluate(t[active])
            error = cumulative - p
            low[active] = np.where(error < 0.0, t[active], low[active])
            high[active] = np.where(error >= 0.0, t[active], high[active])
            with np.errstate(divide="ignore", invalid="ignore"):
                newton = t[active] - error / density
            good = (newton > low[active]) & (newton < high[active]) & (np.abs(error) < 0.5 * miss[active])
            following = np.where(good, newton, 0.5 * (low[active] + high[active]))
            done = (np.abs(error) <= _TOLERANCE) | (high[active] - low[active] <= 1e-13 * (1.0 + np.abs(t[active])))
            near = good & (np.abs(error) <= 1e-7)
            miss[active] = np.abs(error)
            t[active] = np.where(done, t[active], following)
            active = active[~(done | near).all(axis=1)]
            if not active.size:
                break
        return t


def _value(order: int, x: np.ndarray) -> np.ndarray:
    """He_order(x)."""
    coefficients = _HE[order]
    value = np.full(x.shape, coefficients[order])
    for power in range(order - 1, -1, -1):
        value = value * x + coefficients[power]
    return value
