"""Every output against astropy quantities, the conventions, and the conversion between them."""

import csv
import itertools
import math
from pathlib import Path

import numpy as np
import pytest
from astropy import constants, units
from astropy.constants import iau2015
from hypothesis import given, settings
from hypothesis import strategies as st

from stellerg.energetics import (
    OUTPUTS,
    TIME_CONVENTIONS,
    Conventions,
    binding_factor,
    convert_kelvin_helmholtz_time,
)
from stellerg.errors import InputError

PUBLISHED = Path(__file__).parent / "published"
LAWS = settings(derandomize=True, deadline=None)
TIGHT = 1e-13  # a product of a dozen rounded factors
ENERGIES = ("potential_energy", "internal_energy", "binding_energy")
M, R, L, W = 1.7, 1.3, 2.9, 1.44
GM = M * iau2015.GM_sun
MASS = GM / constants.G
RADIUS = R * iau2015.R_sun
LUMINOSITY = L * iau2015.L_sun
OMEGA = W * GM * MASS / RADIUS
DENSITY = MASS / (4.0 / 3.0 * math.pi * RADIUS**3)


def rows(name):
    lines = (PUBLISHED / name).read_text(encoding="utf-8").splitlines()
    return list(csv.DictReader(line for line in lines if line[:1] not in ("#", "")))


SUN = {row["quantity"]: row for row in rows("sun.csv")}


def evaluate(name, conventions=None, mass=1.0, radius=1.0, luminosity=1.0, coefficient=1.0):
    """Value of an output from its row of the table, in its unit."""
    conventions = conventions or Conventions()
    output = OUTPUTS[name]
    powers = np.dot(output.exponents, np.log([mass, radius, luminosity]))
    structure = math.log(coefficient) if output.carries_structure(conventions) else 0.0
    return output.factor(conventions) * math.exp(output.log_constant(conventions) + powers + structure)


def expected(conventions):
    """The definitions, with astropy's constants and units."""
    g = conventions.adiabatic_index
    energy = (3.0 * g - 4.0) / (3.0 * (g - 1.0)) * OMEGA
    simple = GM * MASS / RADIUS / LUMINOSITY
    time = {
        "total": energy / LUMINOSITY,
        "potential": OMEGA / LUMINOSITY,
        "GM2/RL": simple,
        "GM2/2RL": simple / 2.0,
    }
    rest = MASS * constants.c**2
    burnt = conventions.nuclear_mass_fraction * conventions.nuclear_efficiency
    return {
        "potential_energy": OMEGA,
        "internal_energy": -energy + OMEGA,  # U = E - Omega, with E = -abs(E), Omega = -abs(Omega)
        "binding_energy": energy,
        "kelvin_helmholtz_time": time[conventions.time],
        "rest_energy_fraction": energy / rest,
        "specific_binding_energy": energy / MASS,
        "free_fall_time": np.sqrt(3.0 * math.pi / (32.0 * constants.G * DENSITY)),
        "nuclear_time": burnt * rest / LUMINOSITY,
    }


CONVENTIONS = [
    Conventions(),
    Conventions(time="potential", energy_unit="J"),
    Conventions(time="GM2/RL", adiabatic_index=1.4),
    Conventions(time="GM2/2RL", nuclear_mass_fraction=0.13, nuclear_efficiency=0.0066),
    Conventions(adiabatic_index=1.5),
]


@pytest.mark.parametrize("conventions", CONVENTIONS, ids=lambda c: f"{c.time}, g = {c.adiabatic_index:.3f}")
@pytest.mark.parametrize("name", OUTPUTS)
def test_output_against_astropy(name, conventions):
    found = evaluate(name, conventions, M, R, L, W)
    unit = units.Unit(OUTPUTS[name].unit_for(conventions))
    assert found == pytest.approx(expected(conventions)[name].to_value(unit), rel=TIGHT)


def test_every_output_is_checked_and_documented():
    assert set(expected(Conventions())) == set(OUTPUTS)
    assert all(output.meaning and output.name == name for name, output in OUTPUTS.items())


def test_units_of_the_outputs():
    found = {name: output.unit_for(Conventions()) for name, output in OUTPUTS.items()}
    assert {name for name, unit in found.items() if unit == "erg"} == set(ENERGIES)
    assert OUTPUTS["internal_energy"].unit_for(Conventions(energy_unit="J")) == "J"
    times = ("kelvin_helmholtz_time", "free_fall_time", "nuclear_time")
    assert tuple(found[name] for name in times) == ("Myr", "h", "Gyr")


@pytest.mark.parametrize("name", ["free_fall_time", "nuclear_time"])
def test_outputs_without_structure(name):
    assert not OUTPUTS[name].carries_structure(Conventions())


@pytest.mark.parametrize(
    ("time", "carries"), [("total", True), ("potential", True), ("GM2/RL", False), ("GM2/2RL", False)]
)
def test_which_times_carry_structure(time, carries):
    assert OUTPUTS["kelvin_helmholtz_time"].carries_structure(Conventions(time=time)) is carries


@LAWS
@given(st.floats(0.1, 10.0), st.sampled_from(sorted(OUTPUTS)), st.sampled_from(range(3)))
def test_outputs_scale_as_their_definitions(factor, name, which):
    """Doubling a quantity in the definition, read with astropy's units, multiplies by factor^exponent."""
    powers = {
        "kelvin_helmholtz_time": (2, -1, -1),
        "rest_energy_fraction": (1, -1, 0),
        "specific_binding_energy": (1, -1, 0),
        "free_fall_time": (-0.5, 1.5, 0),
        "nuclear_time": (1, 0, -1),
    }.get(name, (2, -1, 0))
    star = [1.0, 1.0, 1.0]
    star[which] = factor
    assert evaluate(name, None, *star) == pytest.approx(evaluate(name) * factor ** powers[which], rel=TIGHT)


# --- how a star is bound ---


@pytest.mark.parametrize(("g", "f"), [(5 / 3, 1 / 2), (1.4, 1 / 6), (1.5, 1 / 3), (2.0, 2 / 3)])
def test_binding_factor(g, f):
    assert binding_factor(g) == pytest.approx(f, rel=TIGHT)


@pytest.mark.parametrize("g", [4.0 / 3.0, 1.3, 1.01])
def test_at_four_thirds_and_below_nothing_binds(g):
    assert binding_factor(g) <= 0.0


@LAWS
@given(st.floats(1.34, 5.0))
def test_energies_add_up(g):
    """abs(E) + U = abs(Omega), and the virial theorem 3 (g - 1) U = abs(Omega)."""
    conventions = Conventions(adiabatic_index=g)
    whole, inner, bound = (evaluate(name, conventions, coefficient=W) for name in ENERGIES)
    assert bound + inner == pytest.approx(whole, rel=TIGHT)
    assert 3.0 * (g - 1.0) * inner == pytest.approx(whole, rel=TIGHT)


def test_virial_theorem_of_a_monatomic_gas():
    assert 2.0 * evaluate("internal_energy") == pytest.approx(evaluate("potential_energy"), rel=TIGHT)
    assert evaluate("internal_energy") == pytest.approx(evaluate("binding_energy"), rel=TIGHT)


# --- published numbers ---


def realise(f):
    """Convention and coefficient that give the prefactor f."""
    return {1.0: ("GM2/RL", 1.0), 0.5: ("GM2/2RL", 1.0), 1.5: ("potential", 1.5)}.get(f, ("total", 2.0 * f))


@pytest.mark.parametrize("row", rows("kelvin_helmholtz_prefactors.csv"), ids=lambda row: row["f"])
def test_prefactors_in_use(row):
    """To half a unit of the last digit printed (five digits)."""
    time, coefficient = realise(float(row["f"]))
    years = 1e6 * evaluate("kelvin_helmholtz_time", Conventions(time=time), coefficient=coefficient)
    digits, power = row["sun_yr"].split("e")
    half = 0.5 * 10.0 ** (int(power) - len(digits.split(".")[1]))
    assert years == pytest.approx(float(row["sun_yr"]), abs=half, rel=0.0)


def test_the_nominal_sun():
    for name, quantity, conventions, scale in (
        ("potential_energy", "GM2_over_R_J", Conventions(energy_unit="J"), 1.0),
        ("kelvin_helmholtz_time", "GM2_over_RL_yr", Conventions(time="GM2/RL"), 1e6),
    ):
        row = SUN[quantity]
        found = scale * evaluate(name, conventions)
        assert found == pytest.approx(float(row["value"]), abs=float(row["tolerance"]), rel=0.0)


@pytest.mark.parametrize(("index", "key"), [(3.0, "n3"), (1.5, "n1p5"), (0.0, "n0")])
def test_total_energy_of_polytropes(index, key):
    printed = float(SUN[f"total_energy_over_GM2_over_R_{key}"]["value"])
    found = evaluate("binding_energy", coefficient=3.0 / (5.0 - index)) / evaluate("potential_energy")
    assert found == pytest.approx(printed, abs=1e-12)  # twelve digits are printed


def test_the_sun_is_bound_by_a_millionth_of_its_rest_energy():
    printed = float(SUN["total_energy_over_rest_energy"]["value"])  # two digits, n = 3
    assert evaluate("rest_energy_fraction", coefficient=1.5) == pytest.approx(printed, abs=0.05e-6)


# --- conversion of published times ---

CONVERSIONS = list(itertools.product(TIME_CONVENTIONS, repeat=2))


@pytest.mark.parametrize(("source", "target"), CONVERSIONS)
def test_conversion_between_all_conventions(source, target):
    g = 1.6
    conventions = {name: Conventions(time=name, adiabatic_index=g) for name in (source, target)}
    published = expected(conventions[source])["kelvin_helmholtz_time"].to_value("Myr")
    wanted = expected(conventions[target])["kelvin_helmholtz_time"].to_value("Myr")
    found = convert_kelvin_helmholtz_time(published, source, target, coefficient=W, adiabatic_index=g)
    assert found == pytest.approx(wanted, rel=TIGHT)
    back = convert_kelvin_helmholtz_time(found, target, source, coefficient=W, adiabatic_index=g)
    assert back == pytest.approx(published, rel=TIGHT)


@pytest.mark.parametrize(("source", "target"), CONVERSIONS)
def test_the_coefficient_is_asked_for_only_where_it_enters(source, target):
    with_structure = {"total", "potential"}
    if (source in with_structure) != (target in with_structure):
        with pytest.raises(InputError, match=f"from {source} to {target} needs the structure coefficient"):
            convert_kelvin_helmholtz_time(1.0, source, target)
    else:
        found = convert_kelvin_helmholtz_time(1.0, source, target)
        assert found == convert_kelvin_helmholtz_time(1.0, source, target, coefficient=W)


def test_conversion_of_arrays():
    times, coefficients = np.array([1.0, 2.0]), np.array([1.5, 6 / 7])
    found = convert_kelvin_helmholtz_time(times, "GM2/2RL", "total", coefficient=coefficients)
    assert found == pytest.approx([1.5, 2.0 * 6 / 7], rel=TIGHT)


@pytest.mark.parametrize("g", [1.3, 4.0 / 3.0])
@pytest.mark.parametrize(("source", "target"), [("total", "potential"), ("potential", "total")])
def test_a_star_that_is_not_bound_has_no_total_time(source, target, g):
    with pytest.raises(InputError, match="unbound; it must exceed 4/3"):
        convert_kelvin_helmholtz_time(1.0, source, target, coefficient=1.5, adiabatic_index=g)


def test_conversion_from_an_unknown_convention():
    with pytest.raises(InputError, match="'thermal' is unknown; choose from total, potential, GM2/RL"):
        convert_kelvin_helmholtz_time(1.0, "thermal", "total")


# --- conventions ---


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"time": "thermal"}, "time convention: 'thermal' is unknown; choose from total"),
        ({"energy_unit": "eV"}, "energy unit: 'eV' is unknown; choose from erg, J"),
        ({"adiabatic_index": 1.0}, "adiabatic index: 1.0 must exceed 1"),
        ({"adiabatic_index": math.nan}, "adiabatic index: nan"),
        ({"adiabatic_index": math.inf}, "adiabatic index: inf"),
        ({"nuclear_mass_fraction": 0.0}, r"nuclear_mass_fraction: must lie in \(0, 1\], got 0.0"),
        ({"nuclear_efficiency": 1.1}, r"nuclear_efficiency: must lie in \(0, 1\], got 1.1"),
        ({"nuclear_efficiency": math.nan}, "nuclear_efficiency: .* got nan"),
    ],
)
def test_conventions_that_are_refused(options, message):
    with pytest.raises(InputError, match=message):
        Conventions(**options)


def test_conventions_say_what_they_are():
    assert Conventions().energy_text == "abs(E) = abs(Omega)/2 (monatomic ideal gas)"
    other = Conventions(adiabatic_index=1.4)
    assert other.energy_text == "abs(E) = 0.166667 abs(Omega) (adiabatic index 1.4)"
    texts = {time: Conventions(time=time).time_text for time in TIME_CONVENTIONS}
    assert texts["total"] == "t_KH = abs(E)/L"
    assert texts["GM2/2RL"] == "t_KH = G M^2/(2 R L)"
    assert len(set(texts.values())) == 4
