"""What binds a star: the share of |Omega| that is its binding energy, beyond the monatomic ideal gas.

    E = -f |Omega| + e M        f = beta (3 g - 4)/(3 (g - 1)),   |Omega| = w G M^2/R

with beta the pressure-weighted share of the gas in the pressure (1 without radiation; `stellerg.structure.radiation`),
g the adiabatic index of the gas, and e the specific energy that ionised the matter (0 if it is not counted; its zero is
neutral atoms at rest at infinity).
"""

from dataclasses import dataclass, replace
from enum import IntEnum

import numpy as np

from stellerg import constants as const

__all__ = ["MEAN_MOLECULAR_WEIGHT", "Binding", "Kind"]

MEAN_MOLECULAR_WEIGHT = 0.61  # of ionised matter of solar composition (common practice)
_FLOOR = 1e-12  # share of a star that is all but unbound: keeps the logarithm finite
# GM/R per solar mass and radius, in J/kg: e R/(w G M) is e over this, times R/(w M)
_SOLAR_POTENTIAL = const.NOMINAL_SOLAR_GM / const.NOMINAL_SOLAR_RADIUS


class Kind(IntEnum):
    """How structure enters an output."""

    NONE = 0
    COEFFICIENT = 1  # through w alone
    BINDING = 2  # through the binding energy
    INTERNAL = 3  # through the internal energy, E - Omega


@dataclass(frozen=True)
class Binding:
    """How the binding energy of the stars of a problem follows from |Omega|.

    Attributes
    ----------
    gas : float
        f of the gas alone, 1/2 if it is monatomic.
    radiation : bool
        Whether radiation carries a part of the pressure.
    ionisation : ndarray, (star,), or None
        Specific energy of ionisation, J/kg; None if it is not counted.
    """

    gas: float
    radiation: bool = False
    ionisation: np.ndarray | None = None

    @property
    def constant(self) -> bool:
        """Whether the share is one number for all stars."""
        return not self.radiation and self.ionisation is None

    def take(self, which: np.ndarray) -> "Binding":
        """Return some of the stars."""
        return self if self.ionisation is None else replace(self, ionisation=self.ionisation[which])

    def constant_share(self, kind: Kind) -> float:
        """The share of |Omega| of a kind of output, where it is one number."""
        return {Kind.BINDING: self.gas, Kind.INTERNAL: 1.0 - self.gas}.get(kind, 1.0)

    def log_share(self, kind: Kind, q, log_mass, log_radius, log_molecular_weight) -> np.ndarray:
        """Logarithm of the share of |Omega| that an output of a kind holds.

        Parameters
        ----------
        kind : Kind
        q : ndarray, (star, m)
            ln w.
        log_mass, log_radius, log_molecular_weight : ndarray, broadcastable to `q`
            In nominal solar units, and units of the atomic mass constant. The radius matters only with ionisation.

        Returns
        -------
        ndarray, (star, m)
            Of a star that is not bound: the logarithm of a tiny number.
        """
        if kind in (Kind.NONE, Kind.COEFFICIENT):
            return np.zeros(np.shape(q))
        share = self.bound_share(q, log_mass, log_radius, log_molecular_weight)
        return np.log(np.maximum(share if kind == Kind.BINDING else 1.0 - share, _FLOOR))

    def bound_share(self, q, log_mass, log_radius, log_molecular_weight) -> np.ndarray:
        """|E|/|Omega|; not positive where the star is not bound. Parameters as `log_share`."""
        share = np.full(np.shape(q), self.gas)
        if self.radiation:
            share = share * (1.0 - radiation_share(q, log_mass, log_molecular_weight))
        if self.ionisation is not None:
            share = share - ionisation_share(self.ionisation[:, None], q, log_mass, log_radius)
        return share


def radiation_share(q, log_mass, log_molecular_weight) -> np.ndarray:
    """Share of radiation in the pressure, weighted by pressure: 1 - beta. Any shape."""
    from stellerg.structure.radiation import gas_pressure_fraction

    return 1.0 - gas_pressure_fraction(5.0 - 3.0 * np.exp(-q), log_mass + 2.0 * log_molecular_weight)


def ionisation_share(specific_energy, q, log_mass, log_radius) -> np.ndarray:
    """Energy of ionisation over |Omega|, e M/|Omega|. Any shape."""
    return specific_energy / _SOLAR_POTENTIAL * np.exp(log_radius - log_mass - q)
