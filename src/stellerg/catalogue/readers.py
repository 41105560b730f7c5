"""Tables of stars from files, in parts of a fixed number of rows: which reader, and the one for CSV."""

import csv
from collections.abc import Iterator
from pathlib import Path

from stellerg.catalogue.fits import open_fits
from stellerg.catalogue.parquet import PARQUET_ENDINGS, open_parquet
from stellerg.catalogue.raw import PART_ROWS, RawColumn, Source, check_names, no_rows
from stellerg.catalogue.whole import open_ecsv, open_mrt, open_votable
from stellerg.errors import InputError

__all__ = ["PART_ROWS", "RawColumn", "Source", "open_table"]


def open_table(path: Path) -> Source:
    """Open a table of stars; the ending of the name, in any case, says the format.

    Raises
    ------
    InputError
        If the file cannot be read, is empty, has no rows, or names a column twice.
    """
    if path.is_dir():
        return open_parquet(path)
    if not path.is_file():
        raise InputError(f"{path}: there is no such file")
    if path.stat().st_size == 0:
        raise InputError(f"{path}: the file is empty; a header and at least one row are wanted")
    for ending, reader in _READERS.items():
        if path.name.lower().endswith(ending):
            return reader(path)
    raise InputError(
        f"{path}: cannot tell the format; the name must end in {', '.join(_READERS)}, "
        f"or be that of a folder of {' or '.join(PARQUET_ENDINGS)} files"
    )


def _open_csv(path: Path) -> Source:
    try:
        with path.open(encoding="utf-8-sig", newline="") as file:
            names = [name.strip() for name in next(csv.reader(file), [])]
    except UnicodeDecodeError as problem:
        raise InputError(f"{path}: not a text in UTF-8 (byte {problem.start}); convert the file") from None
    check_names(path, names)

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
                raise no_rows(path) from None
            raise InputError(f"{path}: {_ragged_row(path, len(names)) or problem}") from None
        if rows == 0 and table.num_rows == 0:
            raise no_rows(path)
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


_READERS = {
    ".csv": _open_csv,
    ".ecsv": open_ecsv,
    **dict.fromkeys(PARQUET_ENDINGS, open_parquet),
    **dict.fromkeys((".fits", ".fit", ".fits.gz"), open_fits),
    **dict.fromkeys((".vot", ".votable", ".xml"), open_votable),
    **dict.fromkeys((".mrt", ".dat", ".txt"), open_mrt),
}
