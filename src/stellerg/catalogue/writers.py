"""Results to files: each is written under a temporary name, read back and counted, and renamed when whole."""

import os
import shutil
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Protocol

import numpy as np

from stellerg.errors import InputError
from stellerg.posterior.columns import Column, joined

__all__ = ["WRITERS", "Rejected", "Writer", "put"]

_DICTIONARY = ["status", "flags", "engine"]  # few different words; numbers never repeat


def put(path: Path, write: Callable[[Path], None]) -> None:
    """Write a file under a temporary name and give it its own name when it is whole."""
    temporary = path.with_name(f".{path.name}.{os.getpid()}.tmp")
    try:
        write(temporary)
        os.replace(temporary, path)
    except OSError as problem:
        raise InputError(f"{path}: cannot be written: {problem.strerror or problem}") from None
    finally:
        temporary.unlink(missing_ok=True)


def arrow_table(columns: list[Column]):
    """Return columns as an Arrow table: nulls for what does not exist, units and descriptions as metadata."""
    import pyarrow as pa

    arrays, fields = [], []
    for column in columns:
        if column.values.dtype == object:
            array = pa.array(column.values, pa.string())
        else:
            array = pa.array(column.values, pa.float64(), mask=np.isnan(column.values))
        metadata = {"description": column.description, **({"unit": column.unit} if column.unit else {})}
        arrays.append(array)
        fields.append(pa.field(column.name, array.type, metadata=dict(sorted(metadata.items()))))
    return pa.Table.from_arrays(arrays, schema=pa.schema(fields))


class Writer(Protocol):
    """Takes the parts of a summary in order; `finish` leaves whole files under their final names."""

    def add(self, columns: list[Column]) -> None:
        """Write one part."""

    def finish(self) -> None:
        """Complete what is written whole."""

    def abandon(self) -> None:
        """Take away what was written: the run failed."""


@dataclass
class ParquetWriter:
    """One file and one row group a part, in the folder `summary`."""

    folder: Path
    meta: dict[str, str]
    count: int = 0

    def add(self, columns: list[Column]) -> None:
        """Write one part."""
        import pyarrow.parquet as pq

        (self.folder / "summary").mkdir(exist_ok=True)
        table = arrow_table(columns).replace_schema_metadata(dict(sorted(self.meta.items())))

        def write(path: Path) -> None:
            pq.write_table(
                table,
                path,
                row_group_size=max(table.num_rows, 1),
                compression="zstd",
                use_dictionary=_DICTIONARY,
                write_statistics=True,
                version="2.6",
            )
            if pq.read_metadata(path).num_rows != table.num_rows:
                raise OSError("a part came back with another number of rows")

        put(self.folder / "summary" / f"part-{self.count:06d}.parquet", write)
        self.count += 1

    def finish(self) -> None:
        """Every part is whole already."""

    def abandon(self) -> None:
        """Take away the parts."""
        shutil.rmtree(self.folder / "summary", ignore_errors=True)


@dataclass
class CsvWriter:
    """One file, `summary.csv`, appended part by part."""

    folder: Path
    meta: dict[str, str]
    count: int = 0

    def add(self, columns: list[Column]) -> None:
        """Write one part."""
        from pyarrow import csv

        options = csv.WriteOptions(include_header=self.count == 0, quoting_style="needed")
        with self._temporary().open("ab" if self.count else "wb") as file:
            csv.write_csv(arrow_table(columns), file, options)
        self.count += 1

    def finish(self) -> None:
        """Give the file its name."""
        os.replace(self._temporary(), self.folder / "summary.csv")

    def abandon(self) -> None:
        """Take away the unfinished file."""
        self._temporary().unlink(missing_ok=True)

    def _temporary(self) -> Path:
        return self.folder / f".summary.csv.{os.getpid()}.tmp"


@dataclass
class EcsvWriter:
    """One file, `summary.ecsv`, written whole with units and descriptions."""

    folder: Path
    meta: dict[str, str]
    parts: list[list[Column]] = field(default_factory=list)

    def add(self, columns: list[Column]) -> None:
        """Keep one part."""
        self.parts.append(columns)

    def finish(self) -> None:
        """Write the file."""
        from stellerg.posterior.table import columns_to_table

        table = columns_to_table(joined(self.parts), self.meta)
        put(self.folder / "summary.ecsv", lambda path: table.write(path, format="ascii.ecsv", overwrite=True))

    def abandon(self) -> None:
        """Nothing was written yet."""


WRITERS = {"parquet": ParquetWriter, "csv": CsvWriter, "ecsv": EcsvWriter}


@dataclass
class Rejected:
    """`rejected.csv`: row number, identifier, status and sentence of every row that was not done."""

    folder: Path
    parts: list = field(default_factory=list)

    def add(self, rows: np.ndarray, columns: list[Column], first_row: int) -> None:
        """Add rows (positions in a part) that were not done."""
        import pyarrow as pa

        by_name = {column.name: column.values[rows] for column in columns[:3]}
        arrays = {"row": pa.array(rows + first_row, pa.int64())}
        arrays |= {name: pa.array(values, pa.string()) for name, values in by_name.items()}
        self.parts.append(pa.table(arrays))

    def finish(self) -> None:
        """Write the file, also when no row was rejected."""
        import pyarrow as pa
        from pyarrow import csv

        table = pa.concat_tables(self.parts)
        put(
            self.folder / "rejected.csv",
            lambda path: csv.write_csv(table, path, csv.WriteOptions(quoting_style="needed")),
        )
