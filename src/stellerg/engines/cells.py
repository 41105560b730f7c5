"""Quadrature over densities of ln w star by star: after structure observables, or where the binding energy is curved.

    ln Y = w . ln obs + q + ln f(q, M, R, mu)

Given q the rest is a narrow kernel (ln f to second order about the means of the measured quantities). The density of q
is piecewise linear, so each cell has a closed integral, in the kernel's cumulative and its first and second integrals
over the score: exact for kernels much narrower and much wider than a cell.
"""

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import hermite_e
from scipy.special import ndtr

from stellerg.binding import MEAN_MOLECULAR_WEIGHT, Kind
from stellerg.engines.carried import input_cumulants
from stellerg.engines.intervals import mass_score
from stellerg.engines.inversion import first_guess, invert
from stellerg.engines.kernels import expansion_error
from stellerg.engines.summed import SummedAnswer
from stellerg.problem import Problem
from stellerg.structure.informed import Cells, cells_of

__all__ = ["CellsSums", "cells_refusal"]

_ROOT_2PI = np.sqrt(2.0 * np.pi)
_STARS = 128  # treated together: bounds memory, changes no bit
_REACH = 9.0  # normal scores of a kernel that a bracket covers
_NARROWEST = 1e-7  # of a kernel, in ln Y: an exact one is taken for this wide
_STEP = 0.02  # in the logarithms of mass, radius and molecular weight: for derivatives of the share
_WORST = 2e-4  # bound on the error of the cumulative above which a star is refused; the error is some times smaller
_HOPELESS = 0.1  # and where a look at the first term left out is not worth it
_FOLLOWED = ("mass", "radius", "mean_molecular_weight")


def _polynomial(order: int) -> np.ndarray:
    return hermite_e.herme2poly([0.0] * order + [1.0])


_HE = {order: _polynomial(order) for order in range(12)}


@dataclass(frozen=True)
class CellsSums:
    """Kernels smeared over the cells of each star. See `stellerg.engines.summed.Sums`."""

    def parts(self, problem: Problem, *, coarser: bool = False):
        """Yield (rows, output, _Sums)."""
        for rows, cells in _densities(problem):
            for start in range(0, len(rows), _STARS):
                some = rows[start : start + _STARS]
                here = cells.take(np.arange(start, start + len(some)))
                part = problem.take(some)
                for output in range(len(part.outputs)):
                    yield some, output, _Sums.of(part, output, here.halved() if coarser else here)

    def other_error(self, problem: Problem) -> np.ndarray:
        """What third derivatives of ln f would add, (star, output)."""
        return _expansion_error(problem)[1] + 1e-9

    def error_of(self, difference: np.ndarray) -> np.ndarray:
        """A rule of second order: half as many cells have four times the error."""
        return difference / 3.0


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
    bound, curved = _expansion_error(problem)
    error = (bound + curved).max(axis=1)
    # the bound exceeds the error by far where the density of ln w is wide: there the first term left out decides
    unsure = np.flatnonzero(~straddles & (error > _WORST) & (error < _HOPELESS))
    if unsure.size:
        error[unsure] = SummedAnswer(problem.take(unsure), CellsSums()).first_left_out() + curved[unsure].max(axis=1)
    return np.where(straddles, 1, np.where(error > _WORST, 2, 0))


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


def _expansion_error(problem: Problem) -> np.ndarray:
    """Bounds on the errors of the expansion of the kernel, and of ln f, (2, star, output)."""
    cumulants = input_cumulants(problem)
    error = np.zeros((2, len(problem), len(problem.outputs)))
    widest = np.abs(problem.log_sd).max(axis=1, initial=0.0)
    for output in range(len(problem.outputs)):
        share = _share(problem, output, np.full((len(problem), 1), 0.25))
        weight = share.slope[:, 0]
        sd = np.sqrt(np.maximum(problem.variance_of(weight), 1e-30))
        whole = (np.stack([weight**k for k in range(3, 7)]) * cumulants).sum(axis=-1)
        whole[0] += share.skew[:, 0]
        # a density of ln w wider than the kernel damps what is left out, most at its sharp ends by this
        width = np.hypot(sd, _spread(problem) if problem.structured[output] else 0.0)
        moves = sd >= _NARROWEST
        bound = expansion_error(whole / sd ** np.arange(3, 7)[:, None]) * sd / width
        error[0, :, output] = np.where(moves, bound, 0.0)
        # third derivatives of ln f: the second order changes by about a third of itself within one relative error of
        # what it follows; 0.4 is the height of a normal density
        error[1, :, output] = np.where(moves, 0.4 * np.abs(share.curved[:, 0]) * widest / (3.0 * width), 0.0)
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
    """Kernels smeared over cells of y = q + ln f, (star, cell) each.

    `series` and `following` hold the coefficients of He_k in the expansion of the kernel, and in its next order.
    """

    low: np.ndarray
    high: np.ndarray
    at_low: np.ndarray
    at_high: np.ndarray
    sd: np.ndarray
    series: dict[int, np.ndarray]
    following: dict[int, np.ndarray]

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
        three, four, five, six = (
            (middle ** (k + 3) * input_cumulants(problem)[k]).sum(axis=-1)[:, None] / sd ** (k + 3) for k in range(4)
        )
        three = three + share.skew / sd**3
        series, following = {}, {}
        if max(np.abs(x).max() for x in (three, four, five, six)) > 0.0:
            series = {
                2: three / 6.0,
                3: four / 24.0,
                5: three**2 / 72.0,
                4: five / 120.0,
                6: three * four / 144.0,
                8: three**3 / 1296.0,
            }
            following = {
                5: six / 720.0,
                7: four**2 / 1152.0 + three * five / 720.0,
                9: three**2 * four / 1728.0,
                11: three**4 / 31104.0,
            }
        heights = (cells.at_low * stretch, cells.at_high * stretch)
        return cls(mean + ends[0], mean + ends[1], *heights, sd, series, following)

    def take(self, rows):
        """Return some of the stars."""
        parts = {name: getattr(self, name) for name in self.__dataclass_fields__}
        orders = [{k: v[rows] for k, v in parts.pop(name).items()} for name in ("series", "following")]
        return _Sums(*(value[rows] for value in parts.values()), *orders)

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
        cumulative, density = self._sum(t, self._integrals)
        return np.clip(cumulative, 0.0, 1.0), np.maximum(density, 0.0)

    def left_out(self, t: np.ndarray) -> np.ndarray:
        """What the next order of the expansion would add to the cumulative at t, (star, m)."""
        if not self.following:
            return np.zeros(t.shape)
        return self._sum(t, lambda x: self._terms(x, self.following))[0]

    def _sum(self, t, integrals):
        cumulative, density = np.empty(t.shape), np.empty(t.shape)
        width, sd = self.high - self.low, self.sd
        slope = (self.at_high - self.at_low) / width
        for m in range(t.shape[1]):
            upper = integrals((t[:, m, None] - self.low) / sd)
            lower = integrals((t[:, m, None] - self.high) / sd)
            # integrals over a cell of K and of (y - low) K, y rising as the score falls
            flat = sd * (upper[1] - lower[1])
            tilted = sd**2 * (upper[2] - lower[2]) - width * sd * lower[1]
            cumulative[:, m] = (self.at_low * flat + slope * tilted).sum(axis=-1)
            here = self.at_low * (upper[0] - lower[0]) + slope * (sd * (upper[1] - lower[1]) - width * lower[0])
            density[:, m] = here.sum(axis=-1)
        return cumulative, density

    @staticmethod
    def _terms(x: np.ndarray, series: dict[int, np.ndarray]) -> tuple:
        """-phi sum_k c_k He_k at a score, and its first and second integrals."""
        bell = np.exp(-0.5 * x * x) / _ROOT_2PI
        # the integral of phi He_k is -phi He_(k-1)
        return tuple(
            sign * bell * sum(size * _value(order - less, x) for order, size in series.items())
            for less, sign in ((0, -1.0), (1, 1.0), (2, -1.0))
        )

    def _integrals(self, x: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """The kernel's cumulative at a score, and its first and second integrals from minus infinity."""
        below, bell = ndtr(x), np.exp(-0.5 * x * x) / _ROOT_2PI
        once = x * below + bell
        twice = 0.5 * ((x * x + 1.0) * below + x * bell)
        if not self.series:
            return below, once, twice
        return tuple(a + b for a, b in zip((below, once, twice), self._terms(x, self.series), strict=True))

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """Values at cumulative probabilities p (m,): (star, m)."""
        reach = _REACH * self.sd
        start = first_guess(p, self.moments, np.zeros(len(reach)))
        return invert(self, p, (self.low - reach).min(axis=1), (self.high + reach).max(axis=1), start)


def _value(order: int, x: np.ndarray) -> np.ndarray:
    """He_order(x)."""
    coefficients = _HE[order]
    value = np.full(x.shape, coefficients[order])
    for power in range(order - 1, -1, -1):
        value = value * x + coefficients[power]
    return value
