"""A table in a file as it stands there: its columns, its parts, its hash."""

import hashlib
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from stellerg.errors import InputError
from stellerg.observables import MEASURABLE

__all__ = ["PART_ROWS", "RawColumn", "Source", "check_names", "first_line", "looks_like_ours", "no_rows"]

PART_ROWS = 65_536  # rows of one part: a constant, since it shows in the files

_OTHERS = ("star", "system", "component", "evolutionary_state")


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
    """A table in a file or in the files of a folder.

    Attributes
    ----------
    path : Path
    names : tuple of str
    units : dict of str to str
    rows : int or None
        None where only reading on will tell.
    parts : callable
        Gives an iterator over parts: dict of str to RawColumn, `PART_ROWS` rows each but the last.
    files : tuple of Path
        The files of a folder in the order in which they are read; empty where `path` is the file.
    """

    path: Path
    names: tuple[str, ...]
    units: dict[str, str]
    rows: int | None
    parts: object
    files: tuple[Path, ...] = ()

    def sha256(self) -> str:
        """Hash of the bytes of the file, or of the files of a folder one after the other."""
        digest = hashlib.sha256()
        for path in self.files or (self.path,):
            with path.open("rb") as file:
                while block := file.read(1 << 20):
                    digest.update(block)
        return digest.hexdigest()


def check_names(path: Path, names: list[str]) -> None:
    """Refuse columns without a name and names that occur twice."""
    if any(not name for name in names):
        raise InputError(f"{path}: column {names.index('') + 1} has no name in the header")
    for name in names:
        if names.count(name) > 1:
            raise InputError(f"{path}: column {name!r} stands {names.count(name)} times in the header; keep one")


def looks_like_ours(name: str) -> bool:
    """Whether a column is, or belongs to, an observable or an identifier."""
    return name in _OTHERS or any(x == name or name.startswith((x + "_", "correlation_")) for x in MEASURABLE)


def no_rows(path: Path) -> InputError:
    """Return the message about a table without rows."""
    return InputError(f"{path}: the table has a header but no rows")


def first_line(problem: Exception) -> str:
    """First line of what a library says, or the kind of its exception where it says nothing."""
    lines = str(problem).strip().splitlines()
    return lines[0] if lines else type(problem).__name__
