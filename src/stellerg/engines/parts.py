"""Distributions of the measured part X of ln Y = X + S(u), star axis first.

Each part has the total probability `mass` (star,), a window [`lower`, `upper`] (star,) outside which its
cumulative is 0 or `mass` to 1e-9, `take(rows)`, and `evaluate(x)` for x (star, m), which returns the
cumulative and the density.
"""

from dataclasses import dataclass, fields

import numpy as np
from scipy.special import ndtr

from stellerg.measured import Measured

__all__ = ["GaussianPart", "GridPart", "MassShift", "Part", "RestrictedPart", "SharpPart"]

_REACH = 8.3  # normal scores: 1e-16 lies beyond
_NODE, _WEIGHT = np.polynomial.legendre.leggauss(48)
_ROOT_2PI = np.sqrt(2.0 * np.pi)


def _take(part, rows):
    """Return the same kind of part for some rows."""
    changed = {}
    for f in fields(part):
        value = getattr(part, f.name)
        changed[f.name] = value.take(rows) if hasattr(value, "evaluate") or hasattr(value, "at") else value[rows]
    return type(part)(**changed)


@dataclass(frozen=True)
class SharpPart:
    """No spread: everything that enters is exact."""

    mean: np.ndarray

    @property
    def mass(self):
        """Total probability, (star,)."""
        return np.ones(len(self.mean))

    @property
    def lower(self):
        """Lower end of the window, (star,)."""
        return self.mean

    @property
    def upper(self):
        """Upper end of the window, (star,)."""
        return self.mean

    def take(self, rows):
        """Return some rows."""
        return _take(self, rows)

    def evaluate(self, x):
        """Cumulative (a step) and density (none) at x, (star, m)."""
        return np.where(x >= self.mean[:, None], 1.0, 0.0), np.zeros(x.shape)


@dataclass(frozen=True)
class GaussianPart:
    """Normal with mean and standard deviation (positive), (star,)."""

    mean: np.ndarray
    sd: np.ndarray

    @property
    def mass(self):
        """Total probability, (star,)."""
        return np.ones(len(self.mean))

    @property
    def lower(self):
        """Lower end of the window, (star,)."""
        return self.mean - _REACH * self.sd

    @property
    def upper(self):
        """Upper end of the window, (star,)."""
        return self.mean + _REACH * self.sd

    def take(self, rows):
        """Return some rows."""
        return _take(self, rows)

    def evaluate(self, x):
        """Cumulative and density at x, (star, m)."""
        score = (x - self.mean[:, None]) / self.sd[:, None]
        return ndtr(score), np.exp(-0.5 * score**2) / (_ROOT_2PI * self.sd[:, None])


@dataclass(frozen=True)
class GridPart:
    """Cumulative and density tabulated at start + i step, i = 0, ..., N - 1; cubic Hermite between.

    Attributes
    ----------
    start, step, lower, upper : ndarray, (star,)
    mean : ndarray, (star,)
        Mean of X.
    table, slope : ndarray, (star, N)
        Cumulative and density.
    tilted, tilted_slope : ndarray, (star, N)
        Integral of exp(x - mean) times the density up to a point, and its integrand.
    mass : ndarray, (star,)
        Total probability.
    """

    start: np.ndarray
    step: np.ndarray
    lower: np.ndarray
    upper: np.ndarray
    mean: np.ndarray
    table: np.ndarray
    slope: np.ndarray
    tilted: np.ndarray
    tilted_slope: np.ndarray
    mass: np.ndarray

    def take(self, rows):
        """Return some rows."""
        return _take(self, rows)

    def evaluate(self, x):
        """Cumulative and density at x, (star, m)."""
        index, t, inside, above = self._place(x)
        cumulative, density = self._hermite(self.table, self.slope, index, t)
        cumulative = np.where(above, self.mass[:, None], np.clip(cumulative, 0.0, 1.0))
        return cumulative, np.where(inside, np.maximum(density, 0.0), 0.0)

    def evaluate_tilted(self, x):
        """Cumulative, and integral of exp(x' - mean) f(x') up to x, (star, m)."""
        index, t, _, above = self._place(x)
        cumulative, _ = self._hermite(self.table, self.slope, index, t)
        tilted, _ = self._hermite(self.tilted, self.tilted_slope, index, t)
        return np.where(above, self.mass[:, None], np.clip(cumulative, 0.0, 1.0)), tilted

    def _place(self, x):
        """Cell and place in it, and whether x lies on the grid or above it."""
        place = (x - self.start[:, None]) / self.step[:, None]
        last = self.table.shape[1] - 1
        index = np.clip(np.floor(place), 0, last - 1).astype(np.intp)
        inside = (place >= 0.0) & (place <= last)
        return index, np.clip(place - index, 0.0, 1.0), inside, place >= last

    def _hermite(self, table, slopes, index, t):
        step = self.step[:, None]
        value = [np.take_along_axis(table, index + i, axis=1) for i in (0, 1)]
        slope = [np.take_along_axis(slopes, index + i, axis=1) * step for i in (0, 1)]
        rise = value[1] - value[0]
        quadratic = 3.0 * rise - 2.0 * slope[0] - slope[1]
        cubic = slope[0] + slope[1] - 2.0 * rise
        cumulative = value[0] + t * (slope[0] + t * (quadratic + t * cubic))
        return cumulative, (slope[0] + t * (2.0 * quadratic + 3.0 * t * cubic)) / step


@dataclass(frozen=True)
class MassShift:
    """How X moves with the normal score of the mass: ``slope * z``, or through the distribution of one input.

    Attributes
    ----------
    slope, centre : ndarray, (star,)
    measured : Measured or None
        If given, the shift is ``slope * (ln obs(z) - centre)``.
    """

    slope: np.ndarray
    centre: np.ndarray
    measured: Measured | None

    def take(self, rows):
        """Return some rows."""
        return MassShift(self.slope[rows], self.centre[rows], self.measured and self.measured.take(rows))

    def at(self, score):
        """Shift at scores, (star, m)."""
        if self.measured is None:
            return self.slope[:, None] * score
        return self.slope[:, None] * (self.measured.log_quantile(score) - self.centre[:, None])

    def score_of(self, shift):
        """Score at which a shift is reached, and |d score/d shift|, (star, m); slope must not be 0."""
        slope = self.slope[:, None]
        if self.measured is None:
            return shift / slope, np.abs(1.0 / slope) + 0.0 * shift
        score, log_slope = self.measured.score(shift / slope + self.centre[:, None])
        return score, np.exp(log_slope) / np.abs(slope)

    @property
    def direction(self):
        """+1 where the shift grows with the score, -1 where it falls, 0 where there is none, (star,)."""
        if self.measured is None or not len(self.slope):
            return np.sign(self.slope)
        two = self.measured.log_quantile(np.array([[-1.0, 1.0]]))
        return np.sign(self.slope * (two[:, 1] - two[:, 0]))


@dataclass(frozen=True)
class RestrictedPart:
    """X where the normal score of the mass lies in [low, high]: X = shift(z) + rest, z standard normal.

    Attributes
    ----------
    rest : GaussianPart, GridPart or SharpPart
    shift : MassShift
    low, high : ndarray, (star,)
    """

    rest: "GaussianPart | GridPart | SharpPart"
    shift: MassShift
    low: np.ndarray
    high: np.ndarray

    @property
    def mass(self):
        """Total probability, (star,): that of the interval of mass."""
        return ndtr(self.high) - ndtr(self.low)

    def _ends(self):
        low = np.clip(self.low, -_REACH, _REACH)[:, None]
        high = np.clip(self.high, -_REACH, _REACH)[:, None]
        return low, high

    def _shifts(self):
        return np.sort(np.concatenate([self.shift.at(end) for end in self._ends()], axis=1), axis=1)

    @property
    def lower(self):
        """Lower end of the window, (star,)."""
        return self._shifts()[:, 0] + self.rest.lower

    @property
    def upper(self):
        """Upper end of the window, (star,)."""
        return self._shifts()[:, 1] + self.rest.upper

    def take(self, rows):
        """Return some rows."""
        return _take(self, rows)

    def evaluate(self, x):
        """Cumulative and density at x, (star, m): Gauss-Legendre in z where the rest is neither 0 nor 1."""
        low, high = self._ends()
        direction = self.shift.direction[:, None]
        if not direction.any():
            cumulative, density = self.rest.evaluate(x - self.shift.at(np.zeros((len(x), 1))))
            return cumulative * self.mass[:, None], density * self.mass[:, None]
        full, slope = self.shift.score_of(x - self.rest.upper[:, None])  # the rest is wholly below x
        none, _ = self.shift.score_of(x - self.rest.lower[:, None])  # the rest is wholly above x
        full, none = np.clip(full, low, high), np.clip(none, low, high)
        certain = np.where(direction > 0, ndtr(full) - ndtr(low), ndtr(high) - ndtr(full))
        if isinstance(self.rest, SharpPart):
            inside = (full > low) & (full < high)
            return certain, np.where(inside, np.exp(-0.5 * full**2) / _ROOT_2PI * slope, 0.0)
        a, b = np.minimum(full, none)[:, :, None], np.maximum(full, none)[:, :, None]
        z = (0.5 * (a + b) + 0.5 * (b - a) * _NODE).reshape(len(x), -1)
        argument = np.repeat(x, len(_NODE), axis=1) - self.shift.at(z)
        weight = 0.5 * (b - a) * _WEIGHT * np.exp(-0.5 * z.reshape(*x.shape, -1) ** 2) / _ROOT_2PI
        cumulative, density = (v.reshape(*x.shape, -1) for v in self.rest.evaluate(argument))
        return certain + (weight * cumulative).sum(axis=-1), (weight * density).sum(axis=-1)


Part = SharpPart | GaussianPart | GridPart | RestrictedPart
