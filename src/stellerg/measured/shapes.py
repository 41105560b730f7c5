"""The distribution that a quoted value and error assign to a quantity (the view of JCGM 101:2008, clause 6).

Every shape is a map between a *base score* (a standard normal variate, before the restriction to positive
values) and a value in the scale in which the quantity is quoted; the restriction is one more map, between
the *normal score* z = Phi^-1(F(v)) of the restricted distribution and the base score.

All arrays are (star, k) with parameters (star, 1): value m, upper error a, lower error b.
"""

from enum import IntEnum

import numpy as np
from scipy.special import ndtr, ndtri

__all__ = [
    "SHAPE_WORDS",
    "Scale",
    "Shape",
    "base_score",
    "base_value",
    "log_base_density",
    "probability_below_zero",
    "restrict",
    "unrestrict",
]


class Scale(IntEnum):
    """The scale in which a quantity is quoted."""

    LINEAR = 0
    DEX = 1
    MAGNITUDE = 2


class Shape(IntEnum):
    """The distribution assigned to a quoted value. In dex and magnitudes `LOGNORMAL` is normal as quoted."""

    ABSENT = 0
    EXACT = 1
    NORMAL = 2
    LOGNORMAL = 3
    THREE_QUANTILE = 4
    SPLIT_NORMAL = 5


SHAPE_WORDS: dict[str, Shape] = {
    "exact": Shape.EXACT,
    "normal": Shape.NORMAL,
    "lognormal": Shape.LOGNORMAL,
    "three-quantile": Shape.THREE_QUANTILE,
    "split-normal": Shape.SPLIT_NORMAL,
}

Array = np.ndarray
_HALF_LOG_2PI = 0.5 * float(np.log(2.0 * np.pi))


def _asymmetry(upper: Array, lower: Array) -> tuple[Array, Array]:
    """Return g = ln(a/b) and c = a g/(e^g - 1) of Tukey's g distribution, with the limit at a = b."""
    g = np.log(upper / lower)
    near = np.abs(g) < 1e-9
    g_safe = np.where(near, 1.0, g)
    c = np.where(near, upper * (1.0 - 0.5 * g), upper * g_safe / np.expm1(g_safe))
    return np.where(near, 0.0, g), c


def base_value(shape: Shape, score: Array, value: Array, upper: Array, lower: Array) -> Array:
    """Value in the quoted scale at a base score, for one shape; nothing is restricted here."""
    if shape is Shape.EXACT:
        return value + 0.0 * score
    if shape is Shape.THREE_QUANTILE:
        g, c = _asymmetry(upper, lower)
        g_safe = np.where(g == 0.0, 1.0, g)
        return value + np.where(g == 0.0, c * score, c * np.expm1(g_safe * score) / g_safe)
    if shape is Shape.SPLIT_NORMAL:
        share = lower / (upper + lower)
        below = ndtr(score) < share
        low = value + lower * ndtri(np.minimum(ndtr(score) / (2.0 * share), 0.5))
        high = value - upper * ndtri(np.minimum(ndtr(-score) / (2.0 * (1.0 - share)), 0.5))
        return np.where(below, low, high)
    return value + upper * score


def base_score(shape: Shape, quoted: Array, value: Array, upper: Array, lower: Array) -> Array:
    """Base score of a value in the quoted scale: the inverse of `base_value`; infinite beyond a hard end."""
    if shape is Shape.THREE_QUANTILE:
        g, c = _asymmetry(upper, lower)
        g_safe = np.where(g == 0.0, 1.0, g)
        argument = g_safe * (quoted - value) / c
        inside = argument > -1.0
        curved = np.log1p(np.where(inside, argument, 0.0)) / g_safe
        curved = np.where(inside, curved, -np.inf * np.sign(g_safe))
        return np.where(g == 0.0, (quoted - value) / c, curved)
    if shape is Shape.SPLIT_NORMAL:
        share = lower / (upper + lower)
        below = quoted < value
        # the smaller tail is always the one evaluated, so that neither side loses digits
        low = ndtri(2.0 * share * ndtr((quoted - value) / lower))
        high = -ndtri(2.0 * (1.0 - share) * ndtr((value - quoted) / upper))
        return np.where(below, low, high)
    return (quoted - value) / upper


def log_base_density(
    shape: Shape, score: Array | None, quoted: Array, value: Array, upper: Array, lower: Array
) -> Array:
    """Logarithm of the density over the quoted value, before the restriction; -inf beyond a hard end.

    `score` is the base score that belongs to `quoted`, where it is known already.
    """
    if shape is Shape.SPLIT_NORMAL:
        side = np.where(quoted < value, lower, upper)
        return np.log(2.0 / (upper + lower)) - 0.5 * ((quoted - value) / side) ** 2 - _HALF_LOG_2PI
    if score is None:
        score = base_score(shape, quoted, value, upper, lower)
    if shape is not Shape.THREE_QUANTILE:
        return -np.log(upper) - 0.5 * score**2 - _HALF_LOG_2PI
    g, c = _asymmetry(upper, lower)
    inside = np.isfinite(score)
    finite = np.where(inside, score, 0.0)
    return np.where(inside, -np.log(c) - g * finite - 0.5 * finite**2 - _HALF_LOG_2PI, -np.inf)


def probability_below_zero(shape: Shape, value: Array, upper: Array, lower: Array) -> Array:
    """Probability that the unrestricted distribution puts at or below zero."""
    if shape in (Shape.EXACT, Shape.ABSENT, Shape.LOGNORMAL):
        return np.zeros(np.shape(value))
    return ndtr(base_score(shape, np.zeros(np.shape(value)), value, upper, lower))


def unrestrict(score: Array, below_zero: Array) -> Array:
    """Base score of a normal score of the distribution restricted to positive values.

    Parameters
    ----------
    score : ndarray, (star, k) or (1, k)
    below_zero : ndarray, (star, 1)
    """
    base = np.array(np.broadcast_to(score, np.broadcast_shapes(score.shape, below_zero.shape)))
    rows = np.flatnonzero(below_zero[:, 0] > 0.0)
    if rows.size:
        here, cut = base[rows], below_zero[rows]
        low = ndtri(cut + (1.0 - cut) * ndtr(np.minimum(here, 0.0)))
        high = -ndtri((1.0 - cut) * ndtr(-np.maximum(here, 0.0)))
        base[rows] = np.where(here <= 0.0, low, high)
    return base


def restrict(score: Array, below_zero: Array) -> Array:
    """Normal score of a base score, (star, k); the inverse of `unrestrict`."""
    normal = np.array(score)
    rows = np.flatnonzero(below_zero[:, 0] > 0.0)
    if rows.size:
        here, cut = score[rows], below_zero[rows]
        upper_tail = np.minimum(ndtr(-here) / (1.0 - cut), 1.0)
        lower_tail = np.clip((ndtr(here) - cut) / (1.0 - cut), 0.0, 1.0)
        normal[rows] = np.where(upper_tail < 0.5, -ndtri(upper_tail), ndtri(lower_tail))
    return normal
