"""Densities of one structure variable: families with cumulative, quantile, density and moments.

A family is a frozen dataclass; `panels` are the points between which its density is smooth, close enough
for a fixed Gauss-Legendre rule.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.special import betainc, betaincinv, betaln, ndtr, ndtri, xlog1py, xlogy

__all__ = ["Beta", "Family", "Normal", "Point", "Tabulated", "Uniform"]

# Probabilities at which a density of unbounded or peaked form is cut into panels; 2e-13 lies outside.
_PANEL_SCORES = np.array([-7.3, -5.0, -3.0, -1.5, 0.0, 1.5, 3.0, 5.0, 7.3])


@dataclass(frozen=True)
class Point:
    """All probability at one value."""

    value: float

    @property
    def support(self) -> tuple[float, float]:
        """Ends of the support."""
        return self.value, self.value

    @property
    def mean(self) -> float:
        """Mean."""
        return self.value

    @property
    def standard_deviation(self) -> float:
        """Standard deviation."""
        return 0.0

    @property
    def panels(self) -> np.ndarray:
        """No panel: there is no density."""
        return np.array([self.value])

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """Value at cumulative probability p."""
        return np.full(np.shape(p), self.value)

    def cumulative(self, x: np.ndarray) -> np.ndarray:
        """Cumulative probability at x."""
        return np.where(np.asarray(x) >= self.value, 1.0, 0.0)


@dataclass(frozen=True)
class Uniform:
    """Uniform between two ends."""

    lower: float
    upper: float

    @property
    def support(self) -> tuple[float, float]:
        """Ends of the support."""
        return self.lower, self.upper

    @property
    def mean(self) -> float:
        """Mean."""
        return 0.5 * (self.lower + self.upper)

    @property
    def standard_deviation(self) -> float:
        """Standard deviation."""
        return (self.upper - self.lower) / np.sqrt(12.0)

    @property
    def panels(self) -> np.ndarray:
        """Points between which the density is smooth."""
        return np.linspace(self.lower, self.upper, 4)

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """Value at cumulative probability p."""
        return self.lower + (self.upper - self.lower) * np.asarray(p)

    def cumulative(self, x: np.ndarray) -> np.ndarray:
        """Cumulative probability at x."""
        return np.clip((np.asarray(x) - self.lower) / (self.upper - self.lower), 0.0, 1.0)

    def log_density(self, x: np.ndarray) -> np.ndarray:
        """Logarithm of the density at x."""
        inside = (x >= self.lower) & (x <= self.upper)
        return np.where(inside, -np.log(self.upper - self.lower), -np.inf)


@dataclass(frozen=True)
class Normal:
    """Normal restricted to [lower, upper] and renormalised."""

    location: float
    scale: float
    lower: float
    upper: float

    @cached_property
    def _ends(self) -> tuple[float, float]:
        """Tail probabilities below the lower end and above the upper end."""
        below = float(ndtr((self.lower - self.location) / self.scale))
        above = float(ndtr((self.location - self.upper) / self.scale))
        return below, above

    @property
    def kept(self) -> float:
        """Probability of the unrestricted normal between the ends."""
        return 1.0 - sum(self._ends)

    @property
    def support(self) -> tuple[float, float]:
        """Ends of the support."""
        return self.lower, self.upper

    @cached_property
    def mean(self) -> float:
        """Mean."""
        return self._moment(1, 0.0)

    @cached_property
    def standard_deviation(self) -> float:
        """Standard deviation."""
        return float(np.sqrt(self._moment(2, self.mean)))

    def _moment(self, order: int, about: float) -> float:
        node, weight = np.polynomial.legendre.leggauss(40)
        a, b = self.panels[:-1, None], self.panels[1:, None]
        x = 0.5 * (a + b) + 0.5 * (b - a) * node
        return float((0.5 * (b - a) * weight * (x - about) ** order * np.exp(self.log_density(x))).sum())

    @cached_property
    def panels(self) -> np.ndarray:
        """Points between which the density is smooth."""
        return np.unique(np.clip(self.location + self.scale * _PANEL_SCORES, self.lower, self.upper))

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """Value at cumulative probability p."""
        below, above = self._ends
        p = np.asarray(p)
        low = ndtri(below + self.kept * p)
        high = -ndtri(above + self.kept * (1.0 - p))
        return np.clip(self.location + self.scale * np.where(p < 0.5, low, high), self.lower, self.upper)

    def cumulative(self, x: np.ndarray) -> np.ndarray:
        """Cumulative probability at x."""
        inside = np.clip(x, self.lower, self.upper)
        return np.clip((ndtr((inside - self.location) / self.scale) - self._ends[0]) / self.kept, 0.0, 1.0)

    def log_density(self, x: np.ndarray) -> np.ndarray:
        """Logarithm of the density at x."""
        inside = (x >= self.lower) & (x <= self.upper)
        value = -0.5 * ((x - self.location) / self.scale) ** 2 - np.log(self.scale * np.sqrt(2 * np.pi) * self.kept)
        return np.where(inside, value, -np.inf)


@dataclass(frozen=True)
class Beta:
    """Beta density between two ends, both exponents at least 1 (bounded)."""

    alpha: float
    beta: float
    lower: float
    upper: float

    @property
    def support(self) -> tuple[float, float]:
        """Ends of the support."""
        return self.lower, self.upper

    @property
    def mean(self) -> float:
        """Mean."""
        return self.lower + (self.upper - self.lower) * self.alpha / (self.alpha + self.beta)

    @property
    def standard_deviation(self) -> float:
        """Standard deviation."""
        total = self.alpha + self.beta
        return (self.upper - self.lower) * np.sqrt(self.alpha * self.beta / (total + 1.0)) / total

    @cached_property
    def panels(self) -> np.ndarray:
        """Points between which the density is smooth; graded towards the ends, where it has power laws."""
        graded = self.quantile(
            np.array([1e-12, 1e-9, 1e-6, 1e-4, 1e-2, 0.1, 0.5, 0.9, 0.99, 1 - 1e-4, 1 - 1e-6, 1 - 1e-9])
        )
        return np.unique(np.concatenate([[self.lower], graded, [self.upper]]))

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """Value at cumulative probability p."""
        return self.lower + (self.upper - self.lower) * betaincinv(self.alpha, self.beta, np.asarray(p))

    def cumulative(self, x: np.ndarray) -> np.ndarray:
        """Cumulative probability at x."""
        return betainc(self.alpha, self.beta, self._share(x))

    def log_density(self, x: np.ndarray) -> np.ndarray:
        """Logarithm of the density at x."""
        share = self._share(x)
        value = xlogy(self.alpha - 1.0, share) + xlog1py(self.beta - 1.0, -share) - betaln(self.alpha, self.beta)
        inside = (x >= self.lower) & (x <= self.upper)
        return np.where(inside, value - np.log(self.upper - self.lower), -np.inf)

    def _share(self, x):
        return np.clip((np.asarray(x) - self.lower) / (self.upper - self.lower), 0.0, 1.0)


@dataclass(frozen=True)
class Tabulated:
    """Piecewise linear density through given points, normalised."""

    points: tuple[float, ...]
    heights: tuple[float, ...]

    @cached_property
    def _table(self) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Points, normalised heights, and cumulative at the points."""
        x, y = np.array(self.points), np.array(self.heights)
        mass = np.concatenate([[0.0], np.cumsum(0.5 * (y[1:] + y[:-1]) * np.diff(x))])
        return x, y / mass[-1], mass / mass[-1]

    @property
    def support(self) -> tuple[float, float]:
        """Ends of the support."""
        return self.points[0], self.points[-1]

    @cached_property
    def mean(self) -> float:
        """Mean: the moments of a linear piece are exact."""
        x, y, _ = self._table
        a, b = x[:-1], x[1:]
        return float(((b - a) * (y[:-1] * (2 * a + b) + y[1:] * (a + 2 * b)) / 6.0).sum())

    @cached_property
    def standard_deviation(self) -> float:
        """Standard deviation."""
        x, y, _ = self._table
        a, b = x[:-1] - self.mean, x[1:] - self.mean
        second = (b - a) / 12.0 * (y[:-1] * (3 * a * a + 2 * a * b + b * b) + y[1:] * (a * a + 2 * a * b + 3 * b * b))
        return float(np.sqrt(second.sum()))

    @property
    def panels(self) -> np.ndarray:
        """Points between which the density is smooth."""
        return self._table[0]

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """Value at cumulative probability p: a quadratic in each piece."""
        x, y, cumulative = self._table
        p = np.asarray(p, float)
        piece = np.clip(np.searchsorted(cumulative, p, side="right") - 1, 0, len(x) - 2)
        width, start = (x[1:] - x[:-1])[piece], y[piece]
        slope = ((y[1:] - y[:-1]) / (x[1:] - x[:-1]))[piece]
        rest = p - cumulative[piece]
        root = np.sqrt(np.maximum(start**2 + 2.0 * slope * rest, 0.0)) + start
        step = np.where(root > 0.0, 2.0 * rest / np.where(root > 0.0, root, 1.0), 0.0)
        return x[piece] + np.clip(step, 0.0, width)

    def cumulative(self, x: np.ndarray) -> np.ndarray:
        """Cumulative probability at x."""
        points, y, cumulative = self._table
        x = np.clip(x, points[0], points[-1])
        piece = np.clip(np.searchsorted(points, x, side="right") - 1, 0, len(points) - 2)
        step = x - points[piece]
        slope = ((y[1:] - y[:-1]) / (points[1:] - points[:-1]))[piece]
        return np.clip(cumulative[piece] + step * (y[piece] + 0.5 * slope * step), 0.0, 1.0)

    def log_density(self, x: np.ndarray) -> np.ndarray:
        """Logarithm of the density at x."""
        points, y, _ = self._table
        with np.errstate(divide="ignore"):
            return np.log(np.interp(x, points, y, left=0.0, right=0.0))


Family = Point | Uniform | Normal | Beta | Tabulated
