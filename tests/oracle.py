"""Brute-force reference for the distribution of T = sum_j w_j ln v_j + q, with numpy and scipy only.

The v_j are independent measured quantities and q = ln w(n), w(n) = 3/(5 - n), n being the polytropic
index.  Nothing here is shared with the package under test.

Method.  Every random term X of the sum is written as a monotone function x(u) of a standard normal
score u.  The terms are sorted by width; the cumulative distribution of the widest is known in closed
form, and each further term is folded in by

    G_i(s) = E[ G_{i-1}(s - x_i(u)) ],      u standard normal, |u| <= 8.3,

with composite Gauss-Legendre quadrature in u.  Each intermediate G_i is stored as a piecewise Chebyshev
polynomial whose panels are bisected until it reproduces the quadrature to `_TOLERANCE`.  The panels of
the quadrature are, for each s separately, the union of fixed panels in u and of the images of the panel
edges of G_{i-1}; so both factors of the integrand are polynomials on every panel, whatever the ratio of
the widths, and the non-smooth points (hard ends of a bounded prior, modes of split normals, and their
sums) lie on panel edges.  `refine` multiplies panels and nodes, so that convergence can be checked.

Limit: when every random term is a 'three-quantile' input whose errors differ by more than a factor of
about 1000, the distribution is vertical to rounding at several places and RuntimeError is raised.

All logarithms are natural; T, q and everything called x, s, t here are dimensionless (ln of a number).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise

import numpy as np
from scipy.integrate import quad
from scipy.optimize import brentq
from scipy.special import ndtr, ndtri

_CLIP = 8.3  # scores beyond this carry a probability of 1e-16
_TOLERANCE = 1e-12  # accepted error of one panel of an intermediate distribution
_ORDER = 16  # Chebyshev nodes per stored panel
_NODES = 16  # Gauss-Legendre nodes per quadrature panel
_NOISE = 1e-8  # rounding of a nearly vertical distribution accepted below this
_MOST_PANELS = 1000  # pending at once, before giving up
_ROWS = 200  # abscissae folded at once (memory only)
_TINY = 1e-300
_SHAPES = ("normal", "lognormal", "three-quantile", "split-normal", "exact")
_ROOT_2PI = np.sqrt(2.0 * np.pi)


def _density(u):
    """Return the standard normal density at score(s) u."""
    return np.exp(-0.5 * np.square(u)) / _ROOT_2PI


def _score(lower, upper):
    """Return the standard score of probabilities `lower` = 1 - `upper`, accurate in both tails."""
    lower, upper = np.clip(lower, 0.0, 1.0), np.clip(upper, 0.0, 1.0)
    return np.where(lower < upper, ndtri(lower), -ndtri(upper))


def _mass(low, high):
    """Return the standard normal probability between scores low <= high (arrays)."""
    flip = np.asarray(low) > 0.0
    return np.where(flip, ndtr(-low) - ndtr(-high), ndtr(high) - ndtr(low))


def _above(low, mass):
    """Return z and z - low such that the normal probability between `low` and z is `mass` (array).

    The difference keeps its relative accuracy as `mass` tends to 0, when `low` is finite.
    """
    z = np.maximum(ndtri(np.minimum(ndtr(low) + mass, 1.0)), low)
    gap = z - low
    if abs(low) < 37.0:
        e = np.minimum(mass / _density(low), 1.0)
        series = e * (1.0 + e * (low / 2.0 + e * (1.0 + 2.0 * low**2) / 6.0))
        gap = np.where(e * (1.0 + abs(low)) < 1e-4, series, gap)
    return z, gap


def _restricted_score(low, u):
    """Return z and z - low for scores u of a standard normal restricted to z > low (low <= 0)."""
    kept = ndtr(-low)
    z, gap = _above(low, ndtr(u) * kept)
    beyond = ndtr(-u) * kept
    z_up = -ndtri(np.minimum(beyond, 0.5))
    right = beyond < 0.5
    return np.where(right, z_up, z), np.where(right, z_up - low, gap)


@dataclass(frozen=True)
class Input:
    """A measured quantity: its assigned shape, quoted value and upper and lower errors (same units)."""

    shape: str
    value: float
    upper: float
    lower: float

    def __post_init__(self):
        """Refuse what the definitions of the shapes do not cover."""
        if self.shape not in _SHAPES:
            raise ValueError(f"unknown shape {self.shape!r}")
        if not self.value > 0.0:
            raise ValueError("the quoted value must be positive")
        if self.shape == "exact":
            return
        if not (self.upper > 0.0 and self.lower > 0.0):
            raise ValueError("errors must be positive")
        if self.shape in ("normal", "lognormal") and self.upper != self.lower:
            raise ValueError(f"shape {self.shape!r} takes equal errors")

    @property
    def _relative(self):
        """Upper and lower errors divided by the value."""
        return self.upper / self.value, self.lower / self.value

    def _three(self):
        """Return g, c / value and the score of v = 0 (-inf if v > 0 always) of 'three-quantile'."""
        a, b = self._relative
        g = np.log(a / b)
        if g == 0.0:
            return 0.0, a, -1.0 / a
        c = a * g / np.expm1(g)
        return g, c, np.log1p(-g / c) / g if g < c else -np.inf

    def log_ratio(self, u):
        """Return ln(v / value), array like u, where v has the probability of standard score u."""
        u = np.asarray(u, dtype=float)
        a, b = self._relative
        if self.shape == "lognormal":
            return a * u
        if self.shape == "normal":
            z, gap = _restricted_score(-1.0 / a, u)
            return _log_of(a * z, a * gap)
        if self.shape == "split-normal":
            left = b * (0.5 - ndtr(-1.0 / b))
            total = left + 0.5 * a
            z, gap = _above(-1.0 / b, np.minimum(ndtr(u) * total, left) / b)
            z_up = -ndtri(np.minimum(ndtr(-u) * total / a, 0.5))
            right = ndtr(u) * total > left
            return np.where(right, np.log1p(a * z_up), _log_of(b * z, b * gap))
        g, c, low = self._three()
        z, gap = _restricted_score(low, u)
        if g == 0.0:
            return _log_of(c * z, c * gap)
        if np.isfinite(low):
            positive = (c / g) * np.exp(g * low) * np.expm1(g * gap)
        else:
            positive = (1.0 - c / g) + (c / g) * np.exp(g * z)
        return _log_of(c * np.expm1(g * z) / g, positive)

    def tails(self, y):
        """Return P(ln(v / value) <= y) and its complement, each an array like y."""
        y = np.asarray(y, dtype=float)
        a, b = self._relative
        if self.shape == "lognormal":
            return ndtr(y / a), ndtr(-y / a)
        r = np.expm1(np.minimum(y, 600.0))
        if self.shape == "split-normal":
            cut = ndtr(-1.0 / b)
            total = b * (0.5 - cut) + 0.5 * a
            low = np.minimum(r, 0.0) / b
            up = np.maximum(r, 0.0) / a
            lower = (b * (ndtr(low) - cut) + a * (ndtr(up) - 0.5)) / total
            upper = (a * ndtr(-up) + b * (0.5 - ndtr(low))) / total
            return lower, upper
        if self.shape == "normal":
            z, low = r / a, -1.0 / a
        else:
            g, c, low = self._three()
            z = r / c
            if g != 0.0:
                argument = g * r / c
                inside = argument > -1.0
                z = np.log1p(np.where(inside, argument, 0.0)) / g
                z = np.where(inside, z, -np.inf if g > 0.0 else np.inf)
        kept = ndtr(-low)
        return np.maximum(ndtr(z) - ndtr(low), 0.0) / kept, ndtr(-z) / kept

    def cumulative(self, v):
        """Return P(quantity <= v), v in the units of `value`; scalar or array."""
        v = np.asarray(v, dtype=float)
        if self.shape == "exact":
            return np.where(v >= self.value, 1.0, 0.0)[()]
        safe = np.log(np.where(v > 0.0, v, self.value) / self.value)
        return np.where(v > 0.0, np.clip(self.tails(safe)[0], 0.0, 1.0), 0.0)[()]

    def quantile(self, p):
        """Return v, in the units of `value`, with P(quantity <= v) = p, 0 < p < 1; scalar or array."""
        if self.shape == "exact":
            return np.full_like(np.asarray(p, dtype=float), self.value)[()]
        return (self.value * np.exp(self.log_ratio(ndtri(p))))[()]


def _log_of(r, one_plus_r):
    """Return ln(1 + r), given 1 + r computed without cancellation near 0."""
    near = r > -0.5
    return np.where(near, np.log1p(np.where(near, r, 0.0)), np.log(np.maximum(one_plus_r, _TINY)))


class _Measured:
    """The term w ln(v / value) of one input."""

    def __init__(self, source, weight):
        self.source, self.weight = source, weight
        self.sign = np.sign(weight)
        self.kinks = (0.0,) if source.shape == "split-normal" else ()

    def at(self, u):
        """Return the term at standard score(s) u."""
        return self.weight * self.source.log_ratio(self.sign * np.asarray(u))

    def tails(self, x):
        """Return P(term <= x) and its complement."""
        lower, upper = self.source.tails(np.asarray(x) / self.weight)
        return (lower, upper) if self.weight > 0.0 else (upper, lower)


class _Structure:
    """The term q - centre, q = ln w(n), under a prior that is not a point."""

    def __init__(self, prior):
        self.kind, first, second = prior
        if self.kind == "normal":
            self.mean, self.sd = first, second
            self.low, self.high = -first / second, (5.0 - first) / second
            self.kept = _mass(self.low, self.high)
            middle = 5.0 - min(max(first, 0.0), 4.9)
            ends = (0.0, 5.0)
        elif self.kind in ("uniform", "uniform-coefficient", "uniform-log-coefficient"):
            if not first < second:
                raise ValueError("the bounds of a uniform prior must increase")
            ends = (first, second)
            self.width = second - first
            middle = 0.5 * ((5.0 - first) + (5.0 - second)) if self.kind == "uniform" else 0.5 * (first + second)
            if self.kind == "uniform-log-coefficient":
                self.width = np.log(second / first)
                middle = np.sqrt(first * second)
        else:
            raise ValueError(f"unknown prior {self.kind!r}")
        self.middle = middle  # 5 - n (priors on n) or w (priors on the coefficient) at the centre
        if self.kind in ("uniform", "normal"):
            ends = tuple(3.0 / (5.0 - n) if n < 5.0 else np.inf for n in ends)
            middle = 3.0 / middle
        self.centre = float(np.log(middle))
        self.kinks = tuple(float(np.log(w / middle)) for w in ends if np.isfinite(w))

    def at(self, u):
        """Return q - centre at standard score(s) u."""
        u = np.asarray(u, dtype=float)
        p, s = ndtr(u), ndtr(-u)
        offset = np.where(u < 0.0, p - 0.5, 0.5 - s)
        if self.kind == "uniform":
            far = (self.middle - 0.5 * self.width) + s * self.width
            return -_log_of(-offset * self.width / self.middle, far / self.middle)
        if self.kind == "uniform-coefficient":
            return np.log1p(offset * self.width / self.middle)
        if self.kind == "uniform-log-coefficient":
            return offset * self.width
        z = _above(self.low, p * self.kept)[0]
        minus_z, gap = _above(-self.high, s * self.kept)
        below = (self.low <= 0.0) & ((self.high < 0.0) | (ndtr(self.low) + p * self.kept < 0.5))
        z, gap = np.where(below, z, -minus_z), np.where(below, self.high - z, gap)
        change = (self.mean - (5.0 - self.middle)) + self.sd * z  # n minus its value at the centre
        return -_log_of(-change / self.middle, self.sd * gap / self.middle)

    def tails(self, x):
        """Return P(q - centre <= x) and its complement."""
        x = np.clip(np.asarray(x, dtype=float), -600.0, 600.0)
        change = -self.middle * np.expm1(-x)  # of n
        if self.kind == "normal":
            z = ((5.0 - self.middle) - self.mean + change) / self.sd
            z = np.clip(z, self.low, self.high)
            lower, upper = _mass(self.low, z) / self.kept, _mass(z, self.high) / self.kept
        else:
            if self.kind == "uniform-coefficient":
                change = self.middle * np.expm1(x)
            elif self.kind == "uniform-log-coefficient":
                change = x
            lower, upper = 0.5 + change / self.width, 0.5 - change / self.width
        return np.clip(lower, 0.0, 1.0), np.clip(upper, 0.0, 1.0)


def _base_edges(part, refine):
    """Return fixed panel edges in score, shape (panels + 1,), with the kinks of the term on edges."""
    edges = np.linspace(-_CLIP, _CLIP, 20 * refine + 1)
    inner = [float(_score(*part.tails(x))) for x in part.kinks]
    return np.unique(np.concatenate([edges, [u for u in inner if abs(u) < _CLIP]]))


def _peak_density(parts):
    """Return an upper bound of the density of the sum of terms: the least of their greatest densities."""
    u = np.linspace(-_CLIP, _CLIP, 500)
    masses = 2.0 * np.diff(u) * np.maximum(_density(u[1:]), _density(u[:-1]))  # the 2 is for safety
    rises = [np.maximum(np.diff(part.at(u)), 1e-200) for part in parts]
    return min(float(np.max(masses / rise)) for rise in rises)


class _Curve:
    """A cumulative distribution stored as Chebyshev polynomials on panels; 0 below, 1 above.

    `peak` is the greatest density of what is still to be added.  An error e of this distribution on a
    panel of width h changes the final one by at most e min(1, h peak), which is held to `tolerance`.
    A panel is also kept when its error is below `_NOISE` and was not reduced by the last bisection.
    """

    def __init__(self, function, seeds, tolerance, peak):
        k = np.arange(_ORDER)
        theta = np.pi * (k + 0.5) / _ORDER
        nodes = np.cos(theta)
        to_coefficients = (2.0 / _ORDER) * np.cos(np.outer(k, theta))
        to_coefficients[0] *= 0.5
        checks = np.array([-0.999, -0.83, -0.41, 0.06, 0.57, 0.92, 0.9995])
        at_checks = np.cos(np.outer(np.arccos(checks), k))
        points = np.concatenate([nodes, checks])

        seeds = np.unique(seeds)
        left, right = seeds[:-1], seeds[1:]
        parent = np.full(left.size, np.inf)
        done_left, done_coefficients = [], []
        while left.size:
            half = 0.5 * (right - left)
            s = 0.5 * (left + right)[:, None] + half[:, None] * points
            values = function(s.ravel()).reshape(s.shape)
            coefficients = values[:, :_ORDER] @ to_coefficients.T
            error = np.abs(coefficients @ at_checks.T - values[:, _ORDER:]).max(axis=1)
            good = error * np.minimum(1.0, 2.0 * half * peak) < tolerance
            good |= (error < _NOISE) & (error > 0.6 * parent)
            done_left.append(left[good])
            done_coefficients.append(coefficients[good])
            left, right, parent = left[~good], right[~good], np.tile(error[~good], 2)
            if left.size > _MOST_PANELS:
                raise RuntimeError("an intermediate distribution could not be resolved")
            middle = 0.5 * (left + right)
            left, right = np.concatenate([left, middle]), np.concatenate([middle, right])
        starts = np.concatenate(done_left)
        order = np.argsort(starts)
        self.edges = np.append(starts[order], seeds[-1])
        self.coefficients = np.concatenate(done_coefficients)[order]

    def on_panels(self, panel, y):
        """Return values at y, shape (rows, nodes), row i lying on stored panel number panel[i]."""
        a, b = self.edges[panel][:, None], self.edges[panel + 1][:, None]
        x = np.clip((2.0 * y - (a + b)) / (b - a), -1.0, 1.0)
        c = self.coefficients[panel]
        one, two = np.zeros_like(x), np.zeros_like(x)
        for k in range(_ORDER - 1, 0, -1):
            one, two = 2.0 * x * one - two + c[:, k, None], one
        return x * one - two + c[:, 0, None]


def _fold(curve, part, base, nodes, s):
    """Return E[curve(s - x(u))], array like s of shape (S,), for the term `part`, x = part.at(u)."""
    images = np.clip(_score(*part.tails(s[:, None] - curve.edges[None, ::-1])), -_CLIP, _CLIP)
    first, last = images[:, :1], images[:, -1:]  # between these scores s - x lies on the panels
    edges = np.concatenate([images, np.clip(np.broadcast_to(base, (s.size, base.size)), first, last)], axis=1)
    edges.sort(axis=1)
    row, column = np.nonzero(np.diff(edges, axis=1) > 0.0)
    left, right = edges[row, column], edges[row, column + 1]
    centre, half = 0.5 * (left + right), 0.5 * (right - left)
    panel = np.searchsorted(curve.edges, s[row] - part.at(centre), side="right") - 1
    panel = np.clip(panel, 0, curve.edges.size - 2)
    abscissae, weights = np.polynomial.legendre.leggauss(nodes)
    u = centre[:, None] + half[:, None] * abscissae
    values = curve.on_panels(panel, s[row][:, None] - part.at(u)) * _density(u)
    sums = np.bincount(row, weights=half * (values @ weights), minlength=s.size)
    return sums + np.where(first[:, 0] > -_CLIP, ndtr(first[:, 0]), 0.0)


def _terms(inputs, weights, prior):
    """Return the constant part of T and the list of its random terms."""
    if len(inputs) != len(weights):
        raise ValueError("one weight per input is needed")
    shift, parts = 0.0, []
    for source, weight in zip(inputs, weights, strict=True):
        shift += weight * np.log(source.value)
        if source.shape != "exact" and weight != 0.0:
            parts.append(_Measured(source, float(weight)))
    if prior[0] == "point":
        shift += np.log(3.0 / (5.0 - prior[1]))
    elif prior[0] != "normal" and prior[1] == prior[2]:
        w = 3.0 / (5.0 - prior[1]) if prior[0] == "uniform" else prior[1]
        shift += np.log(w)
    else:
        structure = _Structure(prior)
        shift += structure.centre
        parts.append(structure)
    parts.sort(key=lambda part: -float(part.at(1.0) - part.at(-1.0)))
    return float(shift), parts


@lru_cache(maxsize=64)
def _prepare(inputs, weights, prior, refine):
    """Return the constant, the terms and the distribution of all the terms but the narrowest."""
    shift, parts = _terms(inputs, weights, prior)
    if len(parts) < 2:
        return shift, parts, None
    scores = np.concatenate([[-_CLIP], np.arange(-6.0, 6.5, 1.0), [_CLIP]])
    tolerance = _TOLERANCE / refine
    widest = parts[0]
    kinks, marks = np.array(widest.kinks), widest.at(scores)

    def seeds():
        return np.concatenate([marks, kinks[(kinks > marks[0]) & (kinks < marks[-1])]])

    curve = _Curve(lambda s: widest.tails(s)[0], seeds(), 0.1 * tolerance, _peak_density(parts[1:]))
    for number, part in enumerate(parts[1:-1], start=2):
        base = _base_edges(part, refine)
        kinks = np.add.outer(kinks, np.array(part.kinks)).ravel()
        marks = marks + part.at(scores)

        def function(s, curve=curve, part=part, base=base):
            blocks = np.array_split(s, 1 + s.size // _ROWS)
            return np.concatenate([_fold(curve, part, base, refine * _NODES, block) for block in blocks])

        curve = _Curve(function, seeds(), tolerance, _peak_density(parts[number:]))
    return shift, parts, curve


def cumulative(t, inputs, weights, prior, refine=1):
    """Return F(t) = P(T <= t) for scalar t; `refine` (integer) multiplies panels and nodes."""
    shift, parts, curve = _prepare(tuple(inputs), tuple(weights), tuple(prior), refine)
    s = float(t) - shift
    if not parts:
        return float(s >= 0.0)
    if curve is None:
        return float(parts[0].tails(s)[0])
    base = _base_edges(parts[-1], refine)
    return float(_fold(curve, parts[-1], base, refine * _NODES, np.array([s]))[0])


def quantile(p, inputs, weights, prior, refine=1):
    """Return the scalar t with F(t) = p, 0 < p < 1."""
    shift, parts = _terms(inputs, weights, prior)
    if not parts:
        return shift
    ends = [shift + sum(float(part.at(u)) for part in parts) for u in (-_CLIP, _CLIP)]
    if len(parts) == 1:
        return shift + float(parts[0].at(ndtri(p)))
    return brentq(lambda t: cumulative(t, inputs, weights, prior, refine) - p, *ends, xtol=1e-14, rtol=1e-14)


def moments(inputs, weights, prior, refine=1):
    """Return the mean and the standard deviation of T (those of the terms within |u| <= 8.3)."""
    mean, parts = _terms(inputs, weights, prior)
    variance = 0.0
    abscissae, weight = np.polynomial.legendre.leggauss(refine * _NODES)
    for part in parts:
        edges = _base_edges(part, 4 * refine)
        half = 0.5 * np.diff(edges)[:, None]
        u = 0.5 * (edges[1:] + edges[:-1])[:, None] + half * abscissae
        measure = half * weight * _density(u)
        x = part.at(u)
        centre = np.sum(measure * x) / np.sum(measure)
        mean += float(centre)
        variance += float(np.sum(measure * (x - centre) ** 2))
    return mean, float(np.sqrt(variance))


def _index_density(prior):
    """Return variable -> q, variable -> density, q -> variable and the ends of the prior's variable."""
    kind, first, second = prior
    if kind == "uniform-log-coefficient":
        ends = (np.log(first), np.log(second))
        return (lambda q: q), (lambda q: 1.0 / (ends[1] - ends[0])), (lambda q: q), ends
    if kind == "uniform-coefficient":
        return np.log, (lambda w: 1.0 / (second - first)), np.exp, (first, second)

    def q_of(n):
        return np.log(3.0 / max(5.0 - n, _TINY))

    def n_of(q):
        return 5.0 - 3.0 * np.exp(-q)

    if kind == "uniform":
        return q_of, (lambda n: 1.0 / (second - first)), n_of, (first, second)
    low, high = -first / second, (5.0 - first) / second
    kept = _mass(low, high)
    ends = (max(0.0, first - 9.0 * second), min(5.0, first + 9.0 * second))
    return q_of, (lambda n: _density((n - first) / second) / (second * kept)), n_of, ends


def lognormal_cumulative(t, location, sigma, prior):
    """Return P(X + q <= t), X normal of mean `location` and standard deviation `sigma`; scalar t.

    One adaptive quadrature over the variable on which the prior is stated (n, w or ln w), broken where
    the normal factor and, for a normal prior, the prior change.
    """
    s = float(t) - float(location)
    if prior[0] == "point":
        return float(ndtr((s - np.log(3.0 / (5.0 - prior[1]))) / sigma))
    q_of, density, variable_of, (start, stop) = _index_density(prior)
    steps = np.array([-9.0, -6.0, -4.0, -2.0, -1.0, 0.0, 1.0, 2.0, 4.0, 6.0, 9.0])
    breaks = [start, stop, *(variable_of(s - step * sigma) for step in steps)]
    if prior[0] == "normal":
        breaks.extend(prior[1] + prior[2] * steps)
    breaks = np.unique(np.clip(breaks, start, stop))

    def integrand(y):
        return float(density(y) * ndtr((s - q_of(y)) / sigma))

    total = 0.0
    for a, b in pairwise(breaks):
        total += quad(integrand, a, b, epsabs=1e-13, epsrel=1e-12, limit=200)[0]
    return total
