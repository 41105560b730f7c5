"""Which measurements of a star are used, and what they determine: linear algebra on the table of exponents.

Redundant columns are not evidence: luminosities are often computed from radius and temperature, gravities
from mass and radius. Without an explicit list the first determining set in `SELECTION_ORDER` is taken and the
rest is left aside, by name. Decisions are made once for each pattern of measurements, never star by star.
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from stellerg.observables import LATENTS, OBSERVABLES, SELECTION_ORDER
from stellerg.status import STATUS_TEXT, VALUE, Status
from stellerg.wording import label

__all__ = ["Need", "Selection", "determined", "select"]

_TOLERANCE = 1e-9  # on exponents, which are multiples of 1/8

_SUPPLIED_BY = {
    "mass": "give mass, or log_surface_gravity or mean_density with radius, or large_frequency_separation with radius",
    "radius": "give radius, or luminosity with effective_temperature, or angular_diameter with parallax or distance",
    "luminosity": "give luminosity, or effective_temperature with radius, or bolometric_flux with parallax or distance",
}


@dataclass(frozen=True)
class Need:
    """Something that is asked for.

    Attributes
    ----------
    name : str
    monomials : tuple of tuple of float
        Exponents over `LATENTS` of all that must be determined; the first is the output itself.
    """

    name: str
    monomials: tuple[tuple[float, ...], ...]

    def met_by(self, names: Sequence[str]) -> bool:
        """Whether the observables named determine it."""
        return all(determined(exponents, names) for exponents in self.monomials)

    def involves(self, latent: str) -> bool:
        """Whether a latent quantity enters."""
        return any(exponents[LATENTS.index(latent)] for exponents in self.monomials)


@dataclass(frozen=True)
class Selection:
    """What is done with the stars of one pattern of measurements.

    Attributes
    ----------
    chosen : tuple of str
        Observables used.
    aside : tuple of str
        Usable observables left aside as redundant.
    given : tuple of bool
        Which of the needs are determined.
    status : Status
    reason : str
        Sentence of the status.
    culprit : str
        Observable whose fault is the reason; '' if none is.
    """

    chosen: tuple[str, ...]
    aside: tuple[str, ...]
    given: tuple[bool, ...]
    status: Status
    reason: str
    culprit: str


def _matrix(names: Sequence[str]) -> np.ndarray:
    return np.array([OBSERVABLES[name].exponents for name in names], float).reshape(len(names), len(LATENTS))


def determined(exponents: Sequence[float], names: Sequence[str]) -> bool:
    """Whether a monomial is a combination of the observables named."""
    wanted = np.array(exponents, float)
    if not wanted.any():
        return True
    if not names:
        return False
    rows = _matrix(names)
    weights = np.linalg.lstsq(rows.T, wanted, rcond=None)[0]
    return bool(np.abs(rows.T @ weights - wanted).max() < _TOLERANCE)


def _unit(name: str) -> str:
    return OBSERVABLES[name].unit


def _first_set(names: Sequence[str], start: Sequence[str] = ()) -> list[str]:
    """The first observables, in the order given, each of which adds to what is determined."""
    found = list(start)
    for name in names:
        if name not in found and not determined(OBSERVABLES[name].exponents, found):
            found.append(name)
    return found


def select(
    usable: Sequence[str], faults: dict[str, Status], needs: Sequence[Need], use: Sequence[str] | None
) -> Selection:
    """Choose the measurements of one pattern.

    Parameters
    ----------
    usable : sequence of str
        Observables that hold a measurement.
    faults : dict of str to Status
        Observables whose cell cannot be used, and why.
    needs : sequence of Need
    use : sequence of str or None
        Observables stated to be independent: all of them are used; None for the first determining set.
    """
    order = [name for name in SELECTION_ORDER if use is None or name in use]
    candidates = [name for name in order if name in usable]
    chosen = candidates if use is not None else _first_set(candidates)
    given = tuple(need.met_by(chosen) for need in needs)
    aside = tuple(name for name in OBSERVABLES if name in usable and name not in chosen)
    if all(given):
        return Selection(tuple(chosen), aside, given, Status.OK, "", "")
    excluded = f" ({', '.join(aside)} given but not named in use)" if use is not None and aside else ""
    status, reason, culprit = _why_not(chosen, [n for n in order if n in faults], faults, needs, given)
    reason += excluded if status == Status.UNDERDETERMINED else ""
    if any(given):
        lacking = ", ".join(label(need.name) for need, has in zip(needs, given, strict=True) if not has)
        status, reason = Status.PARTIAL, f"no {lacking}: {reason}"
    return Selection(tuple(chosen), aside, given, status, reason, culprit)


def _why_not(chosen, faulty, faults, needs, given) -> tuple[Status, str, str]:
    """The first fault that keeps a need from being determined, or the quantities that are missing."""
    extended = _first_set(faulty, chosen)
    for need, has in zip(needs, given, strict=True):
        if has or not need.met_by(extended):
            continue
        for name in faulty:
            others = [other for other in extended if other != name]
            if name in extended and not need.met_by(others):
                sentence = STATUS_TEXT[faults[name]].about(name, _unit(name))
                return faults[name], f"{name}{VALUE}: {sentence}", name
    missing = [
        latent
        for latent in ("mass", "radius", "luminosity")
        if any(need.involves(latent) and not has for need, has in zip(needs, given, strict=True))
        and not determined(tuple(float(latent == other) for other in LATENTS), chosen)
    ]
    sentences = [f"{latent} is not determined; {_SUPPLIED_BY[latent]}" for latent in missing]
    sentences += [f"{name} is not usable: {STATUS_TEXT[faults[name]].about(name, _unit(name))}" for name in faulty]
    return Status.UNDERDETERMINED, "; ".join(sentences), ""
