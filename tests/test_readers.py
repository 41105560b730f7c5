"""Tables in every format: the same numbers from each, what is missing stays missing, one message for what is wrong."""

import gzip
import hashlib
import json

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from astropy import units
from astropy.io import fits
from astropy.table import MaskedColumn, QTable, Table

from command_line import assert_one_message, stellerg
from stellerg.catalogue import whole
from stellerg.catalogue.readers import PART_ROWS, open_table
from stellerg.errors import InputError

OPTIONS = ("--outputs", "binding_energy", "--prior", "polytrope-3", "--format", "csv", "--overwrite")
NUMBERS = {
    "mass": np.array([1.02, 0.5, 8.25, 1.4, 2.0]),
    "mass_error": np.array([0.03, 0.1, 0.5, 0.01, 0.7]),
    "radius": np.array([1.05, 0.6, 4.125, 1.6, 1.7]),
    "radius_error": np.array([0.02, 0.1, 0.3, 0.5, 0.1]),
}
STARS = np.array(["a", "b", "c 2", "d", "e"])
HIDDEN = {"radius": [0, 0, 0, 0, 1], "radius_error": [0, 1, 0, 0, 0]}
FORMATS = {
    "stars.parquet": {"format": "parquet"},
    "stars.PQ": {"format": "parquet"},
    "stars.fits": {"format": "fits"},
    "stars.fit": {"format": "fits"},
    "stars.fits.gz": {"format": "fits"},
    "stars.vot": {"format": "votable"},
    "stars.XML": {"format": "votable", "tabledata_format": "binary2"},
    "stars.ecsv": {"format": "ascii.ecsv"},
    "stars.mrt": {"format": "ascii.mrt"},
    "stars.dat": {"format": "ascii.mrt"},
    "stars.txt": {"format": "ascii.mrt"},
}


def five_stars():
    columns = {n: MaskedColumn(v, mask=HIDDEN.get(n, np.zeros(5))) for n, v in NUMBERS.items()}
    return Table({"star": STARS, **columns})


def csv_of(table, folder):
    """The table as CSV: the shortest texts that give the same doubles, nothing where masked."""
    rows = [["" if cell is np.ma.masked else str(cell) for cell in row] for row in table.iterrows()]
    lines = [",".join(table.colnames), *(",".join(row) for row in rows)]
    (folder / "stars.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    return folder / "stars.csv"


def summary(path):
    """Bytes of the summary: equal texts of doubles are equal doubles."""
    result = stellerg("catalogue", path, "--out", path.parent / "out", *OPTIONS)
    assert (result.code, result.err) == (0, ""), result
    return (path.parent / "out" / "summary.csv").read_bytes()


def refused(path, *words):
    assert_one_message(stellerg("catalogue", path, "--out", path.parent / "out", *OPTIONS), path.name, *words)
    assert not (path.parent / "out").exists()


def cells(source, name):
    return [cell for part in source.parts() for cell in part[name].as_texts().tolist()]


@pytest.mark.parametrize("name", FORMATS)
def test_every_format_gives_the_numbers_of_csv(tmp_path, name):
    table = five_stars()
    expected = summary(csv_of(table, tmp_path))
    assert b"error-missing" in expected
    table.write(tmp_path / name, **FORMATS[name])
    assert summary(tmp_path / name) == expected
    table["mass"][0] = 1.03  # a negative control: another table, another summary
    table.write(tmp_path / name, overwrite=True, **FORMATS[name])
    assert summary(tmp_path / name) != expected


@pytest.mark.parametrize("name", ["stars.parquet", "stars.fits", "stars.vot", "stars.mrt", "stars.ecsv"])
def test_units_are_those_of_the_file(tmp_path, name):
    table = five_stars()
    table["mass"].unit, table["radius"].unit = units.kg, units.km
    table.write(tmp_path / name, **FORMATS[name])
    assert open_table(tmp_path / name).units == {"mass": "kg", "radius": "km"}


def test_units_of_parquet_fields_and_of_quantities(tmp_path):
    field = pa.field("mass", pa.float64(), metadata={b"unit": b"kg"})
    pq.write_table(pa.table([[1.0]], pa.schema([field])), tmp_path / "field.parquet")
    assert open_table(tmp_path / "field.parquet").units == {"mass": "kg"}
    QTable({"mass": [1.0] * units.kg}).write(tmp_path / "quantity.parquet")
    assert open_table(tmp_path / "quantity.parquet").units == {"mass": "kg"}
    schema = pa.schema([field], metadata={b"table_meta_yaml": b"{"})
    pq.write_table(pa.table([[1.0]], schema), tmp_path / "broken.parquet")
    refused(tmp_path / "broken.parquet", "table_meta_yaml")


# --- Parquet ---
def test_types_of_parquet_columns(tmp_path):
    large = 2**63 - 3
    columns = {
        "star": pa.array([large, None, large - 1]),
        "unsigned": pa.array([2**64 - 1, 0, None], pa.uint64()),
        "mass": pa.array([1, None, 3], pa.int32()),
        "radius": pa.array([0.1, float("nan"), None], pa.float32()),
        "half": pa.array(np.array([0.5, 2.0, 3.0], np.float16)),
        "luminosity": pa.array(["1(1)", None, "2"], pa.large_string()),
        "evolutionary_state": pa.array(["evolved", None, "evolved"]).dictionary_encode(),
        "flag": pa.array([True, None, False]),
        "nothing": pa.nulls(3),
        "nothing_typed": pa.nulls(3, pa.float64()),
        "decimal": pa.array(["1.10", None, "2.20"]).cast(pa.decimal128(5, 2)),
        "bytes": pa.array([b"x\0", None, b"y"]),
    }
    pq.write_table(pa.table(columns), tmp_path / "t.parquet")
    source = open_table(tmp_path / "t.parquet")
    assert source.names == tuple(columns)
    assert source.rows == 3
    expected = {
        "star": [str(large), "", str(large - 1)],
        "unsigned": [str(2**64 - 1), "0", ""],
        "mass": ["1", "", "3"],
        "radius": [f"{float(np.float32(0.1)):.17g}", "", ""],
        "half": ["0.5", "2", "3"],
        "luminosity": ["1(1)", "", "2"],
        "evolutionary_state": ["evolved", "", "evolved"],
        "flag": ["true", "", "false"],
        "nothing": ["", "", ""],
        "nothing_typed": ["", "", ""],
        "decimal": ["1.10", "", "2.20"],
        "bytes": ["x", "", "y"],
    }
    assert {name: cells(source, name) for name in columns} == expected


def test_large_identifiers_reach_the_summary(tmp_path):
    table = five_stars()
    table["star"] = 2**53 + np.array([1, 3, 5, 7, 9])
    expected = summary(csv_of(table, tmp_path))
    assert str(2**53 + 1).encode() in expected
    for name in ("stars.parquet", "stars.fits", "stars.vot", "stars.mrt"):
        table.write(tmp_path / name, **FORMATS[name])
        assert summary(tmp_path / name) == expected, name


def test_errors_in_a_unit_of_their_own(tmp_path):
    """Converted errors are written to: columns must not be views of the file."""
    for name in ("stars.parquet", "stars.fits"):
        table = five_stars()
        table["radius"].unit, table["radius_error"].unit = units.km, units.m
        table.write(tmp_path / name, **FORMATS[name])
        assert len(summary(tmp_path / name).splitlines()) == 6


def test_parts_of_a_folder_cross_its_files(tmp_path):
    folder = tmp_path / "stars"
    folder.mkdir()
    sizes, start = (40_000, 70_000, 30_000), 0
    for number, size in enumerate(sizes):
        table = pa.table({"star": np.arange(start, start + size), "mass": np.arange(start, start + size) / 8})
        pq.write_table(table, folder / f"part-{number}.parquet", row_group_size=9_999)
        start += size
    (folder / ".part-9.parquet").write_bytes(b"half-written")
    (folder / "notes.txt").write_text("mine", encoding="utf-8")
    source = open_table(folder)
    parts = list(source.parts())
    assert [len(part["mass"].numbers) for part in parts] == [PART_ROWS, PART_ROWS, start - 2 * PART_ROWS]
    np.testing.assert_array_equal(np.concatenate([part["mass"].numbers for part in parts]), np.arange(start) / 8)
    assert source.rows == start
    contents = b"".join((folder / f"part-{k}.parquet").read_bytes() for k in range(3))
    assert source.sha256() == hashlib.sha256(contents).hexdigest()
    assert source.sha256() != hashlib.sha256(contents[::-1]).hexdigest()


def test_a_folder_gives_what_its_one_file_gives(tmp_path):
    table = five_stars()
    table.write(tmp_path / "stars.parquet")
    expected = summary(tmp_path / "stars.parquet")
    folder = tmp_path / "stars"
    folder.mkdir()
    table[:2].write(folder / "a.parquet")
    table[2:].write(folder / "b.pq", format="parquet")
    assert summary(folder) == expected
    assert json.loads((tmp_path / "out" / "run.json").read_text(encoding="utf-8"))["input"]["rows"] == 5


def test_nulls_of_one_file_have_a_type_in_the_next(tmp_path):
    (tmp_path / "t").mkdir()
    pq.write_table(pa.table({"mass": [1.0], "star": pa.nulls(1)}), tmp_path / "t" / "a.parquet")
    pq.write_table(pa.table({"mass": [2.0], "star": ["x"]}), tmp_path / "t" / "b.parquet")
    assert cells(open_table(tmp_path / "t"), "star") == ["", "x"]


@pytest.mark.parametrize(
    ("second", "words"),
    [
        ({"mass": ["1(1)"], "radius": [1.0]}, "another type"),
        ({"radius": [1.0], "mass": [1.0]}, "columns differ"),
        ({"mass": [1.0]}, "columns differ"),
    ],
)
def test_files_of_a_folder_that_do_not_fit(tmp_path, second, words):
    folder = tmp_path / "t"
    folder.mkdir()
    pq.write_table(pa.table({"mass": [1.0], "radius": [1.0]}), folder / "a.parquet")
    pq.write_table(pa.table(second), folder / "b.parquet")
    with pytest.raises(InputError, match=rf"b\.parquet.*{words}"):
        list(open_table(folder).parts())


def test_nested_columns(tmp_path):
    columns = {"mass": [1.0], "radius": [1.0], "spectrum": [[1.0, 2.0]]}
    pq.write_table(pa.table(columns), tmp_path / "t.parquet")
    source = open_table(tmp_path / "t.parquet")
    assert "spectrum" in source.names  # said to be not used, and not read
    assert list(next(source.parts())) == ["mass", "radius"]
    pq.write_table(pa.table({**columns, "radius_error": [{"up": 1.0}]}), tmp_path / "t.parquet")
    refused(tmp_path / "t.parquet", "'radius_error'", "nested")
    Table({"mass": [1.0], "radius": [[1.0, 2.0]]}).write(tmp_path / "t.fits")
    refused(tmp_path / "t.fits", "'radius'", "array")


def test_a_time_in_a_zone_that_no_one_knows_is_read_all_the_same(tmp_path):
    times = pa.array([0, None], pa.timestamp("s", tz="Isle/Nowhere"))
    pq.write_table(pa.table({"mass": [1.0, 2.0], "observed": times}), tmp_path / "t.parquet")
    part = next(open_table(tmp_path / "t.parquet").parts())
    assert part["observed"].as_texts().tolist()[0].startswith("1970-01-01 00:00:00")
    assert part["observed"].as_texts().tolist()[1] == ""


# --- FITS ---
def test_types_of_fits_columns(tmp_path):
    columns = [
        fits.Column("star", "K", array=np.array([2**62 + 1, -9, 7]), null=-9),
        fits.Column("unsigned", "K", bzero=2**63, array=np.array([2**64 - 1, 0, 5], np.uint64)),
        fits.Column("mass", "I", null=-1, array=np.array([1, -1, 3], np.int16)),
        fits.Column("scaled", "J", array=np.array([1, 2, 5])),
        fits.Column("radius", "E", array=np.array([0.1, np.nan, 3.0], np.float32)),
        fits.Column("name", "6A", array=np.array(["  x", "", "y z"])),
        fits.Column("flag", "L", array=np.array([True, False, True])),
        fits.Column("vector", "2D", array=np.ones((3, 2))),
    ]
    fits.HDUList([fits.PrimaryHDU(np.ones(3)), fits.BinTableHDU.from_columns(columns)]).writeto(tmp_path / "t.fits")
    fits.setval(tmp_path / "t.fits", "TSCAL4", value=0.5, ext=1)
    fits.setval(tmp_path / "t.fits", "TZERO4", value=1.0, ext=1)
    source = open_table(tmp_path / "t.fits")
    assert source.names == tuple(column.name for column in columns)
    part = next(source.parts())
    assert all(c.numbers is None or c.numbers.dtype.isnative for c in part.values())
    assert {name: column.as_texts().tolist() for name, column in part.items()} == {
        "star": [str(2**62 + 1), "", "7"],
        "unsigned": [str(2**64 - 1), "0", "5"],
        "mass": ["1", "", "3"],
        "scaled": ["1.5", "2", "3.5"],
        "radius": [f"{float(np.float32(0.1)):.17g}", "", "3"],
        "name": ["x", "", "y z"],
        "flag": ["true", "false", "true"],
    }


def test_masked_unsigned_integers_of_fits(tmp_path):
    mass = MaskedColumn(np.array([1, 2, 3], np.uint16), mask=[0, 1, 0])
    Table({"mass": mass}).write(tmp_path / "t.fits")
    assert cells(open_table(tmp_path / "t.fits"), "mass") == ["1", "", "3"]


def test_parts_of_fits(tmp_path):
    count = PART_ROWS + 5
    Table({"mass": np.arange(count) / 8}).write(tmp_path / "t.fits")
    parts = [part["mass"].numbers for part in open_table(tmp_path / "t.fits").parts()]
    assert [len(part) for part in parts] == [PART_ROWS, 5]
    np.testing.assert_array_equal(np.concatenate(parts), np.arange(count) / 8)


# --- what cannot be read ---
# a text that ends early after its header is a shorter table
BINARY = [name for name in FORMATS if not FORMATS[name]["format"].startswith("ascii")]


@pytest.mark.parametrize(
    ("name", "share"), [*((n, 0.02) for n in FORMATS), *((n, s) for n in BINARY for s in (0.5, 0.9))]
)
def test_a_truncated_file_is_one_message(tmp_path, name, share):
    table = Table({"star": np.arange(900), "mass": np.arange(900) + 0.5, "radius": np.arange(900) + 0.25})
    table.write(tmp_path / name, **FORMATS[name])
    content = (tmp_path / name).read_bytes()
    (tmp_path / name).write_bytes(content[: int(share * len(content))])
    refused(tmp_path / name)


@pytest.mark.parametrize("name", FORMATS)
def test_what_is_no_table_is_one_message(tmp_path, name):
    (tmp_path / name).write_bytes(b"star,mass\na,1(1)\n")
    refused(tmp_path / name, "not a readable")
    (tmp_path / name).write_bytes(b"")
    refused(tmp_path / name, "empty")


@pytest.mark.parametrize("name", ["stars.parquet", "stars.fits", "stars.vot"])
def test_a_table_without_rows(tmp_path, name):
    Table({"mass": np.zeros(0), "radius": np.zeros(0)}).write(tmp_path / name, **FORMATS[name])
    refused(tmp_path / name, "no rows")


def test_damage_inside_a_parquet_file(tmp_path):
    path = tmp_path / "t.parquet"
    pq.write_table(pa.table({"mass": np.linspace(1, 2, 5000), "radius": np.ones(5000)}), path, compression="zstd")
    content = bytearray(path.read_bytes())
    content[40:4000] = bytes(3960)  # the footer at the end stays whole
    path.write_bytes(content)
    refused(path, "damaged")


def test_fits_without_a_binary_table(tmp_path):
    fits.PrimaryHDU(np.ones((3, 3))).writeto(tmp_path / "t.fits")
    refused(tmp_path / "t.fits", "no binary table")


def test_a_compressed_fits_table_of_which_a_part_is_there(tmp_path):
    Table({"mass": np.arange(9000.0), "radius": np.arange(9000.0)}).write(tmp_path / "t.fits")
    (tmp_path / "t.fits.gz").write_bytes(gzip.compress((tmp_path / "t.fits").read_bytes()[:20_000]))
    refused(tmp_path / "t.fits.gz")


def test_unknown_endings_and_folders_without_tables(tmp_path):
    (tmp_path / "stars.xlsx").write_bytes(b"x")
    refused(tmp_path / "stars.xlsx", ".csv", ".ecsv", ".parquet", ".pq", ".fits.gz", ".votable", ".mrt", "folder")
    (tmp_path / "stars").mkdir()
    refused(tmp_path / "stars", "no such file", ".parquet")


def test_names_that_occur_twice(tmp_path):
    twice = pa.table([[1.0], [2.0]], names=["mass", "mass"])
    pq.write_table(twice, tmp_path / "t.parquet")
    refused(tmp_path / "t.parquet", "'mass'", "2 times")


@pytest.mark.parametrize("name", ["stars.vot", "stars.XML", "stars.ecsv", "stars.mrt"])
def test_formats_read_whole_have_a_limit(tmp_path, name, monkeypatch):
    five_stars().write(tmp_path / name, **FORMATS[name])
    monkeypatch.setattr(whole, "MOST_ROWS", 5)
    assert open_table(tmp_path / name).rows == 5
    monkeypatch.setattr(whole, "MOST_ROWS", 4)
    refused(tmp_path / name, "more than 4 rows", "Parquet, CSV or FITS")
