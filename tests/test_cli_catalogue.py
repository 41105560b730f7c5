"""`stellerg catalogue`: tables in, tables out, every row accounted for, and one message for a wrong call."""

import csv
import hashlib
import json
import math
import re

import numpy as np
import pyarrow.parquet as pq
import pytest
from astropy import constants, units
from astropy.constants import iau2015
from astropy.table import QTable, Table

from command_line import assert_one_message, stellerg
from stellerg import Stars, propagate
from stellerg.catalogue.readers import PART_ROWS
from stellerg.energetics import OUTPUTS
from stellerg.status import STATUS_TEXT, Status

BOTH = ("binding_energy", "kelvin_helmholtz_time")
ENDS = ("", "_lower68", "_upper68", "_lower95", "_upper95")
MOMENTS = ("_log10_mean", "_log10_sd", "_linear", "_linear_u")
INSIDE = ("radiation_share", "ionisation_share")
WITHOUT_STRUCTURE = ("free_fall_time", "nuclear_time")
ROUNDING = 1e-9  # medians of inputs that differ by rounding in their units
UNREADABLE = "cannot be read as a finite number"

# Ten stars that need different engines and statuses; the last two are not done.
ROWS = [
    # star, mass, mass_error, radius, luminosity, effective_temperature, correlation_mass_radius
    ("a", "1.02", "0.03", "1.05(2)", "1.10 +0.12 -0.10", "", ""),
    ("b", "1.02 ± 0.03", "", "1.05 ± 0.02", "", "5800 ± 60", ""),
    ("c", "0.5", "0.1", "0.6(1)", "0.05(1)", "", "0.6"),
    ("d", "8", "0.5", "4.1 ± 0.3", "3000 ± 400", "", "0"),
    ("e", "1 exact", "", "1 exact", "1 exact", "", ""),
    ("f", "1.4", "0.01", "1.6 ± 0.5", "", "", ""),
    ("g", "1.4", "0.01", "1.6 +0.5 -0.2", "5.0(5)", "6800 ± 100", "-0.3"),
    ("h", "2.0", "0.7", "1.7(1)", "16(2)", "", ""),
    ("i", "heavy", "0.1", "1.0(1)", "1.0(1)", "", ""),
    ("j", "1.0", "", "1.0(1)", "1.0(1)", "", ""),
]
NAMES = (
    "star", "mass", "mass_error", "radius", "luminosity", "effective_temperature", "correlation_mass_radius",
)  # fmt: skip
WORDS = ["ok", "ok", "ok", "ok", "ok", "partial", "ok", "ok", "not-a-number", "error-missing"]


def csv_text(names, rows):
    return "\n".join([",".join(names), *(",".join(row) for row in rows)]) + "\n"


TEN = csv_text(NAMES, ROWS)


def call(folder, text, *arguments, name="stars.csv", out="out"):
    """Write a table, run it, return the result of the call and the folder of the results."""
    path = folder / name
    if isinstance(text, bytes):
        path.write_bytes(text)
    elif text is not None:
        path.write_text(text, encoding="utf-8", newline="")
    return stellerg("catalogue", path, "--out", folder / out, *arguments), folder / out


def done(folder, text, *arguments, **more):
    """The summary as a dict of columns, of a run that must succeed."""
    result, out = call(folder, text, "--format", "csv", "--overwrite", *arguments, **more)
    assert result.code == 0, result
    assert result.err == ""
    return read_csv(out / "summary.csv")


def read_csv(path):
    """Columns of texts and, where all cells are numbers or empty, of numbers."""
    with path.open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    return {name: [_cell(name, row[name]) for row in rows] for name in rows[0]} if rows else {}


def _cell(name, text):
    if name in ("star", "status", "status_text", "flags", "engine", "row"):
        return text
    return float(text) if text else None


def read_parquet(folder):
    table = pq.read_table(folder / "summary" / "part-000000.parquet")
    return {name: table[name].to_pylist() for name in table.column_names}


def rejected(out):
    with (out / "rejected.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def files(folder):
    return sorted(str(p.relative_to(folder)) for p in folder.rglob("*") if p.is_file())


def measurements(row):
    """Keyword arguments of the API for one of the ten rows."""
    cells = dict(zip(NAMES, row, strict=True))
    mass = cells["mass"] + (f" ± {cells['mass_error']}" if cells["mass_error"] else "")
    given = {"mass": mass} | {n: cells[n] for n in ("radius", "luminosity", "effective_temperature") if cells[n]}
    rho = cells["correlation_mass_radius"]
    return {"star": cells["star"], **given, "correlation": {("mass", "radius"): float(rho)} if rho else None}


# --- what is written ---
def expected_columns(outputs, observables):
    shares = (*observables, "correlations", "structure")
    tail = [*MOMENTS, *(f"_budget_{share}" for share in shares)]
    return [
        "star",
        "status",
        "status_text",
        "flags",
        "engine",
        *(
            name + end
            for name in outputs
            for end in (*ENDS, *(["_calibrated"] if name not in WITHOUT_STRUCTURE else []), *tail)
        ),
        *INSIDE,
    ]


@pytest.mark.parametrize("outputs", [BOTH, tuple(OUTPUTS)], ids=["default", "all"])
def test_columns(tmp_path, outputs):
    summary = done(tmp_path, TEN, "--outputs", ",".join(outputs))
    observables = ("mass", "radius", "luminosity", "effective_temperature")
    assert list(summary) == expected_columns(outputs, observables)


def test_row_count_order_and_statuses(tmp_path):
    summary = done(tmp_path, TEN)
    assert summary["star"] == [row[0] for row in ROWS]
    assert summary["status"] == WORDS
    for name in BOTH:
        given = [value is not None for value in summary[name]]
        assert given == [w == "ok" or (w == "partial" and name == "binding_energy") for w in WORDS]
    assert UNREADABLE in summary["status_text"][8]
    assert "a value without an error" in summary["status_text"][9]
    assert summary["engine"][8:] == ["", ""]


@pytest.mark.parametrize("number", range(8))
def test_a_row_equals_the_api(tmp_path, number):
    summary = done(tmp_path, TEN)
    posterior = propagate(Stars.of(**measurements(ROWS[number])))
    assert summary["engine"][number] == posterior.engines[posterior.engine[0]]
    for name in BOTH:
        if summary[name][number] is None:
            assert np.isnan(posterior.median(name)[0])
            continue
        for end, p in zip(ENDS, (0.5, *INTERVAL_PROBABILITIES), strict=True):
            assert math.isclose(summary[name + end][number], posterior.quantile(p, name)[0], rel_tol=1e-12)
        assert summary[name + "_log10_mean"][number] == posterior.log10_mean(name)[0]
        assert summary[name + "_log10_sd"][number] == posterior.log10_sd(name)[0]
        assert summary[name + "_linear"][number] == posterior.linear_value(name)[0]
        assert summary[name + "_linear_u"][number] == posterior.linear_uncertainty(name)[0]
        assert summary[name + "_calibrated"][number] == number_or_none(posterior.calibrated(name))
        for quantity, share in posterior.budget(name).items():
            assert summary[f"{name}_budget_{quantity}"][number] == share[0]
    assert summary["radiation_share"][number] == posterior.radiation_share()[0] > 0.0
    assert summary["ionisation_share"][number] == posterior.ionisation_share()[0] > 0.0


def number_or_none(values):
    return None if np.isnan(values[0]) else values[0]


def test_calibrated_medians_stand_where_the_prior_excludes_them(tmp_path):
    """They are the medians of the same table under the calibrated prior, and stand beside the flag only."""
    summary, calibrated = done(tmp_path, TEN), done(tmp_path, TEN, "--prior", "main-sequence")
    excluded = ["prior-excludes-calibration" in flags for flags in summary["flags"]]
    assert {True, False} == set(excluded[:8])  # some stars of each kind
    for name in BOTH:
        expected = [value if flagged else None for value, flagged in zip(calibrated[name], excluded, strict=True)]
        assert summary[name + "_calibrated"] == expected
    assert not any("prior-excludes-calibration" in flags for flags in calibrated["flags"])
    assert set(calibrated["binding_energy_calibrated"]) == {None}


def test_structure_observables_of_a_table(tmp_path):
    """Cells of the inside reach the star, and what the prior predicted has a column for each."""
    names = ("star", "mass", "radius", "log_k2", "mean_log_k2", "mean_log_k2_weight")
    rows = [
        ("a", "1.0(1)", "1.0(1)", "-1.80 ± 0.05", "", ""),
        ("b", "1.0(1)", "1.0(1)", "", "-1.80 ± 0.05", "0.6"),
        ("c", "1.0(1)", "1.0(1)", "", "-1.80 ± 0.05", ""),  # neither the row nor the call says whose it is
    ]
    text = csv_text(names, rows)
    summary = done(tmp_path, text, "--outputs", BOTH[0])
    assert summary["status"] == ["ok"] * 3
    assert ["measurement-unusable" in flags for flags in summary["flags"]] == [False, False, True]
    star = {"mass": "1.0(1)", "radius": "1.0(1)"}
    own = propagate(Stars.of("a", **star, log_k2="-1.80 ± 0.05"), outputs=BOTH[:1])
    mean = {"mean_log_k2": "-1.80 ± 0.05", "mean_log_k2_weight": 0.6}
    of_system = propagate(Stars.of("b", **star, **mean), outputs=BOTH[:1])
    plain = propagate(Stars.of("c", **star), outputs=BOTH[:1])
    assert summary[BOTH[0]] == [p.median(BOTH[0])[0] for p in (own, of_system, plain)]
    assert len(set(summary[BOTH[0]])) == 3
    for name, expected in (
        ("log_k2", [own.predictive_probabilities()["log_k2"][0], None, None]),
        ("mean_log_k2", [None, of_system.predictive_probabilities()["mean_log_k2"][0], None]),
    ):
        assert summary[f"{name}_predictive_probability"] == expected
    # the option fills empty cells only
    filled = done(tmp_path, text, "--outputs", BOTH[0], "--mean-log-k2-weight", "0.6")
    assert filled[BOTH[0]] == [summary[BOTH[0]][k] for k in (0, 1, 1)]


# Phi(-1), Phi(1), Phi(-2), Phi(2)
INTERVAL_PROBABILITIES = [0.5 * math.erfc(-z / math.sqrt(2.0)) for z in (-1.0, 1.0, -2.0, 2.0)]


def test_ten_rows_together_each_alone_and_in_another_order_give_the_same_bits(tmp_path):
    together = done(tmp_path, TEN)
    backwards = done(tmp_path, csv_text(NAMES, ROWS[::-1]))
    for name, column in together.items():
        assert backwards[name][::-1] == column, name
    for number, row in enumerate(ROWS):
        alone = done(tmp_path, csv_text(NAMES, [row]))
        assert {name: column[number] for name, column in together.items()} == {
            name: column[0] for name, column in alone.items()
        }


def test_three_formats_hold_the_same(tmp_path):
    texts = done(tmp_path, TEN)
    call(tmp_path, TEN, out="parquet")  # the default
    call(tmp_path, TEN, "--format", "ecsv", out="ecsv")
    assert files(tmp_path / "out") == ["rejected.csv", "run.json", "summary.csv"]
    assert files(tmp_path / "parquet") == ["rejected.csv", "run.json", "summary/part-000000.parquet"]
    assert files(tmp_path / "ecsv") == ["rejected.csv", "run.json", "summary.ecsv"]
    parquet = read_parquet(tmp_path / "parquet")
    table = Table.read(tmp_path / "ecsv" / "summary.ecsv", format="ascii.ecsv")
    assert list(parquet) == list(texts) == table.colnames
    for name, column in texts.items():
        assert parquet[name] == column
        ecsv = np.ma.asarray(table[name])
        cells = np.where(np.ma.getmaskarray(ecsv), None, ecsv.data.astype(object)).tolist()
        # an ECSV file makes no difference between an empty text and none
        assert [cell or None if isinstance(cell, str) else cell for cell in cells] == [
            cell or None if isinstance(cell, str) else cell for cell in column
        ], name
    assert [rejected(tmp_path / out) for out in ("parquet", "ecsv")] == [rejected(tmp_path / "out")] * 2


def test_units_and_descriptions(tmp_path):
    call(tmp_path, TEN, "--energy-unit", "J", out="parquet")
    call(tmp_path, TEN, "--energy-unit", "J", "--format", "ecsv", out="ecsv")
    schema = pq.read_schema(tmp_path / "parquet" / "summary" / "part-000000.parquet")
    table = QTable.read(tmp_path / "ecsv" / "summary.ecsv", format="ascii.ecsv")
    for name, unit in zip(BOTH, ("J", "Myr"), strict=True):
        for end in (*ENDS, "_linear", "_linear_u"):
            assert schema.field(name + end).metadata[b"unit"].decode() == unit
            assert table[name + end].unit == units.Unit(unit)
            assert schema.field(name + end).metadata[b"description"].decode() == table[name + end].info.description
        assert schema.field(name + "_calibrated").metadata[b"unit"].decode() == unit
        assert table[name + "_calibrated"].unit == units.Unit(unit)
    for name in INSIDE:
        assert b"unit" not in schema.field(name).metadata  # a share
        assert table[name].unit is None
    assert all(field.metadata[b"description"] for field in schema)
    assert schema.metadata[b"energy_convention"].decode() == "abs(E) = abs(Omega)/2 (monatomic ideal gas)"
    assert schema.metadata[b"time_convention"].decode() == table.meta["time_convention"] == "t_KH = abs(E)/L"
    assert schema.metadata[b"prior"].decode() == table.meta["prior"] == "uniform-index"


def test_rejected(tmp_path):
    summary = done(tmp_path, TEN)
    rows = rejected(tmp_path / "out")
    assert list(rows[0]) == ["row", "star", "status", "status_text"]
    assert [(row["row"], row["star"], row["status"]) for row in rows] == [
        ("9", "i", "not-a-number"),
        ("10", "j", "error-missing"),
    ]
    assert [row["status_text"] for row in rows] == summary["status_text"][8:]


def test_rejected_when_no_row_was(tmp_path):
    done(tmp_path, csv_text(NAMES, ROWS[:2]))
    text = (tmp_path / "out" / "rejected.csv").read_text(encoding="utf-8")
    assert text.strip().replace('"', "") == "row,star,status,status_text"


def test_closing_summary_counts_by_status(tmp_path):
    result, out = call(tmp_path, TEN)
    counts = dict(re.findall(r"^(\S+) +(\d+)$", re.sub(r" +$", "", result.out, flags=re.M), re.M))
    assert counts == {"ok": "7", "partial": "1", "not-a-number": "1", "error-missing": "1", "all": "10"}
    assert "rejected.csv" in result.words
    assert str(out) in result.words.replace(" ", "")
    assert re.search(r"Left aside as redundant in 1 stars?: luminosity", result.words)
    assert json.loads((out / "run.json").read_text(encoding="utf-8"))["counts"] == {
        word: int(count) for word, count in counts.items() if word != "all"
    }


PRIOR = 'summary = "mine"\nsource = "judgement"\n\n[index]\ndistribution = "uniform"\nlower = 2.0\nupper = 2.5\n'


def test_run_json(tmp_path):
    prior = tmp_path / "mine.toml"
    prior.write_text(PRIOR, encoding="utf-8")
    done(
        tmp_path, TEN, "--prior", prior, "--engine", "montecarlo", "--seed", "7", "--shape", "lognormal",
        *("--time-convention", "potential", "--adiabatic-index", "3/2", "--energy-unit", "J"),
        *("--use", "mass,radius,luminosity", "--correlation", "luminosity,radius=0.1"),
        *("--evolutionary-state", "main-sequence", "--solar-large-frequency-separation", "134.9"),
    )  # fmt: skip
    record = json.loads((tmp_path / "out" / "run.json").read_text(encoding="utf-8"))
    digest = hashlib.sha256((tmp_path / "stars.csv").read_bytes()).hexdigest()
    assert record["input"] == {"file": "stars.csv", "sha256": digest, "rows": 10}
    assert record["prior"] == {"name": "mine", "text": PRIOR}
    options = record["options"]
    assert (options["format"], options["engine"], options["seed"]) == ("csv", "montecarlo", 7)
    assert options["outputs"] == list(BOTH)
    assert options["use"] == ["mass", "radius", "luminosity"]
    assert options["shape"] == "lognormal"
    assert options["correlation"] == {"luminosity,radius": 0.1}
    assert options["evolutionary_state"] == "main-sequence"
    assert options["solar_references"]["large_frequency_separation"] == 134.9
    assert record["conventions"]["time"] == "potential"
    assert record["conventions"]["adiabatic_index"] == 1.5
    assert record["conventions"]["energy_unit"] == "J"
    assert record["constants"]["nominal_solar_gm"] == iau2015.GM_sun.si.value
    assert record["constants"]["nominal_solar_radius"] == iau2015.R_sun.si.value
    assert record["constants"]["nominal_solar_luminosity"] == iau2015.L_sun.si.value
    assert record["constants"]["gravitational_constant"] == constants.G.si.value
    assert record["constants"]["year"] == units.yr.to("s")
    assert sum(record["counts"].values()) == 10
    assert set(record["counts"]) <= {text.word for text in STATUS_TEXT.values()}
    assert record["columns"]["left_aside"] == [{"columns": ["effective_temperature"], "rows": 2}]
    assert record["stellerg"]
    assert {"numpy", "scipy", "astropy", "pyarrow"} <= set(record["versions"])


def test_the_same_run_gives_the_same_bytes(tmp_path):
    for out in ("one", "two"):
        call(tmp_path, TEN, "--engine", "montecarlo", out=out)
    for name in files(tmp_path / "one"):
        assert (tmp_path / "one" / name).read_bytes() == (tmp_path / "two" / name).read_bytes(), name


def test_explain_says_how_columns_are_read_and_computes_nothing(tmp_path):
    result, out = call(tmp_path, TEN.replace("star,", "star,", 1), "--explain")
    assert result.code == 0
    assert "mass, mass_error" in result.words
    assert "Correlation of mass and radius: column correlation_mass_radius" in result.words
    assert "Left aside as redundant in 1 of the first 10 rows: luminosity" in result.words
    assert not out.exists()


def test_columns_that_mean_nothing_here_are_named(tmp_path):
    names, rows = ("star", "mass", "radius", "colour"), [("a", "1(1)", "1(1)", "red")]
    done(tmp_path, csv_text(names, rows))
    record = json.loads((tmp_path / "out" / "run.json").read_text(encoding="utf-8"))
    assert record["columns"]["not_used"] == ["colour"]
    assert record["columns"]["observables"] == ["mass", "radius"]
    assert "Not used: colour" in call(tmp_path, csv_text(names, rows), "--explain")[0].words


# --- how columns are read ---
def one_way(folder, **columns):
    """Medians and spread of a table of one or more rows given by columns of texts."""
    rows = list(zip(*columns.values(), strict=True))
    summary = done(folder, csv_text(tuple(columns), rows))
    return [summary[name + end] for name in ("binding_energy",) for end in ("", "_log10_sd", "_upper95")]


def test_an_error_may_stand_in_the_cell_or_beside_it(tmp_path):
    inside = one_way(tmp_path, star=["a", "b"], mass=["1.02 ± 0.03", "1.02(3)"], radius=["1.05(2)", "1.05(2)"])
    beside = one_way(
        tmp_path,
        star=["a", "b"],
        mass=["1.02", "1.02"],
        mass_error=["0.03", "3e-2"],
        radius=["1.05 ± 0.02"] * 2,
    )
    assert inside == beside
    assert inside[0][0] == inside[0][1]


def test_upper_and_lower_errors_in_columns(tmp_path):
    inside = one_way(tmp_path, mass=["1.02 +0.05 -0.03"], radius=["1.05(2)"])
    beside = one_way(tmp_path, mass=["1.02"], mass_error_upper=["0.05"], mass_error_lower=["0.03"], radius=["1.05(2)"])
    swapped = one_way(tmp_path, mass=["1.02"], mass_error_upper=["0.03"], mass_error_lower=["0.05"], radius=["1.05(2)"])
    assert inside == beside
    assert swapped != beside


def test_the_word_exact_in_an_error_column(tmp_path):
    beside = one_way(tmp_path, mass=["1.02"], mass_error=["exact"], radius=["1.05(2)"])
    assert beside == one_way(tmp_path, mass=["1.02 exact"], radius=["1.05(2)"])


def test_shape_column(tmp_path):
    summary = done(
        tmp_path,
        csv_text(
            ("star", "mass", "mass_shape", "radius"),
            [
                ("a", "1.0(3)", "lognormal", "1.0(1)"),
                ("b", "1.0(3)", "", "1.0(1)"),
                ("c", "1.0(3)", "exact", "1.0(1)"),
            ],
        ),
    )
    for number, shape in enumerate(("lognormal", "normal")):
        stars = Stars.of("x", mass="1.0(3)", radius="1.0(1)", shape={"mass": shape})
        assert summary["binding_energy_log10_sd"][number] == propagate(stars).log10_sd("binding_energy")[0]
    exact = propagate(Stars.of("x", mass="1.0 exact", radius="1.0(1)"))
    assert summary["binding_energy_log10_sd"][2] == exact.log10_sd("binding_energy")[0]


def test_shape_option_where_a_row_does_not_say(tmp_path):
    text = csv_text(("mass", "mass_shape", "radius"), [("1.0(3)", "", "1.0(1)"), ("1.0(3)", "normal", "1.0(1)")])
    summary = done(tmp_path, text, "--shape", "lognormal")
    for number, shape in enumerate(("lognormal", "normal")):
        stars = Stars.of("x", mass="1.0(3)", radius="1.0(1)", shape={"mass": shape, "radius": "lognormal"})
        expected = propagate(stars).log10_sd("binding_energy")[0]
        assert math.isclose(summary["binding_energy_log10_sd"][number], expected, rel_tol=1e-12)


@pytest.mark.parametrize("column", ["correlation_mass_radius", "correlation_radius_mass"])
def test_correlation_column(tmp_path, column):
    names = ("star", "mass", "radius", column)
    rows = [
        ("a", "1.0(1)", "1.0(2)", "0.6"),
        ("b", "1.0(1)", "1.0(2)", ""),
        ("c", "1.0(1)", "1.0(2)", "-0.6"),
    ]
    summary = done(tmp_path, csv_text(names, rows), "--shape", "lognormal")
    for number, rho in enumerate((0.6, 0.0, -0.6)):
        stars = Stars.of("x", mass="1.0(1)", radius="1.0(2)", shape="lognormal", correlation={("mass", "radius"): rho})
        assert summary["binding_energy_log10_sd"][number] == propagate(stars).log10_sd("binding_energy")[0]
    sds = summary["binding_energy_log10_sd"]
    assert sds[0] < sds[1] < sds[2]
    option = done(
        tmp_path,
        csv_text(names[:3], [r[:3] for r in rows]),
        "--shape",
        "lognormal",
        "--correlation",
        "mass,radius=0.6",
    )
    assert option["binding_energy_log10_sd"] == [sds[0]] * 3
    both = done(tmp_path, csv_text(names, rows), "--shape", "lognormal", "--correlation", "mass,radius=0.6")
    assert both["binding_energy_log10_sd"] == [sds[0], sds[0], sds[2]]  # the option fills empty cells only


def states_table(*states):
    names = ("star", "mass", "radius", "luminosity", "evolutionary_state")
    return csv_text(names, [("s", *["1.00(1)"] * 3, state) for state in states])


def test_evolutionary_state_column(tmp_path):
    text = states_table("main-sequence", "pre-main-sequence", "evolved", "unknown", "")
    refused = ["ok", "outside-calibration", "evolved-or-contracting", "ok"]
    plain = done(tmp_path, text, "--prior", "present-sun")
    assert plain["status"] == [*refused, "ok"]
    stated = done(tmp_path, text, "--prior", "present-sun", "--evolutionary-state", "pre-main-sequence")
    assert stated["status"] == [*refused, "outside-calibration"]


def test_an_evolutionary_state_that_is_not_understood_is_flagged(tmp_path):
    summary = done(tmp_path, states_table("main-sequence", "dead"), "--prior", "wide-index")
    assert summary["status"] == ["ok", "ok"]
    assert summary["flags"] == ["", "state-not-understood"]


def test_rows_without_an_identifier_use_their_number(tmp_path):
    rows = [("K-7", "1(1)", "1(1)"), ("", "1(1)", "1(1)"), ("  ", "1(1)", "1(1)")]
    assert done(tmp_path, csv_text(("star", "mass", "radius"), rows))["star"] == ["K-7", "2", "3"]
    assert done(tmp_path, csv_text(("mass", "radius"), [r[1:] for r in rows]))["star"] == ["1", "2", "3"]


def test_system_and_component_make_an_identifier(tmp_path):
    rows = [("V1", "A", "1(1)", "1(1)"), ("V1", "B", "1(1)", "1(1)"), ("V2", "", "1(1)", "1(1)")]
    assert done(tmp_path, csv_text(("system", "component", "mass", "radius"), rows))["star"] == [
        "V1 A",
        "V1 B",
        "V2",
    ]


def test_two_rows_with_the_same_identifier_are_both_kept(tmp_path):
    text = csv_text(("star", "mass", "radius"), [("a", "1.0(1)", "1.0(1)"), ("a", "2.0(1)", "1.0(1)")])
    summary = done(tmp_path, text)
    assert summary["star"] == ["a", "a"]
    assert 3.5 < summary["binding_energy"][1] / summary["binding_energy"][0] < 4.5  # as the square of the mass


def test_byte_order_mark_and_windows_line_endings(tmp_path):
    plain = done(tmp_path, TEN)
    assert done(tmp_path, b"\xef\xbb\xbf" + TEN.encode()) == plain
    assert done(tmp_path, TEN.replace("\n", "\r\n")) == plain
    assert done(tmp_path, b"\xef\xbb\xbf" + TEN.replace("\n", "\r\n").encode()) == plain
    assert done(tmp_path, TEN.rstrip("\n")) == plain


def test_quoted_cells_blanks_and_capital_endings(tmp_path):
    plain = done(tmp_path, "star,mass,radius\nα Cen,1.02 ± 0.03,1.05(2)\n")
    quoted = done(tmp_path, '"star", mass ,radius\n"α Cen"," 1.02 ± 0.03 ","1.05(2)"\n', name="STARS.CSV")
    assert quoted == plain
    assert plain["star"] == ["α Cen"]
    comma = done(tmp_path, 'star,mass,radius\n"V1, A",1.02 ± 0.03,1.05(2)\n')
    assert comma["star"] == ["V1, A"]


# --- ECSV ---
def write_ecsv(folder, name="stars.ecsv", **columns):
    QTable(columns).write(folder / name, format="ascii.ecsv", overwrite=True)


def test_ecsv_equals_csv(tmp_path):
    table = Table(rows=ROWS, names=NAMES)
    table.write(tmp_path / "stars.ecsv", format="ascii.ecsv")
    assert done(tmp_path, None, name="stars.ecsv") == done(tmp_path, TEN)


def test_units_of_ecsv_columns(tmp_path):
    """kg, km and dex of m s^-2 against solar units and dex of cm s^-2."""
    solar_mass = (iau2015.GM_sun / constants.G).to_value("kg")
    solar_radius = iau2015.R_sun.to_value("km")
    mass, radius = np.array([1.2, 0.4]), np.array([1.1, 0.5])
    write_ecsv(
        tmp_path,
        mass=mass * solar_mass * units.kg,
        mass_error=0.05 * mass * solar_mass * units.kg,
        radius=radius * solar_radius * units.km,
        radius_error=0.03 * radius * solar_radius * units.km,
    )
    quoted = done(tmp_path, None, name="stars.ecsv")
    write_ecsv(tmp_path, mass=mass, mass_error=0.05 * mass, radius=radius, radius_error=0.03 * radius)
    plain = done(tmp_path, None, name="stars.ecsv")
    for name in ("binding_energy", "binding_energy_lower95", "binding_energy_log10_sd"):
        np.testing.assert_allclose(quoted[name], plain[name], rtol=ROUNDING)


def test_units_of_dex_columns(tmp_path):
    radius, error = np.array([1.1, 0.5]), np.array([0.03, 0.02])
    found = []
    for unit, offset in (
        (units.dex(units.cm / units.s**2), 0.0),
        (units.dex(units.m / units.s**2), -2.0),
        (1, 0.0),
    ):
        write_ecsv(
            tmp_path,
            radius=radius,
            radius_error=error,
            log_surface_gravity=(np.array([4.4, 4.7]) + offset) * unit,
            log_surface_gravity_error=np.array([0.05, 0.06]) * (units.dex if unit != 1 else 1),
        )
        found.append(done(tmp_path, None, name="stars.ecsv"))
    for other in found[1:]:
        for name in ("binding_energy", "binding_energy_lower95", "binding_energy_log10_sd"):
            np.testing.assert_allclose(other[name], found[0][name], rtol=ROUNDING)


def test_an_error_column_of_another_unit_is_converted(tmp_path):
    solar_radius = iau2015.R_sun.to_value("km")
    found = []
    for error in (np.array([0.05]) * units.solRad, np.array([0.05 * solar_radius]) * units.km):
        write_ecsv(tmp_path, mass=[1.0], mass_error=[0.1], radius=np.array([1.0]) * units.solRad, radius_error=error)
        found.append(done(tmp_path, None, name="stars.ecsv")["binding_energy_log10_sd"])
    np.testing.assert_allclose(found[0], found[1], rtol=ROUNDING)


def test_units_that_a_quantity_requires(tmp_path):
    columns = {"radius": [1.0], "radius_error": [0.1]}
    write_ecsv(
        tmp_path,
        **columns,
        mean_density=[1.4] * units.g / units.cm**3,
        mean_density_error=[0.1] * units.g / units.cm**3,
    )
    assert done(tmp_path, None, "--outputs", BOTH[0], name="stars.ecsv")["status"] == ["ok"]
    write_ecsv(tmp_path, **columns, mean_density=[1.4], mean_density_error=[0.1])
    assert done(tmp_path, None, "--outputs", BOTH[0], name="stars.ecsv")["status"] == ["unit-missing"]
    write_ecsv(tmp_path, radius=[1.0] * units.kg, radius_error=[0.1] * units.kg, mass=[1.0], mass_error=[0.1])
    assert done(tmp_path, None, "--outputs", BOTH[0], name="stars.ecsv")["status"] == ["unit-missing"]


def test_masked_cells_of_ecsv_are_empty(tmp_path):
    table = Table({"star": ["a", "b"], "mass": [1.0, 1.0], "mass_error": [0.1, 0.1], "radius": ["1(1)", "1(1)"]})
    table = Table(table, masked=True)
    table["mass_error"].mask[0] = True
    table["radius"].mask[1] = True
    table.write(tmp_path / "stars.ecsv", format="ascii.ecsv")
    summary = done(tmp_path, None, "--outputs", BOTH[0], name="stars.ecsv")
    assert summary["status"] == ["error-missing", "underdetermined"]


def test_long_integer_identifiers_keep_their_digits(tmp_path):
    """Identifiers of large surveys have 19 digits, more than a float64 holds."""
    names = [5853498713190525696, 5853498713190525697, 7]
    write_ecsv(
        tmp_path,
        star=np.array(names),
        mass=[1.0] * 3,
        mass_error=[0.1] * 3,
        radius=[1.0] * 3,
        radius_error=[0.1] * 3,
    )
    assert done(tmp_path, None, name="stars.ecsv")["star"] == [str(name) for name in names]


def test_ecsv_columns_of_other_kinds_do_no_harm(tmp_path):
    """Coordinates, times, vectors and truth values that nobody asked about."""
    from astropy.coordinates import SkyCoord
    from astropy.time import Time

    columns = {"mass": [1.0, 1.1], "mass_error": [0.1, 0.1], "radius": [1.0, 1.0], "radius_error": [0.1, 0.1]}
    write_ecsv(tmp_path, **columns)
    plain = done(tmp_path, None, name="stars.ecsv")
    others = {
        "seen": [True, False],
        "vector": np.zeros((2, 3)),
        "observed": Time(["2020-01-01", "2021-01-01"]),
        "position": SkyCoord([1, 2] * units.deg, [3, 4] * units.deg),
    }
    for name, column in others.items():
        write_ecsv(tmp_path, **columns, **{name: column})
        assert done(tmp_path, None, name="stars.ecsv") == plain, name


# --- every status ---
GOOD = {"mass": "1.10 ± 0.03", "radius": "1.20 +0.04 -0.03", "luminosity": "1.7 ± 0.1"}
BAD = {
    # status: (cells of the row that differ, options, word of its sentence)
    "partial": ({"luminosity": ""}, [], "no Kelvin-Helmholtz time"),
    "underdetermined": ({"mass": "", "radius": ""}, [], "mass is not determined"),
    "error-missing": ({"mass": "1.1"}, [], "a value without an error"),
    "error-zero": ({"mass": "1.1 ± 0"}, [], "an error of zero"),
    "not-positive": ({"radius": "-1.2(1)"}, [], "must be positive"),
    "not-a-number": ({"mass": "see note"}, [], UNREADABLE),
    "limit-only": ({"radius": "<1.2"}, [], "a limit is not a measurement"),
    "unit-missing": ({"mass": "1.1 ± 0.1 km"}, [], "the unit"),
    "shape-invalid": ({"mass": "1.1 +0.1 -0.2", "mass_shape": "normal"}, [], "upper and lower errors"),
    "correlation-invalid": ({"correlation_mass_radius": "1.2"}, [], "[-1, 1]"),
    "exact-values-conflict": (
        {"mass": "1 exact", "radius": "1 exact", "log_surface_gravity": "4.0 exact"},
        ["--use", "mass,radius,luminosity,log_surface_gravity"],
        "contradict each other",
    ),
    "parallax-not-usable": (
        {"luminosity": "", "parallax": "-1.0(1)", "bolometric_flux": "3e-11 ± 1e-12 W/m2"},
        ["--outputs", "kelvin_helmholtz_time"],
        "give a distance instead",
    ),
    "evolved-or-contracting": ({"evolutionary_state": "evolved"}, [], "evolved"),
    "outside-calibration": ({"mass": "2.0(1)"}, ["--prior", "present-sun"], "choose another prior"),
    "engine-refused": ({"correlation_mass_radius": "0.5"}, ["--engine", "quadrature"], "use montecarlo"),
}
WHOLE_CATALOGUE = {Status.OK, Status.NOT_BOUND}  # tested below: they depend on options, not on a row
LATER = {Status.DOUBTFUL}  # of the calibrated model of main-sequence stars
ENGINES_OWN = {Status.NOT_CONVERGED}  # raised by engines, in their own tests


def test_every_status_has_a_row():
    assert set(BAD) == {STATUS_TEXT[s].word for s in set(Status) - WHOLE_CATALOGUE - LATER - ENGINES_OWN}


def with_neighbours(word):
    """The row between two good ones."""
    cells, arguments, wanted = BAD[word]
    good = {**GOOD, "mass": "1.00(1)"} if word == "outside-calibration" else GOOD
    middle = {**good, **cells}
    names = list(dict.fromkeys([*good, *middle]))
    rows = [
        [label, *(cell.get(name, "") for name in names)]
        for label, cell in (("before", good), ("bad", middle), ("after", good))
    ]
    return csv_text(("star", *names), rows), arguments, wanted


@pytest.mark.parametrize("word", BAD)
def test_status_of_a_row(tmp_path, word):
    text, arguments, wanted = with_neighbours(word)
    summary = done(tmp_path, text, *arguments)
    assert summary["status"] == ["ok", word, "ok"]
    assert wanted in summary["status_text"][1]
    assert summary["status_text"][::2] == ["", ""]
    reasons = [(row["row"], row["star"], row["status"]) for row in rejected(tmp_path / "out")]
    assert reasons == ([] if word == "partial" else [("2", "bad", word)])
    output = next(name for name in summary if name in OUTPUTS)
    assert (summary[output][1] is None) == (word != "partial")
    assert summary[output][0] == summary[output][2] is not None


def test_a_catalogue_that_is_not_bound(tmp_path):
    summary = done(tmp_path, TEN, "--adiabatic-index", "4/3")
    assert set(summary["status"]) == {"not-bound", "not-a-number", "error-missing"}
    assert len(rejected(tmp_path / "out")) == 10


@pytest.mark.parametrize("column", ["mass_error", "radius", "correlation_mass_radius"])
def test_text_in_a_number_cell_is_a_status(tmp_path, column):
    cells = {"mass": "1.0", "mass_error": "0.1", "radius": "1.0(1)", "correlation_mass_radius": "0"} | {column: "text"}
    summary = done(tmp_path, csv_text(tuple(cells), [cells.values()]))
    expected = "correlation-invalid" if column.startswith("correlation") else "not-a-number"
    assert summary["status"] == [expected if column != "radius" else summary["status"][0]]
    if column == "radius":  # luminosity is missing too: either sentence will do
        assert summary["status"][0] in ("not-a-number", "underdetermined")


def test_an_unknown_shape_in_a_row_is_a_status(tmp_path):
    text = csv_text(("mass", "mass_shape", "radius"), [("1(1)", "round", "1(1)")])
    assert done(tmp_path, text, "--outputs", BOTH[0])["status"] == ["shape-invalid"]


# --- wrong calls ---
STARS = "star,mass,radius\na,1.0(1),1.0(1)\nb,1.1(1),1.0(1)\n"
ECSV_HEAD = "# %ECSV 1.0\n# ---\n# datatype:\n# - {name: mass, datatype: string}\n"
ECSV_TWICE = ECSV_HEAD + "# - {name: mass, datatype: string}\n# schema: astropy-2.0\nmass mass\n1(1) 1(1)\n"
WRONG = {
    # (text of the table, name of the file, arguments, words of the message)
    "empty file": ("", "stars.csv", [], ["stars.csv", "empty"]),
    "empty ecsv": ("", "stars.ecsv", [], ["stars.ecsv", "empty"]),
    "header only": ("star,mass\n", "stars.csv", [], ["stars.csv", "header but no rows"]),
    "header without line end": ("star,mass", "stars.csv", [], ["header but no rows"]),
    "header only in ecsv": (
        ECSV_HEAD + "# schema: astropy-2.0\nmass\n", "stars.ecsv", [], ["header but no rows"],
    ),
    "no ecsv": ("star,mass\na,1(1)\n", "stars.ecsv", [], ["stars.ecsv", "ECSV"]),
    "duplicate column": ("mass,radius,mass\n1(1),1(1),2(1)\n", "stars.csv", [], ["'mass'", "2 times"]),
    "duplicate column in ecsv": (ECSV_TWICE, "stars.ecsv", [], ["mass"]),
    "column without a name": ("mass,radius,\n1(1),1(1),\n", "stars.csv", [], ["column 3", "no name"]),
    "short row": (STARS + "c,1.0(1)\n", "stars.csv", [], ["every row needs 3 cells", "c,1.0(1)"]),
    "long row": (STARS + "c,1.0(1),1(1),2\n", "stars.csv", [], ["every row needs 3 cells", "c,1.0(1),1(1),2"]),
    "no observable": ("star,colour\na,red\n", "stars.csv", [], ["no column is an observable", "star, colour"]),
    "error without value": ("star,mass,radius_error\na,1(1),1\n", "stars.csv", [], ["'radius_error'", "'radius'"]),
    "shape without value": ("star,mass,radius_shape\na,1(1),\n", "stars.csv", [], ["'radius_shape'", "'radius'"]),
    "one-sided error": (
        "mass,mass_error_upper\n1,0.1\n", "stars.csv", [], ["mass_error_upper", "mass_error_lower"],
    ),
    "correlation without a column": (
        "mass,correlation_mass_radius\n1(1),0.1\n", "stars.csv", [], ["'correlation_mass_radius'", "'radius'"],
    ),
    "correlation both ways": (
        "mass,radius,correlation_mass_radius,correlation_radius_mass\n1(1),1(1),0,0\n",
        "stars.csv", [], ["correlation_mass_radius", "correlation_radius_mass"],
    ),
    "missing file": (None, "stars.csv", [], ["stars.csv", "no such file"]),
    "unknown ending": (STARS, "stars.dat", [], ["stars.dat", ".csv", ".ecsv"]),
    "no text": (b"star,mass\na,1\xff\n", "stars.csv", [], ["UTF-8"]),
    "unknown format": (STARS, "stars.csv", ["--format", "xlsx"], ["'xlsx'", "parquet, csv, ecsv"]),
    "unknown engine": (STARS, "stars.csv", ["--engine", "steam"], ["'steam'", "quadrature"]),
    "unknown output": (STARS, "stars.csv", ["--outputs", "mass"], ["'mass'", "binding_energy"]),
    "unknown prior": (STARS, "stars.csv", ["--prior", "nobody"], ["'nobody'", "uniform-index"]),
    "unknown shape": (STARS, "stars.csv", ["--shape", "round"], ["'round'", "lognormal"]),
    "unknown state": (STARS, "stars.csv", ["--evolutionary-state", "dead"], ["'dead'"]),
    "use of a column not there": (STARS, "stars.csv", ["--use", "mass,distance"], ["'distance'"]),
    "correlation of a column not there": (
        STARS, "stars.csv", ["--correlation", "mass,distance=0.1"], ["'distance'"],
    ),
    "negative seed": (STARS, "stars.csv", ["--engine", "montecarlo", "--seed", "-1"], ["seed", "-1"]),
    "an observable as option": (STARS, "stars.csv", ["--mass", "1(1)"], ["No such option", "--mass"]),
}  # fmt: skip


@pytest.mark.parametrize("case", WRONG)
@pytest.mark.parametrize("output_format", ["parquet", "csv", "ecsv"])
def test_a_wrong_call_is_one_message_and_leaves_nothing(tmp_path, case, output_format):
    text, name, arguments, wanted = WRONG[case]
    result, _ = call(tmp_path, text, "--format", output_format, *arguments, name=name)
    assert_one_message(result, *wanted)
    assert files(tmp_path) == ([] if text is None else [name])


def test_out_that_is_a_file(tmp_path):
    (tmp_path / "out").write_text("mine", encoding="utf-8")
    assert_one_message(call(tmp_path, STARS)[0], "--out", "is a file")
    assert (tmp_path / "out").read_text(encoding="utf-8") == "mine"


def test_out_missing(tmp_path):
    (tmp_path / "stars.csv").write_text(STARS, encoding="utf-8")
    assert_one_message(stellerg("catalogue", tmp_path / "stars.csv"), "--out")


def test_a_folder_for_a_table(tmp_path):
    assert_one_message(stellerg("catalogue", tmp_path, "--out", tmp_path / "out"), "no such file")


def contents(folder):
    return {name: (folder / name).read_bytes() for name in files(folder)}


def test_earlier_results_are_kept_without_overwrite(tmp_path):
    _, out = call(tmp_path, STARS)
    before = contents(out)
    assert_one_message(call(tmp_path, TEN)[0], "earlier run", "--overwrite")
    assert contents(out) == before


def test_overwrite_replaces_earlier_results_and_nothing_else(tmp_path):
    _, out = call(tmp_path, STARS)
    (out / "notes.txt").write_text("mine", encoding="utf-8")
    result, _ = call(tmp_path, TEN, "--overwrite", "--format", "csv")
    assert result.code == 0
    assert files(out) == ["notes.txt", "rejected.csv", "run.json", "summary.csv"]
    assert len(read_csv(out / "summary.csv")["star"]) == 10


@pytest.mark.parametrize("arguments", [["--engine", "steam"], ["--outputs", "mass"], ["--shape", "round"]])
def test_a_wrong_option_does_not_cost_the_earlier_results(tmp_path, arguments):
    _, out = call(tmp_path, STARS)
    before = contents(out)
    assert_one_message(call(tmp_path, STARS, "--overwrite", *arguments)[0])
    assert contents(out) == before


@pytest.mark.parametrize("output_format", ["parquet", "csv", "ecsv"])
def test_a_short_row_after_the_first_part_leaves_nothing_half_written(tmp_path, output_format):
    padding = "x" * 60
    rows = [f"{padding},1 exact,1 exact"] * (PART_ROWS + 30_000)
    text = "\n".join(["note,mass,radius", *rows, "short,1 exact"]) + "\n"
    result, out = call(
        tmp_path, text, "--format", output_format, "--outputs", "binding_energy", "--prior", "polytrope-3"
    )
    assert_one_message(result, "every row needs 3 cells", "short,1 exact")
    left = files(out)
    assert not [name for name in left if name.endswith(".tmp")]
    assert not {"summary.csv", "summary.ecsv", "run.json"} & set(left)


def test_parts_have_a_fixed_number_of_rows(tmp_path):
    text = "mass,radius\n" + "1 exact,1 exact\n" * (PART_ROWS + 5)
    result, out = call(tmp_path, text, "--outputs", "binding_energy", "--prior", "polytrope-3")
    assert result.code == 0
    parts = sorted((out / "summary").iterdir())
    assert [path.name for path in parts] == ["part-000000.parquet", "part-000001.parquet"]
    assert [pq.read_metadata(path).num_rows for path in parts] == [PART_ROWS, 5]
    assert pq.read_table(parts[1])["star"].to_pylist() == [str(PART_ROWS + k) for k in range(1, 6)]
