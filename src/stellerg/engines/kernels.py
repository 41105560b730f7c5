"""Distributions of ln Y as sums of narrow kernels: normal ones, with an expansion in the cumulants of their inputs.

    F(t) = sum_k W_k {Phi(x) - phi(x) [l3/6 He2 + l4/24 He3 + l3^2/72 He5 + l5/120 He4 + l3 l4/144 He6 + l3^3/1296 He8]}

with x = (t - mean_k)/sd_k and l the standardised cumulants (Edgeworth's expansion to third order; Kendall & Stuart, The
Advanced Theory of Statistics, vol. 1, ch. 6, from memory). The next order bounds what it leaves out.
"""

from dataclasses import dataclass

import numpy as np
from numpy.polynomial import hermite_e
from scipy.special import ndtr

from stellerg.engines.inversion import invert

__all__ = ["Kernels", "expansion_error"]

_ROOT_2PI = np.sqrt(2.0 * np.pi)
_REACH = 8.3  # normal scores: 1e-16 lies beyond
_ORDERS = 9  # powers of x in the expansion of the cumulative


def _hermite(order: int) -> np.ndarray:
    """Coefficients of He_order over powers of x."""
    return hermite_e.herme2poly([0.0] * order + [1.0])


def _largest(order: int) -> float:
    x = np.linspace(0.0, 12.0, 4001)
    return float(np.abs(np.polynomial.polynomial.polyval(x, _hermite(order)) * np.exp(-0.5 * x**2)).max() / _ROOT_2PI)


_LARGEST = {order: _largest(order) for order in (5, 7, 9, 11)}
_POWERS = {order: np.pad(_hermite(order), (0, _ORDERS - order - 1)) for order in (2, 3, 4, 5, 6, 8)}


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
    series : ndarray or None, (star, kernel, 9)
        Coefficients over powers of x of the bracket of the expansion; None where all inputs are normal.
    """

    weight: np.ndarray
    mean: np.ndarray
    sd: np.ndarray
    series: np.ndarray | None = None

    @classmethod
    def of(cls, weight, mean, sd, cumulants: np.ndarray | None) -> "Kernels":
        """Make kernels; `cumulants` 3 to 5, (3, star, kernel), or None."""
        if cumulants is None:
            return cls(weight, mean, sd)
        three, four, five = (cumulants[k] / sd ** (k + 3) for k in range(3))
        terms = {
            2: three / 6.0,
            3: four / 24.0,
            5: three**2 / 72.0,
            4: five / 120.0,
            6: three * four / 144.0,
            8: three**3 / 1296.0,
        }
        series = np.zeros((*sd.shape, _ORDERS))
        for order, size in terms.items():
            series += size[..., None] * _POWERS[order]
        return cls(weight, mean, sd, series)

    def take(self, rows) -> "Kernels":
        """Return some of the stars."""
        series = None if self.series is None else self.series[rows]
        return Kernels(self.weight[rows], self.mean[rows], self.sd[rows], series)

    @property
    def moments(self) -> tuple[np.ndarray, np.ndarray]:
        """Mean and standard deviation, (star,) each."""
        mean = (self.weight * self.mean).sum(axis=-1)
        variance = (self.weight * (self.sd**2 + (self.mean - mean[:, None]) ** 2)).sum(axis=-1)
        return mean, np.sqrt(variance)

    def evaluate(self, t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Cumulative and density at t, (star, m) each."""
        cumulative, density = np.empty(t.shape), np.empty(t.shape)
        share = self.weight / (_ROOT_2PI * self.sd)
        slopes = None
        if self.series is not None:
            slopes = self.series[..., 1:] * np.arange(1, _ORDERS)
        for m in range(t.shape[1]):  # a few quantiles; the arrays of kernels stay in the cache
            x = (t[:, m, None] - self.mean) / self.sd
            bell = np.exp(-0.5 * x * x)
            below, at = ndtr(x), 1.0
            if self.series is not None:
                bracket, slope = self.series[..., -1], slopes[..., -1]
                for power in range(_ORDERS - 2, -1, -1):
                    bracket = bracket * x + self.series[..., power]
                for power in range(_ORDERS - 3, -1, -1):
                    slope = slope * x + slopes[..., power]
                below = below - bell / _ROOT_2PI * bracket
                at = 1.0 + x * bracket - slope
            cumulative[:, m] = (self.weight * below).sum(axis=-1)
            density[:, m] = (share * bell * at).sum(axis=-1)
        return np.clip(cumulative, 0.0, 1.0), np.maximum(density, 0.0)

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """Values at cumulative probabilities p (m,): (star, m)."""
        reach = _REACH * self.sd
        return invert(self, p, (self.mean - reach).min(axis=1), (self.mean + reach).max(axis=1))
