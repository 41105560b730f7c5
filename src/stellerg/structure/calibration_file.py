"""The part of a TOML file that describes a calibrated coefficient: [calibration] with its tables."""

import itertools

import numpy as np

from stellerg.structure.calibration import Boundaries, Calibration, Nodes
from stellerg.structure.fields import Place, check_keys, read_finite, read_number, wanted_value

__all__ = ["parse_calibration"]

_NODES = tuple(Nodes.__dataclass_fields__)
_BOUNDARIES = tuple(Boundaries.__dataclass_fields__)


def parse_calibration(table: object, where: Place, **common) -> Calibration:
    """Read a calibration.

    Parameters
    ----------
    table : object
        What stands at [calibration].
    where : Place
        Of the file.
    **common
        What every kind of file holds, already read: name, summary, source, applies_to, common, text, training.

    Raises
    ------
    PriorError
        If a key is unknown or missing, or a table is not what it must be.
    """
    where = where.inside("[calibration]", "calibration")
    check_keys(table, ("columns", "nodes", "domain", "spread", "convective"), where)
    nodes = _columns(table, "nodes", _NODES, where)
    for name in ("radius_zams", "coefficient_zams", "scatter"):
        _positive(nodes[name], name, where)
    inside = where.inside("[domain]", "domain")
    domain = _inner(table, "domain", ("columns", "boundaries", "smallest", "none_evolved_below"), where)
    boundaries = Boundaries(**_columns(domain, "boundaries", _BOUNDARIES, inside, optional=_BOUNDARIES[3:]))
    spread = _inner(table, "spread", ("at_end", "inflated", "inflated_over"), where)
    convective = _inner(table, "convective", ("coefficient", "standard_deviation"), where)
    numbers = {
        name: read_number(source, key, where.inside(f"[{part}]", part))
        for name, source, part, key in (
            ("smallest", domain, "domain", "smallest"),
            ("none_evolved_below", domain, "domain", "none_evolved_below"),
            ("spread_at_end", spread, "spread", "at_end"),
            ("inflated_scatter", spread, "spread", "inflated"),
            ("inflated_over", spread, "spread", "inflated_over"),
            ("convective_coefficient", convective, "convective", "coefficient"),
            ("convective_sd", convective, "convective", "standard_deviation"),
        )
    }
    for name, value in numbers.items():
        if value <= 0.0:
            raise where.fault(f"{name.replace('_', ' ')} must be positive, got {value}")
    if numbers["inflated_over"] <= 1.0:
        raise where.inside("[spread]", "spread").fault("'inflated_over' must exceed 1", "inflated_over")
    return Calibration(nodes=Nodes(**nodes), boundaries=boundaries, **numbers, **common)


def _inner(table: dict, key: str, allowed: tuple[str, ...], where: Place) -> dict:
    found = wanted_value(table, key, f"a table with {', '.join(allowed)}", where)
    check_keys(found, allowed, where.inside(f"[{key}]", key))
    return found


def _columns(table: dict, key: str, names: tuple[str, ...], where: Place, optional: tuple[str, ...] = ()) -> dict:
    """Columns of a list of rows, by name; NaN is allowed in the optional ones."""
    stated = wanted_value(table, "columns", f"the list {list(names)}", where)
    if stated != list(names):
        raise where.fault(f"'columns' must be {list(names)}, got {stated!r}", "columns")
    rows = wanted_value(table, key, "a list of rows of numbers", where)
    if not isinstance(rows, list) or len(rows) < 3:
        raise where.fault(f"{key!r} must be a list of at least 3 rows, got {rows!r}", key)
    for number, row in enumerate(rows):
        if not isinstance(row, list) or len(row) != len(names):
            raise where.fault(f"a row of {key!r} must hold {len(names)} numbers, got {row!r}", key, number)
        for place, (name, value) in enumerate(zip(names, row, strict=True)):
            if not (name in optional and value != value):
                read_finite(value, where, key, number, place)
    columns = {name: np.array([row[k] for row in rows], float) for k, name in enumerate(names)}
    mass = columns["mass"]
    if mass[0] <= 0.0 or any(b <= a for a, b in itertools.pairwise(mass)):
        raise where.fault(f"the masses of {key!r} must be positive and increase, got {mass.tolist()}", key)
    for name in optional:
        if np.isnan(columns[name]).all():
            raise where.fault(f"column {name!r} of {key!r} must hold at least one number", key)
    return columns


def _positive(values: np.ndarray, name: str, where: Place) -> None:
    if (values <= 0.0).any():
        raise where.fault(f"{name!r} must be positive at every node, got {values.min():g}", "nodes")
