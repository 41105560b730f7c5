"""The Sun through the command line, against published values (source beside each in the tables read here)."""

import csv
import io
import json
import math
import sys
from contextlib import redirect_stdout
from pathlib import Path
from unittest.mock import patch

import pytest
from astropy import constants
from astropy.constants import iau2015

from stellerg import Exact, Stars, propagate
from stellerg.cli import main

HERE = Path(__file__).parent
EXACT = 1e-9  # relative: exact inputs and a point prior leave rounding only
NOMINAL = ["--mass", "1 exact", "--radius", "1 exact", "--luminosity", "1 exact"]


def rows(name):
    """Read a table with its comment lines left out."""
    with (HERE / name).open(encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


SUN = {row["quantity"]: row for row in rows("sun.csv")}
ALPHAS = {name: float(row["value"]) for name, row in SUN.items() if name.startswith("alpha_")}
MEAN_ALPHA = "alpha_twelve_tables_mean"
# The share of G M^2/R by which a polytrope of a monatomic gas is bound: prior, row of sun.csv.
POLYTROPES = {
    "constant-density": "total_energy_over_GM2_over_R_n0",
    "polytrope-1.5": "total_energy_over_GM2_over_R_n1p5",
    "polytrope-3": "total_energy_over_GM2_over_R_n3",
}


def value(quantity):
    return float(SUN[quantity]["value"])


def tolerance(quantity):
    return float(SUN[quantity]["tolerance"])


def star(*arguments):
    """The JSON object that `stellerg star` prints for the nominal Sun."""
    out = io.StringIO()
    words = ["stellerg", "star", *NOMINAL, *map(str, arguments), "--json"]
    with patch.object(sys, "argv", words), redirect_stdout(out), pytest.raises(SystemExit) as end:
        main()
    assert not end.value.code
    return json.loads(out.getvalue())


def median(output, *arguments):
    return star("--outputs", output, *arguments)["outputs"][output]["median"]


@pytest.mark.parametrize("prior", POLYTROPES)
def test_binding_energy_of_polytropes(prior):
    """3/10, 3/7 and 3/4 of G M^2/R."""
    energy = median("binding_energy", "--prior", prior, "--energy-unit", "J")
    relative = tolerance("GM2_over_R_J") / value("GM2_over_R_J")
    assert math.isclose(energy, value(POLYTROPES[prior]) * value("GM2_over_R_J"), rel_tol=relative)
    unit = (iau2015.GM_sun**2 / constants.G / iau2015.R_sun).to_value("J")
    exact = {"constant-density": 3 / 10, "polytrope-1.5": 3 / 7, "polytrope-3": 3 / 4}[prior]
    assert math.isclose(energy, exact * unit, rel_tol=EXACT)


def test_polytropes_lie_within_a_factor_of_two_of_the_middle_one():
    energies = [median("binding_energy", "--prior", prior) for prior in POLYTROPES]
    ratios = [energy / energies[1] for energy in energies]
    assert 0.5 < ratios[0] < 1.0 < ratios[2] < 2.0
    assert math.isclose(ratios[2] / ratios[0], 2.5, rel_tol=EXACT)


def test_the_default_spans_a_factor_of_seven_quarters():
    """From n = 3/2 to n = 3: (3/4)/(3/7) = 1.75; its 95.45 % interval lies within."""
    span = value(POLYTROPES["polytrope-3"]) / value(POLYTROPES["polytrope-1.5"])
    sun = Stars.of("Sun", mass=Exact(1.0), radius=Exact(1.0), luminosity=Exact(1.0))
    for output in ("binding_energy", "kelvin_helmholtz_time"):
        low, high = propagate(sun).quantile((1e-9, 1.0 - 1e-9), output)[0]
        assert math.isclose(high / low, span, rel_tol=1e-6)
    ends = [median("binding_energy", "--prior", prior) for prior in ("polytrope-1.5", "polytrope-3")]
    output = star()["outputs"]["binding_energy"]
    assert ends[0] < output["interval95"][0] < output["interval68"][0] < output["median"]
    assert output["median"] < output["interval68"][1] < output["interval95"][1] < ends[1]


def test_the_interval_of_the_default_is_that_of_a_uniform_index():
    """n = 3/2 + 3 p/2 at p = Phi(-2), Phi(-1), 1/2, Phi(1), Phi(2), and E = (1/2) 3/(5 - n) G M^2/R."""
    output = star("--energy-unit", "J")["outputs"]["binding_energy"]
    got = [output["interval95"][0], output["interval68"][0], output["median"], *output["interval68"][1:]]
    got.append(output["interval95"][1])
    unit = (iau2015.GM_sun**2 / constants.G / iau2015.R_sun).to_value("J")
    for energy, z in zip(got, (-2.0, -1.0, 0.0, 1.0, 2.0), strict=True):
        n = 1.5 + 1.5 * 0.5 * math.erfc(-z / math.sqrt(2.0))
        assert math.isclose(energy, 1.5 / (5.0 - n) * unit, rel_tol=1e-6)


@pytest.mark.parametrize("prior", [*POLYTROPES, "uniform-index", "present-sun"])
def test_about_a_millionth_of_the_rest_energy(prior):
    fraction = median("rest_energy_fraction", "--prior", prior)
    assert 1e-7 < fraction < 1e-5
    energy = median("binding_energy", "--prior", prior, "--energy-unit", "J")
    rest_energy = (iau2015.GM_sun / constants.G * constants.c**2).to_value("J")
    assert math.isclose(fraction, energy / rest_energy, rel_tol=EXACT)


def test_rest_energy_fraction_of_the_published_order():
    """The table gives an order of magnitude: within half of one."""
    ratio = median("rest_energy_fraction") / value("total_energy_over_rest_energy")
    assert abs(math.log10(ratio)) < 0.5


# Each published prefactor as a call: convention and prior.
CALLS = {
    "dimensional estimate": ["--time-convention", "GM2/RL"],
    "half of the dimensional estimate": ["--time-convention", "GM2/2RL"],
    "uniform density: half of (3/5)": ["--prior", "constant-density"],
    "n = 3/2: half of 6/7": ["--prior", "polytrope-1.5"],
    "n = 3: half of 3/2": ["--prior", "polytrope-3"],
    "n = 3: all of it": ["--prior", "polytrope-3", "--time-convention", "potential"],
    "published solar model B16-GS98: half of alpha": ["--prior", "FILE"],
}
PREFACTORS = {row["meaning"]: row for row in rows("kelvin_helmholtz_prefactors.csv")}


def half_a_digit(text):
    """Half a unit of the last digit of a number as printed."""
    mantissa, _, exponent = text.partition("e")
    decimals = len(mantissa.partition(".")[2])
    return 0.5 * 10.0 ** (int(exponent or 0) - decimals)


def test_every_published_prefactor_has_a_call():
    assert set(CALLS) == set(PREFACTORS)


@pytest.mark.parametrize("meaning", PREFACTORS)
def test_kelvin_helmholtz_time_by_published_prefactor(meaning, tmp_path):
    path = tmp_path / "published.toml"
    path.write_text(
        f'summary = "B16-GS98"\nsource = "{SUN["alpha_B16_GS98"]["source"]}"\n[coefficient]\n'
        f'distribution = "point"\nvalue = {value("alpha_B16_GS98")}\n',
        encoding="utf-8",
    )
    arguments = [path if word == "FILE" else word for word in CALLS[meaning]]
    years = 1e6 * median("kelvin_helmholtz_time", *arguments)
    printed = PREFACTORS[meaning]["sun_yr"]
    assert abs(years - float(printed)) <= half_a_digit(printed)
    unit = value("GM2_over_RL_yr")
    rounding = half_a_digit(PREFACTORS[meaning]["f"]) if "." in PREFACTORS[meaning]["f"] else 0.0
    assert abs(years / unit - float(PREFACTORS[meaning]["f"])) <= rounding + tolerance("GM2_over_RL_yr") / unit
    assert abs(math.log10(years / 1e7)) < 1.0  # of order ten million years, whatever the convention


def test_kelvin_helmholtz_time_of_order_ten_million_years():
    output = star()["outputs"]["kelvin_helmholtz_time"]
    assert output["unit"] == "Myr"
    for time in (output["median"], *output["interval95"]):
        assert abs(math.log10(time / 10.0)) < 0.5


def test_present_sun_covers_the_published_solar_models():
    structure = star("--prior", "present-sun")["structure"]
    low, high = structure["coefficient"]["interval68"]
    assert low < ALPHAS[MEAN_ALPHA] < high
    low, high = structure["coefficient"]["interval95"]
    for name, alpha in ALPHAS.items():
        assert low < alpha < high, name
    assert len(ALPHAS) == 7  # six models and the mean of twelve
    n = structure["n_effective"]
    assert abs(n["median"] - value("index_from_alpha")) < tolerance("index_from_alpha")
    assert n["interval68"][0] < value("index_from_alpha") < n["interval68"][1]


@pytest.mark.parametrize("name", ALPHAS)
def test_the_default_excludes_the_published_solar_models(name):
    """The tool keeps its default and shows that it leaves out real main-sequence stars."""
    low, high = star()["structure"]["coefficient"]["interval95"]
    assert not low < ALPHAS[name] < high
    assert high < ALPHAS[name]
    # the largest coefficient of the default, that of n = 3, lies below too
    assert 2.0 * value(POLYTROPES["polytrope-3"]) < ALPHAS[name]
