"""Stars whose structure was observed, from a table, for learning a structure prior."""

from dataclasses import dataclass
from pathlib import Path

import numpy as np

from stellerg.catalogue.columns import recognise
from stellerg.catalogue.readers import open_table
from stellerg.errors import InputError
from stellerg.stars import Stars

__all__ = ["Training", "read_training_stars"]


@dataclass(frozen=True)
class Training:
    """Stars of a table.

    Attributes
    ----------
    stars : Stars
    stages : ndarray of str, (star,), or None
        Cells of the column that names the evolutionary stage.
    """

    stars: Stars
    stages: np.ndarray | None

    def log_mass(self) -> np.ndarray:
        """ln of the median mass in nominal solar masses, (star,); NaN where none was measured."""
        value = np.full(len(self.stars), np.nan)
        for name in ("log_mass", "mass"):
            if name in self.stars.measured:
                measured = self.stars.measured[name]
                value = np.where(measured.usable, measured.log_median, value)
        return value


def read_training_stars(path: Path, stage: str = "") -> Training:
    """Read a table of stars with structure observables.

    Parameters
    ----------
    path : Path
        As `stellerg catalogue` reads, with our names of columns.
    stage : str
        Column whose cells name the evolutionary stage of each star; '' for one stage.

    Raises
    ------
    InputError
        If the table cannot be read, or has no such column.
    """
    source = open_table(path)
    columns = recognise(source)
    if stage and stage not in source.names:
        raise InputError(f"--stage: {path} has no column {stage!r}; it has {', '.join(source.names)}")
    parts, stages, row = [], [], 1
    for part in source.parts():
        parts.append(columns.stars(part, row))
        row += len(parts[-1])
        if stage:
            stages.append(np.char.strip(part[stage].as_texts()))
    stars = parts[0] if len(parts) == 1 else Stars.joined(parts)
    return Training(stars, np.concatenate(stages) if stage else None)
