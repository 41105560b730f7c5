"""Tables in Parquet: one file, or the files of a folder in the order of their names, never whole in memory."""

from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np

from stellerg.catalogue.raw import PART_ROWS, RawColumn, Source, check_names, first_line, looks_like_ours, no_rows
from stellerg.errors import InputError

__all__ = ["PARQUET_ENDINGS", "open_parquet"]

PARQUET_ENDINGS = (".parquet", ".pq")
_BUFFER = 1 << 20  # bytes read at a time, so that a large row group is not read whole (judgement)
_MASK = ".mask"  # astropy writes a masked column as two: its data, and where they do not count


def open_parquet(path: Path) -> Source:
    """Open a Parquet file or a folder of them.

    Raises
    ------
    InputError
        If a file cannot be read, there are no rows, the files of a folder differ in their columns, or a column of
        ours holds more than one value in a cell.
    """
    files = _files(path) if path.is_dir() else [path]
    schemas, rows = [], 0
    for file in files:
        with _opened(file) as parquet:
            schemas.append(parquet.schema_arrow)
            rows += parquet.metadata.num_rows
    schema = schemas[0]
    check_names(files[0], schema.names)
    nested = {name for name in schema.names if _is_nested(schema.field(name).type)}
    for name in schema.names:
        if name in nested and looks_like_ours(name):
            kind = schema.field(name).type
            raise InputError(f"{files[0]}: column {name!r} is nested ({kind}); give one value in a cell")
    units = _units(files[0], schema)
    names = _names(schema)
    for file, other in zip(files[1:], schemas[1:], strict=True):
        if _names(other) != names:
            raise InputError(
                f"{file}: its columns differ from those of {files[0].name}; all files need the same in the same order"
            )
        if _units(file, other) != units:
            raise InputError(f"{file}: its units differ from those of {files[0].name}; all files need the same")
    if rows == 0:
        raise no_rows(path)
    read = [name for name in names if name not in nested]

    def parts() -> Iterator[dict[str, RawColumn]]:
        for table in _tables(files, read):
            yield {name: _column(table[name], units.get(name, "")) for name in read}

    return Source(path, tuple(names), units, rows, parts, tuple(files) if path.is_dir() else ())


def _files(folder: Path) -> list[Path]:
    """Tables of a folder; names that start with a dot or underscore are half-written or no tables."""
    files = [p for p in folder.iterdir() if p.name.lower().endswith(PARQUET_ENDINGS) and p.name[0] not in "._"]
    files = sorted((p for p in files if p.is_file()), key=lambda p: p.name)
    if not files:
        raise InputError(
            f"{folder}: a folder, and there is no such file in it as ends in {' or '.join(PARQUET_ENDINGS)}"
        )
    return files


@contextmanager
def _opened(path: Path):
    """Open a file, with one message for whatever is wrong with it."""
    import pyarrow as pa
    import pyarrow.parquet as pq

    try:
        with pq.ParquetFile(path, pre_buffer=False, buffer_size=_BUFFER) as file:
            yield file
    except (pa.ArrowException, OSError, UnicodeDecodeError) as problem:
        raise InputError(f"{path}: not a readable Parquet file, or a damaged one: {first_line(problem)}") from None


def _is_nested(kind) -> bool:
    """Whether a cell holds several values."""
    import pyarrow as pa

    return pa.types.is_nested(kind.value_type if pa.types.is_dictionary(kind) else kind)


def _names(schema) -> list[str]:
    """Names without those of masks, which one file of a folder has and another has not."""
    return [name for name in schema.names if not _is_mask(schema, name)]


def _is_mask(schema, name: str) -> bool:
    import pyarrow as pa

    owner = name.removesuffix(_MASK)
    return owner != name and {owner, name} <= set(schema.names) and pa.types.is_boolean(schema.field(name).type)


def _units(path: Path, schema) -> dict[str, str]:
    """Units of the columns: of the field itself, else of the description that astropy leaves."""
    units = {}
    text = (schema.metadata or {}).get(b"table_meta_yaml")
    if text is not None:
        from astropy.table.meta import get_header_from_yaml

        try:
            header = get_header_from_yaml(text.decode("utf-8").split("\n"))
            units = {str(column["name"]): str(column["unit"]) for column in header["datatype"] if column.get("unit")}
        except Exception as problem:
            # without it units would be lost in silence
            raise InputError(f"{path}: its table_meta_yaml cannot be read: {first_line(problem)}") from None
    for name in schema.names:
        own = (schema.field(name).metadata or {}).get(b"unit", b"").decode("utf-8", "replace").strip()
        if own:
            units[name] = own
    return {name: unit for name, unit in units.items() if name in schema.names}


def _tables(files: list[Path], names: list[str]) -> Iterator:
    """Tables of `PART_ROWS` rows each but the last, across row groups and files."""
    waiting, count = [], 0
    for path in files:
        with _opened(path) as file:
            masks = [name + _MASK for name in names if _is_mask(file.schema_arrow, name + _MASK)]
            for batch in file.iter_batches(PART_ROWS, columns=[*names, *masks]):
                waiting.append(_plain(batch, names, masks))
                count += batch.num_rows
                while count >= PART_ROWS:
                    table = _joined(path, waiting)
                    yield table.slice(0, PART_ROWS)
                    waiting, count = [table.slice(PART_ROWS)], count - PART_ROWS
    if count:
        yield _joined(files[-1], waiting)


def _plain(batch, names: list[str], masks: list[str]):
    """The same cells as a table of few types: integers, doubles, texts, booleans, nulls."""
    import pyarrow as pa
    import pyarrow.compute as pc

    columns = []
    for name in names:
        cells = _plain_cells(batch[name])
        if name + _MASK in masks:
            hidden = pc.fill_null(batch[name + _MASK], False)
            cells = pc.if_else(hidden, pa.scalar(None, cells.type), cells)
        columns.append(cells)
    return pa.table(columns, names=names)


def _plain_cells(cells):
    """Dictionaries are spelled out; half and single precision widened; what is no number becomes texts."""
    import pyarrow as pa

    if pa.types.is_dictionary(cells.type):
        cells = cells.dictionary_decode()
    kind = cells.type
    if pa.types.is_float16(kind):
        missing = cells.is_null().to_numpy(zero_copy_only=False)
        return pa.array(cells.to_numpy(zero_copy_only=False).astype(float), pa.float64(), mask=missing)
    if pa.types.is_floating(kind):
        return cells.cast(pa.float64())
    if kind == pa.uint64():
        return cells
    if pa.types.is_integer(kind):
        return cells.cast(pa.int64())
    if pa.types.is_boolean(kind) or pa.types.is_null(kind):
        return cells
    if pa.types.is_binary(kind) or pa.types.is_large_binary(kind) or pa.types.is_fixed_size_binary(kind):
        texts = [None if cell is None else cell.rstrip(b"\0").decode("utf-8", "replace") for cell in cells.to_pylist()]
        return pa.array(texts, pa.string())
    if pa.types.is_timestamp(kind):  # without the zone, whose name this machine may not know
        cells = cells.cast(pa.timestamp(kind.unit))
    # texts in their several layouts; decimals, whose text is read once and so rounded once; dates
    return cells.cast(pa.string())


def _joined(path: Path, tables: list):
    """Join pieces of one part; a column of only nulls in one file may have a type in the next."""
    import pyarrow as pa

    try:
        return pa.concat_tables(tables, promote_options="permissive").combine_chunks()
    except pa.ArrowException as problem:
        raise InputError(f"{path}: a column has another type than before: {first_line(problem)}") from None


def _column(column, unit: str) -> RawColumn:
    import pyarrow as pa
    import pyarrow.compute as pc

    cells = _one_array(column)
    kind = cells.type
    if pa.types.is_floating(kind):
        return RawColumn(None, np.array(cells.to_numpy(zero_copy_only=False), float), unit)
    if pa.types.is_integer(kind):
        integers = np.array(pc.fill_null(cells, 0))
        missing = cells.is_null().to_numpy(zero_copy_only=False)
        return RawColumn(None, np.where(missing, np.nan, integers.astype(float)), unit, integers)
    return RawColumn(pc.fill_null(cells.cast(pa.string()), ""), None, unit)


def _one_array(column):
    """The cells of a chunked column as one array."""
    import pyarrow as pa

    cells = column.combine_chunks()
    return pa.concat_arrays(cells.chunks) if isinstance(cells, pa.ChunkedArray) else cells
