"""A whole table of stars into memory, for work in Python."""

from pathlib import Path

from stellerg.catalogue.columns import recognise
from stellerg.catalogue.readers import open_table
from stellerg.observables import SolarReferences
from stellerg.stars import Stars

__all__ = ["read_stars"]


def read_stars(
    path: str | Path, *, shape: str = "", evolutionary_state: str = "", solar: SolarReferences | None = None
) -> Stars:
    """Read a table of stars as ``stellerg catalogue`` does.

    Parameters
    ----------
    path : str or Path
        See `stellerg.catalogue.readers.open_table`; columns as described in the README.
    shape, evolutionary_state : str
        For rows that do not say themselves.
    solar : SolarReferences, optional

    Raises
    ------
    InputError
        If the table cannot be read or holds no observable.
    """
    source = open_table(Path(path))
    columns = recognise(source)
    parts, row = [], 1
    for part in source.parts():
        stars = columns.stars(part, row, shape=shape, evolutionary_state=evolutionary_state, solar=solar)
        parts.append(stars)
        row += len(stars)
    return parts[0] if len(parts) == 1 else Stars.joined(parts)
