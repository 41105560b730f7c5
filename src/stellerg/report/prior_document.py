"""A structure model as plain data: what ``stellerg priors show --json`` prints, and the words of its parts."""

import math
from dataclasses import asdict

import numpy as np

from stellerg.report.prior_domain import domain_document
from stellerg.report.prior_view import View
from stellerg.structure.calibration import Calibration
from stellerg.structure.distributions import Beta, Normal, Point, Tabulated
from stellerg.structure.model import Component, Coordinate, MassInterval, Mixture, StructureModel
from stellerg.structure.polytrope import gravitational_coefficient, index_of_coefficient

__all__ = ["LANDMARKS", "SYMBOLS", "density_words", "mass_words", "prior_document"]

SYMBOLS = {Coordinate.INDEX: "n", Coordinate.COEFFICIENT: "w", Coordinate.LOG_COEFFICIENT: "ln w"}

_SUN = 1.613  # w of the present Sun: mean of twelve published standard solar models, integrated from their tables

# Index n of stars that a reader knows. 3/2 and 3: Chandrasekhar 1939, An Introduction to the Study of Stellar
# Structure, ch. IV; 0: exact.
LANDMARKS = {
    "uniform density": 0.0,
    "convective star": 1.5,
    "radiative star": 3.0,
    "present Sun": float(index_of_coefficient(_SUN)),
}

_PROBABILITIES = {"interval68": 0.6826894921370859, "interval95": 0.9544997361036416}  # normal within 1 and 2 sd
_CLOSE = 1e-9  # values of n that differ by less are the same but for rounding


def prior_document(model: StructureModel | Calibration) -> dict:
    """Return a structure model, its numbers and what it excludes.

    Parameters
    ----------
    model : StructureModel or Calibration

    Returns
    -------
    dict
        Numbers, texts, lists and None only; None for an end at infinity and for a mean that does not exist. A
        calibration has an entry `calibration` where a density has `intervals`.
    """
    limits, common = model.applies_to, model.common
    about = {
        "name": model.name,
        "summary": model.summary,
        "source": model.source,
        "applies_to": {
            "mass": list(limits.mass) if limits.mass else None,
            "evolutionary_state": list(limits.evolutionary_state),
        },
        "common": asdict(common) if common else None,
    }
    if isinstance(model, Calibration):
        return {**about, "calibration": domain_document(model)}
    return {**about, "intervals": [_interval(piece) for piece in model.intervals]}


def mass_words(piece: MassInterval) -> str:
    """Return the masses of an interval in words."""
    lower, upper = math.exp(piece.log_lower), math.exp(piece.log_upper)
    if upper == math.inf:
        return f"from {lower:.4g} solar masses up" if lower > 0.0 else "all masses"
    return f"{lower:.4g} to {upper:.4g} solar masses" if lower > 0.0 else f"below {upper:.4g} solar masses"


def density_words(mixture: Mixture) -> str:
    """Return a density in words."""
    if len(mixture.components) == 1:
        return _component_words(mixture.components[0])
    parts = zip(mixture.weights, mixture.components, strict=True)
    return "; ".join(f"{100.0 * weight:.4g} % {_component_words(part)}" for weight, part in parts)


def _component_words(part: Component) -> str:
    family, symbol = part.family, SYMBOLS[part.coordinate]
    ends = "from {:.4g} to {:.4g}".format(*family.support)
    if isinstance(family, Point):
        return f"the single value {symbol} = {family.value:.4g}"
    if isinstance(family, Normal):
        cut = "" if family.kept > 1.0 - _CLOSE else f", restricted to what is possible, {ends}"
        return f"normal in {symbol}, {family.location:.4g} ± {family.scale:.4g}{cut}"
    if isinstance(family, Beta):
        return f"beta (alpha {family.alpha:.4g}, beta {family.beta:.4g}) in {symbol} {ends}"
    if isinstance(family, Tabulated):
        return f"tabulated in {symbol} {ends}, {len(family.points)} points"
    return f"uniform in {symbol} {ends}"


def _interval(piece: MassInterval) -> dict:
    mixture = piece.mixture
    return {
        "mass": [_mass(piece.log_lower), _mass(piece.log_upper)],
        "mass_in_words": mass_words(piece),
        "density": density_words(mixture),
        **{coordinate.value: _numbers(View(mixture, coordinate)) for coordinate in Coordinate},
        "excluded": {
            "index": _excluded(View(mixture, Coordinate.INDEX), 0.0, 5.0),
            "coefficient": _excluded(View(mixture, Coordinate.COEFFICIENT), 0.6, math.inf),
        },
        "landmarks": [_landmark(mixture, name, index) for name, index in LANDMARKS.items()],
    }


def _mass(log_mass: float) -> float | None:
    """A limit as it was written: 12 digits leave out the rounding of the logarithm."""
    return _plain(float(f"{math.exp(log_mass):.12g}"))


def _numbers(view: View) -> dict:
    intervals = {
        name: [_plain(view.quantile(0.5 - 0.5 * p)), _plain(view.quantile(0.5 + 0.5 * p))]
        for name, p in _PROBABILITIES.items()
    }
    return {
        "mean": _plain(view.mean),
        "standard_deviation": _plain(view.standard_deviation),
        "median": _plain(view.quantile(0.5)),
        **intervals,
        "ranges": [[_plain(end) for end in piece] for piece in view.ranges],
    }


def _excluded(view: View, least: float, most: float) -> list[list[float | None]]:
    """What lies between the possible ends and in no range."""
    edges = [least, *(end for piece in view.ranges for end in piece), most]
    return [[_plain(a), _plain(b)] for a, b in zip(edges[::2], edges[1::2], strict=True) if b > a + _CLOSE]


def _landmark(mixture: Mixture, name: str, index: float) -> dict:
    q = float(Coordinate.INDEX.to_log_coefficient(index))
    below, upto = (float(mixture.cumulative(np.float64(x))) for x in (q - _CLOSE, q + _CLOSE))
    return {
        "name": name,
        "index": index,
        "coefficient": float(gravitational_coefficient(index)),
        "probability_below": below,
        "place": _place(View(mixture, Coordinate.INDEX), index, below, upto),
    }


def _place(view: View, index: float, below: float, upto: float) -> str:
    """Where a value of n lies in a density, in words."""
    share = sum(weight for value, weight in view.atoms if abs(value - index) < _CLOSE)
    if share > 1.0 - _CLOSE:
        return "all the probability"
    if share:
        return f"the value of {100.0 * share:.4g} % of the probability"
    around = [piece for piece in view.ranges if piece[0] - _CLOSE <= index <= piece[1] + _CLOSE]
    if not around:
        return "excluded"
    for end, word in zip(around[0], ("lower", "upper"), strict=True):
        if abs(end - index) < _CLOSE:
            return f"at the {word} end of its range{', outside the central 95.45 %' if _tail(below, upto) else ''}"
    if _tail(below, upto):
        return f"in the {_tail(below, upto)} tail, outside the central 95.45 %"
    inner = abs(below - 0.5) <= 0.5 * _PROBABILITIES["interval68"]
    return f"inside the central {'68.27' if inner else '95.45'} %"


def _tail(below: float, upto: float) -> str:
    """The tail beyond the central 95.45 % in which a value lies, if any."""
    edge = 0.5 - 0.5 * _PROBABILITIES["interval95"]
    return "lower" if upto < edge else "upper" if below > 1.0 - edge else ""


def _plain(value: float) -> float | None:
    """A number that JSON can hold."""
    return float(value) if math.isfinite(value) else None
