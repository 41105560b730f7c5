"""One star of known mass, radius, luminosity and distance: each observable of it by physics, with astropy.

The exponents of the package are not used here.
"""

import math

import numpy as np
from astropy import constants, units
from astropy.constants import iau2015

from stellerg.measured import Scale
from stellerg.observables import OBSERVABLES
from stellerg.propagation import propagate
from stellerg.stars import Stars

ROUNDING = 1e-12
QUANTILE = 1e-8  # of a log-normal answer by quadrature
NOMINAL_TEMPERATURE = 1e-4  # 5772 K is rounded: the Stefan-Boltzmann law agrees to this
LN10 = math.log(10.0)

M, R, L, D = 1.7, 1.3, 2.9, 40.0
GM = M * iau2015.GM_sun
RADIUS = R * iau2015.R_sun
LUMINOSITY = L * iau2015.L_sun
DISTANCE = D * units.pc
GRAVITY = (GM / RADIUS**2).to_value("cm / s2")
FLUX = LUMINOSITY / (4.0 * math.pi * DISTANCE**2)
TEMPERATURE = ((LUMINOSITY / (4.0 * math.pi * constants.sigma_sb * RADIUS**2)) ** 0.25).to_value("K")
SOLAR_T = ((iau2015.L_sun / (4.0 * math.pi * constants.sigma_sb * iau2015.R_sun**2)) ** 0.25).to_value("K")
SOLAR_GRAVITY = (iau2015.GM_sun / iau2015.R_sun**2).to_value("cm / s2")
# IAU 2015 Resolution B2: absolute magnitude 0 is 3.0128e28 W, apparent magnitude 0 is 2.518021002e-8 W/m2
ZERO_LUMINOSITY, ZERO_FLUX = 3.0128e28 * units.W, 2.518021002e-8 * units.W / units.m**2

# Each observable of the star above, in its own unit; dex and magnitudes as quoted.
PHYSICS = {
    "mass": M,
    "radius": R,
    "luminosity": L,
    "log_mass": math.log10(M),
    "log_radius": math.log10(R),
    "log_luminosity": math.log10(L),
    "log_effective_temperature": math.log10(TEMPERATURE),
    "effective_temperature": TEMPERATURE,
    "log_surface_gravity": math.log10(GRAVITY),
    "mean_density": ((GM / RADIUS**3) / (iau2015.GM_sun / iau2015.R_sun**3)).to_value(""),
    "large_frequency_separation": 135.1 * math.sqrt(M / R**3),
    "frequency_of_maximum_power": 3090.0 * (GRAVITY / SOLAR_GRAVITY) / math.sqrt(TEMPERATURE / SOLAR_T),
    "angular_diameter": np.rad2deg((2.0 * RADIUS / DISTANCE).to_value("")) * 3.6e6,
    "parallax": DISTANCE.to_value("mas", units.parallax()),
    "distance": D,
    "bolometric_flux": FLUX.to_value("W / m2"),
    "absolute_bolometric_magnitude": -2.5 * math.log10((LUMINOSITY / ZERO_LUMINOSITY).to_value("")),
    "apparent_bolometric_magnitude": -2.5 * math.log10((FLUX / ZERO_FLUX).to_value("")),
}
ENERGY = (0.75 * GM**2 / constants.G / RADIUS).to_value("erg")  # w = 3/2, half of it binds
TIME = (0.75 * GM**2 / constants.G / RADIUS / LUMINOSITY).to_value("Myr")
BOTH = ("binding_energy", "kelvin_helmholtz_time")


def tolerance(names, otherwise):
    """Temperatures and IAU's rounded zero-point flux (ten digits) carry their own rounding."""
    return max(
        [otherwise]
        + [5.0 * NOMINAL_TEMPERATURE for name in names if "temperature" in name]
        + [1e-8 for name in names if name == "apparent_bolometric_magnitude"]
    )


def point(stars, **options):
    return propagate(stars, prior="polytrope-3", **options)


def quoted(name, error=0.01):
    """The star's observable with an error of one per cent, log-normal."""
    scale = OBSERVABLES[name].scale
    size = {Scale.LINEAR: PHYSICS[name], Scale.DEX: 1.0 / LN10, Scale.MAGNITUDE: 2.5 / LN10}[scale]
    return PHYSICS[name], error * size


def star_of(*names, **options):
    unit = {"mean_density": "solar", "bolometric_flux": "W / m2"}
    return Stars.of(**{name: quoted(name) for name in names}, unit=unit, shape="lognormal", **options)


def variance(posterior, output="binding_energy"):
    return (posterior.log10_sd(output)[0] * LN10) ** 2
