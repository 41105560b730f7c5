"""Composition of stars: mass fractions, and the mean molecular weight that follows from them."""

from collections.abc import Mapping
from dataclasses import replace

import numpy as np

from stellerg.measured import Measured, Shape, assign
from stellerg.status import Status
from stellerg.structure.radiation import mean_molecular_weight

__all__ = ["HYDROGEN", "METAL", "mass_fractions", "with_molecular_weight"]

# Near-solar mass fractions where none is given (common practice)
HYDROGEN = 0.70
METAL = 0.02
_DEFAULT = {"hydrogen_mass_fraction": HYDROGEN, "metal_mass_fraction": METAL}


def mass_fractions(measured: Mapping[str, Measured], count: int) -> tuple[np.ndarray, np.ndarray]:
    """Mass fractions of hydrogen and metals, (star,) each: as quoted, or near-solar."""
    return tuple(_values(measured, name, count)[0] for name in _DEFAULT)


def with_molecular_weight(measured: Mapping[str, Measured]) -> dict[str, Measured]:
    """Add the mean molecular weight where a mass fraction is given and it is not.

    Errors are propagated to first order (with errors of 0.02 in X the second order is 4e-4 of the value): mu is given a
    normal error, or is exact where the mass fractions are.
    """
    count = len(next(iter(measured.values())))
    measured = _within_range(measured, count)
    values, errors, given = zip(*(_values(measured, name, count) for name in _DEFAULT), strict=True)
    weight = mean_molecular_weight(*values)
    slopes = [_slope(values, k) for k in range(2)]
    error = np.sqrt(np.square(slopes[0] * errors[0]) + np.square(slopes[1] * errors[1]))
    derived = given[0] | given[1]
    weight, error = np.where(derived, weight, np.nan), np.where(derived & (error > 0.0), error, np.nan)
    made = assign(weight, error, error, exact=derived & np.isnan(error))
    own = measured.get("mean_molecular_weight")
    if own is None:
        return {**measured, "mean_molecular_weight": made}
    parts = {}
    for name in ("value", "upper", "lower", "shape", "fault"):
        keep = own.usable | (own.fault != 0)
        parts[name] = np.where(keep, getattr(own, name), getattr(made, name))
    return {**measured, "mean_molecular_weight": Measured(**parts, scale=own.scale, cells=own.cells)}


def _within_range(measured, count: int) -> dict[str, Measured]:
    """Take mass fractions out that cannot be: above 1, or of a sum above 1 (a value of 0 is refused on reading)."""
    whole = sum(_values(measured, name, count)[0] for name in _DEFAULT)
    checked = dict(measured)
    for name in _DEFAULT:
        if name in measured:
            own = measured[name]
            wrong = own.usable & ((own.value > 1.0) | (whole > 1.0))
            shape = np.where(wrong, Shape.ABSENT, own.shape).astype(np.uint8)
            fault = np.where(wrong, Status.NOT_A_NUMBER, own.fault).astype(np.uint8)
            checked[name] = replace(own, shape=shape, fault=fault)
    return checked


def _values(measured, name, count):
    """Value, error (the larger side) and presence of a mass fraction, (star,) each."""
    value, error, given = np.full(count, _DEFAULT[name]), np.zeros(count), np.zeros(count, bool)
    if name in measured:
        own = measured[name]
        given = own.usable
        value = np.where(given, own.value, value)
        error = np.where(given & (own.shape != Shape.EXACT), np.fmax(own.upper, own.lower), error)
    return value, error, given


def _slope(values, which):
    step = 1e-4
    ends = []
    for sign in (1.0, -1.0):
        moved = list(values)
        moved[which] = values[which] + sign * step
        ends.append(mean_molecular_weight(*moved))
    return (ends[0] - ends[1]) / (2.0 * step)
