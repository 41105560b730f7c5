"""What the columns of a table mean: our own names, recognised once, then read part by part."""

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np

from stellerg.catalogue.readers import RawColumn, Source
from stellerg.errors import InputError
from stellerg.inputs import in_unit_of_value, measured_from_columns
from stellerg.measured import Measured, Shape
from stellerg.measured.text import TextKind, parse_text
from stellerg.observables import MEASURABLE, OBSERVABLES, STRUCTURE_OBSERVABLES, SolarReferences
from stellerg.stars import Stars, state_codes
from stellerg.status import Status

__all__ = ["Columns", "recognise", "suspicious"]

_WEIGHT = "mean_log_k2_weight"
_ERRORS = ("_error", "_error_upper", "_error_lower")


@dataclass(frozen=True)
class Columns:
    """The columns of a table that mean something here.

    Attributes
    ----------
    observables : tuple of str
        In the order of `MEASURABLE`.
    correlations : dict of (str, str) to str
        Pair of observables to column.
    names : tuple of str
        All columns of the table.
    unrecognised : tuple of str
        Not used; those that look like ours come first.
    """

    observables: tuple[str, ...]
    correlations: dict[tuple[str, str], str]
    names: tuple[str, ...]
    unrecognised: tuple[str, ...]

    def stars(
        self,
        part: Mapping[str, RawColumn],
        first_row: int,
        *,
        shape: str = "",
        correlation: Mapping[tuple[str, str], float] | None = None,
        evolutionary_state: str = "",
        solar: SolarReferences | None = None,
        k2_weight: float | None = None,
    ) -> Stars:
        """Read one part.

        Parameters
        ----------
        part : mapping of str to RawColumn
        first_row : int
            Number (from 1) of its first row in the table, for rows without an identifier.
        shape, correlation, evolutionary_state, solar, k2_weight
            For rows that do not say themselves.
        """
        count = _length(part)
        measured = {name: _measured(name, part, shape) for name in self.observables}
        correlations: dict[tuple[str, str], np.ndarray] = {
            pair: np.full(count, float(value)) for pair, value in (correlation or {}).items()
        }
        for pair in correlations:
            for name in pair:
                if name in measured and name not in OBSERVABLES:
                    raise InputError(f"correlation: {name!r} constrains structure or composition; it is independent")
                if name not in measured:
                    raise InputError(f"correlation: the table has no column {name!r}")
        for pair, column in self.correlations.items():
            value, bad, units = _numbers(part[column])
            bad |= units != ""
            given = correlations.pop(pair[::-1], correlations.get(pair, np.zeros(count)))
            # a cell that is no number is an invalid correlation, not a missing one
            correlations[pair] = np.where(bad, np.inf, np.where(np.isnan(value), given, value))
        for name in STRUCTURE_OBSERVABLES:  # needs an error: an exact cell is one that cannot be used
            if name in measured and measured[name].exact.any():
                own = measured[name]
                measured[name] = replace(
                    own,
                    shape=np.where(own.exact, Shape.ABSENT, own.shape).astype(np.uint8),
                    fault=np.where(own.exact, Status.ERROR_MISSING, own.fault).astype(np.uint8),
                )
        states = self._states(part, count, evolutionary_state)
        return Stars(
            identifier=self._identifiers(part, count, first_row),
            measured=measured,
            correlation=correlations,
            evolutionary_state=states,
            solar=solar or SolarReferences(),
            k2_weight=self._weights(part, measured, count, k2_weight),
        )

    def _identifiers(self, part, count: int, first_row: int) -> np.ndarray:
        numbers = np.arange(first_row, first_row + count).astype(str)
        if "star" in self.names:
            names = np.char.strip(part["star"].as_texts())
        elif "system" in self.names and "component" in self.names:
            both = (np.char.strip(part[name].as_texts()) for name in ("system", "component"))
            names = np.char.strip(np.char.add(np.char.add(next(both), " "), next(both)))
        else:
            return numbers
        return np.where(names == "", numbers, names)

    def _weights(self, part, measured, count: int, default: float | None) -> np.ndarray:
        """Weights in the mean k2 of systems; where there is none that can be used, the mean is not used either."""
        if default is not None and "mean_log_k2" not in measured:
            raise InputError("--mean-log-k2-weight: the table has no column mean_log_k2")
        weight = np.full(count, np.nan if default is None else default)
        if _WEIGHT in self.names:
            values, bad, units = _numbers(part[_WEIGHT])
            weight = np.where(np.isnan(values) & ~bad, weight, np.where(bad | (units != ""), np.nan, values))
        usable = (weight > 0.0) & (weight <= 1.0)
        if "mean_log_k2" in measured:
            mean = measured["mean_log_k2"]
            lacking = mean.usable & ~usable
            measured["mean_log_k2"] = replace(
                mean,
                shape=np.where(lacking, Shape.ABSENT, mean.shape).astype(np.uint8),
                fault=np.where(lacking, Status.ERROR_MISSING, mean.fault).astype(np.uint8),
            )
        return np.where(usable, weight, 1.0)

    def _states(self, part, count: int, default: str) -> np.ndarray:
        if "evolutionary_state" not in self.names:
            return state_codes(default, count)
        words = np.char.strip(part["evolutionary_state"].as_texts())
        state_codes(default, count)  # the option is a call, not a cell: a wrong word is refused
        return state_codes(np.where(words == "", default, words), count, forgiving=True)


def recognise(source: Source) -> Columns:
    """Recognise the columns of a table by name.

    Raises
    ------
    InputError
        If no observable is there, or an error or shape column has no value column.
    """
    names = source.names
    observables = tuple(name for name in MEASURABLE if name in names)
    pairs = {
        f"correlation_{first}_{second}": (first, second)
        for first in OBSERVABLES
        for second in OBSERVABLES
        if first != second
    }
    known = {"star", "system", "component", "evolutionary_state", _WEIGHT, *observables}
    for name in MEASURABLE:
        attached = [name + ending for ending in (*_ERRORS, "_shape") if name + ending in names]
        if attached and name not in observables:
            raise InputError(f"column {attached[0]!r} has no column {name!r} beside it")
        sides = [name + ending in names for ending in _ERRORS[1:]]
        if sides[0] != sides[1]:
            raise InputError(f"{name}: give both {name}_error_upper and {name}_error_lower, or {name}_error")
        known.update(attached)
    correlations = {pairs[name]: name for name in names if name in pairs}
    for pair, column in correlations.items():
        for name in pair:
            if name not in observables:
                raise InputError(f"column {column!r}: the table has no column {name!r}")
        if pair[::-1] in correlations:
            raise InputError(f"column {column!r} and {correlations[pair[::-1]]!r} say the same; keep one")
    known.update(correlations.values())
    if not observables:
        hint = ""
        if any(name.lower() in MEASURABLE for name in names):
            hint = "; names are in lower case: mass, not Mass"
        elif len(names) == 1 and ";" in names[0]:
            hint = "; cells are separated by commas"
        elif names[0].startswith("#"):
            hint = "; the first line must be the header, without comments before it"
        raise InputError(
            f"{source.path}: no column is an observable; name columns mass, radius, luminosity, ... "
            f"(found: {', '.join(names)}){hint}"
        )
    unknown = [name for name in names if name not in known]
    return Columns(observables, correlations, names, tuple(sorted(unknown, key=lambda name: not suspicious(name))))


def suspicious(name: str) -> bool:
    """Whether a column that is not recognised looks as if it were meant to be one of ours."""
    plain = name.lower()
    return plain.startswith(("correlation", "e_", "evol")) or any(x in plain for x in MEASURABLE)


def _length(part: Mapping[str, RawColumn]) -> int:
    column = next(iter(part.values()))
    return len(column.numbers if column.numbers is not None else column.texts)


def _numbers(column: RawColumn) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Numbers of a column, NaN where empty; where a cell holds something else; and the unit of each."""
    if column.numbers is not None:
        count = len(column.numbers)
        return column.numbers, np.zeros(count, bool), np.full(count, column.unit)
    text = parse_text(column.texts)
    bad = ~np.isin(text.kind, (TextKind.VALUE_ONLY, TextKind.EMPTY))
    units = np.array(text.unit, dtype=str)
    return text.value, bad, np.where(units == "", column.unit, units)


def _measured(name: str, part: Mapping[str, RawColumn], shape: str) -> Measured:
    """Read one observable: the cell's own error counts, else that of the error columns."""
    column = part[name]
    observable = MEASURABLE[name]
    if column.numbers is not None:
        count = len(column.numbers)
        value, upper, lower = column.numbers, np.full(count, np.nan), np.full(count, np.nan)
        alone = ~np.isnan(value)
        exact, fault = np.zeros(count, bool), np.zeros(count, np.uint8)
        units: np.ndarray = np.full(count, column.unit)
    else:
        text = parse_text(column.texts)
        value, upper, lower = text.value, text.upper.copy(), text.lower.copy()
        alone, exact = text.kind == TextKind.VALUE_ONLY, text.kind == TextKind.EXACT
        fault = np.zeros(len(value), np.uint8)
        fault[text.kind == TextKind.LIMIT] = Status.LIMIT_ONLY
        fault[text.kind == TextKind.NOT_A_NUMBER] = Status.NOT_A_NUMBER
        written = np.array(text.unit, dtype=str)
        units = np.where(written == "", column.unit, written)
    plain = column.numbers is not None
    cells = (np.char.mod("%.10g", column.numbers) if plain else column.as_texts()).astype(object)
    for ending, sides in zip(_ERRORS, ((upper, lower), (upper,), (lower,)), strict=True):
        if name + ending in part:
            errors, wrong, none, texts = _errors(observable, part[name + ending], units)
            exact |= alone & none
            at_fault = alone & (wrong != Status.OK) & (fault == Status.OK)
            fault[at_fault] = wrong[at_fault]
            cells[at_fault] = cells[at_fault] + f" with {name}{ending} " + texts[at_fault]
            for side in sides:
                side[:] = np.where(alone & ~np.isnan(errors), errors, side)
    chosen: object = shape
    if name + "_shape" in part:
        words = np.char.strip(part[name + "_shape"].as_texts())
        fallback = np.where(upper == lower, shape, "") if shape in ("", "normal", "lognormal") else ""
        chosen = np.where(words == "", fallback, words)
    return measured_from_columns(
        observable, value, upper, lower, unit=units, exact=exact, shape=chosen, fault=fault, cells=cells
    )


def _errors(observable, column: RawColumn, value_units: np.ndarray):
    """Errors in the unit of the values, faults of their cells, where they read 'exact', and the cells."""
    numbers, bad, units = _numbers(column)
    texts = column.as_texts().astype(object)
    none = np.char.lower(np.char.strip(texts.astype(str))) == "exact"
    wrong = np.where(bad & ~none, Status.NOT_A_NUMBER, Status.OK)
    # one conversion for each pair of units that occurs, not for each cell
    pairs, which = np.unique(np.stack([units, value_units]), axis=1, return_inverse=True)
    for number, (own, value_unit) in enumerate(pairs.T):
        if own:
            rows = (which.ravel() == number) & ~np.isnan(numbers)
            try:
                numbers[rows] = in_unit_of_value(observable, numbers[rows], str(own), str(value_unit))
            except InputError:
                wrong[rows] = Status.UNIT_MISSING
    return np.where(none, np.nan, numbers), wrong, none, texts
