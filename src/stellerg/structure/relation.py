"""The law of ln w of each calibrated star: a line in ln R whose height and slope follow the mass, and its spread.

    ln w = a(M) + b(M) ln R + e + h       e normal, h half-normal (towards the end of the main sequence)

or, with the weight `convective`, that of a fully convective star. e + h has the skew-normal density (Azzalini 1985,
Scand. J. Stat. 12, 171: the sum of a normal and a half-normal variate), whose cumulative is Phi less Owen's T.
"""

from dataclasses import dataclass, fields
from typing import TYPE_CHECKING

import numpy as np
from scipy.special import log_ndtr, ndtr, ndtri, owens_t

if TYPE_CHECKING:
    from stellerg.structure.calibration import Calibration

__all__ = ["Relation"]

_BISECTIONS = 50  # halvings of a bracket of about one in ln w: to 1e-15
_REACH = 8.3


@dataclass(frozen=True)
class Relation:
    """What holds for calibrated stars, (star,) each.

    Attributes
    ----------
    calibration : Calibration
    follows : ndarray
        Share of gamma with which ln w follows ln R: 1, and less where it is held.
    offset : ndarray
        Added to ``follows * ln(R/R_zams)``.
    scatter, widening : ndarray
        Standard deviation of e, and scale of h.
    convective : ndarray
        Weight of the fully convective component.
    log_convective : ndarray
        Its ln w.
    misfit : ndarray
        Share of the misfit of polytropes that the star has (0: fully convective).
    log_mass, log_radius : ndarray
        Of the medians, on which all this was decided.
    """

    calibration: "Calibration"
    follows: np.ndarray
    offset: np.ndarray
    scatter: np.ndarray
    widening: np.ndarray
    convective: np.ndarray
    log_convective: np.ndarray
    misfit: np.ndarray
    log_mass: np.ndarray
    log_radius: np.ndarray

    def __len__(self) -> int:
        return len(self.follows)

    def take(self, which: np.ndarray) -> "Relation":
        """Return some of the stars."""
        arrays = {f.name: getattr(self, f.name) for f in fields(self)}
        return Relation(**{k: v if k == "calibration" else v[which] for k, v in arrays.items()})

    @property
    def convective_sd(self) -> float:
        """Standard deviation of ln w of the convective component."""
        return self.calibration.convective_sd / self.calibration.convective_coefficient

    @property
    def single(self) -> np.ndarray:
        """Whether a star has one kind of interior, (star,)."""
        return (self.convective == 0.0) | (self.convective == 1.0)

    def line(self, log_mass: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """a and b of ``ln w = a + b ln R`` at ln M, (star, m) each."""
        of_mass = self.calibration.relation_at(log_mass)
        slope = of_mass[..., 2] * self.follows[:, None]
        height = of_mass[..., 1] + of_mass[..., 2] * self.offset[:, None] - slope * of_mass[..., 0]
        return height, slope

    def centre(self, log_mass: np.ndarray, log_radius: np.ndarray) -> np.ndarray:
        """ln w of the relation without its spread, (star, m)."""
        height, slope = self.line(log_mass)
        return height + slope * log_radius

    def moments(self, centre: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Mean and standard deviation of ln w, given the centre of the relation; (star,) each."""
        # the mean of a half-normal variate of scale 1 is sqrt(2/pi), its variance 1 - 2/pi
        mean = centre + np.sqrt(2.0 / np.pi) * self.widening
        variance = self.scatter**2 + (1.0 - 2.0 / np.pi) * self.widening**2
        whole = (1.0 - self.convective) * mean + self.convective * self.log_convective
        variance = (1.0 - self.convective) * (variance + (mean - whole) ** 2)
        variance = variance + self.convective * (self.convective_sd**2 + (self.log_convective - whole) ** 2)
        return whole, np.sqrt(variance)

    def quantile(self, u: np.ndarray, log_mass: np.ndarray, log_radius: np.ndarray) -> np.ndarray:
        """ln w at cumulative probability u, given ln M and ln R; (star, m) each."""
        centre = self.centre(log_mass, log_radius)
        q = centre + self.scatter[:, None] * ndtri(u)
        mixed = np.flatnonzero((self.widening > 0.0) | (self.convective > 0.0))
        if mixed.size:
            q[mixed] = self.take(mixed)._solve(u[mixed], centre[mixed])
        return q

    def cumulative(self, q: np.ndarray, centre: np.ndarray) -> np.ndarray:
        """Cumulative probability at ln w = q, given the centre of the relation; (star, m) each."""
        width = np.hypot(self.scatter, self.widening)[:, None]
        score = (q - centre) / width
        skew = (self.widening / self.scatter)[:, None]
        below = ndtr(score) - np.where(skew > 0.0, 2.0 * owens_t(score, skew), 0.0)
        if not self.convective.any():
            return below
        weight = self.convective[:, None]
        return (1.0 - weight) * below + weight * ndtr((q - self.log_convective[:, None]) / self.convective_sd)

    def log_convective_share(self, q: np.ndarray, centre: np.ndarray) -> np.ndarray:
        """Logarithm of the probability that a star of ln w = q is fully convective, (star, m)."""
        width = np.hypot(self.scatter, self.widening)[:, None]
        score, skew = (q - centre) / width, (self.widening / self.scatter)[:, None]
        usual = np.log(2.0) + log_ndtr(skew * score) - 0.5 * score**2 - np.log(width)
        score = (q - self.log_convective[:, None]) / self.convective_sd
        with np.errstate(divide="ignore"):
            usual = usual + np.log1p(-self.convective)[:, None]
            convective = np.log(self.convective)[:, None] - 0.5 * score**2 - np.log(self.convective_sd)
        return convective - np.logaddexp(usual, convective)

    def _solve(self, u, centre):
        """Bisect; the spread of ln w brackets it."""
        reach = _REACH * (np.hypot(self.scatter, self.widening)[:, None] + self.convective_sd)
        fixed = np.where(self.convective > 0.0, self.log_convective, np.nan)[:, None]
        low, high = np.fmin(centre, fixed) - reach, np.fmax(centre, fixed) + reach
        for _ in range(_BISECTIONS):
            middle = 0.5 * (low + high)
            below = self.cumulative(middle, centre) < u
            low, high = np.where(below, middle, low), np.where(below, high, middle)
        return 0.5 * (low + high)
