"""The invented survey in `examples/`: both files and the script give every row, and the same numbers."""

import csv
import json
import re
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest
from astropy.table import Table
from typer.testing import CliRunner

from stellerg.cli import app

EXAMPLES = Path(__file__).parents[1] / "examples"
EVOLVED = "the star is stated evolved, and no prior here describes a giant"
NOT_DONE = {
    "Lighthouse 1": ("evolved-or-contracting", EVOLVED),
    "Lighthouse 6": ("evolved-or-contracting", EVOLVED),
    "Shoal 1": ("error-missing", "radius = 1.22: a value without an error"),
}
STATUSES = ["ok"] * 13 + ["evolved-or-contracting"] * 2 + ["ok"] * 2 + ["partial"] + ["ok"] * 3
STATUSES += ["error-missing", "ok", "ok"]
WORDS = ("star", "status", "status_text", "flags", "engine")


def run(file, folder, *options):
    """Rows of the summary, `run.json` and what was printed."""
    arguments = ["catalogue", str(EXAMPLES / file), "--out", str(folder), "--format", "csv", *options]
    result = CliRunner().invoke(app, arguments)
    assert result.exit_code == 0, result.output
    with (folder / "summary.csv").open(encoding="utf-8", newline="") as text:
        rows = list(csv.DictReader(text))
    return rows, json.loads((folder / "run.json").read_text(encoding="utf-8")), result.output


@pytest.fixture(scope="module")
def results(tmp_path_factory):
    return {file: run(file, tmp_path_factory.mktemp("out") / "result") for file in ("survey.csv", "survey.ecsv")}


@pytest.fixture(scope="module")
def survey():
    with (EXAMPLES / "survey.csv").open(encoding="utf-8", newline="") as text:
        return {row["star"]: row for row in csv.DictReader(text)}


@pytest.mark.parametrize("file", ["survey.csv", "survey.ecsv"])
def test_every_row_has_its_status(file, results, survey):
    rows, record, _ = results[file]
    assert [row["star"] for row in rows] == list(survey)
    assert [row["status"] for row in rows] == STATUSES
    assert record["counts"] == {word: STATUSES.count(word) for word in record["counts"]}
    assert sum(record["counts"].values()) == len(rows) == 24
    partial = rows[STATUSES.index("partial")]
    assert partial["star"] == "Tern 2"
    assert "no Kelvin-Helmholtz time: luminosity is not determined" in partial["status_text"]
    assert float(partial["binding_energy"]) > 0.0
    assert partial["kelvin_helmholtz_time"] == ""


@pytest.mark.parametrize("file", ["survey.csv", "survey.ecsv"])
def test_exactly_three_stars_are_not_done_and_say_why(file, results, tmp_path, survey):
    not_done = {row["star"]: row for row in results[file][0] if not row["binding_energy"]}
    assert list(not_done) == list(NOT_DONE)
    run(file, tmp_path)
    with (tmp_path / "rejected.csv").open(encoding="utf-8", newline="") as text:
        rejected = {row["star"]: row for row in csv.DictReader(text)}
    assert list(rejected) == list(NOT_DONE)
    for star, (word, sentence) in NOT_DONE.items():
        assert rejected[star]["status"] == not_done[star]["status"] == word
        assert sentence in rejected[star]["status_text"]
        assert rejected[star]["status_text"] == not_done[star]["status_text"]
        assert rejected[star]["row"] == str(list(survey).index(star) + 1)
        assert survey[star]["note"].startswith("not done: ")


def test_both_files_give_the_same_numbers(results):
    (rows, _, _), (others, _, _) = results["survey.csv"], results["survey.ecsv"]
    assert list(rows[0]) == list(others[0])
    for row, other in zip(rows, others, strict=True):
        assert [row[name] for name in WORDS] == [other[name] for name in WORDS]
        for name in row.keys() - set(WORDS):
            assert (row[name] == "") == (other[name] == ""), (row["star"], name)
            if row[name]:
                expected = pytest.approx(float(other[name]), rel=1e-12, abs=1e-15)
                assert float(row[name]) == expected, (row["star"], name)


@pytest.mark.parametrize("file", ["survey.csv", "survey.ecsv"])
def test_redundant_columns_are_left_aside_by_name(file, results):
    _, record, printed = results[file]
    aside = {tuple(entry["columns"]): entry["rows"] for entry in record["columns"]["left_aside"]}
    assert aside == {("luminosity",): 8, ("angular_diameter", "bolometric_flux"): 1}
    assert record["columns"]["not_used"] == ["note"]
    assert record["columns"]["correlations"] == ["correlation_mass_radius"]
    assert record["catalogue_flags"] == []
    assert "Left aside as redundant in 8 stars: luminosity." in printed


def test_luminosities_of_the_binaries_are_computed_and_recognised_when_used(survey, tmp_path):
    binaries = [row for row in survey.values() if row["system"]]
    for row in binaries:
        radius, temperature, luminosity = (
            float(row[name]) for name in ("radius", "effective_temperature", "luminosity")
        )
        assert luminosity == pytest.approx(radius**2 * (temperature / 5772.0) ** 4, rel=1e-3)
    assert len(binaries) == 8
    _, record, printed = run("survey.csv", tmp_path, "--use", "mass,radius,effective_temperature,luminosity")
    assert record["catalogue_flags"] == ["redundant-columns"]
    assert "redundant-columns" in printed


def test_using_all_of_the_over_determined_star_narrows_its_answer(survey, results, tmp_path):
    """Six measurements of four unknowns, which agree: the one flag raised is about the prior, with or without them."""
    names = "effective_temperature", "large_frequency_separation", "frequency_of_maximum_power"
    names += "angular_diameter", "parallax", "bolometric_flux"
    assert all(survey["Causeway 8"][name] for name in names)
    rows, _, _ = run("survey.csv", tmp_path, "--use", ",".join(names))
    star = next(row for row in rows if row["star"] == "Causeway 8")
    assert (star["status"], star["flags"]) == ("ok", "prior-excludes-calibration")
    assert float(star["kelvin_helmholtz_time_budget_bolometric_flux"]) > 0.0
    before = next(row for row in results["survey.csv"][0] if row["star"] == "Causeway 8")
    assert before["kelvin_helmholtz_time_budget_bolometric_flux"] == ""
    assert before["flags"] == "prior-excludes-calibration"
    widths = [float(row["kelvin_helmholtz_time_log10_sd"]) for row in (star, before)]
    assert widths[0] < widths[1], widths


def test_each_feature_is_present(survey, results):
    cells = [(name, cell or "") for row in survey.values() for name, cell in row.items() if name != "note"]
    assert any(re.fullmatch(r"[\d.]+\(\d+\)", cell) for _, cell in cells)  # 1.02(3)
    assert any(re.fullmatch(r"[\d.]+ \+[\d.]+ -[\d.]+", cell) for _, cell in cells)
    assert any(cell.endswith(" exact") for _, cell in cells)
    assert any(cell.startswith(">") for _, cell in cells)
    assert any(cell.endswith("erg / (s cm2)") for _, cell in cells)
    sides = [(row["luminosity_error_upper"], row["luminosity_error_lower"]) for row in survey.values()]
    assert sum(upper != lower for upper, lower in sides) == 2
    assert sum(bool(row["correlation_mass_radius"]) for row in survey.values()) == 2
    shapes = {cell for name, cell in cells if name.endswith("_shape")}
    assert shapes == {"", "lognormal", "split-normal"}
    states = {row["evolutionary_state"] for row in survey.values()}
    assert states == {"", "main-sequence", "pre-main-sequence", "evolved"}
    assert sum(star.startswith("Lighthouse") for star in survey) == 2  # giants
    assert {"0.351", "0.352"} <= {row["mass"] for row in survey.values()}
    by_star = {row["star"]: row for row in results["survey.csv"][0]}
    assert abs(float(by_star["Jetty 3 A"]["kelvin_helmholtz_time_budget_correlations"])) > 1e-3
    assert all(row["note"] for row in survey.values())


def test_the_ecsv_file_holds_numbers_with_units_and_says_that_they_are_invented():
    table = Table.read(EXAMPLES / "survey.ecsv", format="ascii.ecsv")
    assert "invented" in table.meta["comments"][0]
    units = {name: str(table[name].unit) for name in table.colnames if table[name].unit is not None}
    assert units["mass"] == "solMass"
    assert units["bolometric_flux"] == "erg / (s cm2)"
    texts = {name for name in table.colnames if table[name].dtype.kind in "UO"}
    assert texts == {
        "star",
        "system",
        "component",
        "evolutionary_state",
        "mass_shape",
        "luminosity_shape",
        "distance",
        "note",
    }


def test_the_script_prints_the_same_medians(results, tmp_path):
    """From another folder, with warnings as errors."""
    command = [sys.executable, "-W", "error", "-X", "utf8", str(EXAMPLES / "survey.py")]
    done = subprocess.run(command, cwd=tmp_path, capture_output=True, text=True, encoding="utf-8", check=False)
    assert done.returncode == 0, done.stderr
    assert done.stderr == ""
    given = [row for row in results["survey.csv"][0] if row["binding_energy"]]
    for row in given:
        (line,) = (x for x in done.stdout.splitlines() if x.startswith(row["star"] + "  "))
        assert f" {float(row['binding_energy']) / 1e48:<9.4g} " in line
        time = row["kelvin_helmholtz_time"]
        assert (f" {float(time):<9.4g} " if time else " not given ") in line
        share = float(row["binding_energy_budget_structure"])
        assert np.isclose(float(line.split()[-2]), 100.0 * share, rtol=0.0, atol=0.051)
    for row in results["survey.csv"][0]:
        if row["status_text"]:
            assert f"{row['star']}: {row['status_text']}" in done.stdout
    assert "mean temperature inside" in done.stdout
