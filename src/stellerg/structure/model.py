"""Structure models: the conditional inverse cumulative ln w = S(u | ln M, ln R) of one uniform variate u.

w is the coefficient of the potential energy, Omega = -w G M^2/R; for a polytrope w = 3/(5 - n)
(Chandrasekhar 1939, An Introduction to the Study of Stellar Structure, ch. IV, eq. 90). A component is a
density on the index n, on w or on ln w; a mixture weighs components; a model gives one mixture to each
interval of mass. Every piece is normalised, so that it leaves the posterior of M and R untouched.
"""

from dataclasses import dataclass, field
from enum import Enum
from functools import cached_property

import numpy as np

from stellerg.structure.distributions import Family, Point

__all__ = ["AppliesTo", "Common", "Component", "Coordinate", "MassInterval", "Mixture", "StructureModel"]

_LN3 = float(np.log(3.0))
_BISECTIONS = 60  # halvings of a bracket a few units wide: to the last bit


class Coordinate(Enum):
    """The variable on which a density is stated."""

    INDEX = "index"
    COEFFICIENT = "coefficient"
    LOG_COEFFICIENT = "log_coefficient"

    def to_log_coefficient(self, x):
        """ln w of a value of this coordinate (infinite at n = 5)."""
        if self is Coordinate.INDEX:
            with np.errstate(divide="ignore"):
                return _LN3 - np.log(5.0 - np.asarray(x, float))
        return np.log(x) if self is Coordinate.COEFFICIENT else np.asarray(x, float)

    def from_log_coefficient(self, q):
        """Value of this coordinate at ln w = q."""
        if self is Coordinate.INDEX:
            return 5.0 - 3.0 * np.exp(-np.asarray(q))
        return np.exp(q) if self is Coordinate.COEFFICIENT else np.asarray(q)

    def log_slope(self, q):
        """Logarithm of d(coordinate)/d(ln w) at ln w = q."""
        if self is Coordinate.INDEX:
            return _LN3 - np.asarray(q)
        return np.asarray(q) if self is Coordinate.COEFFICIENT else np.zeros(np.shape(q))


@dataclass(frozen=True)
class Component:
    """A density on one coordinate, seen in q = ln w."""

    coordinate: Coordinate
    family: Family

    @property
    def is_point(self) -> bool:
        """Whether all probability is at one value."""
        return isinstance(self.family, Point)

    @cached_property
    def panels(self) -> np.ndarray:
        """Finite values of ln w between which the density is smooth, (panel + 1,)."""
        panels = self.coordinate.to_log_coefficient(self.family.panels)
        if np.isfinite(panels[-1]):
            return panels
        # a density that reaches n = 5 has an exponential tail in ln w: panels to a probability of 1e-12
        tail = self.coordinate.to_log_coefficient(self.family.quantile(1.0 - 10.0 ** -np.arange(2.0, 12.5)))
        return np.unique(np.concatenate([panels[:-1], tail[np.isfinite(tail)]]))

    def quantile(self, u: np.ndarray) -> np.ndarray:
        """ln w at cumulative probability u."""
        return self.coordinate.to_log_coefficient(self.family.quantile(u))

    def cumulative(self, q: np.ndarray) -> np.ndarray:
        """Cumulative probability at ln w = q."""
        if self.is_point:  # compared in ln w, where the point was computed
            return np.where(np.asarray(q) >= self.panels[0], 1.0, 0.0)
        return self.family.cumulative(self.coordinate.from_log_coefficient(q))

    def log_density(self, q: np.ndarray) -> np.ndarray:
        """Logarithm of the density over ln w."""
        return self.family.log_density(self.coordinate.from_log_coefficient(q)) + self.coordinate.log_slope(q)


@dataclass(frozen=True)
class Mixture:
    """Weighted components of ln w."""

    weights: tuple[float, ...]
    components: tuple[Component, ...]

    @cached_property
    def bracket(self) -> tuple[float, float]:
        """Finite values of ln w between which (all but 1e-12 of) the probability lies."""
        return min(c.panels[0] for c in self.components), max(c.panels[-1] for c in self.components)

    @property
    def is_point(self) -> bool:
        """Whether all probability is at one value."""
        return self.bracket[0] == self.bracket[1]

    def quantile(self, u: np.ndarray) -> np.ndarray:
        """ln w at cumulative probability u."""
        if len(self.components) == 1:
            return self.components[0].quantile(u)
        low = np.full(np.shape(u), self.bracket[0])
        high = np.full(np.shape(u), self.bracket[1])
        for _ in range(_BISECTIONS):
            middle = 0.5 * (low + high)
            below = self.cumulative(middle) < u
            low, high = np.where(below, middle, low), np.where(below, high, middle)
        return high

    def cumulative(self, q: np.ndarray) -> np.ndarray:
        """Cumulative probability at ln w = q."""
        return sum(w * c.cumulative(q) for w, c in zip(self.weights, self.components, strict=True))

    @cached_property
    def moments(self) -> tuple[float, float]:
        """Mean and standard deviation of ln w."""
        node, weight = np.polynomial.legendre.leggauss(40)
        first = second = 0.0
        for share, component in zip(self.weights, self.components, strict=True):
            if component.is_point:
                q, mass = component.panels, np.ones(1)
            else:
                a, b = component.panels[:-1, None], component.panels[1:, None]
                q = 0.5 * (a + b) + 0.5 * (b - a) * node
                mass = 0.5 * (b - a) * weight * np.exp(component.log_density(q))
                mass = mass / mass.sum()
            first += share * float((mass * q).sum())
            second += share * float((mass * q * q).sum())
        return first, float(np.sqrt(max(second - first**2, 0.0))) if self.bracket[0] < self.bracket[1] else 0.0


@dataclass(frozen=True)
class MassInterval:
    """The mixture that holds for log_lower <= ln M < log_upper (M in nominal solar masses)."""

    log_lower: float
    log_upper: float
    mixture: Mixture


@dataclass(frozen=True)
class AppliesTo:
    """The stars a model is meant for; enforced. Empty states: any."""

    mass: tuple[float, float] | None = None
    evolutionary_state: tuple[str, ...] = ()


@dataclass(frozen=True)
class Common:
    """How much of a model's uncertainty is common to stars, and to which.

    Attributes
    ----------
    fraction : float or None
        Of the variance of the normal score of u.
    within : str
        all, mass or the name of a column.
    standard_deviation : float or None
        Of ln w, where that is stated instead of a fraction.
    scale : float or None
        For ``mass``: of a Gaussian kernel in ln M.
    """

    fraction: float | None
    within: str
    standard_deviation: float | None = None
    scale: float | None = None


@dataclass(frozen=True)
class StructureModel:
    """A prior on the structure of stars, as read from a file of `priors/`.

    Attributes
    ----------
    name, summary, source : str
    intervals : tuple of MassInterval
        Adjacent, covering all masses.
    applies_to : AppliesTo
    common : Common or None
    text : str
        The file as it stands, kept with every run.
    training : tuple of int
        64-bit keys of the stars that a model was learned from: their data must not be used with it again.
    """

    name: str
    summary: str
    source: str
    intervals: tuple[MassInterval, ...]
    applies_to: AppliesTo = field(default_factory=AppliesTo)
    common: Common | None = None
    text: str = ""
    training: tuple[int, ...] = ()

    @property
    def needs(self) -> tuple[str, ...]:
        """What the model, or the rule that says where it applies, looks at: the mass, or nothing."""
        return ("mass",) if len(self.intervals) > 1 or self.applies_to.mass is not None else ()

    @cached_property
    def edges(self) -> np.ndarray:
        """Inner boundaries of the mass intervals in ln M, (interval - 1,)."""
        return np.array([piece.log_lower for piece in self.intervals[1:]])

    def cumulative(self, q: np.ndarray, log_mass: np.ndarray | None = None) -> np.ndarray:
        """Cumulative probability at ln w = q, any shape; `log_mass` of the same, where the model looks at it."""
        if len(self.intervals) == 1:
            return self.intervals[0].mixture.cumulative(q)
        which = np.searchsorted(self.edges, log_mass, side="right")
        return np.select(
            [which == number for number in range(len(self.intervals))],
            [piece.mixture.cumulative(q) for piece in self.intervals],
        )

    def quantile(self, u: np.ndarray, log_mass: np.ndarray | None = None, log_radius: np.ndarray | None = None):
        """S(u | ln M, ln R): ln w at cumulative probability u.

        Parameters
        ----------
        u : ndarray
            In (0, 1).
        log_mass, log_radius : ndarray, broadcastable to `u`, optional
            Needed only by models that look at them.

        Returns
        -------
        ndarray
            Of the shape of `u`.
        """
        if len(self.intervals) == 1:
            return self.intervals[0].mixture.quantile(u)
        which = np.broadcast_to(np.searchsorted(self.edges, log_mass, side="right"), np.shape(u))
        out = np.empty(np.shape(u))
        for number, piece in enumerate(self.intervals):
            here = which == number
            if here.any():
                out[here] = piece.mixture.quantile(u[here])
        return out
