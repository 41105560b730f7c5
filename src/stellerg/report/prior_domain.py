"""The domain of a calibrated coefficient: its tables as plain data, its regions in words, and where stars lie in it."""

from collections import Counter
from dataclasses import dataclass, fields

import numpy as np

from stellerg.errors import InputError
from stellerg.measured import Measured
from stellerg.stars import EvolutionaryState, Stars
from stellerg.structure.calibration import Boundaries, Calibration, Nodes, Place
from stellerg.structure.polytrope import index_of_coefficient
from stellerg.wording import counted

__all__ = ["MARKS", "PLACE_NAMES", "STATED_EVOLVED", "PlacedStars", "domain_document", "place_stars"]

PLACE_NAMES = {
    Place.MAIN_SEQUENCE: "main sequence",
    Place.INFLATED: "inflated",
    Place.CONTRACTING: "taken as contracting",
    Place.STATED_CONTRACTING: "stated pre-main-sequence",
    Place.MASS_OUTSIDE: "mass outside",
    Place.TOO_SMALL: "too small",
    Place.BEYOND: "too large",
    Place.CONTRACTING_OUTSIDE: "contracting and too massive",  # and too large
}
STATED_EVOLVED = "stated evolved"  # refused wherever the star lies

# How stars are told apart in a figure and counted; all other places are refused.
_REFUSED = "refused"
_MARK_OF_PLACE = {
    PLACE_NAMES[Place.MAIN_SEQUENCE]: "covered",
    PLACE_NAMES[Place.INFLATED]: "inflated",
    PLACE_NAMES[Place.CONTRACTING]: "taken as contracting",
    PLACE_NAMES[Place.STATED_CONTRACTING]: "stated pre-main-sequence",
}
MARKS = (*_MARK_OF_PLACE.values(), _REFUSED)

_SHOWN = (0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 30.0)  # solar masses
_ROUNDING = 1e-12  # splines give a node back but for this


def domain_document(calibration: Calibration) -> dict:
    """Return the tables of a calibration, the relation at some masses, and its regions in words.

    Parameters
    ----------
    calibration : Calibration

    Returns
    -------
    dict
        Numbers, texts, lists and None only; None where there is no such boundary. Nominal solar units; boundaries are
        radii over that at age zero.
    """
    return {
        "nodes": _columns(calibration.nodes, Nodes),
        "boundaries": _columns(calibration.boundaries, Boundaries),
        "smallest": calibration.smallest,
        "none_evolved_below": calibration.none_evolved_below,
        "spread_at_end": calibration.spread_at_end,
        "inflated_scatter": calibration.inflated_scatter,
        "inflated_over": calibration.inflated_over,
        "convective_coefficient": calibration.convective_coefficient,
        "convective_standard_deviation": calibration.convective_sd,
        "by_mass": [_at_mass(calibration, mass) for mass in _shown_masses(calibration)],
        "places": [
            {
                "name": PLACE_NAMES.get(place, STATED_EVOLVED),
                "covered": place is not None and place.covered,
                "words": words,
            }
            for place, words in _places(calibration).items()
        ],
    }


@dataclass(frozen=True)
class PlacedStars:
    """Stars of a table in the plane of mass and radius.

    Attributes
    ----------
    table : str
        Name of the table.
    mass, radius : ndarray, (3, star)
        Lower end of the 68.27 % interval, median and upper end, nominal solar units; only of stars with both.
    place : tuple of str, (star,)
        Names as in `PLACE_NAMES`, or `STATED_EVOLVED`.
    without : int
        Stars of the table without a usable mass and radius.
    """

    table: str
    mass: np.ndarray
    radius: np.ndarray
    place: tuple[str, ...]
    without: int

    @property
    def mark(self) -> tuple[str, ...]:
        """Which of `MARKS` each star has, (star,)."""
        return tuple(_MARK_OF_PLACE.get(place, _REFUSED) for place in self.place)

    def document(self) -> dict:
        """Return the counts as plain data."""
        counts = Counter(self.place)
        names = (*PLACE_NAMES.values(), STATED_EVOLVED)
        return {
            "table": self.table,
            "stars": len(self.place) + self.without,
            "places": {name: counts[name] for name in names if counts[name]},
            "without_mass_and_radius": self.without,
        }

    def words(self) -> str:
        """Return the counts as a sentence."""
        marks, places = Counter(self.mark), self.document()["places"]
        reasons = [name for name in places if name not in _MARK_OF_PLACE]
        why = ", ".join(f"{places[name]:,} {name}" if len(reasons) > 1 else name for name in reasons)
        notes = {_REFUSED: f" ({why})"}
        parts = [f"{marks[mark]:,} {mark}{notes.get(mark, '')}" for mark in MARKS if marks[mark]]
        if self.without:
            parts.append(f"{self.without:,} not drawn, without a usable mass and radius")
        return f"{self.table}: {counted(len(self.place) + self.without, 'star')}: {'; '.join(parts)}."


def place_stars(stars: Stars, calibration: Calibration, table: str) -> PlacedStars:
    """Say where stars lie, on the medians of their masses and radii as measured and what is stated of them.

    Parameters
    ----------
    stars : Stars
    calibration : Calibration
    table : str
        What messages call them.

    Raises
    ------
    InputError
        If masses or radii were not given at all.
    """
    columns = {}
    for name in ("mass", "radius"):
        given = [stars.measured[key] for key in (name, f"log_{name}") if key in stars.measured]
        if not given:
            raise InputError(
                f"{table}: the table has no column {name!r} or 'log_{name}', and stars are drawn by mass and radius; "
                f"give both columns, with their errors"
            )
        columns[name] = _interval(given)
    known = np.isfinite(columns["mass"]).all(axis=0) & np.isfinite(columns["radius"]).all(axis=0)
    log_mass, log_radius = (values[:, known] for values in columns.values())
    state = stars.evolutionary_state[known]
    place = calibration.place(log_mass[1], log_radius[1], state == EvolutionaryState.PRE_MAIN_SEQUENCE)
    names = np.where(state == EvolutionaryState.EVOLVED, STATED_EVOLVED, [PLACE_NAMES[Place(k)] for k in place])
    return PlacedStars(table, np.exp(log_mass), np.exp(log_radius), tuple(names.tolist()), int((~known).sum()))


def _interval(given: list[Measured]) -> np.ndarray:
    """Logarithm at normal scores -1, 0 and 1, (3, star), of the first of several that can be used; NaN if none can."""
    score = np.array([[-1.0, 0.0, 1.0]])
    out = np.full((len(given[0]), 3), np.nan)
    for measured in reversed(given):
        out = np.where(measured.usable[:, None], measured.log_quantile(score), out)
    return out.T


def _columns(table, kind: type) -> dict:
    """Columns as lists; None where a boundary is not given."""
    return {
        field.name: [None if value != value else value for value in getattr(table, field.name).tolist()]
        for field in fields(kind)
    }


def _shown_masses(calibration: Calibration) -> list[float]:
    """Round masses within the nodes; some of the nodes where there are too few."""
    nodes = calibration.nodes.mass
    inside = [mass for mass in _SHOWN if nodes[0] <= mass <= nodes[-1]]
    return inside if len(inside) > 2 else nodes[[0, len(nodes) // 2, -1]].tolist()


def _at_mass(calibration: Calibration, mass: float) -> dict:
    log_mass = np.log(mass)
    log_radius, log_coefficient, gamma = calibration.relation_at(log_mass)
    radius, coefficient = float(np.exp(log_radius)), float(np.exp(log_coefficient))
    end, limit = (float(calibration.boundaries.at(name, log_mass)) for name in ("end", "radius_limit"))
    inflated = mass < calibration.boundaries.last_mass("radius_limit") and limit < end
    return {
        "mass": mass,
        "radius_zams": radius,
        "coefficient_zams": coefficient,
        "n_effective": float(index_of_coefficient(coefficient)),
        "gamma": 0.0 if abs(gamma) < _ROUNDING else float(gamma),
        "scatter": float(np.interp(log_mass, np.log(calibration.nodes.mass), calibration.nodes.scatter)),
        "radius_limit": radius * limit if inflated else None,
        "radius_at_end": radius * end,
    }


def _places(calibration: Calibration) -> dict[Place | None, str]:
    """Each region in words; None for stars stated evolved, wherever they lie."""
    bounds, light = calibration.boundaries, _solar(calibration.none_evolved_below)
    low, high = (f"{mass:g}" for mass in calibration.nodes.mass[[0, -1]])
    top = _solar(bounds.last_mass("convective_above"))
    evolving = bounds.mass >= calibration.none_evolved_below
    small, end = f"{calibration.smallest:g} R_zams", f"the end of the main sequence ({_span(bounds.end)} R_zams)"
    convective = (
        f"w = {calibration.convective_coefficient:g} ± {calibration.convective_sd:g}, "
        "or that of age zero where it is smaller"
    )
    return {
        Place.MAIN_SEQUENCE: f"{low} to {high} solar masses, from {small} to {end}: by the relation; from {light} up, "
        f"beyond {_span(bounds.widen[evolving])} R_zams, ln w gains the absolute value of a normal variate whose scale "
        f"grows to {_percent(calibration.spread_at_end)} at the end",
        Place.INFLATED: f"below {_solar(bounds.last_mass('radius_limit'))}, beyond the largest radius of a single "
        f"star at the age of the Universe ({_span(bounds.radius_limit)} R_zams): w is held at its value there, and its "
        f"scatter grows to {_percent(calibration.inflated_scatter)} at {calibration.inflated_over:g} times that radius",
        Place.CONTRACTING: f"below {light}, beyond the end of the main sequence, where no single star so "
        f"light has evolved: fully convective, {convective}",
        Place.STATED_CONTRACTING: f"fully convective beyond {_span(bounds.convective_above)} R_zams, "
        f"{convective}; below that a mixture with the relation; above {top} by the relation, to the end of "
        "the main sequence only",
        Place.MASS_OUTSIDE: f"below {low} or above {high} solar masses",
        Place.TOO_SMALL: f"below {small}: no main-sequence star of near-solar composition is so small",
        Place.BEYOND: f"from {light} up, beyond the end of the main sequence: either a giant, or a "
        "contracting star, which must be stated pre-main-sequence",
        Place.CONTRACTING_OUTSIDE: f"stated pre-main-sequence, above {top} and beyond the end of the main sequence",
        None: "no giant is described: its energy sits in the core",
    }


def _span(values: np.ndarray) -> str:
    low, high = (f"{value:g}" for value in (np.nanmin(values), np.nanmax(values)))
    return low if low == high else f"{low} to {high}"


def _solar(mass: float) -> str:
    return f"{mass:g} solar mass" + ("" if mass == 1.0 else "es")


def _percent(value: float) -> str:
    return f"{100.0 * value:.4g} %"
