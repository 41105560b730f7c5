"""The calibrated coefficient: ln w of a main-sequence star from its mass and radius, with its domain and its spread.

    ln w = ln w_zams(M) + gamma(M) ln(R/R_zams(M)) + scatter

M, R and temperature cannot tell a contracting star from a giant (both lie on the Hayashi line); the user must. What
holds for a star (`Place`, scatter, weights of two kinds of interior) is decided on the medians of its mass and radius;
every weight and width grows from zero at a boundary, so that nothing steps there.
"""

from dataclasses import dataclass
from enum import IntEnum
from functools import cached_property

import numpy as np
from scipy.interpolate import CubicSpline

from stellerg.structure.model import AppliesTo, Common
from stellerg.structure.relation import Relation

__all__ = ["Boundaries", "Calibration", "Nodes", "Place"]

# Judgement, where the definition leaves a step: a star too large for the main sequence and too light to have left it
# turns from the relation to a fully convective star within this factor in radius.
_TURNS_WITHIN = 1.05
_CONVECTIVE_FROM_AGE_ZERO = 1.4  # solar masses: up to here the convective share of a contracting star grows from x = 1,
_CONVECTIVE_NEAR_LIMIT = 1.5  # from here on from this share of the radius of full convection
_NEAR_LIMIT = 0.8
_FULLY_CONVECTIVE = 0.35  # solar masses (common practice)
_PARTLY_CONVECTIVE = 0.5  # judgement: from here the misfit of a polytrope has its full size


class Place(IntEnum):
    """Where a star lies in the plane of mass and radius, given what is stated of its evolution."""

    MASS_OUTSIDE = 0
    TOO_SMALL = 1
    MAIN_SEQUENCE = 2
    INFLATED = 3  # larger than any single star of its mass at the age of the Universe
    CONTRACTING = 4  # too large, and too light to have evolved
    STATED_CONTRACTING = 5
    CONTRACTING_OUTSIDE = 6  # stated contracting, and above the masses of convective ones
    BEYOND = 7  # too large: a giant, or a contracting star

    @property
    def covered(self) -> bool:
        """Whether the calibration describes the star."""
        return self in (Place.MAIN_SEQUENCE, Place.INFLATED, Place.CONTRACTING, Place.STATED_CONTRACTING)


@dataclass(frozen=True)
class Nodes:
    """The relation at its nodes, (node,) each: nominal solar units; scatter is the standard deviation of ln w."""

    mass: np.ndarray
    radius_zams: np.ndarray
    coefficient_zams: np.ndarray
    gamma: np.ndarray
    scatter: np.ndarray


@dataclass(frozen=True)
class Boundaries:
    """Values of x = R/R_zams at masses, (mass,) each; NaN where there is no such boundary."""

    mass: np.ndarray
    widen: np.ndarray
    end: np.ndarray
    convective_above: np.ndarray
    radius_limit: np.ndarray

    def at(self, name: str, log_mass: np.ndarray) -> np.ndarray:
        """A boundary, linear in ln M; constant below its first mass, and above its last."""
        given = np.isfinite(getattr(self, name))
        return np.interp(log_mass, np.log(self.mass[given]), getattr(self, name)[given])

    def last_mass(self, name: str) -> float:
        """The largest mass at which a boundary is given."""
        return float(self.mass[np.isfinite(getattr(self, name))][-1])


@dataclass(frozen=True)
class Calibration:
    """A calibrated structure coefficient, as read from a file of `priors/`.

    Attributes
    ----------
    name, summary, source : str
    nodes : Nodes
    boundaries : Boundaries
    smallest : float
        x below which no main-sequence star lies.
    none_evolved_below : float
        Nominal solar masses: lighter stars have not left the main sequence.
    spread_at_end, inflated_scatter, inflated_over : float
        Half-normal gain of ln w at the end of the main sequence; scatter of ln w of inflated stars, and the factor of
        `radius_limit` at which it is reached.
    convective_coefficient, convective_sd : float
        w of a fully convective star and its standard deviation.
    applies_to : AppliesTo
    common : Common or None
    text : str
        The file as it stands.
    """

    name: str
    summary: str
    source: str
    nodes: Nodes
    boundaries: Boundaries
    smallest: float
    none_evolved_below: float
    spread_at_end: float
    inflated_scatter: float
    inflated_over: float
    convective_coefficient: float
    convective_sd: float
    applies_to: AppliesTo
    common: Common | None = None
    text: str = ""
    training: tuple[int, ...] = ()

    @property
    def needs(self) -> tuple[str, ...]:
        """What the coefficient depends on."""
        return ("mass", "radius")

    @cached_property
    def _spline(self) -> CubicSpline:
        nodes = self.nodes
        values = np.stack([np.log(nodes.radius_zams), np.log(nodes.coefficient_zams), nodes.gamma], axis=1)
        # natural in ln M: monotone interpolants leave kinks
        return CubicSpline(np.log(nodes.mass), values, bc_type="natural")

    def relation_at(self, log_mass: np.ndarray) -> np.ndarray:
        """ln R_zams, ln w_zams and gamma at ln M, (..., 3); straight lines beyond the nodes, where a tail may reach."""
        spline = self._spline
        inside = np.clip(log_mass, spline.x[0], spline.x[-1])
        values = spline(inside)
        beyond = np.asarray(log_mass) - inside
        if np.any(beyond != 0.0):
            values = values + beyond[..., None] * spline(inside, 1)
        return values

    def radius_zams(self, mass: np.ndarray) -> np.ndarray:
        """Radius at age zero, nominal solar; NaN outside the masses covered."""
        mass = np.asarray(mass, float)
        inside = (mass >= self.nodes.mass[0] * (1.0 - 1e-12)) & (mass <= self.nodes.mass[-1] * (1.0 + 1e-12))
        return np.where(inside, np.exp(self.relation_at(np.log(mass))[..., 0]), np.nan)

    def log_ratio(self, log_mass: np.ndarray, log_radius: np.ndarray) -> np.ndarray:
        """ln x = ln R/R_zams(M)."""
        return log_radius - self.relation_at(log_mass)[..., 0]

    def place(self, log_mass: np.ndarray, log_radius: np.ndarray, contracting: np.ndarray) -> np.ndarray:
        """Where stars lie.

        Parameters
        ----------
        log_mass, log_radius : ndarray, (star,)
            Of the medians.
        contracting : ndarray of bool, (star,)
            Stated to be pre-main-sequence.

        Returns
        -------
        ndarray of uint8, (star,)
            `Place`.
        """
        mass, x = np.exp(log_mass), np.exp(self.log_ratio(log_mass, log_radius))
        end, limit = (self.boundaries.at(name, log_mass) for name in ("end", "radius_limit"))
        inflated = (mass < self.boundaries.last_mass("radius_limit")) & (x > limit)
        light = mass < self.none_evolved_below
        too_massive = (mass > self.boundaries.last_mass("convective_above")) & (x > end)
        place = np.select(
            [
                ~((mass >= self.nodes.mass[0] * (1 - 1e-12)) & (mass <= self.nodes.mass[-1] * (1 + 1e-12))),
                x < self.smallest,
                contracting & too_massive,
                contracting,
                (x > end) & light,
                x > end,
                inflated,
            ],
            [
                Place.MASS_OUTSIDE,
                Place.TOO_SMALL,
                Place.CONTRACTING_OUTSIDE,
                Place.STATED_CONTRACTING,
                Place.CONTRACTING,
                Place.BEYOND,
                Place.INFLATED,
            ],
            Place.MAIN_SEQUENCE,
        )
        return place.astype(np.uint8)

    def relation(self, log_mass: np.ndarray, log_radius: np.ndarray, contracting: np.ndarray) -> Relation:
        """The law of ln w of stars, from the medians of their mass and radius; see `place` for the parameters."""
        of_mass = self.relation_at(log_mass)
        log_x = log_radius - of_mass[..., 0]
        scatter = np.interp(log_mass, np.log(self.nodes.mass), self.nodes.scatter)
        held = self._share(log_x, np.log(self.boundaries.at("radius_limit", log_mass)), np.log(self.inflated_over))
        light = np.exp(log_mass) < self.boundaries.last_mass("radius_limit")
        held = np.where(contracting | ~light, 0.0, held)
        follows = 1.0 - held
        limit = np.log(self.boundaries.at("radius_limit", log_mass))
        offset = np.where(held > 0.0, limit - follows * log_x, 0.0)
        convective = np.where(
            contracting, self._share_contracting(log_mass, log_x), self._share_too_large(log_mass, log_x)
        )
        coefficient = np.minimum(np.exp(of_mass[..., 1]), self.convective_coefficient)
        return Relation(
            calibration=self,
            follows=follows,
            offset=offset,
            scatter=scatter + (self.inflated_scatter - scatter) * held,
            widening=np.where(contracting, 0.0, self._widening(log_mass, log_x)),
            convective=convective,
            log_convective=np.log(coefficient),
            misfit=self.misfit(log_mass),
            log_mass=log_mass,
            log_radius=log_radius,
        )

    def misfit(self, log_mass: np.ndarray) -> np.ndarray:
        """Share of the misfit of polytropes that stars of a mass have: none if they are fully convective."""
        return np.clip(
            (log_mass - np.log(_FULLY_CONVECTIVE)) / np.log(_PARTLY_CONVECTIVE / _FULLY_CONVECTIVE), 0.0, 1.0
        )

    def _share(self, log_x, start, length):
        """0 up to `start`, 1 from `start + length` on, linear between."""
        return np.clip((log_x - start) / length, 0.0, 1.0)

    def _widening(self, log_mass, log_x):
        """Scale of the half-normal gain towards the end of the main sequence."""
        widen, end = (np.log(self.boundaries.at(name, log_mass)) for name in ("widen", "end"))
        length = np.maximum(end - widen, 1e-12)
        t = np.where(np.exp(log_mass) < self.none_evolved_below, 0.0, np.clip((log_x - widen) / length, 0.0, 1.0))
        return self.spread_at_end * t**2 * (3.0 - 2.0 * t)

    def _share_contracting(self, log_mass, log_x):
        """Weight of the convective component of a star stated to be contracting."""
        limit = np.log(self.boundaries.at("convective_above", log_mass))
        ends = np.log([_CONVECTIVE_FROM_AGE_ZERO, _CONVECTIVE_NEAR_LIMIT])
        rise = np.clip((log_mass - ends[0]) / (ends[1] - ends[0]), 0.0, 1.0)
        start = np.log(1.0 + (_NEAR_LIMIT * np.exp(limit) - 1.0) * rise)
        share = np.clip((log_x - start) / (limit - start), 0.0, 1.0)
        return np.where(np.exp(log_mass) > self.boundaries.last_mass("convective_above"), 0.0, share)

    def _share_too_large(self, log_mass, log_x):
        """Weight of the convective component of a star too large for the main sequence, too light to have left it."""
        share = self._share(log_x, np.log(self.boundaries.at("end", log_mass)), np.log(_TURNS_WITHIN))
        return np.where(np.exp(log_mass) < self.none_evolved_below, share, 0.0)
