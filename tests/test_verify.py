"""``stellerg verify``: all published numbers are found again, and a constant that is off is found out."""

import csv
import json
import math
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import pytest

from command_line import assert_one_message, stellerg
from stellerg import energetics, verification
from stellerg.energetics import TIME_CONVENTIONS, Output
from stellerg.engines import adaptive
from stellerg.structure import model, polytrope
from stellerg.verification import GROUPS, published
from test_startup import HEAVY, RUN, loaded, modules_after

TABLES = Path(__file__).parent / "published"
OFF = 1.0 + 1e-4  # one part in ten thousand


def rows(name):
    """Read a table with its comment lines left out."""
    with (TABLES / name).open(encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


# --- as it is ---


@pytest.fixture(scope="module")
def document():
    result = stellerg("verify", "--json")
    assert result.code == 0, result.out
    return result.json


def test_all_pass_and_the_object_says_so(document):
    assert list(document) == ["version", "passed", "failed", "checks"]
    checks = document["checks"]
    assert (document["passed"], document["failed"]) == (len(checks), 0)
    assert list(dict.fromkeys(check["group"] for check in checks)) == list(GROUPS)
    for check in checks:
        assert list(check) == ["group", "name", "source", "value", "reference", "difference", "tolerance", "passed"]
        assert check["passed"] is True
        assert check["source"]
        assert check["difference"] == check["value"] - check["reference"]
        assert abs(check["difference"]) <= check["tolerance"]
        assert check["tolerance"] > 0.0
    assert len({(check["group"], check["name"]) for check in checks}) == len(checks)


def test_every_published_row_is_checked(document):
    """Seven quantities a polytrope, two numbers a prefactor, four an example of clause 9, and six of the Sun."""
    wanted = {
        "polytropes": 7 * len(rows("polytropes.csv")),
        "sun": 6,
        "kelvin-helmholtz": 2 * len(rows("kelvin_helmholtz_prefactors.csv")),
        "jcgm-101": 4 * len(rows("gum_supplement_1.csv")),
    }
    groups = [check["group"] for check in document["checks"]]
    assert {group: groups.count(group) for group in GROUPS} == wanted


def test_text_has_every_check_its_sources_and_a_closing_line():
    result = stellerg("verify", "--group", "sun", "--group", "polytropes", columns=160)
    assert result.code == 0
    assert result.out.index("abs(E) over G M^2/R, n = 3/2") < result.out.index("apsidal constant, n = 4.5")
    assert sum(line.endswith(" pass") for line in result.out.splitlines()) == 83
    assert "FAIL" not in result.out
    for heading in ("check", "value", "reference", "difference", "tolerance", "source"):
        assert heading in result.out.splitlines()[0]
    assert "Chandrasekhar 1939" in result.words
    assert result.out.splitlines()[-1] == "83 checks: all pass."


def test_numbers_are_whole_in_a_narrow_terminal():
    narrow = stellerg("verify", "--group", "sun", columns=80).out
    assert "3.79311e+41" in narrow
    assert "…" not in narrow


def test_an_unknown_group_is_one_message():
    assert_one_message(stellerg("verify", "--group", "moon"), "'moon' is unknown", *GROUPS)


def test_help_loads_no_heavy_library():
    text, (code, modules) = modules_after(RUN, "verify", "--help")
    assert code in (0, None)
    assert "Usage: stellerg verify" in text
    assert loaded(modules, [*HEAVY, "numpy", "stellerg.verification"]) == []
    for group in GROUPS:
        assert group in text


# --- the numbers stand once ---


def test_polytropes_are_those_of_the_reference_table():
    table = published()["polytropes"]
    assert table["index"] == [{key: float(cell) for key, cell in row.items()} for row in rows("polytropes.csv")]
    # as asserted of the solver in published/test_polytropes.py
    assert set(table["relative_tolerance"].values()) == {1e-10, 1e-8, 1e-14}
    assert set(table["relative_tolerance"]) == set(table["index"][0]) - {"n"}


def test_the_sun_is_that_of_the_reference_table():
    reference = {row["quantity"]: row for row in rows("sun.csv")}
    for name, found in published()["sun"].items():
        assert found["value"] == float(reference[name]["value"]), name
        assert found["source"] == reference[name]["source"], name
        exact = name.startswith("total_energy")
        assert found.get("tolerance", float(reference[name]["tolerance"])) == (
            1e-9 if exact else float(reference[name]["tolerance"])
        ), name
        assert (float(reference[name]["tolerance"]) == 0.0) == exact, name


def half_a_digit(text):
    """Half a unit of the last digit of a number as printed."""
    mantissa, _, exponent = text.partition("e")
    return 0.5 * 10.0 ** (int(exponent or 0) - len(mantissa.partition(".")[2]))


def test_prefactors_are_those_of_the_reference_table():
    for found, row in zip(
        published()["kelvin_helmholtz_prefactors"], rows("kelvin_helmholtz_prefactors.csv"), strict=True
    ):
        assert (found["meaning"], found["source"]) == (row["meaning"], row["where"])
        assert (found["f"], found["sun_yr"]) == (float(row["f"]), float(row["sun_yr"]))
        assert found["sun_yr_tolerance"] == half_a_digit(row["sun_yr"])
        rounded = row["f"] in ("0.428571428571", "0.8054")
        assert found["f_tolerance"] == pytest.approx(half_a_digit(row["f"]) if rounded else 1e-12, rel=1e-12)


# --- negative controls: one part in ten thousand ---


def failing(*groups):
    """Names of the checks that fail, from a run that must fail; the closing line must name them."""
    arguments = [word for group in groups for word in ("--group", group)]
    result = stellerg("verify", *arguments, "--json")
    assert result.code == 1
    checks = result.json["checks"]
    names = [check["name"] for check in checks if not check["passed"]]
    assert result.json["failed"] == len(names)
    text = stellerg("verify", *arguments, columns=160)
    assert text.code == 1
    assert text.out.count(" FAIL") == len(names)
    for check in checks:
        assert (f"{check['group']}: {check['name']}" in text.words) == (not check["passed"])
    return names


@pytest.mark.parametrize("constant", ["_LN_ENERGY", "_LN_TIME"])
def test_a_constant_of_the_energies(monkeypatch, constant):
    monkeypatch.setattr(energetics, constant, getattr(energetics, constant) + math.log(OFF))
    names = failing("sun", "kelvin-helmholtz")
    if constant == "_LN_ENERGY":
        assert names == ["G M^2/R in J"]
    else:
        years = [f"years of the Sun, {row['meaning']}" for row in rows("kelvin_helmholtz_prefactors.csv")]
        assert names == ["G M^2/(R L) in years", *years]


CHANGED = """
import sys
from stellerg import constants
name, factor, *sys.argv = sys.argv[1:]
setattr(constants, name, getattr(constants, name) * float(factor))
from stellerg.cli import main
main()
"""
ENERGY, TIME = "G M^2/R in J", "G M^2/(R L) in years"


@pytest.mark.parametrize(
    ("constant", "factor", "wanted"),
    [
        ("GRAVITATIONAL_CONSTANT", 1.0, []),
        ("GRAVITATIONAL_CONSTANT", OFF, [ENERGY, TIME]),
        ("NOMINAL_SOLAR_GM", OFF, [ENERGY, TIME]),
        ("NOMINAL_SOLAR_RADIUS", OFF, [ENERGY, TIME]),
        ("NOMINAL_SOLAR_LUMINOSITY", OFF, [TIME]),
        ("YEAR", OFF, [TIME]),
    ],
)
def test_each_constant_in_a_run_of_its_own(constant, factor, wanted):
    """Changed before anything is computed from it."""
    words = [constant, repr(factor), "stellerg", "verify", "--group", "sun", "--json"]
    done = subprocess.run(
        [sys.executable, "-c", CHANGED, *words], capture_output=True, text=True, encoding="utf-8", check=False
    )
    assert done.returncode == int(bool(wanted)), done.stderr
    assert [check["name"] for check in json.loads(done.stdout)["checks"] if not check["passed"]] == wanted


def test_the_gravitational_coefficient(monkeypatch):
    exact = polytrope.gravitational_coefficient
    monkeypatch.setattr(polytrope, "gravitational_coefficient", lambda index: OFF * exact(index))
    names = failing("polytropes", "kelvin-helmholtz")
    wanted = [f"gravitational coefficient, n = {float(row['n']):g}" for row in rows("polytropes.csv")]
    assert names[: len(wanted)] == wanted
    indices = ["uniform density: half of (3/5)", "n = 3/2: half of 6/7", "n = 3: half of 3/2", "n = 3: all of it"]
    assert names[len(wanted) :] == [f"{what}, {text}" for text in indices for what in ("prefactor", "years of the Sun")]


def test_the_coefficient_that_stars_are_given(monkeypatch):
    """The structure models have their own line for 3/(5 - n)."""
    monkeypatch.setattr(model, "_LN3", model._LN3 + math.log(OFF))
    assert failing("sun") == [f"abs(E) over G M^2/R, n = {n}" for n in ("3", "3/2", "0")]


@pytest.mark.parametrize("convention", ["GM2/2RL", "total", "potential"])
def test_a_prefactor_of_a_convention(monkeypatch, convention):
    wrong = TIME_CONVENTIONS[convention]
    monkeypatch.setitem(TIME_CONVENTIONS, convention, replace(wrong, prefactor=OFF * wrong.prefactor))
    meanings = [row["meaning"] for row in published()["kelvin_helmholtz_prefactors"] if row["convention"] == convention]
    assert meanings
    assert failing("kelvin-helmholtz") == [
        f"{what}, {text}" for text in meanings for what in ("prefactor", "years of the Sun")
    ]


def test_the_share_that_binds(monkeypatch):
    exact = Output.factor
    monkeypatch.setattr(Output, "factor", lambda self, how: OFF * exact(self, how))
    names = failing("sun")
    assert "abs(E) over G M^2/R, n = 3" not in names  # the share of both energies is off, their ratio is not
    assert names == ["G M^2/R in J", "G M^2/(R L) in years"]
    monkeypatch.setattr(energetics, "binding_factor", lambda g: 0.5 * OFF)
    monkeypatch.setattr(Output, "factor", exact)
    assert failing("sun") == [f"abs(E) over G M^2/R, n = {n}" for n in ("3", "3/2", "0")]


@pytest.mark.parametrize("unit", ["erg", "J"])
def test_a_unit_of_energy(monkeypatch, unit):
    monkeypatch.setitem(energetics.ENERGY_UNITS, unit, energetics.ENERGY_UNITS[unit] * OFF)
    shares = [f"abs(E) over G M^2/R, n = {n}" for n in ("3", "3/2", "0")]
    assert failing("sun") == (shares if unit == "erg" else ["G M^2/R in J", *shares])


@pytest.mark.parametrize("attribute", ["radius", "surface_slope", "apsidal_constant", "moment_of_inertia_factor"])
def test_a_polytrope(monkeypatch, attribute):
    exact = polytrope.polytrope
    monkeypatch.setattr(
        polytrope,
        "polytrope",
        lambda index: replace(exact(index), **{attribute: OFF * getattr(exact(index), attribute)}),
    )
    names = failing("polytropes")
    assert sum(name.startswith(attribute.replace("_", " ")) for name in names) == len(rows("polytropes.csv"))


# --- negative controls of clause 9, whose tolerances are those of two digits ---


def test_a_run_that_does_not_stand_fails_without_a_value(monkeypatch):
    monkeypatch.setattr(verification, "_MOST_BLOCKS", 40)
    monkeypatch.setitem(verification._RUNS, "central", (adaptive.central_interval, 6, 2))
    result = stellerg("verify", "--group", "jcgm-101", "--json")
    assert result.code == 1
    central = [check for check in result.json["checks"] if check["name"].startswith("9.2")]
    assert len(central) == 12
    assert all(check["value"] is None and check["difference"] is None and not check["passed"] for check in central)
    assert result.json["failed"] == 12


def test_a_wrong_law_or_interval_fails(monkeypatch):
    exact = adaptive.shortest_interval
    wrong = {**verification._RUNS, "shortest": (adaptive.central_interval, 2, 40)}
    monkeypatch.setattr(verification, "_RUNS", wrong)
    names = failing("jcgm-101")
    assert {name.partition(":")[0] for name in names} == {row["example"] for row in rows("gum_supplement_1.csv")[3:]}
    assert all("shortest interval" in name for name in names)
    monkeypatch.setitem(wrong, "shortest", (exact, 2, 40))
    inputs, law = verification._EXAMPLES["9.2.2 additive normal"]
    monkeypatch.setitem(verification._EXAMPLES, "9.2.2 additive normal", (inputs, lambda u: 1.05 * law(u)))
    names = failing("jcgm-101")
    assert names == [
        f"9.2.2 additive normal: {what}"
        for what in ("standard deviation", "central interval, lower", "central interval, upper")
    ]
