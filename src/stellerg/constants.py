"""Constants: value, unit and source, one a line.

Nominal solar values are exact by IAU 2015 Resolution B3; G, the atomic mass constant and what radiation needs are
CODATA's, as `astropy.constants` carries them. Years are Julian (31,557,600 s).
"""

import math
from typing import Final

from astropy import constants as _codata
from astropy import units as _unit
from astropy.constants import iau2015 as _nominal

__all__ = [
    "ATOMIC_MASS_CONSTANT",
    "BOLTZMANN_CONSTANT",
    "ELECTRON_VOLT",
    "GRAVITATIONAL_CONSTANT",
    "GRAVITATIONAL_CONSTANT_RELATIVE_UNCERTAINTY",
    "HELIUM_ATOMIC_MASS",
    "HELIUM_FIRST_IONISATION_ENERGY",
    "HELIUM_SECOND_IONISATION_ENERGY",
    "HYDROGEN_ATOMIC_MASS",
    "HYDROGEN_IONISATION_ENERGY",
    "NOMINAL_SOLAR_EFFECTIVE_TEMPERATURE",
    "NOMINAL_SOLAR_GM",
    "NOMINAL_SOLAR_LUMINOSITY",
    "NOMINAL_SOLAR_RADIUS",
    "PARSEC",
    "RADIATION_CONSTANT",
    "SOLAR_FREQUENCY_OF_MAXIMUM_POWER",
    "SOLAR_LARGE_FREQUENCY_SEPARATION",
    "SOLAR_MASS",
    "SPEED_OF_LIGHT",
    "YEAR",
    "ZERO_POINT_BOLOMETRIC_FLUX",
    "ZERO_POINT_LUMINOSITY",
]

NOMINAL_SOLAR_GM: Final = float(_nominal.GM_sun.si.value)  # m3 s-2; IAU 2015 Resolution B3, exact
NOMINAL_SOLAR_RADIUS: Final = float(_nominal.R_sun.si.value)  # m; IAU 2015 Resolution B3, exact
NOMINAL_SOLAR_LUMINOSITY: Final = float(_nominal.L_sun.si.value)  # W; IAU 2015 Resolution B3, exact
NOMINAL_SOLAR_EFFECTIVE_TEMPERATURE: Final = 5772.0  # K; IAU 2015 Resolution B3, exact
GRAVITATIONAL_CONSTANT: Final = float(_codata.G.si.value)  # m3 kg-1 s-2; CODATA
GRAVITATIONAL_CONSTANT_RELATIVE_UNCERTAINTY: Final = float(_codata.G.uncertainty / _codata.G.value)  # CODATA
SOLAR_MASS: Final = NOMINAL_SOLAR_GM / GRAVITATIONAL_CONSTANT  # kg; from the two above
SPEED_OF_LIGHT: Final = float(_codata.c.si.value)  # m s-1; SI, exact
YEAR: Final = float(_unit.yr.to(_unit.s))  # s; Julian year (IAU)
PARSEC: Final = float(_unit.pc.to(_unit.m))  # m; IAU 2015 Resolution B2, note 4, exact
ZERO_POINT_LUMINOSITY: Final = 3.0128e28  # W at absolute bolometric magnitude 0; IAU 2015 Resolution B2, exact
ZERO_POINT_BOLOMETRIC_FLUX: Final = ZERO_POINT_LUMINOSITY / (4.0 * math.pi * (10.0 * PARSEC) ** 2)  # W m-2; idem
SOLAR_LARGE_FREQUENCY_SEPARATION: Final = 135.1  # muHz; Huber et al. 2011 ApJ 743 143 (from memory); an option
SOLAR_FREQUENCY_OF_MAXIMUM_POWER: Final = 3090.0  # muHz; Huber et al. 2011 ApJ 743 143 (from memory); an option
BOLTZMANN_CONSTANT: Final = float(_codata.k_B.si.value)  # J K-1; SI, exact
ATOMIC_MASS_CONSTANT: Final = float(_codata.u.si.value)  # kg, 1/12 of the mass of carbon-12; CODATA
ELECTRON_VOLT: Final = float(_unit.eV.to(_unit.J))  # J; SI, exact
RADIATION_CONSTANT: Final = 4.0 * float(_codata.sigma_sb.si.value) / SPEED_OF_LIGHT  # J m-3 K-4; 4 sigma/c, SI, exact
HYDROGEN_IONISATION_ENERGY: Final = 13.598434599702  # eV, H I; NIST Atomic Spectra Database
HELIUM_FIRST_IONISATION_ENERGY: Final = 24.587389011  # eV, He I; NIST Atomic Spectra Database
HELIUM_SECOND_IONISATION_ENERGY: Final = 54.4177655282  # eV, He II; NIST Atomic Spectra Database
HYDROGEN_ATOMIC_MASS: Final = 1.007825031898  # m_u; hydrogen-1, Atomic Mass Evaluation 2020 (from memory)
HELIUM_ATOMIC_MASS: Final = 4.00260325413  # m_u; helium-4, Atomic Mass Evaluation 2020 (from memory)
