"""Energies and times: each output is a monomial of M, R, L times one function of structure.

    Omega = -w G M^2/R      E = -f |Omega|      t_KH = |E|/L

with w the structure coefficient (3/(5 - n) for a polytrope) and f the share of |Omega| that binds the star:
1/2 for a monatomic ideal gas (virial theorem), (3 g - 4)/(3 (g - 1)) for a constant adiabatic index g defined
by u = P/((g - 1) rho) (Kippenhahn, Weigert & Weiss, Stellar Structure and Evolution, sec. 3.1, from memory).
"""

import math
from dataclasses import dataclass
from typing import Final

import numpy as np

from stellerg import constants as const
from stellerg.binding import Binding, Kind
from stellerg.errors import InputError

__all__ = [
    "DEFAULT_OUTPUTS",
    "ENERGY_UNITS",
    "OUTPUTS",
    "PRESSURES",
    "TIME_CONVENTIONS",
    "Conventions",
    "Output",
    "binding_factor",
    "convert_kelvin_helmholtz_time",
]

DEFAULT_OUTPUTS = ("binding_energy", "kelvin_helmholtz_time")
PRESSURES = ("gas", "gas+radiation")
ENERGY_UNITS = {"erg": 1e-7, "J": 1.0}  # in joules
MONATOMIC: Final = 5.0 / 3.0

_LN_ENERGY = 2.0 * math.log(const.NOMINAL_SOLAR_GM) - math.log(
    const.GRAVITATIONAL_CONSTANT * const.NOMINAL_SOLAR_RADIUS
)  # ln(G M^2/R) in J for the nominal Sun
_LN_TIME = _LN_ENERGY - math.log(const.NOMINAL_SOLAR_LUMINOSITY)  # ln(G M^2/(R L)) in s
_LN_YEAR = math.log(const.YEAR)


@dataclass(frozen=True)
class TimeConvention:
    """t = prefactor x (G M^2/(R L)), with what of structure and binding enters."""

    structure: bool
    binding: bool
    prefactor: float
    formula: str


TIME_CONVENTIONS: dict[str, TimeConvention] = {
    "total": TimeConvention(True, True, 1.0, "abs(E)/L"),
    "potential": TimeConvention(True, False, 1.0, "abs(Omega)/L"),
    "GM2/RL": TimeConvention(False, False, 1.0, "G M^2/(R L)"),
    "GM2/2RL": TimeConvention(False, False, 0.5, "G M^2/(2 R L)"),
}


def binding_factor(adiabatic_index: float) -> float:
    """Share f of |Omega| that is the binding energy; zero or negative where a star is not bound.

    Raises
    ------
    InputError
        If the adiabatic index is not a finite number above 1.
    """
    g = adiabatic_index
    if not (math.isfinite(g) and g > 1.0):
        raise InputError(f"adiabatic index: {g} must exceed 1 (u = P/((g - 1) rho)); 5/3 is a monatomic gas")
    return (3.0 * g - 4.0) / (3.0 * (g - 1.0))


@dataclass(frozen=True)
class Conventions:
    """Which energy and which time: part of every result.

    Attributes
    ----------
    time : str
        One of `TIME_CONVENTIONS`.
    adiabatic_index : float
        5/3 for a monatomic ideal gas.
    energy_unit : str
        erg or J.
    nuclear_mass_fraction, nuclear_efficiency : float
        Share of the mass that burns and share of its rest energy set free, for `nuclear_time`.
    pressure : str
        gas, or gas+radiation; a calibrated coefficient always takes the latter.
    ionisation : bool
        Whether the energy that ionised the star counts.
    """

    time: str = "total"
    adiabatic_index: float = MONATOMIC
    energy_unit: str = "erg"
    nuclear_mass_fraction: float = 0.1
    nuclear_efficiency: float = 0.007
    pressure: str = "gas"
    ionisation: bool = False

    def __post_init__(self):
        if self.time not in TIME_CONVENTIONS:
            raise InputError(f"time convention: {self.time!r} is unknown; choose from {', '.join(TIME_CONVENTIONS)}")
        if self.energy_unit not in ENERGY_UNITS:
            raise InputError(f"energy unit: {self.energy_unit!r} is unknown; choose from {', '.join(ENERGY_UNITS)}")
        for name in ("nuclear_mass_fraction", "nuclear_efficiency"):
            if not 0.0 < getattr(self, name) <= 1.0:
                raise InputError(f"{name}: must lie in (0, 1], got {getattr(self, name)}")
        if self.pressure not in PRESSURES:
            raise InputError(f"pressure: {self.pressure!r} is unknown; choose from {', '.join(PRESSURES)}")
        binding_factor(self.adiabatic_index)

    @property
    def binding(self) -> Binding:
        """How the binding energy follows from |Omega|, but for the energies of ionisation of the stars."""
        return Binding(self.factor, self.pressure != "gas")

    @property
    def factor(self) -> float:
        """Share of |Omega| that is the binding energy of the gas alone."""
        return binding_factor(self.adiabatic_index)

    @property
    def energy_text(self) -> str:
        """The energy convention in words, with its factor."""
        gas = (
            "monatomic ideal gas" if self.adiabatic_index == MONATOMIC else f"adiabatic index {self.adiabatic_index:g}"
        )
        share = "abs(Omega)/2" if self.factor == 0.5 else f"{self.factor:.6g} abs(Omega)"
        if self.pressure != "gas":
            share, gas = f"beta {share}", f"{gas} and radiation"
        if self.ionisation:
            share, gas = f"{share} - e M", f"{gas}, less the energy of ionisation"
        return f"abs(E) = {share} ({gas})"

    @property
    def time_text(self) -> str:
        """The time convention in words."""
        return f"t_KH = {TIME_CONVENTIONS[self.time].formula}"


@dataclass(frozen=True)
class Output:
    """A quantity that can be asked for.

    Attributes
    ----------
    name, meaning : str
    exponents : tuple of float
        Over (mass, radius, luminosity).
    unit : str
        As astropy writes it; '' for a pure number; energies take the unit of the conventions.
    """

    name: str
    exponents: tuple[float, float, float]
    unit: str
    meaning: str

    def unit_for(self, conventions: Conventions) -> str:
        """Return the unit of the values, under the conventions chosen."""
        return conventions.energy_unit if self.unit == "energy" else self.unit

    def carries_structure(self, conventions: Conventions) -> bool:
        """Whether the structure coefficient enters."""
        if self.name == "kelvin_helmholtz_time":
            return TIME_CONVENTIONS[conventions.time].structure
        return self.name not in ("free_fall_time", "nuclear_time")

    def kind(self, conventions: Conventions) -> Kind:
        """How structure enters."""
        if not self.carries_structure(conventions):
            return Kind.NONE
        if self.name == "kelvin_helmholtz_time":
            return Kind.BINDING if TIME_CONVENTIONS[conventions.time].binding else Kind.COEFFICIENT
        return {"potential_energy": Kind.COEFFICIENT, "internal_energy": Kind.INTERNAL}.get(self.name, Kind.BINDING)

    def prefactor(self, conventions: Conventions) -> float:
        """Pure number beside the share of |Omega|."""
        if self.name == "kelvin_helmholtz_time":
            return TIME_CONVENTIONS[conventions.time].prefactor
        if self.name == "nuclear_time":
            return conventions.nuclear_mass_fraction * conventions.nuclear_efficiency
        return 1.0

    def factor(self, conventions: Conventions) -> float:
        """Share of |Omega| of the gas alone, or other pure number; not positive where the star is not bound."""
        return self.prefactor(conventions) * conventions.binding.constant_share(self.kind(conventions))

    def log_constant(self, conventions: Conventions) -> float:
        """ln of the output in its unit at M = R = L = w = 1, without the factor."""
        return {
            "energy": _LN_ENERGY - math.log(ENERGY_UNITS[conventions.energy_unit]),
            "Myr": _LN_TIME - _LN_YEAR - math.log(1e6),
            # |E|/(M c^2): G drops out
            "": math.log(const.NOMINAL_SOLAR_GM / const.NOMINAL_SOLAR_RADIUS / const.SPEED_OF_LIGHT**2),
            "erg / g": math.log(1e4 * const.NOMINAL_SOLAR_GM / const.NOMINAL_SOLAR_RADIUS),
            # sqrt(3 pi/(32 G rho)) with G rho = 3 GM/(4 pi R^3): pi sqrt(R^3/(8 GM)), in hours
            "h": math.log(math.pi / 3600.0)
            + 0.5 * math.log(const.NOMINAL_SOLAR_RADIUS**3 / (8.0 * const.NOMINAL_SOLAR_GM)),
            "Gyr": math.log(const.SOLAR_MASS * const.SPEED_OF_LIGHT**2 / const.NOMINAL_SOLAR_LUMINOSITY)
            - _LN_YEAR
            - math.log(1e9),
        }[self.unit]


OUTPUTS: dict[str, Output] = {
    output.name: output
    for output in (
        Output("potential_energy", (2, -1, 0), "energy", "absolute value of the gravitational potential energy"),
        Output("internal_energy", (2, -1, 0), "energy", "internal energy, U = E - Omega"),
        Output("binding_energy", (2, -1, 0), "energy", "absolute value of the total energy"),
        Output("kelvin_helmholtz_time", (2, -1, -1), "Myr", "Kelvin-Helmholtz time"),
        Output("rest_energy_fraction", (1, -1, 0), "", "binding energy over the rest energy M c^2"),
        Output("specific_binding_energy", (1, -1, 0), "erg / g", "binding energy per mass"),
        Output("free_fall_time", (-0.5, 1.5, 0), "h", "free-fall time at the mean density"),
        Output("nuclear_time", (1, 0, -1), "Gyr", "time on the energy of nuclear burning"),
    )
}


def convert_kelvin_helmholtz_time(
    value, source: str, target: str, *, coefficient=None, adiabatic_index: float = MONATOMIC
):
    """Convert a published Kelvin-Helmholtz time from one convention to another.

    Parameters
    ----------
    value : float or ndarray
        In any unit; the result is in the same.
    source, target : str
        Of `TIME_CONVENTIONS`.
    coefficient : float or ndarray, optional
        Structure coefficient w; needed where exactly one of the two conventions carries structure.
    adiabatic_index : float

    Raises
    ------
    InputError
        If a convention is unknown, the coefficient is needed and missing, or the star is not bound.
    """
    output = OUTPUTS["kelvin_helmholtz_time"]
    factors = [output.factor(Conventions(name, adiabatic_index)) for name in (source, target)]
    if min(factors) <= 0.0:
        raise InputError(f"adiabatic index: {adiabatic_index} leaves the star unbound; it must exceed 4/3")
    ratio = factors[1] / factors[0]
    power = int(TIME_CONVENTIONS[target].structure) - int(TIME_CONVENTIONS[source].structure)
    if power and coefficient is None:
        raise InputError(
            f"conversion from {source} to {target} needs the structure coefficient w (3/(5 - n) for a polytrope)"
        )
    if power and not np.all(np.asarray(coefficient) > 0.0):
        raise InputError(f"coefficient: {coefficient} must be positive (3/(5 - n) for a polytrope)")
    return value * ratio * (coefficient**power if power else 1.0)
