"""A mixture of structure seen in n, in w or in ln w: density, range, quantiles, mean and standard deviation.

Densities of other coordinates come from the one over q = ln w, f(x) = f(q) |dq/dx|: with w = 3/(5 - n),
dq/dn = 1/(5 - n) and dq/dw = 1/w.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from stellerg.structure.distributions import Beta, Normal
from stellerg.structure.model import Component, Coordinate, Mixture

__all__ = ["View"]

_NEGLIGIBLE = 1e-9  # judgement: a family without sharp ends is taken to end where half of this lies beyond
_TOUCHING = 1e-9  # ranges that touch are equal but for rounding
_NODE, _WEIGHT = np.polynomial.legendre.leggauss(40)


@dataclass(frozen=True)
class View:
    """One mixture seen in one coordinate.

    Attributes
    ----------
    mixture : Mixture
    coordinate : Coordinate
    """

    mixture: Mixture
    coordinate: Coordinate

    @property
    def atoms(self) -> tuple[tuple[float, float], ...]:
        """Values that have a probability of their own: (value, probability)."""
        parts = zip(self.mixture.weights, self.mixture.components, strict=True)
        return tuple((self._end(part, part.family.value), weight) for weight, part in parts if part.is_point)

    @property
    def ranges(self) -> tuple[tuple[float, float], ...]:
        """Where the probability is, all but 1e-9 of families without sharp ends: (lower, upper), apart, rising."""
        ends = sorted(
            tuple(self._end(part, x) for x in piece) for part in self.mixture.components for piece in _pieces(part)
        )
        found = [ends[0]]
        for lower, upper in ends[1:]:
            if lower > found[-1][1] + _TOUCHING:
                found.append((lower, upper))
            else:
                found[-1] = (found[-1][0], max(found[-1][1], upper))
        return tuple(found)

    def density(self, x: np.ndarray) -> np.ndarray:
        """Density at x, of the parts that are no points: it integrates to 1 less their probability."""
        x = np.asarray(x, float)
        out = np.zeros(x.shape)
        inside = x < 5.0 if self.coordinate is Coordinate.INDEX else np.ones(x.shape, bool)
        if self.coordinate is Coordinate.COEFFICIENT:
            inside = x > 0.0
        q = self.coordinate.to_log_coefficient(x[inside])
        slope = self.coordinate.log_slope(q)
        for weight, part in zip(self.mixture.weights, self.mixture.components, strict=True):
            if not part.is_point:
                out[inside] += weight * np.exp(part.log_density(q) - slope)
        return out

    def quantile(self, p: float) -> float:
        """Value at cumulative probability p."""
        if len(self.mixture.components) == 1:
            (part,) = self.mixture.components
            return self._end(part, float(part.family.quantile(np.float64(p))))
        with np.errstate(over="ignore"):
            return float(self.coordinate.from_log_coefficient(self.mixture.quantile(np.float64(p))))

    @property
    def mean(self) -> float:
        """Mean; infinite for w where a density on n reaches n = 5."""
        return self._expectation(lambda x: x)

    @property
    def standard_deviation(self) -> float:
        """Standard deviation; infinite where the mean is."""
        mean = self.mean
        return math.sqrt(self._expectation(lambda x: (x - mean) ** 2)) if math.isfinite(mean) else math.inf

    def _expectation(self, function: Callable) -> float:
        total = 0.0
        for weight, part in zip(self.mixture.weights, self.mixture.components, strict=True):
            if part.is_point:
                total += weight * float(function(self._end(part, part.family.value)))
                continue
            if self.coordinate is Coordinate.COEFFICIENT and _reaches_five(part):
                return math.inf
            panels = _panels(part)
            a, b = panels[:-1, None], panels[1:, None]
            q = 0.5 * (a + b) + 0.5 * (b - a) * _NODE
            mass = 0.5 * (b - a) * _WEIGHT * np.exp(part.log_density(q))
            with np.errstate(over="ignore"):
                total += weight * float((function(self.coordinate.from_log_coefficient(q)) * mass).sum() / mass.sum())
        return total

    def _end(self, part: Component, value: float) -> float:
        """A value of a component's own coordinate in this one, without rounding where they are the same."""
        if part.coordinate is self.coordinate:
            return float(value)
        with np.errstate(over="ignore"):
            return float(self.coordinate.from_log_coefficient(part.coordinate.to_log_coefficient(value)))


def _pieces(part: Component) -> list[tuple[float, float]]:
    """Ranges of a component in its own coordinate."""
    family = part.family
    if isinstance(family, (Normal, Beta)):
        tails = family.quantile(np.array([0.5 * _NEGLIGIBLE, 1.0 - 0.5 * _NEGLIGIBLE]))
        return [tuple(end if abs(x - end) < 1e-6 else float(x) for x, end in zip(tails, family.support, strict=True))]
    if part.is_point or not hasattr(family, "heights"):
        return [family.support]
    points, heights = family.points, family.heights
    cells = zip(points, points[1:], heights, heights[1:], strict=False)
    return [(a, b) for a, b, left, right in cells if left > 0.0 or right > 0.0]


def _panels(part: Component) -> np.ndarray:
    """Panels to the end of the support: the mean of w = exp(q) weighs the upper tail more than the density does."""
    end = part.coordinate.to_log_coefficient(part.family.support[1])
    return np.unique(np.append(part.panels, end)) if np.isfinite(end) else part.panels


def _reaches_five(part: Component) -> bool:
    """Whether the density is not negligible at n = 5, where w is infinite."""
    return part.coordinate is Coordinate.INDEX and part.family.panels[-1] >= 5.0
