"""Tables that astropy reads whole: ECSV, VOTable, and the machine-readable tables of CDS and the AAS journals."""

import csv
import warnings
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np

from stellerg.catalogue.raw import PART_ROWS, RawColumn, Source, check_names, first_line, no_rows
from stellerg.errors import InputError

__all__ = ["open_ecsv", "open_mrt", "open_votable"]

MOST_ROWS = 1_000_000  # of a table held whole in memory (judgement)


def open_ecsv(path: Path) -> Source:
    """Open an ECSV table."""
    from astropy.table import Table

    table = _read(path, "ECSV table", lambda: Table.read(path, format="ascii.ecsv"))
    if len(table):
        check_names(path, _ecsv_header(path))
    return _source(path, table)


def open_mrt(path: Path) -> Source:
    """Open a machine-readable table with its description in the same file."""
    from astropy.table import Table

    _refuse_above(path, _count(path, b"\n") - 1000)  # a description of more than 1000 lines is not known (judgement)
    hint = "; another format needs its own ending: .csv, .ecsv, .parquet, .fits or .vot"
    table = _read(path, "machine-readable table (CDS, AAS)", lambda: Table.read(path, format="ascii.mrt"), hint)
    return _source(path, table)


def open_votable(path: Path) -> Source:
    """Open the first table of a VOTable."""
    from astropy.io import votable

    _refuse_above(path, _count(path, b"<TR>"))
    element = _read(path, "VOTable", lambda: votable.parse(path, verify="ignore").get_first_table())
    check_names(path, [str(field.name or "") for field in element.fields])
    return _source(path, _read(path, "VOTable", lambda: element.to_table(use_names_over_ids=True)))


def _read(path: Path, what: str, reader: Callable, hint: str = ""):
    """Read with one message for whatever is wrong; warnings about style are not for our reader."""
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            return reader()
    except Exception as problem:
        raise InputError(f"{path}: not a readable {what}: {first_line(problem)}{hint}") from None


def _count(path: Path, mark: bytes) -> int:
    """How often a mark occurs in a file, counted before the file is held in memory."""
    count, kept = 0, b""
    with path.open("rb") as file:
        while block := file.read(1 << 20):
            block = kept + block
            count += block.count(mark)
            kept = block[len(block) - len(mark) + 1 :]  # too short for a mark, and may be its beginning
    return count


def _refuse_above(path: Path, rows: int) -> None:
    if rows > MOST_ROWS:
        raise InputError(
            f"{path}: more than {MOST_ROWS} rows, and this format can only be read whole; "
            "convert the table to Parquet, CSV or FITS"
        )


def _source(path: Path, table) -> Source:
    """Parts of a table in memory."""
    if len(table) == 0:
        raise no_rows(path)
    _refuse_above(path, len(table))
    names = [str(name) for name in table.colnames]
    units = {name: str(unit) for name in names if (unit := getattr(table[name], "unit", None)) is not None}

    def parts() -> Iterator[dict[str, RawColumn]]:
        for start in range(0, len(table), PART_ROWS):
            rows = slice(start, start + PART_ROWS)
            yield {name: _column(table[name][rows], units.get(name, "")) for name in names}

    return Source(path, tuple(names), units, len(table), parts)


def _column(cells, unit: str) -> RawColumn:
    import pyarrow as pa

    kind = getattr(getattr(cells, "dtype", None), "kind", "O")
    if kind in "fiu" and np.ndim(cells) == 1:
        plain = np.ma.asarray(cells)
        numbers = np.ma.filled(plain.astype(float), np.nan)
        return RawColumn(None, numbers, unit, plain.data if kind in "iu" else None)
    # texts; and columns of other kinds (times, coordinates, arrays), which mean nothing here
    texts = np.ma.filled(np.ma.asarray(cells).astype(object), "") if kind in "US" else list(cells)
    return RawColumn(pa.array([_text(cell) for cell in texts], pa.string()), None, unit)


def _text(cell) -> str:
    if cell is None or cell is np.ma.masked:
        return ""
    return cell.decode("utf-8", "replace") if isinstance(cell, bytes) else str(cell)


def _ecsv_header(path: Path) -> list[str]:
    """Names in the header line as they stand: astropy renames the second of two that are equal."""
    delimiter = " "
    with path.open(encoding="utf-8-sig", newline="") as file:
        for line in file:
            if line.startswith("# delimiter:"):
                delimiter = "," if "," in line else " "
            elif not line.startswith("#"):
                return next(csv.reader([line.strip()], delimiter=delimiter))
    return []
