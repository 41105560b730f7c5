"""The table of exponents against physics in astropy, through the answers; units and solar references."""

import csv
import math
from pathlib import Path

import numpy as np
import pytest
from astropy import constants, units
from astropy.constants import iau2015

from reference_star import (
    BOTH,
    ENERGY,
    LN10,
    PHYSICS,
    QUANTILE,
    ROUNDING,
    TIME,
    D,
    L,
    M,
    R,
    point,
    quoted,
    star_of,
    tolerance,
)
from stellerg.energetics import Conventions
from stellerg.inputs import Exact, measured_from
from stellerg.measured import Scale
from stellerg.observables import (
    COMPOSITION,
    LATENTS,
    MEASURABLE,
    OBSERVABLES,
    SELECTION_ORDER,
    STRUCTURE_OBSERVABLES,
    SolarReferences,
    unit_conversion,
)
from stellerg.propagation import propagate
from stellerg.stars import Stars
from stellerg.status import Status

PUBLISHED = Path(__file__).parent / "published"
MU = 0.85  # of the star, in atomic mass constants: no star's own number, so that it is not mixed up with a default
PHYSICS_OF_ALL = {**PHYSICS, "mean_molecular_weight": MU}
RADIATION = Conventions(pressure="gas+radiation")


def published(name):
    lines = (PUBLISHED / name).read_text(encoding="utf-8").splitlines()
    return list(csv.DictReader(line for line in lines if not line.startswith("#")))


# --- the table of exponents ---


def test_every_observable_is_checked():
    assert LATENTS == ("mass", "radius", "luminosity", "distance", "mean_molecular_weight")
    assert set(PHYSICS_OF_ALL) == set(OBSERVABLES)
    assert {len(row.exponents) for row in MEASURABLE.values()} == {len(LATENTS)}
    assert sorted(SELECTION_ORDER) == sorted(OBSERVABLES)
    assert SELECTION_ORDER[:4] == ("mass", "radius", "effective_temperature", "luminosity")
    # what follows from no mass, radius, luminosity and distance: a check of its own each, below
    assert list(MEASURABLE) == [*OBSERVABLES, *COMPOSITION, *STRUCTURE_OBSERVABLES]
    assert set(COMPOSITION) == set(SLOPES)
    assert set(STRUCTURE_OBSERVABLES) == set(OF_A_POLYTROPE)


@pytest.mark.parametrize("name", OBSERVABLES)
def test_observable_against_physics(name):
    observable = OBSERVABLES[name]
    log_value = observable.reference + np.dot(observable.exponents, np.log([M, R, L, D, MU]))
    factor = {Scale.LINEAR: None, Scale.DEX: 1.0 / LN10, Scale.MAGNITUDE: -2.5 / LN10}[observable.scale]
    if factor is None:
        assert math.exp(log_value) == pytest.approx(PHYSICS_OF_ALL[name], rel=tolerance([name], ROUNDING) / 5.0)
    else:
        assert factor * log_value == pytest.approx(PHYSICS_OF_ALL[name], abs=tolerance([name], ROUNDING) / 5.0)


def test_zero_point_of_the_apparent_magnitude_is_the_resolutions():
    """The Sun at 10 pc has the absolute magnitude 4.74 of Resolution B2 (to its two digits)."""
    row = OBSERVABLES["apparent_bolometric_magnitude"]
    magnitude = -2.5 / LN10 * (row.reference + np.dot(row.exponents, np.log([1.0, 1.0, 1.0, 10.0, 1.0])))
    absolute = -2.5 / LN10 * OBSERVABLES["absolute_bolometric_magnitude"].reference
    assert magnitude == pytest.approx(absolute, abs=1e-12)
    assert absolute == pytest.approx(4.74, abs=0.005)


SETS = [
    ("mass", "radius", "luminosity"),
    ("log_mass", "log_radius", "log_luminosity"),
    ("mass", "radius", "effective_temperature"),
    ("mass", "luminosity", "log_effective_temperature"),
    ("log_surface_gravity", "radius", "luminosity"),
    ("mean_density", "radius", "luminosity"),
    ("large_frequency_separation", "radius", "luminosity"),
    ("large_frequency_separation", "frequency_of_maximum_power", "effective_temperature"),
    ("mass", "angular_diameter", "parallax", "bolometric_flux"),
    ("mass", "angular_diameter", "distance", "effective_temperature"),
    ("mass", "radius", "absolute_bolometric_magnitude"),
    ("mass", "radius", "apparent_bolometric_magnitude", "distance"),
]


@pytest.mark.parametrize("names", SETS, ids="+".join)
def test_medians_from_any_determining_set(names):
    posterior = point(star_of(*names))
    assert posterior.status.tolist() == [Status.OK], posterior.status_text()
    assert posterior.median("binding_energy")[0] == pytest.approx(ENERGY, rel=tolerance(names, QUANTILE))
    assert posterior.median("kelvin_helmholtz_time")[0] == pytest.approx(TIME, rel=tolerance(names, QUANTILE))


@pytest.mark.parametrize("names", SETS, ids="+".join)
def test_spread_from_any_determining_set(names):
    """Each ln obs has standard deviation 0.01: that of ln Y is 0.01 |a A^-1|, solved here."""
    matrix = np.array([OBSERVABLES[name].exponents for name in names], float)
    posterior = point(star_of(*names))
    for output, wanted in zip(BOTH, ((2, -1, 0, 0, 0), (2, -1, -1, 0, 0)), strict=True):
        weights = np.linalg.pinv(matrix.T) @ np.array(wanted, float)
        assert matrix.T @ weights == pytest.approx(np.array(wanted), abs=1e-12)
        assert posterior.log10_sd(output)[0] * LN10 == pytest.approx(0.01 * np.linalg.norm(weights), rel=1e-8)


def test_radius_and_temperature_give_a_steep_time():
    """t_KH goes as M^2 R^-3 T^-4."""
    spread = point(star_of("mass", "radius", "effective_temperature")).log10_sd("kelvin_helmholtz_time")[0]
    assert spread * LN10 == pytest.approx(0.01 * math.sqrt(4.0 + 9.0 + 16.0), rel=1e-8)


def test_solar_references_are_an_option():
    given = {"radius": (1.0, 0.01), "luminosity": (1.0, 0.01), "large_frequency_separation": (140.0, 1.0)}
    usual, other = (
        point(Stars.of(**given, shape="lognormal", solar=solar)).median("binding_energy")[0]
        for solar in (None, SolarReferences(large_frequency_separation=134.9))
    )
    assert other / usual == pytest.approx((135.1 / 134.9) ** 4, rel=QUANTILE)  # mass^2, mass as its square


# --- mean molecular weight and composition: they enter through radiation alone ---

THREE = ("mass", "radius", "luminosity")


@pytest.mark.parametrize("time", ["total", "potential", "GM2/RL"])
def test_without_radiation_the_mean_molecular_weight_enters_nothing(time):
    conventions = Conventions(time=time)
    plain = point(star_of(*THREE), conventions=conventions)
    more = {"mean_molecular_weight": (MU, 0.3 * MU)}
    stars = Stars.of(**{name: quoted(name) for name in THREE}, **more, shape="lognormal")
    with_it = point(stars, conventions=conventions)
    assert with_it.status.tolist() == [Status.OK]
    for output in BOTH:
        found, expected = (p.quantile([0.02, 0.5, 0.98], output)[0] for p in (with_it, plain))
        assert found == pytest.approx(expected, rel=QUANTILE)
        assert with_it.budget(output)["mean_molecular_weight"].tolist() == [0.0]


@pytest.mark.parametrize("mu", [0.6, 1.3])
@pytest.mark.parametrize("row", published("eddington_quartic.csv"), ids=lambda row: f"mu2M={row['M_mu2']}")
def test_with_radiation_it_enters_through_mu_squared_times_the_mass(row, mu):
    """A polytrope n = 3 has one share of radiation for each mu^2 M, as tabulated: |E| = beta |Omega|/2."""
    mass = float(row["M_mu2"]) / mu**2
    stars = Stars.of(mass=Exact(mass), radius=Exact(10.0), mean_molecular_weight=Exact(mu))
    outputs = ("potential_energy", "binding_energy", "internal_energy")
    posterior = point(stars, outputs=outputs, conventions=RADIATION)
    potential, binding, internal = (posterior.median(name)[0] for name in outputs)
    # the shares are printed to six digits or more; each of two medians is good to QUANTILE
    share = pytest.approx(float(row["one_minus_beta"]), rel=3e-6, abs=2.0 * QUANTILE)
    assert 1.0 - 2.0 * binding / potential == share
    assert internal == pytest.approx(potential - binding, rel=2.0 * QUANTILE)  # E = U + Omega


def quartic(mass_mu2):
    """Gas pressure fraction beta of the standard model: (1 - beta)/beta^4 = k (mu^2 M)^2, as published."""
    low, high = 0.0, 1.0
    for _ in range(200):
        beta = 0.5 * (low + high)
        low, high = (beta, high) if (1.0 - beta) / beta**4 > 0.0029902537 * mass_mu2**2 else (low, beta)
    return beta


def test_the_spread_of_the_mean_molecular_weight_is_that_of_the_quartic():
    """|E| falls with mu: its quantiles are those at the opposite quantiles of mu, here 10 % wide."""
    mass, normal_score = 40.0, 1.5
    more = {"radius": Exact(10.0), "mean_molecular_weight": (0.61, 0.061)}
    posterior = point(Stars.of(mass=Exact(mass), **more, shape="lognormal"), outputs=BOTH[:1], conventions=RADIATION)
    probabilities = [0.5 * math.erfc(-z / math.sqrt(2.0)) for z in (-normal_score, 0.0, normal_score)]
    found = np.log(posterior.quantile(probabilities, "binding_energy")[0])
    expected = np.log([quartic(mass * (0.61 * math.exp(-0.1 * z)) ** 2) for z in (-normal_score, 0.0, normal_score)])
    assert found - found[1] == pytest.approx(expected - expected[1], abs=1e-4)
    assert found[2] - found[0] > 0.1  # the check is of something
    assert posterior.budget("binding_energy")["mean_molecular_weight"] == pytest.approx([1.0], abs=1e-9)


# 1/mu = 2 X + 3 Y/4 + Z/2 with Y = 1 - X - Z: its derivatives by X and Z
SLOPES = {"hydrogen_mass_fraction": 2.0 - 0.75, "metal_mass_fraction": 0.5 - 0.75}
USUAL = {"hydrogen_mass_fraction": 0.70, "metal_mass_fraction": 0.02}


@pytest.mark.parametrize("name", COMPOSITION)
def test_composition_gives_the_mean_molecular_weight(name):
    given = {"mass": (40.0, 0.4), "radius": (10.0, 0.1)}
    fractions = {**USUAL, name: USUAL[name] + 0.05}
    x, z = fractions["hydrogen_mass_fraction"], fractions["metal_mass_fraction"]
    mu = 1.0 / (2.0 * x + 0.75 * (1.0 - x - z) + 0.5 * z)
    error = mu**2 * abs(SLOPES[name]) * 0.03
    answers = [
        point(Stars.of(**given, **more), outputs=BOTH[:1], conventions=RADIATION)
        for more in ({name: (fractions[name], 0.03)}, {"mean_molecular_weight": (mu, error)}, {})
    ]
    by_fraction, by_weight, usual = (a.quantile([0.1, 0.5, 0.9], "binding_energy")[0] for a in answers)
    assert by_fraction == pytest.approx(by_weight, rel=1e-6)
    assert abs(by_fraction[1] / usual[1] - 1.0) > 1e-3


# --- what is measured of the inside: a polytrope is recognised by each ---

INDEX = 2.5
POLYTROPE = next(row for row in published("polytropes.csv") if float(row["n"]) == INDEX)
OF_A_POLYTROPE = {
    "log_k2": math.log10(float(POLYTROPE["k2"])),
    "mean_log_k2": math.log10(float(POLYTROPE["k2"])),
    "moment_of_inertia_factor": float(POLYTROPE["moment_of_inertia_factor"]),
    "structure_coefficient": float(POLYTROPE["gravitational_coefficient"]),
}


@pytest.mark.parametrize("name", STRUCTURE_OBSERVABLES)
def test_a_structure_observable_of_a_polytrope_gives_its_index(name):
    """Of a star alone, without misfit: the published value comes back as its index, and its energy follows."""
    weight = {"mean_log_k2_weight": 1.0} if name == "mean_log_k2" else {}
    error = 1e-4 * abs(OF_A_POLYTROPE[name])
    stars = Stars.of(mass=Exact(M), radius=Exact(R), **{name: (OF_A_POLYTROPE[name], error)}, **weight)
    posterior = propagate(stars, prior="wide-index", outputs=BOTH[:1], discrepancy=0.0)
    assert posterior.median("n_effective")[0] == pytest.approx(INDEX, abs=1e-3)
    by_index = ENERGY / 1.5 * 3.0 / (5.0 - INDEX)  # ENERGY is that of w = 3/2
    assert posterior.median("binding_energy")[0] == pytest.approx(by_index, rel=1e-3)


# --- units ---

MSUN = iau2015.GM_sun / constants.G
UNITS = [
    ("mass", "kg", (1.0 * units.kg / MSUN).to_value("")),
    ("mass", "g", (1.0 * units.g / MSUN).to_value("")),
    ("mass", "Msun", 1.0),
    ("mass", "M_sun", 1.0),
    ("mass", "M☉", 1.0),
    ("radius", "km", (1.0 * units.km / iau2015.R_sun).to_value("")),
    ("radius", "Rsun", 1.0),
    ("luminosity", "W", (1.0 * units.W / iau2015.L_sun).to_value("")),
    ("luminosity", "erg / s", 1e-7 * (1.0 * units.W / iau2015.L_sun).to_value("")),
    ("luminosity", "Lsun", 1.0),
    ("effective_temperature", "kK", 1e3),
    ("mean_density", "g / cm3", 1.0 / (MSUN / (4.0 / 3.0 * math.pi * iau2015.R_sun**3)).to_value("g / cm3")),
    ("mean_density", "solar", 1.0),
    ("large_frequency_separation", "Hz", 1e6),
    ("angular_diameter", "arcsec", 1e3),
    ("parallax", "arcsec", 1e3),
    ("distance", "kpc", 1e3),
    ("bolometric_flux", "erg / (s cm2)", 1e-3),
    ("bolometric_flux", "erg / s / cm2", 1e-3),
]


@pytest.mark.parametrize(("name", "unit", "factor"), UNITS)
def test_unit_of_a_linear_quantity(name, unit, factor):
    assert unit_conversion(OBSERVABLES[name], unit) == pytest.approx((factor, 0.0), rel=ROUNDING)
    measured = measured_from(OBSERVABLES[name], (2.0, 0.2, 0.1), unit=unit)
    found = (measured.value[0], measured.upper[0], measured.lower[0])
    assert found == pytest.approx((2.0 * factor, 0.2 * factor, 0.1 * factor), rel=ROUNDING)


@pytest.mark.parametrize(
    ("name", "unit", "offset"),
    [
        ("log_surface_gravity", "dex", 0.0),
        ("log_surface_gravity", "cm / s2", 0.0),
        ("log_surface_gravity", "dex(m / s2)", 2.0),
        ("log_surface_gravity", "[m/s2]", 2.0),
        ("log_radius", "dex(km)", math.log10((1.0 * units.km / iau2015.R_sun).to_value(""))),
        ("absolute_bolometric_magnitude", "mag", 0.0),
    ],
)
def test_unit_of_a_logarithmic_quantity_shifts_it(name, unit, offset):
    measured = measured_from(OBSERVABLES[name], (4.4, 0.1), unit=unit)
    assert measured.value[0] == pytest.approx(4.4 + offset, rel=ROUNDING)
    assert (measured.upper[0], measured.lower[0]) == (0.1, 0.1)


@pytest.mark.parametrize(
    ("name", "unit"),
    [
        ("mass", "km"),
        ("mass", "nonsense"),
        ("radius", "solMass"),
        ("luminosity", "J"),
        ("effective_temperature", "deg_C"),
        ("bolometric_flux", "Jy"),
        ("bolometric_flux", ""),
        ("mean_density", ""),
        ("mean_density", "g"),
        ("log_surface_gravity", "dex(cm)"),
        ("apparent_bolometric_magnitude", "Jy"),
        ("parallax", "pc"),
    ],
)
def test_units_that_are_missing_or_do_not_fit(name, unit):
    assert unit_conversion(OBSERVABLES[name], unit) is None
    assert measured_from(OBSERVABLES[name], (1.0, 0.1), unit=unit).fault.tolist() == [Status.UNIT_MISSING]


@pytest.mark.parametrize(
    ("name", "value", "error", "number", "spread"),
    [
        ("mass", 2.0 * MSUN.to("kg"), 0.1 * MSUN.to("g"), 2.0, 0.1),
        ("radius", 1.0 * iau2015.R_sun.to("km"), 0.02, 1.0, 0.02 / iau2015.R_sun.to_value("km")),
        ("radius", 1.0 * units.R_sun, 695.7 * units.km, 1.0, 0.001),
        ("radius", 1.0, 695.7 * units.km, 1.0, 0.001),
        ("effective_temperature", 5.772 * units.kK, 50.0 * units.K, 5772.0, 50.0),
        ("log_surface_gravity", 4.4 * units.dex(units.cm / units.s**2), 0.1, 4.4, 0.1),
        ("log_surface_gravity", 2.4 * units.dex(units.m / units.s**2), 0.1 * units.dex, 4.4, 0.1),
        ("apparent_bolometric_magnitude", 4.74 * units.mag, 0.02 * units.mag, 4.74, 0.02),
        (
            "bolometric_flux",
            1e-8 * units.erg / units.s / units.cm**2,
            1e-13 * units.W / units.m**2,
            1e-11,
            1e-13,
        ),
    ],
)
def test_quantities(name, value, error, number, spread):
    measured = measured_from(OBSERVABLES[name], (value, error))
    assert measured.fault.tolist() == [Status.OK]
    assert (measured.value[0], measured.upper[0]) == pytest.approx((number, spread), rel=ROUNDING)


@pytest.mark.parametrize(("name", "value"), [("mass", 3.0 * units.km), ("bolometric_flux", 1.0 * units.Jy)])
def test_quantities_of_another_kind_are_refused(name, value):
    assert measured_from(OBSERVABLES[name], (value, 0.1 * value)).fault.tolist() == [Status.UNIT_MISSING]
