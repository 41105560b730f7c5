"""Tables of stars from files, in parts of a fixed number of rows."""

import csv
import hashlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from stellerg.errors import InputError

__all__ = ["PART_ROWS", "RawColumn", "Source", "open_table"]

PART_ROWS = 65_536  # rows of one part: a constant, since it shows in the files


@dataclass(frozen=True)
class RawColumn:
    """A column as it stands in a file: texts (a pyarrow string array) or numbers (NaN where masked).

    Integers are kept beside their numbers, since identifiers may have more digits than a double holds.
    """

    texts: object | None
    numbers: np.ndarray | None
    unit: str = ""
    integers: np.ndarray | None = None

    def as_texts(self) -> np.ndarray:
        """Return the cells as texts, (row,); '' where there is none."""
        if self.integers is not None:
            return np.where(np.isnan(self.numbers), "", self.integers.astype(str))
        if self.numbers is not None:
            return np.where(np.isnan(self.numbers), "", np.char.mod("%.17g", self.numbers))
        return np.array(self.texts.to_numpy(zero_copy_only=False), dtype=str)


@dataclass(frozen=True)
class Source:
    """A table in a file.

    Attributes
    ----------
    path : Path
    names : tuple of str
    units : dict of str to str
    rows : int or None
        None where only reading on will tell.
    parts : callable
        Gives an iterator over parts: dict of str to RawColumn, `PART_ROWS` rows each but the last.
    """

    path: Path
    names: tuple[str, ...]
    units: dict[str, str]
    rows: int | None
    parts: object

    def sha256(self) -> str:
        """Hash of the file's bytes."""
        digest = hashlib.sha256()
        with self.path.open("rb") as file:
            while block := file.read(1 << 20):
                digest.update(block)
        return digest.hexdigest()


def open_table(path: Path) -> Source:
    """Open a table of stars.

    Raises
    ------
    InputError
        If the file cannot be read, is empty, has no rows, or names a column twice.
    """
    if not path.is_file():
        raise InputError(f"{path}: there is no such file")
    if path.stat().st_size == 0:
        raise InputError(f"{path}: the file is empty; a header and at least one row are wanted")
    readers = {".csv": _open_csv, ".ecsv": _open_ecsv}
    if path.suffix.lower() not in readers:
        raise InputError(f"{path}: cannot tell the format; the name must end in {' or '.join(readers)}")
    return readers[path.suffix.lower()](path)


def _check_names(path: Path, names: list[str]) -> None:
    if any(not name for name in names):
        raise InputError(f"{path}: column {names.index('') + 1} has no name in the header")
    for name in names:
        if names.count(name) > 1:
            raise InputError(f"{path}: column {name!r} stands {names.count(name)} times in the header; keep one")


def _open_csv(path: Path) -> Source:
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            names = [name.strip() for name in next(csv.reader(file), [])]
    except UnicodeDecodeError as problem:
        raise InputError(f"{path}: not a text in UTF-8 (byte {problem.start}); convert the file") from None
    _check_names(path, names)

    def parts() -> Iterator[dict[str, RawColumn]]:
        import pyarrow as pa
        from pyarrow import csv as arrow

        types = {name: pa.string() for name in names}
        rows = 0
        try:
            reader = arrow.open_csv(
                path,
                read_options=arrow.ReadOptions(column_names=names, skip_rows=1),
                parse_options=arrow.ParseOptions(newlines_in_values=True),
                convert_options=arrow.ConvertOptions(column_types=types, strings_can_be_null=False),
            )
            waiting = []
            for batch in reader:
                waiting.append(batch)
                while sum(b.num_rows for b in waiting) >= PART_ROWS:
                    table = pa.Table.from_batches(waiting)
                    yield _from_arrow(table.slice(0, PART_ROWS))
                    rows += PART_ROWS
                    waiting = table.slice(PART_ROWS).to_batches()
            table = pa.Table.from_batches(waiting, schema=reader.schema)
        except pa.ArrowInvalid as problem:
            if "Empty CSV" in str(problem) or "Could not skip initial" in str(problem):
                raise InputError(f"{path}: the table has a header but no rows") from None
            raise InputError(f"{path}: {_ragged_row(path, len(names)) or problem}") from None
        if rows == 0 and table.num_rows == 0:
            raise InputError(f"{path}: the table has a header but no rows")
        if table.num_rows:
            yield _from_arrow(table)

    return Source(path, tuple(names), {}, None, parts)


def _ragged_row(path: Path, cells: int) -> str:
    """Say which row does not have as many cells as the header; '' if none is found. Read only after a failure."""
    with path.open(encoding="utf-8-sig", newline="", errors="replace") as file:
        for number, row in enumerate(line for line in csv.reader(file) if line):
            if len(row) != cells:
                return f"row {number} has {len(row)} cells ({','.join(row)[:80]!r}); every row needs {cells} cells"
    return ""


def _from_arrow(table) -> dict[str, RawColumn]:
    return {name: RawColumn(table[name].combine_chunks(), None) for name in table.column_names}


def _open_ecsv(path: Path) -> Source:
    import pyarrow as pa
    from astropy.table import Table

    try:
        table = Table.read(path, format="ascii.ecsv")
    except Exception as problem:
        reason = str(problem).strip().splitlines()
        raise InputError(
            f"{path}: not a readable ECSV table: {reason[0] if reason else type(problem).__name__}"
        ) from None
    if len(table) == 0:
        raise InputError(f"{path}: the table has a header but no rows")
    names = [str(name) for name in table.colnames]
    _check_names(path, _ecsv_header(path))
    units = {name: str(unit) for name in names if (unit := getattr(table[name], "unit", None)) is not None}

    def column(name: str, rows: slice) -> RawColumn:
        cells = table[name][rows]
        kind = getattr(getattr(cells, "dtype", None), "kind", "O")
        if kind in "fiu" and np.ndim(cells) == 1:
            plain = np.ma.asarray(cells)
            numbers = np.ma.filled(plain.astype(float), np.nan)
            return RawColumn(None, numbers, units.get(name, ""), plain.data if kind in "iu" else None)
        # texts; and columns of other kinds (times, coordinates, arrays), which mean nothing here
        texts = np.ma.filled(np.ma.asarray(cells).astype(object), "") if kind in "US" else [str(c) for c in cells]
        return RawColumn(pa.array([str(cell) for cell in texts], pa.string()), None, units.get(name, ""))

    def parts() -> Iterator[dict[str, RawColumn]]:
        for start in range(0, len(table), PART_ROWS):
            yield {name: column(name, slice(start, start + PART_ROWS)) for name in names}

    return Source(path, tuple(names), units, len(table), parts)


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
