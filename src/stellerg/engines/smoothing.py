"""The sum of a measured part and the structure term: cumulative, density and quantiles of ln Y = X + q.

F(t) = integral of dP(q) F_X(t - q). For n uniform on [n1, n2] and normal X it has a closed form; else
Gauss-Legendre of 32 nodes (1e-12 for normal X) in each panel on which the density of q is smooth, cut to the
window in which F_X is neither 0 nor 1: exact for X much narrower and much wider than the structure term.
"""

import itertools
from dataclasses import dataclass

import numpy as np
from scipy.special import log_ndtr, ndtr, ndtri

from stellerg.engines.inversion import invert
from stellerg.engines.parts import GaussianPart, GridPart, Part, SharpPart
from stellerg.structure.distributions import Uniform
from stellerg.structure.model import Component, Coordinate, Mixture

__all__ = ["Term", "evaluate", "quantile", "uniform_index"]

_NODE, _WEIGHT = np.polynomial.legendre.leggauss(32)

Term = tuple[Mixture, Part]


def uniform_index(t: np.ndarray, sd: np.ndarray, lower: float, upper: float) -> tuple[np.ndarray, np.ndarray]:
    """Cumulative and density of q + sd z, q = ln 3/(5 - n) with n uniform on [lower, upper], z normal.

    F(t) = 3/(n2 - n1) {e^-a Phi((t-a)/s) - e^-b Phi((t-b)/s) - e^(s^2/2 - t) [Phi((t-a)/s - s) - Phi((t-b)/s - s)]}
    with a = ln w(n1), b = ln w(n2). The products of a large exponential and a small Phi are formed as
    logarithms, so that nothing overflows.

    Parameters
    ----------
    t : ndarray, (star, m)
    sd : ndarray, (star, 1)
        Positive.
    lower, upper : float
    """
    a, b = (float(Coordinate.INDEX.to_log_coefficient(n)) for n in (lower, upper))
    at_a, at_b = (t - a) / sd, (t - b) / sd
    exponent = 0.5 * sd**2 - t
    tail = np.exp(exponent + log_ndtr(at_a - sd)) - np.exp(exponent + log_ndtr(at_b - sd))
    scale = 3.0 / (upper - lower)
    cumulative = scale * (np.exp(-a) * ndtr(at_a) - np.exp(-b) * ndtr(at_b) - tail)
    return np.clip(cumulative, 0.0, 1.0), np.maximum(scale * tail, 0.0)


def evaluate(terms: list[Term], t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Cumulative and density of ln Y.

    Parameters
    ----------
    terms : list of (Mixture, Part)
        One for each interval of mass that a star can lie in.
    t : ndarray, (star, m)

    Returns
    -------
    cumulative, density : ndarray, (star, m)
    """
    cumulative, density = np.zeros(t.shape), np.zeros(t.shape)
    for mixture, part in terms:
        for weight, component in zip(mixture.weights, mixture.components, strict=True):
            below, at = _component(component, part, t)
            cumulative = cumulative + weight * below
            density = density + weight * at
    return np.clip(cumulative, 0.0, 1.0), density


def _component(component: Component, part: Part, t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    if component.is_point:
        return part.evaluate(t - component.panels[0])
    mass = part.mass[:, None]
    family = component.family
    if isinstance(part, SharpPart):
        q = t - part.mean[:, None]
        return component.cumulative(q), np.exp(component.log_density(q))
    if isinstance(part, GaussianPart) and isinstance(family, Uniform) and component.coordinate is Coordinate.INDEX:
        return uniform_index(t - part.mean[:, None], part.sd[:, None], family.lower, family.upper)
    if isinstance(part, GridPart) and isinstance(family, Uniform) and component.coordinate is Coordinate.INDEX:
        return _uniform_index_on_grid(t, part, family)
    # below q = t - upper all of X lies below t - q; above q = t - lower none of it
    low, high = t - part.upper[:, None], t - part.lower[:, None]
    cumulative = mass * component.cumulative(low)
    density = np.zeros(t.shape)
    panels = component.panels
    for start, end in itertools.pairwise(panels):
        a, b = np.clip(low, start, end)[:, :, None], np.clip(high, start, end)[:, :, None]
        q = 0.5 * (a + b) + 0.5 * (b - a) * _NODE
        weight = 0.5 * (b - a) * _WEIGHT * np.exp(component.log_density(q))
        argument = (t[:, :, None] - q).reshape(len(t), -1)
        below, at = (v.reshape(q.shape) for v in part.evaluate(argument))
        cumulative = cumulative + (weight * below).sum(axis=-1)
        density = density + (weight * at).sum(axis=-1)
    return cumulative, density + _sharp_density(component, part, t)


def _uniform_index_on_grid(t: np.ndarray, part: GridPart, family: Uniform) -> tuple[np.ndarray, np.ndarray]:
    """The closed form of `uniform_index` for any X: Phi and its tilted companion are read off the grid."""
    a, b = (float(Coordinate.INDEX.to_log_coefficient(n)) for n in family.support)
    at_a, tilted_a = part.evaluate_tilted(t - a)
    at_b, tilted_b = part.evaluate_tilted(t - b)
    scale = 3.0 / (family.upper - family.lower)
    tail = np.exp(part.mean[:, None] - t) * (tilted_a - tilted_b)
    return scale * (np.exp(-a) * at_a - np.exp(-b) * at_b - tail), np.maximum(scale * tail, 0.0)


def _sharp_density(component: Component, part: Part, t: np.ndarray) -> np.ndarray:
    """Density where X has probability at a point (an interval of mass that does not move X)."""
    rest = getattr(part, "rest", None)
    if isinstance(rest, SharpPart) and not part.shift.direction.any():
        return part.mass[:, None] * np.exp(component.log_density(t - part.lower[:, None]))
    return np.zeros(t.shape)


def quantile(terms: list[Term], p: np.ndarray, start: np.ndarray) -> np.ndarray:
    """ln Y at cumulative probabilities: Newton's method kept inside a bracket.

    Parameters
    ----------
    terms : list of (Mixture, Part)
    p : ndarray, (m,)
    start : ndarray, (star, m)
        First guess.

    Returns
    -------
    ndarray, (star, m)
    """
    if len(terms) == 1:
        mixture, part = terms[0]
        if isinstance(part, SharpPart):
            return part.mean[:, None] + mixture.quantile(p)[None, :]
        if isinstance(part, GaussianPart) and mixture.bracket[0] == mixture.bracket[1]:
            return part.mean[:, None] + mixture.bracket[0] + part.sd[:, None] * ndtri(p)
    low = np.min([part.lower + mixture.bracket[0] for mixture, part in terms], axis=0)
    high = np.max([part.upper + mixture.bracket[1] for mixture, part in terms], axis=0)
    # a touch wider, so that the ends themselves are never the answer by rounding
    return invert(_Smoothed(terms), p, low - 1e-9, high + 1e-9, start, near=0.0)


@dataclass(frozen=True)
class _Smoothed:
    """The sum of terms, for `invert`."""

    terms: list[Term]

    def take(self, rows: np.ndarray) -> "_Smoothed":
        """Return some of the stars."""
        return _Smoothed([(mixture, part.take(rows)) for mixture, part in self.terms])

    def evaluate(self, t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Cumulative and density at t, (star, m) each."""
        return evaluate(self.terms, t)
