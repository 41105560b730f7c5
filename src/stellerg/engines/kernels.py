"""Distributions of ln Y as sums of narrow kernels: normal ones, with an expansion in the cumulants of their inputs.

    F(t) = sum_k W_k {Phi(x) - phi(x) [l3/6 He2 + l4/24 He3 + l3^2/72 He5 + l5/120 He4 + l3 l4/144 He6 + l3^3/1296 He8]}

with x = (t - mean_k)/sd_k and l the standardised cumulants (Edgeworth's expansion to third order; Kendall & Stuart, The
Advanced Theory of Statistics, vol. 1, ch. 6, from memory). The next order bounds what it leaves out.
"""

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import hermite_e
from scipy.special import ndtr

from stellerg.engines.inversion import first_guess, invert

__all__ = ["Kernels", "expansion_error"]

_ROOT_2PI = np.sqrt(2.0 * np.pi)
_REACH = 8.3  # normal scores: 1e-16 lies beyond


def _hermite(order: int) -> np.ndarray:
    """Coefficients of He_order over powers of x."""
    return hermite_e.herme2poly([0.0] * order + [1.0])


def _largest(order: int) -> float:
    x = np.linspace(0.0, 12.0, 4001)
    return float(np.abs(np.polynomial.polynomial.polyval(x, _hermite(order)) * np.exp(-0.5 * x**2)).max() / _ROOT_2PI)


_LARGEST = {order: _largest(order) for order in (5, 7, 9, 11)}


def expansion_error(standardised: np.ndarray) -> np.ndarray:
    """Bound on the fourth order of the expansion, which is left out; cumulants 3 to 6 on the first axis."""
    three, four, five, six = np.abs(standardised)
    return (
        six / 720.0 * _LARGEST[5]
        + (four**2 / 1152.0 + three * five / 720.0) * _LARGEST[7]
        + three**2 * four / 1728.0 * _LARGEST[9]
        + three**4 / 31104.0 * _LARGEST[11]
    )


@dataclass(frozen=True)
class Kernels:
    """Weighted kernels of stars.

    Attributes
    ----------
    weight, mean, sd : ndarray, (star, kernel)
        Weights sum to one over the kernels; sd is positive.
    series : tuple of ndarray, (star, kernel) each
        Coefficients over powers of x of the bracket of the expansion; empty where all inputs are normal.
    following : tuple of (int, ndarray)
        Order k and coefficient of He_k in the next order of the expansion.
    """

    weight: np.ndarray
    mean: np.ndarray
    sd: np.ndarray
    series: tuple[np.ndarray, ...] = ()
    following: tuple[tuple[int, np.ndarray], ...] = ()

    @classmethod
    def of(cls, weight, mean, sd, cumulants: np.ndarray | None) -> "Kernels":
        """Make kernels; `cumulants` 3 to 6, (4, star, kernel), or None."""
        if cumulants is None:
            return cls(weight, mean, sd)
        inverse = 1.0 / sd
        cube = inverse * inverse * inverse
        three = cumulants[0] * cube
        four = cumulants[1] * (cube * inverse)
        five = cumulants[2] * (cube * inverse * inverse)
        square = three * three
        he2, he3, he5 = three * (1.0 / 6.0), four * (1.0 / 24.0), square * (1.0 / 72.0)
        he4, he6, he8 = five * (1.0 / 120.0), three * four * (1.0 / 144.0), square * three * (1.0 / 1296.0)
        # He2 = x^2 - 1, He3 = x^3 - 3x, He4 = x^4 - 6x^2 + 3, He5 = x^5 - 10x^3 + 15x,
        # He6 = x^6 - 15x^4 + 45x^2 - 15, He8 = x^8 - 28x^6 + 210x^4 - 420x^2 + 105
        series = (
            3.0 * he4 - he2 - 15.0 * he6 + 105.0 * he8,
            15.0 * he5 - 3.0 * he3,
            he2 - 6.0 * he4 + 45.0 * he6 - 420.0 * he8,
            he3 - 10.0 * he5,
            he4 - 15.0 * he6 + 210.0 * he8,
            he5,
            he6 - 28.0 * he8,
            0.0 * he8,
            he8,
        )
        six = cumulants[3] * (cube * cube)
        following = (
            (5, six / 720.0),
            (7, four * four / 1152.0 + three * five / 720.0),
            (9, square * four / 1728.0),
            (11, square * square / 31104.0),
        )
        return cls(weight, mean, sd, series, following)

    def take(self, rows) -> "Kernels":
        """Return some of the stars."""
        series = tuple(c[rows] for c in self.series)
        following = tuple((order, c[rows]) for order, c in self.following)
        return Kernels(self.weight[rows], self.mean[rows], self.sd[rows], series, following)

    def left_out(self, t: np.ndarray) -> np.ndarray:
        """What the next order of the expansion would add to the cumulative at t, (star, m)."""
        out = np.zeros(t.shape)
        for m in range(t.shape[1]) if self.following else ():
            x = (t[:, m, None] - self.mean) / self.sd
            bell = self.weight * np.exp(-0.5 * x * x) / _ROOT_2PI
            for order, size in self.following:
                out[:, m] -= (bell * size * hermite_e.hermeval(x, [0.0] * order + [1.0])).sum(axis=-1)
        return out

    @property
    def moments(self) -> tuple[np.ndarray, np.ndarray]:
        """Mean and standard deviation, (star,) each."""
        mean = (self.weight * self.mean).sum(axis=-1)
        variance = (self.weight * (self.sd**2 + (self.mean - mean[:, None]) ** 2)).sum(axis=-1)
        return mean, np.sqrt(variance)

    @property
    def skewness(self) -> np.ndarray:
        """Third standardised cumulant of the sum of normal kernels, (star,)."""
        mean, sd = self.moments
        off = self.mean - mean[:, None]
        return (self.weight * off * (off**2 + 3.0 * self.sd**2)).sum(axis=-1) / sd**3

    def evaluate(self, t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Cumulative and density at t, (star, m) each."""
        cumulative, density = np.empty(t.shape), np.empty(t.shape)
        inverse = 1.0 / self.sd
        share = self.weight * inverse / _ROOT_2PI
        for m in range(t.shape[1]):  # a few quantiles; the arrays of kernels stay in the cache
            x = (t[:, m, None] - self.mean) * inverse
            bell = np.exp(-0.5 * x * x)
            below = ndtr(x)
            if self.series:
                bracket, slope = self._bracket(x)
                below = below - bell * bracket / _ROOT_2PI
                density[:, m] = (share * bell * (1.0 + x * bracket - slope)).sum(axis=-1)
            else:
                density[:, m] = (share * bell).sum(axis=-1)
            cumulative[:, m] = (self.weight * below).sum(axis=-1)
        return np.clip(cumulative, 0.0, 1.0), np.maximum(density, 0.0)

    def _bracket(self, x: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """The bracket of the expansion and its slope at x, by Horner's rule."""
        value, slope = self.series[-1], 0.0
        for coefficient in self.series[-2::-1]:
            slope = slope * x + value
            value = value * x + coefficient
        return value, slope

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """Values at cumulative probabilities p (m,): (star, m)."""
        reach = _REACH * self.sd
        start = first_guess(p, self.moments, self.skewness)
        return invert(self, p, (self.mean - reach).min(axis=1), (self.mean + reach).max(axis=1), start)
