"""k₂ and I/(M R²) of polytropes as functions of the index, for arrays, and back to the index.

`polytrope` solves one index at a time; likelihoods of structure observables need millions. Both logarithms fall
as 2 log10(5 - n) towards n = 5; what is left is smooth. It is interpolated through a few solved polytropes by
Chebyshev polynomials and then tabulated as a cubic spline, which costs the same for any index.

Indices are clipped to [0, `LARGEST_TABULATED_INDEX`]: a wide tail ends where the most concentrated stars do.
"""

from functools import lru_cache

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import ArrayLike
from scipy.interpolate import CubicSpline

from stellerg.structure.polytrope import polytrope

__all__ = [
    "LARGEST_TABULATED_INDEX",
    "index_of_log10_apsidal_constant",
    "index_of_log10_moment_of_inertia_factor",
    "log10_apsidal_constant",
    "log10_moment_of_inertia_factor",
]

LARGEST_TABULATED_INDEX = 4.95  # judgement: w = 60, well above that of any star on or near the main sequence
# Polytropes solved, and the pole of the variable -ln(5.2 - n) in which they and the knots are spread. By trial: the
# error is 6e-8 dex at most (2e-8 with 26; 9e-6 with a pole at 6); solving 24 takes 0.3 s.
_SOLVED = 24
_POLE = 5.2
_KNOTS = 513  # of the splines; they add 1e-10 dex
_SLOPE = 2.0 / np.log(10.0)  # of -2 log10(5 - n), times 5 - n
_NEWTON_STEPS = 2  # from the inverse spline, itself good to 1e-6: to rounding


class _Relation:
    """One logarithm y(n) = spline(n) + 2 log10(5 - n), falling, and its inverse."""

    def __init__(self, index: np.ndarray, smooth: np.ndarray):
        self._smooth = CubicSpline(index, smooth)
        self._slope = self._smooth.derivative()
        values = self.value(index)
        self._last, self._first = values[-1], values[0]
        self._inverse = CubicSpline(values[::-1], index[::-1])

    def value(self, index: ArrayLike) -> np.ndarray:
        index = np.clip(np.asarray(index, float), 0.0, LARGEST_TABULATED_INDEX)
        return self._smooth(index) + 2.0 * np.log10(5.0 - index)

    def index(self, value: ArrayLike) -> np.ndarray:
        given = np.asarray(value, float)
        value = np.clip(given, self._last, self._first)
        index = self._inverse(value)
        for _ in range(_NEWTON_STEPS):
            slope = self._slope(index) - _SLOPE / (5.0 - index)
            index = np.clip(index - (self.value(index) - value) / slope, 0.0, LARGEST_TABULATED_INDEX)
        # exactly at the ends, which rounding would miss by an ulp
        return np.where(given >= self._first, 0.0, np.where(given <= self._last, LARGEST_TABULATED_INDEX, index))


@lru_cache(maxsize=1)
def _relations() -> tuple[_Relation, _Relation]:
    """Relations of k₂ and of I/(M R²); solved once."""
    ends = np.log(_POLE - np.array([0.0, LARGEST_TABULATED_INDEX]))

    def spread(share):  # from -1 and 1 to the two ends
        index = _POLE - np.exp(ends[0] + (ends[1] - ends[0]) * 0.5 * (share + 1.0))
        return np.clip(index, 0.0, LARGEST_TABULATED_INDEX)

    share, places = chebyshev.chebpts2(_SOLVED), np.linspace(-1.0, 1.0, _KNOTS)
    solved, knots = spread(share), spread(places)
    knots[0], knots[-1] = 0.0, LARGEST_TABULATED_INDEX
    stars = [polytrope(index) for index in solved.tolist()]
    made = []
    for values in ([s.apsidal_constant for s in stars], [s.moment_of_inertia_factor for s in stars]):
        rest = np.log10(values) - 2.0 * np.log10(5.0 - solved)
        made.append(_Relation(knots, chebyshev.chebval(places, chebyshev.chebfit(share, rest, _SOLVED - 1))))
    return made[0], made[1]


def log10_apsidal_constant(index: ArrayLike) -> np.ndarray:
    """log10 k₂ of polytropes, k₂ half the tidal Love number of degree 2.

    Parameters
    ----------
    index : array_like
        n, any shape; clipped to [0, `LARGEST_TABULATED_INDEX`].

    Returns
    -------
    ndarray
        Of the shape of `index`, dex; strictly falling with n. Within 1e-7 of `polytrope`.
    """
    return _relations()[0].value(index)


def log10_moment_of_inertia_factor(index: ArrayLike) -> np.ndarray:
    """log10 of I/(M R²) of polytropes; parameters and accuracy as `log10_apsidal_constant`."""
    return _relations()[1].value(index)


def index_of_log10_apsidal_constant(value: ArrayLike) -> np.ndarray:
    """Index n of the polytrope with log10 k₂ = `value`, the inverse of `log10_apsidal_constant`.

    Parameters
    ----------
    value : array_like
        dex, any shape; values that no tabulated polytrope has give the nearest end of [0, `LARGEST_TABULATED_INDEX`].

    Returns
    -------
    ndarray
        Of the shape of `value`.
    """
    return _relations()[0].index(value)


def index_of_log10_moment_of_inertia_factor(value: ArrayLike) -> np.ndarray:
    """Index n of the polytrope with log10 I/(M R²) = `value`; as `index_of_log10_apsidal_constant`."""
    return _relations()[1].index(value)
