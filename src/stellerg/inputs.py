"""From whatever a user holds (numbers, texts, Quantities, ufloats) to `Measured`, in the observable's own unit."""

from dataclasses import dataclass

import numpy as np

from stellerg.errors import InputError
from stellerg.measured import Measured, Scale, assign
from stellerg.observables import Observable, unit_conversion
from stellerg.status import Status

__all__ = ["Exact", "in_unit_of_value", "measured_from", "measured_from_columns"]


@dataclass(frozen=True)
class Exact:
    """A value (number, array or Quantity) stated to have no error."""

    value: object


def measured_from(observable: Observable, given, *, shape=None, unit: str = "") -> Measured:
    """Read one observable of one or many stars.

    Parameters
    ----------
    observable : Observable
    given : object
        A text or sequence of texts (``"1.02 ± 0.03"``); ``(value, error)`` or ``(value, upper, lower)``;
        ``Exact(value)``; a ufloat or a sequence of them; a bare number or array (its error is then missing).
        Values and errors may be astropy Quantities. A `Measured` passes through.
    shape : str or sequence of str, optional
        As `stellerg.measured.assign`.
    unit : str
        Unit of bare numbers and of texts without one; '' is the observable's own.

    Raises
    ------
    InputError
        If the lengths differ or the object is none of these.
    """
    if isinstance(given, Measured):
        return given
    if isinstance(given, Exact):
        value, own = _number(given.value, unit)
        return measured_from_columns(observable, value, unit=own, exact=True, shape=shape)
    if isinstance(given, str) or _is_text(given):
        return _from_texts(observable, [given] if isinstance(given, str) else list(given), shape, unit)
    if isinstance(given, list) and given and all(isinstance(item, tuple) for item in given):
        raise InputError(
            f"{observable.name}: a list of pairs was given; give a pair of lists: (values, errors), or texts"
        )
    if isinstance(given, tuple) and 2 <= len(given) <= 3:
        value, own = _number(given[0], unit)
        errors = [_error(observable, e, own, unit) for e in given[1:]]
        return measured_from_columns(observable, value, errors[0], errors[-1], unit=own, shape=shape)
    value, error = _from_ufloats(given)
    if error is not None:
        return measured_from_columns(observable, value, error, error, unit=unit, shape=shape)
    value, own = _number(given, unit)
    return measured_from_columns(observable, value, unit=own, shape=shape)


def measured_from_columns(
    observable: Observable, value, upper=None, lower=None, *, unit="", exact=None, shape=None, fault=None, cells=None
) -> Measured:
    """Convert units and assign distributions to columns of numbers.

    Parameters
    ----------
    observable : Observable
    value, upper, lower : array_like, (star,)
        NaN where nothing was given.
    unit : str or array_like of str, (star,)
    exact, shape, fault, cells
        As `stellerg.measured.assign`.
    """
    value = np.atleast_1d(np.asarray(value, float))
    missing = np.full(value.shape, np.nan)
    upper = missing if upper is None else np.atleast_1d(np.asarray(upper, float))
    lower = missing if lower is None else np.atleast_1d(np.asarray(lower, float))
    lengths = {len(x) for x in (value, upper, lower)} - {1}
    if len(lengths) > 1:
        raise InputError(f"{observable.name}: value and errors have different lengths, {sorted(lengths)}")
    fault = np.zeros(len(value), np.uint8) if fault is None else np.array(fault, np.uint8)
    units, which = np.unique(np.atleast_1d(np.asarray(unit, str)), return_inverse=True)
    conversions = [unit_conversion(observable, str(text)) for text in units]
    factor = np.array([1.0 if c is None else c[0] for c in conversions])[which]
    offset = np.array([0.0 if c is None else c[1] for c in conversions])[which]
    known = np.array([c is not None for c in conversions])[which]
    fault = np.where((fault == Status.OK) & ~np.isnan(value) & ~known, Status.UNIT_MISSING, fault)
    own = value * factor + offset
    if observable.name == "parallax":
        with np.errstate(invalid="ignore"):
            fault = np.where((fault == Status.OK) & (own <= 0.0), Status.PARALLAX_NOT_USABLE, fault)
    return assign(
        own,
        upper * factor,
        lower * factor,
        scale=observable.scale,
        exact=exact,
        shape=shape,
        fault=fault,
        cells=cells,
    )


def _from_texts(observable: Observable, cells: list, shape, unit: str) -> Measured:
    from stellerg.measured.text import TextKind, parse_text

    text = parse_text([None if cell is None else str(cell) for cell in cells])
    fault = np.zeros(len(cells), np.uint8)
    fault[text.kind == TextKind.LIMIT] = Status.LIMIT_ONLY
    fault[text.kind == TextKind.NOT_A_NUMBER] = Status.NOT_A_NUMBER
    units = np.where(np.asarray(text.unit, str) == "", unit, np.asarray(text.unit, str))
    return measured_from_columns(
        observable,
        text.value,
        text.upper,
        text.lower,
        unit=units,
        exact=text.kind == TextKind.EXACT,
        shape=shape,
        fault=fault,
        cells=np.array(cells, dtype=object),
    )


def _is_text(given) -> bool:
    if isinstance(given, np.ndarray):
        return given.dtype.kind in "US" or (given.dtype.kind == "O" and any(isinstance(x, str) for x in given))
    return isinstance(given, (list, tuple)) and any(isinstance(x, str) for x in given)


def _number(value, unit: str) -> tuple[np.ndarray, str]:
    """Return plain numbers and the text of their unit."""
    own = getattr(value, "unit", None)
    if own is not None and hasattr(value, "value"):
        # a Masked quantity and a MaskedColumn carry their mask beside their values
        mask = np.atleast_1d(getattr(value, "mask", False))
        plain = getattr(value, "unmasked", value)
        number = np.atleast_1d(np.ma.filled(np.ma.asarray(getattr(plain, "value", plain)).astype(float), np.nan))
        return np.where(mask, np.nan, number), own.to_string()
    if np.ma.isMaskedArray(value):
        value = np.ma.filled(value.astype(float), np.nan)
    try:
        return np.atleast_1d(np.asarray(value, float)), unit
    except (TypeError, ValueError):
        raise InputError(
            f"cannot read {value!r} as measured values; give texts, numbers with errors, Quantities or ufloats"
        ) from None


def _error(observable: Observable, error, value_unit: str, unit: str) -> np.ndarray:
    """An error in the unit of its value (a Quantity is converted, a bare number is taken to be in it)."""
    number, own = _number(error, value_unit)
    return in_unit_of_value(observable, number, own, value_unit) if hasattr(error, "unit") else number


def in_unit_of_value(observable: Observable, error: np.ndarray, own: str, value_unit: str) -> np.ndarray:
    """Convert errors to the unit of their values.

    Parameters
    ----------
    observable : Observable
    error : ndarray, (star,)
    own, value_unit : str

    Raises
    ------
    InputError
        If the units are not of one kind.
    """
    if own == value_unit:
        return error
    target = unit_conversion(observable, value_unit)
    source = unit_conversion(observable, own)
    if observable.scale is not Scale.LINEAR and own in ("", "dex", "mag"):
        return error
    if target is None or source is None:
        raise InputError(
            f"{observable.name}: the error has the unit {own or 'none'!r} and the value {value_unit or 'none'!r}; "
            f"both must be units like {observable.unit}"
        )
    return error * (source[0] / target[0])


def _from_ufloats(given) -> tuple[np.ndarray | None, np.ndarray | None]:
    """Nominal values and standard deviations of one or many ufloats; None if they are not ufloats."""
    items = [given] if hasattr(given, "nominal_value") else given
    if not isinstance(items, (list, tuple, np.ndarray)) or np.ndim(items) != 1 or len(items) == 0:
        return None, None
    if not all(hasattr(x, "nominal_value") for x in items):
        return None, None
    return np.array([x.nominal_value for x in items]), np.array([x.std_dev for x in items])
