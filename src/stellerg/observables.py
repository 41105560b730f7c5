"""What can be measured: each observable is a row of exponents over (mass, radius, luminosity, distance, mean
molecular weight).

``ln(observable) = reference + exponents . (ln M, ln R, ln L, ln d, ln mu)`` with M, R, L in nominal solar units, d
in parsec and mu in atomic mass constants. Imports `measured` and the leaves.
"""

import math
import warnings
from dataclasses import dataclass
from functools import lru_cache

from stellerg import constants as const
from stellerg.measured import Scale

__all__ = [
    "COMPOSITION",
    "LATENTS",
    "MEASURABLE",
    "OBSERVABLES",
    "SELECTION_ORDER",
    "STRUCTURE_OBSERVABLES",
    "Observable",
    "SolarReferences",
    "unit_conversion",
]

LATENTS = ("mass", "radius", "luminosity", "distance", "mean_molecular_weight")

LN10 = math.log(10.0)
_RADIANS_PER_MAS = math.pi / (180.0 * 3600.0e3)
_SOLAR_SURFACE_GRAVITY = 1e2 * const.NOMINAL_SOLAR_GM / const.NOMINAL_SOLAR_RADIUS**2  # cm s-2
_DIAMETER_AT_1_PC = 2.0 * const.NOMINAL_SOLAR_RADIUS / const.PARSEC / _RADIANS_PER_MAS  # mas
_FLUX_AT_1_PC = const.NOMINAL_SOLAR_LUMINOSITY / (4.0 * math.pi * const.PARSEC**2)  # W m-2


@dataclass(frozen=True)
class SolarReferences:
    """Solar values of the asteroseismic scaling relations, in microhertz (options: pipelines differ)."""

    large_frequency_separation: float = const.SOLAR_LARGE_FREQUENCY_SEPARATION
    frequency_of_maximum_power: float = const.SOLAR_FREQUENCY_OF_MAXIMUM_POWER


@dataclass(frozen=True)
class Observable:
    """A quantity that can be measured.

    Attributes
    ----------
    name : str
    exponents : tuple of float
        Over `LATENTS`.
    reference : float
        ln(observable) in `unit` at M = R = L = 1 nominal solar unit, d = 1 pc.
    unit : str
        The unit in which the package keeps it, as astropy writes it.
    scale : Scale
    meaning : str
        One line for help texts.
    unit_required : bool
        True where no unit is customary, so that a bare number is refused.
    """

    name: str
    exponents: tuple[float, ...]
    reference: float
    unit: str
    scale: Scale
    meaning: str
    unit_required: bool = False

    def reference_for(self, solar: SolarReferences) -> float:
        """Return the reference, with the solar values chosen for the scaling relations."""
        solar_value = getattr(solar, self.name, None)
        return self.reference if solar_value is None else math.log(solar_value)


_LINEAR, _DEX, _MAG = Scale.LINEAR, Scale.DEX, Scale.MAGNITUDE
_LN_T = math.log(const.NOMINAL_SOLAR_EFFECTIVE_TEMPERATURE)
_LN_FLUX = math.log(_FLUX_AT_1_PC)

OBSERVABLES: dict[str, Observable] = {
    row[0]: Observable(row[0], (*row[1], *(0,) * (len(LATENTS) - len(row[1]))), *row[2:])
    for row in (
        ("mass", (1, 0, 0, 0), 0.0, "solMass", _LINEAR, "mass, nominal solar"),
        ("radius", (0, 1, 0, 0), 0.0, "solRad", _LINEAR, "radius, nominal solar"),
        ("luminosity", (0, 0, 1, 0), 0.0, "solLum", _LINEAR, "bolometric luminosity, nominal solar"),
        ("log_mass", (1, 0, 0, 0), 0.0, "solMass", _DEX, "log10 of the mass, dex"),
        ("log_radius", (0, 1, 0, 0), 0.0, "solRad", _DEX, "log10 of the radius, dex"),
        ("log_luminosity", (0, 0, 1, 0), 0.0, "solLum", _DEX, "log10 of the luminosity, dex"),
        (
            "log_effective_temperature",
            (0, -0.5, 0.25, 0),
            _LN_T,
            "K",
            _DEX,
            "log10 of the temperature in K, dex",
        ),
        ("effective_temperature", (0, -0.5, 0.25, 0), _LN_T, "K", _LINEAR, "effective temperature, K"),
        (
            "log_surface_gravity",
            (1, -2, 0, 0),
            math.log(_SOLAR_SURFACE_GRAVITY),
            "cm / s2",
            _DEX,
            "log10 of the surface gravity in cm s^-2, dex",
        ),
        (
            "mean_density",
            (1, -3, 0, 0),
            0.0,
            "solar",
            _LINEAR,
            "mean density, unit required (solar, g/cm3)",
            True,
        ),
        (
            "large_frequency_separation",
            (0.5, -1.5, 0, 0),
            math.log(const.SOLAR_LARGE_FREQUENCY_SEPARATION),
            "uHz",
            _LINEAR,
            "asteroseismic large frequency separation, muHz",
        ),
        (
            # Kjeldsen & Bedding 1995, A&A 293, 87: nu_max scales as g/sqrt(T)
            "frequency_of_maximum_power",
            (1, -1.75, -0.125, 0),
            math.log(const.SOLAR_FREQUENCY_OF_MAXIMUM_POWER),
            "uHz",
            _LINEAR,
            "asteroseismic frequency of maximum power, muHz",
        ),
        (
            "angular_diameter",
            (0, 1, 0, -1),
            math.log(_DIAMETER_AT_1_PC),
            "mas",
            _LINEAR,
            "limb-darkened, mas",
        ),
        ("parallax", (0, 0, 0, -1), math.log(1e3), "mas", _LINEAR, "parallax, mas"),
        ("distance", (0, 0, 0, 1), 0.0, "pc", _LINEAR, "distance, pc"),
        (
            "bolometric_flux",
            (0, 0, 1, -2),
            _LN_FLUX,
            "W / m2",
            _LINEAR,
            "unit required (W/m2, erg/(s cm2))",
            True,
        ),
        (
            "absolute_bolometric_magnitude",
            (0, 0, 1, 0),
            math.log(const.NOMINAL_SOLAR_LUMINOSITY / const.ZERO_POINT_LUMINOSITY),
            "mag",
            _MAG,
            "IAU 2015 zero point, mag",
        ),
        (
            "apparent_bolometric_magnitude",
            (0, 0, 1, -2),
            _LN_FLUX - math.log(const.ZERO_POINT_BOLOMETRIC_FLUX),
            "mag",
            _MAG,
            "IAU 2015 zero point, mag",
        ),
        ("mean_molecular_weight", (0, 0, 0, 0, 1), 0.0, "", _LINEAR, "mean molecular weight, atomic mass constants"),
    )
}

# What composition is made of: it gives the mean molecular weight and the energy of ionisation.
COMPOSITION: dict[str, Observable] = {
    name: Observable(name, (0,) * len(LATENTS), 0.0, "", _LINEAR, meaning)
    for name, meaning in (
        ("hydrogen_mass_fraction", "hydrogen mass fraction X"),
        ("metal_mass_fraction", "metal mass fraction Z"),
    )
}
# What is measured of a star's inside: it constrains the structure coefficient.
STRUCTURE_OBSERVABLES: dict[str, Observable] = {
    name: Observable(name, (0,) * len(LATENTS), 0.0, "", scale, meaning)
    for name, scale, meaning in (
        ("log_k2", _DEX, "log10 of the apsidal constant k2, dex"),
        ("mean_log_k2", _DEX, "log10 of the mean k2 of a system, weighted by mean_log_k2_weight, dex"),
        ("moment_of_inertia_factor", _LINEAR, "moment of inertia over M R^2"),
        ("structure_coefficient", _LINEAR, "abs(Omega) R/(G M^2)"),
    )
}
MEASURABLE: dict[str, Observable] = {**OBSERVABLES, **COMPOSITION, **STRUCTURE_OBSERVABLES}

# The order in which the first determining set is taken when the user names none: direct measurements first,
# temperature before luminosity (which catalogues often compute from it), a distance that was measured before one
# that follows from a radius and an angular diameter, then the order of the table.
_FIRST = ("mass", "radius", "effective_temperature", "luminosity", "parallax", "distance")
SELECTION_ORDER = _FIRST + tuple(name for name in OBSERVABLES if name not in _FIRST)

# Spellings that people and catalogues use beside astropy's own.
_ALIASES = {
    "msun": "solMass", "m_sun": "solMass", "msol": "solMass", "m☉": "solMass", "m⊙": "solMass",
    "rsun": "solRad", "r_sun": "solRad", "rsol": "solRad", "r☉": "solRad", "r⊙": "solRad",
    "lsun": "solLum", "l_sun": "solLum", "lsol": "solLum", "l☉": "solLum", "l⊙": "solLum",
}  # fmt: skip


@lru_cache(maxsize=512)
def unit_conversion(observable: Observable, unit: str) -> tuple[float, float] | None:
    """Factor and offset that take a quoted number to the observable's own unit.

    Parameters
    ----------
    observable : Observable
    unit : str
        Unit as text; '' means the customary one.

    Returns
    -------
    tuple of float or None
        ``own = factor * quoted + offset`` (errors: factor only); None where the unit is missing, unknown or
        of the wrong kind.
    """
    text = unit.strip()
    if not text:
        return None if observable.unit_required else (1.0, 0.0)
    if observable.scale is Scale.MAGNITUDE:
        # astropy's own unit says which of the two bolometric zero points it means
        own = "mag(Bol)" if observable.name == "absolute_bolometric_magnitude" else "mag(bol)"
        return (1.0, 0.0) if text in ("mag", "magnitude", own) else None
    if observable.scale is Scale.DEX:
        if text == "dex":
            return 1.0, 0.0
        inner = text[4:-1] if text.startswith("dex(") and text.endswith(")") else text
        inner = inner[1:-1] if inner.startswith("[") and inner.endswith("]") else inner
        factor = _factor(observable.unit, inner)
        return None if factor is None else (1.0, math.log10(factor))
    factor = _factor(observable.unit, text)
    return None if factor is None else (factor, 0.0)


def _factor(own: str, text: str) -> float | None:
    """Factor from a unit in text to the observable's own unit; None if it is unknown or of another kind."""
    from astropy import units

    # the solar mean density is the natural unit of a density here: M/R^3 = 1
    solar_density = const.SOLAR_MASS / (4.0 / 3.0 * math.pi * const.NOMINAL_SOLAR_RADIUS**3)
    if own == "solar":
        if text.lower() in ("solar", "solar density", "rho_sun", "rhosun"):
            return 1.0
        target, scale = units.Unit("kg / m3"), 1.0 / solar_density
    else:
        target, scale = units.Unit(own), 1.0
    try:
        with warnings.catch_warnings():
            # "erg / s / cm2" is clear enough, though the standard discourages two slashes
            warnings.simplefilter("ignore", units.UnitsWarning)
            factor = float(units.Unit(_ALIASES.get(text.lower(), text)).to(target))
    except (ValueError, TypeError, units.UnitsError):
        return None
    return factor * scale if math.isfinite(factor) and factor > 0.0 else None
