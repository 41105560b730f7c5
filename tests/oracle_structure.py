"""Slow and accurate reference for ln Y when structure depends on the star or is constrained by observations.

    ln Y = e_M ln M + e_R ln R + e_L ln L + ln alpha [+ ln f],     M, R, L in nominal solar units, no other constant;

alpha follows the calibration of published/structure_*.csv or a prior of the polytropic index, f is that of gas and
radiation, with or without ionisation.  Nothing is shared with the package under test; the shapes of inputs and the
folding of independent terms are those of oracle.py.

Method.  Given M and R the cumulative distribution of ln alpha, weighted by the likelihood of the structure observables
(averaged over eps), is a closed form or a table; |E| grows with alpha, so P(ln Y <= t | M, R) is its value at the root
of ln Y = t.  Its expectation over the scores of those of M, R and mu on which structure depends is an adaptive tensor
Gauss-Legendre quadrature; what only multiplies Y is folded in after.  `refine` multiplies all resolutions.

Choices where the definitions leave one: medians are those of the assigned distributions (not the mode of a split
normal); natural splines go on straight outside their nodes; tau holds for inflated stars too; `start` is interpolated
between its values at 1.4 and 1.5 Msun; an unbound star counts as Y <= 0; f of n > 4.95 is that of 4.95; positive
structure observables have their distribution restricted to positive values.

Limits: doubling the resolution changes a cumulative by less than 1e-6, mostly 1e-8; nearest to it are observables
many standard deviations from the prior.  0.05 to 3 s a star; longer with 30 % errors and a luminosity (20 s), with an
error of mu besides errors of mass and radius, or with a mean of two and other precise observables (10 s).
"""

from __future__ import annotations

import csv
from functools import lru_cache
from pathlib import Path

import numpy as np
from scipy import constants
from scipy.integrate import solve_ivp
from scipy.interpolate import CubicSpline, RectBivariateSpline, make_interp_spline
from scipy.optimize import brentq
from scipy.special import ndtr, ndtri, owens_t

from oracle import Input, _base_edges, _Curve, _fold, _Measured

GM_SUN, R_SUN = 1.3271244e20, 6.957e8  # m3 s-2 and m, nominal: IAU 2015 Resolution B3
MU = (0.61, None)  # mean molecular weight and its error: definition of the calibration
LARGEST_INDEX = 4.95  # indices are clipped here: definition of the structure observables
_LOG2, _LOG3, _LOG10 = np.log([2.0, 3.0, 10.0])
_LOG_ALPHA = (_LOG3 - np.log(5.0), _LOG3 - np.log(5.0 - LARGEST_INDEX))  # of the polytropes 0 and 4.95
_TOLERANCE = 3e-9  # of one box; the estimate is that of a lower rule (judgement; tests double the resolution)
_PANELS = np.array([-6.6, -2.5, 0.0, 2.5, 6.6])  # scores; 4e-11 lies beyond
_NODES, _RULE = np.polynomial.legendre.leggauss(15)
_NULL = _RULE * np.polynomial.legendre.legval(_NODES, [0.0] * 14 + [1.0])  # sees the 14th Legendre coefficient only


def published(name):
    """Return the rows of a published table without its comments."""
    with (Path(__file__).parent / "published" / name).open(encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


def _gauss(edges, nodes):
    """Return abscissae and weights of composite Gauss-Legendre quadrature."""
    g, w = np.polynomial.legendre.leggauss(nodes)
    half = 0.5 * np.diff(edges)[:, None]
    return (edges[:-1, None] + half * (1.0 + g)).ravel(), (half * w).ravel()


@lru_cache(maxsize=256)
def polytrope(n):
    """Return k2, I/(M R^2), omega_n, and theta with weights by pressure (sum 1) at nodes through the sphere.

    Lane-Emden and Radau's equation, in xi until theta = 0.1, then in theta down to 0, where the surface is exact.
    """

    def rates(xi, y):
        theta, slope, eta, _ = y
        density = max(theta, 0.0) ** n
        ratio = -density * xi / (3.0 * slope)  # density over the mean density inside
        radau = (6.0 - 6.0 * ratio * (eta + 1.0) - eta * (eta - 1.0)) / xi
        return np.array([slope, -density - 2.0 * slope / xi, radau, density * xi**4])

    def inward(theta, y):
        return np.array([1.0, *rates(y[0], (theta, *y[1:]))[1:]]) / y[1]

    def edge(xi, y):
        return y[0] - 0.1

    edge.terminal = True
    x, options = 1e-3, {"method": "DOP853", "rtol": 1e-11, "atol": 1e-13, "dense_output": True}
    start = [1 - x**2 / 6 + n * x**4 / 120, -x / 3 + n * x**3 / 30, 2 * n * x**2 / 35, x**5 / 5]  # series
    core = solve_ivp(rates, (x, 1e3), start, events=edge, **options)
    shell = solve_ivp(inward, (core.y_events[0][0][0], 0.0), [core.t[-1], *core.y_events[0][0][1:]], **options)
    radius, slope, eta, inertia = shell.y[:, -1]
    xi, d_xi = _gauss(np.linspace(x, core.t[-1], 17), 12)
    theta = core.sol(xi)[0]
    outer, d_theta = _gauss(np.append(0.0, shell.t[0] * 2.0 ** np.arange(-17.0, 1.0)), 12)
    xi_outer, slope_outer = shell.sol(outer)[:2]
    weights = np.append(theta ** (n + 1) * xi**2 * d_xi, outer ** (n + 1) * xi_outer**2 / -slope_outer * d_theta)
    omega = -(radius**2) * slope
    moment = inertia * 2.0 / (3.0 * radius**2 * omega)
    return (3.0 - eta) / (4.0 + 2.0 * eta), moment, omega, np.append(theta, outer), weights / weights.sum()


def radiation_constant(n):
    """Return k_n, mu in units of the atomic mass constant; CODATA through scipy, G^3 Msun^2 = G (GM_sun)^2."""
    lead = 4.0 * np.pi * constants.G * GM_SUN**2 * (4.0 * constants.sigma / constants.c) / 3.0
    return lead * (constants.m_u / constants.k) ** 4 / ((n + 1.0) ** 3 * polytrope(n)[2] ** 2)


def gas_pressure_fraction(n, mass):
    """Return beta weighted by pressure for the polytrope n and mass = mu^2 M/Msun (array)."""
    _, _, _, theta, weights = polytrope(n)
    q = radiation_constant(n) * np.square(mass)[..., None] * theta ** (3.0 - n)
    beta = np.minimum(1.0, q**-0.25)
    for _ in range(12):  # Newton's method for q beta^4 + beta = 1, from above, where it is monotone
        beta = beta - (q * beta**4 + beta - 1.0) / (4.0 * q * beta**3 + 1.0)
    return (beta * weights).sum(axis=-1)


@lru_cache(maxsize=1)
def _tables():
    """Return splines of ln k2 and ln(I/MR^2) in ln alpha, ln beta in (ln alpha, ln mu^2 M), and the root of ln Y."""
    small = np.append(0.0, 0.004 * 1.4 ** np.arange(14.0))  # to n = 0.32: terms n^2 ln n are not smooth at n = 0
    a = np.log(3.0 / (5.0 - small))
    a = np.append(a, np.linspace(a[-1], _LOG_ALPHA[1], 64)[1:])
    index, log_mass = np.maximum(5.0 - 3.0 * np.exp(-a), 0.0), np.linspace(-9.0, 9.0, 91)
    k2, inertia = np.log([polytrope(n)[:2] for n in index]).T
    log_beta = np.log([gas_pressure_fraction(n, np.exp(log_mass)) for n in index])
    beta = RectBivariateSpline(a, log_mass, log_beta, kx=5, ky=5)  # constant beyond its ends
    y = np.linspace(-6.0, 4.5, 526)
    root = y[:, None] + _LOG2 - 0.0 * log_mass
    for _ in range(30):  # ln beta changes with ln alpha at a rate below 0.1
        root = y[:, None] + _LOG2 - beta.ev(root, log_mass)
    inverse = RectBivariateSpline(y, log_mass, root, kx=5, ky=5)
    return make_interp_spline(a, k2, k=5), make_interp_spline(a, inertia, k=5), beta, inverse


def log_energy_factor(log_alpha, log_mass):
    """Return ln f, f = beta/2, at ln alpha and ln(mu^2 M/Msun)."""
    return _tables()[2].ev(log_alpha, log_mass) - _LOG2


def log_coefficient(y, log_mass):
    """Return ln alpha where ln(alpha f) = y; the table is polished where it is coarse (small n, much radiation)."""
    y, log_mass = np.broadcast_arrays(y, log_mass)
    root = np.where(np.abs(y + 0.75) < 5.25, _tables()[3].ev(y, log_mass), y + _LOG2)
    coarse = (root < -0.25) | (root > 3.9) | (log_mass > 2.5)
    for _ in range(3):
        a, k = root[coarse], log_mass[coarse]
        root[coarse] = a - (a + log_energy_factor(a, k) - y[coarse]) / (1.0 + _tables()[2].ev(a, k, dx=1))
    return root


def polytropic_observable(n, which):
    """Return ln k2 (0) or ln(I/MR^2) (1) of the polytrope n, clipped to [0, 4.95]."""
    return _tables()[which](_LOG3 - np.log(5.0 - np.clip(n, 0.0, LARGEST_INDEX)))


@lru_cache(maxsize=1)
def _nodes():
    """Return the nodes in ln M, the splines of ln R_zams, ln alpha_zams and gamma, and scatter at the nodes."""
    names = ("mass", "radius_zams", "alpha_zams", "gamma", "scatter")
    mass, radius, alpha, gamma, scatter = np.array(
        [[float(row[name]) for row in published("structure_nodes.csv")] for name in names]
    )
    splines = [CubicSpline(np.log(mass), y, bc_type="natural") for y in (np.log(radius), np.log(alpha), gamma)]
    return np.log(mass), splines, scatter


def calibration(log_mass):
    """Return ln R_zams, ln alpha_zams and gamma; natural splines are straight outside their nodes."""
    first, last = _nodes()[0][[0, -1]]
    low, high = np.minimum(log_mass - first, 0.0), np.maximum(log_mass - last, 0.0)
    return [s(log_mass - low - high) + s(first, 1) * low + s(last, 1) * high for s in _nodes()[1]]


def boundary(name, mass):
    """Return x_widen, x_end, hayashi_above or radius_limit at a mass: linear in ln M, constant outside."""
    rows = [(np.log(float(row["mass"])), float(row[name])) for row in published("structure_branches.csv") if row[name]]
    return float(np.interp(np.log(mass), *np.transpose(rows)))


class _Component:
    """Its probability, and ln alpha = location + N(0, sd) + |N(0, tau)|; `fixed`: the location if convective."""

    def __init__(self, weight, sd, tau=0.0, slope=1.0, shift=0.0, fixed=None):
        self.weight, self.sd, self.tau, self.slope, self.shift, self.fixed = weight, sd, tau, slope, shift, fixed
        self.width = float(np.hypot(sd, tau))

    def location(self, log_mass, log_radius):
        if self.fixed is not None:
            return self.centre(log_mass + log_radius)
        zams, alpha, gamma = calibration(log_mass)
        return alpha + gamma * (self.slope * (log_radius - zams) + self.shift)

    def centre(self, location):
        """Return the location of this component where that of the relation is `location`."""
        return location if self.fixed is None else np.full_like(location, self.fixed)

    def density(self, difference):  # skew-normal: Azzalini 1985, Scand. J. Stat. 12, 171
        z = difference / self.width
        return np.exp(-0.5 * z * z) * 2.0 * ndtr(z * self.tau / self.sd) / (self.width * np.sqrt(2.0 * np.pi))

    def cumulative(self, difference):
        z = difference / self.width
        return ndtr(z) - 2.0 * owens_t(z, self.tau / self.sd) if self.tau > 0.0 else ndtr(z)


def _ramp(x, start, stop):
    return float(np.clip(np.log(x / start) / np.log(stop / start), 0.0, 1.0))


def components(mass, radius, state=None):
    """Return the components of a star of median mass and radius; ValueError where it is refused."""
    contracting, (zams, alpha, _) = state == "pre-main-sequence", calibration(np.log(mass))
    if state not in (None, "unknown", "main-sequence", "pre-main-sequence") or not 0.1 <= mass <= 40.0:
        raise ValueError("state or mass not covered by the calibration")
    x, end, limit, widen = radius / np.exp(zams), *(boundary(b, mass) for b in ("x_end", "radius_limit", "x_widen"))
    if x < 0.8 or (x > end and (mass > 5.0 if contracting else mass >= 0.7)):
        raise ValueError("radius outside the domain of the calibration")
    scatter = float(np.interp(np.log(mass), _nodes()[0], _nodes()[2]))
    weight, relation = 0.0, {"sd": scatter}
    if contracting and mass <= 5.0:
        late = 0.8 * boundary("hayashi_above", max(mass, 1.5))
        weight = _ramp(x, 1.0 + (late - 1.0) * _ramp(mass, 1.4, 1.5), boundary("hayashi_above", mass))
    elif not contracting:
        if mass >= 0.7 and x > widen:
            relation["tau"] = 0.12 * _ramp(x, widen, end) ** 2 * (3.0 - 2.0 * _ramp(x, widen, end))
        if mass < 1.0 and x > limit:
            r = _ramp(x, limit, 1.05 * limit)
            relation["sd"] += (0.10 - scatter) * r
            relation |= {"slope": 1.0 - r, "shift": np.log(limit) - (1.0 - r) * np.log(x)}
        if mass < 0.7 and x > end:
            weight = _ramp(x, end, 1.05 * end)
    convective = _Component(weight, 0.02 / 0.86, fixed=min(float(alpha), np.log(0.86)))
    return [part for part in (_Component(1.0 - weight, **relation), convective) if part.weight > 0.0]


def _score(x, value, upper, lower, shape, positive):
    """Return the normal score of x under a quoted distribution, restricted to positive values or not."""
    if shape == "exact":
        raise ValueError("an exact structure observable is not covered")
    if not positive and shape in ("normal", "lognormal"):  # of a logarithm the two are one
        return (x - value) / upper
    if not positive:  # far from 0 the restriction removes nothing
        far = 1000.0 * (upper + lower)
        x, value = np.maximum(x - value + far, 1e-9 * far), far
    low, high = np.clip(Input(shape, value, upper, lower).tails(np.log(x / value)), 0.0, 1.0)
    return np.where(low < high, ndtri(low), -ndtri(high))


def discrepancy_scale(mass):
    """Return the scale of the latent delta at a median mass (None: not known)."""
    return 1.0 if mass is None else _ramp(mass, 0.35, 0.5)


def predictor(sd, direct=0.0):
    """Return the function of ln alpha, eps, and 0 or 1: ln k2 or ln(I/MR^2); `direct`: share of direct relations."""

    def predict(a, eps, which):
        n = 5.0 - 3.0 * np.exp(-a) - (1.0, 0.55)[which] * sd * eps
        offset, slope, scatter = ((1.0272, 0.3237, 0.028), (1.2909, 0.6436, 0.016))[which]
        directly = (scatter * eps - offset - a) / slope  # published/structure_from_observables.csv
        return (1.0 - direct) * polytropic_observable(n, which) + direct * directly

    return predict


def likelihood(a, eps, predict, observed, other=None):
    """Return exp(-sum z^2 / 2) at ln alpha and eps (broadcast); `other` is ln k2 of the companion."""
    total = 0.0
    for name, *quoted in observed:
        if name == "mean_log_k2":
            *quoted, share = quoted
            k2_mean = share * np.exp(predict(a, eps, 0)) + (1.0 - share) * np.exp(other)
            z = _score(np.log10(k2_mean), *quoted, positive=False)
        elif name == "log_k2":
            z = _score(predict(a, eps, 0) / _LOG10, *quoted, positive=False)
        elif name == "moment_of_inertia_factor":
            z = _score(np.exp(predict(a, eps, 1)), *quoted, positive=True)
        elif name == "structure_coefficient":
            z = _score(np.exp(a), *quoted, positive=True)
        else:
            raise ValueError(f"structure observable {name!r} is not covered")
        total = total + z * z
    return np.exp(-0.5 * total) * np.ones(np.broadcast(a, eps).shape)


class _Averaged:
    """The likelihood averaged over eps, and over the companion if a mean of two is observed."""

    def __init__(self, observed, smear, refine):
        units = {"log_k2": _LOG10 / 3.8, "mean_log_k2": _LOG10 / 3.8, "moment_of_inertia_factor": 0.5}  # in ln alpha
        widths = [units.get(o[0], 1.0) * min(o[2:4]) / (1.0 if "log" in o[0] else o[1]) for o in observed]
        self.observed, self.mean = observed, any(o[0] == "mean_log_k2" for o in observed)
        by_name = [(o[0], width) for o, width in zip(observed, widths, strict=True)]
        self.companion = min([width for name, width in by_name if name == "mean_log_k2"], default=1.0)
        self.width = min(widths) if len(observed) > 1 or observed[0][0] not in units else np.hypot(widths[0], smear)
        sharp = min([width for name, width in by_name if name in units], default=np.inf)  # with eps given
        step = min(0.25, 0.7 * sharp / smear) / refine if smear and np.isfinite(sharp) else 0.0
        self.eps = np.arange(-8.0, 8.0, step) if step else np.zeros(1)
        self.shares = step * np.exp(-0.5 * self.eps**2) / np.sqrt(2.0 * np.pi) if step else np.ones(1)

    def __call__(self, a, predict, companions=()):
        """Return shape (a, nodes); `companions`: pairs of nodes in ln alpha and a predictor."""
        total = 0.0
        for e, share in zip(self.eps, self.shares, strict=True):
            other = np.concatenate([predicts(b, e, 0) for b, predicts in companions]) if self.mean else None
            total = total + share * likelihood(a[:, None], e, predict, self.observed, other)
        return total

    @staticmethod
    def grid(low, high, step, level):
        """Return a uniform grid over the part of low to high where the likelihood `level` is not negligible."""
        coarse = np.linspace(low, high, 8 + int((high - low) / (4.0 * step)))
        values = level(coarse).max(axis=1)
        seen = np.flatnonzero(values > 1e-15 * values.max())
        if not values.max() > 0.0:
            raise ValueError("the structure observables exclude the prior")
        low, high = coarse[max(seen[0] - 1, 0)], coarse[min(seen[-1] + 1, coarse.size - 1)]
        return np.linspace(low, high, 16 + int((high - low) / step))


class _Calibrated:
    """Distribution of ln alpha under the calibration, as tables in (ln alpha, location of the relation)."""

    coupled = True

    def __init__(self, parts, mass, observed, span, refine):
        self.parts, self.tables = parts, [None] * len(parts)
        if not observed:
            return
        direct, scale = _ramp(mass, 1.2, 1.9), 0.25 * discrepancy_scale(mass)
        smear = (1.0 - direct) * 0.56 * scale + direct * 0.028  # of ln alpha by eps; 0.56: d ln alpha / d n, about
        relation = any(p.fixed is None for p in parts)
        average = _Averaged(observed, smear if relation else 0.0, refine)
        predictors = [predictor(scale, direct) if p.fixed is None else predictor(0.0) for p in parts]
        low, high = np.clip(span, -1.0, 2.5)
        least = min(p.sd for p in parts)
        m = np.linspace(low - least, high + least, 10 + int((high - low) / (0.15 * least) * refine))
        ends = [(p.centre(m).min() - 8.5 * p.width, p.centre(m).max() + 8.5 * p.width) for p in parts]
        companions = []
        if average.mean:
            gaps = [min(0.3 * p.sd, 0.7 * average.companion) / refine for p in parts]
            nodes = [np.arange(*end, gap) for end, gap in zip(ends, gaps, strict=True)]
            companions = list(zip(nodes, predictors, strict=True))
            chances = np.concatenate(
                [p.weight * g * p.density(b[:, None] - p.centre(m)) for p, b, g in zip(parts, nodes, gaps, strict=True)]
            )
        for i, part in enumerate(parts):

            def level(a, predict=predictors[i]):
                return average(a, predict, companions)

            a = average.grid(*ends[i], 0.1 / np.hypot(1.0 / part.sd, 1.0 / average.width) / refine, level)
            weighted = level(a) @ chances if average.mean else level(a)
            density = weighted * part.density(a[:, None] - part.centre(m))
            primitive = make_interp_spline(a, density, k=5).antiderivative()(a)
            self.tables[i] = RectBivariateSpline(a, m, primitive, kx=5, ky=5)

    def cumulative(self, a, log_mass, log_radius):
        """Return P(ln alpha <= a and the observables), up to a constant factor."""
        total, m = 0.0, self.parts[0].location(log_mass, log_radius)
        for part, table in zip(self.parts, self.tables, strict=True):
            total = total + part.weight * (table.ev(a, m) if table else part.cumulative(a - part.centre(m)))
        return total


class _Index:
    """Distribution of ln alpha under a prior of the index, ("uniform", a, b) or ("normal", mean, sd)."""

    coupled = False

    def __init__(self, prior, observed, sd, refine):
        (kind, first, second), self.table = prior, None
        if kind == "uniform" and 0.0 <= first < second < 5.0:
            self.low, self.high, peak = first, second, 0.0
            self.prior = lambda n: (n - first) / (second - first)
        elif kind == "normal" and second > 0.0:
            self.low, self.high = max(0.0, first - 8.5 * second), min(5.0 - 1e-9, first + 8.5 * second)
            low, high, peak = ndtr(-first / second), ndtr((5.0 - first) / second), 1.0 / second
            self.prior = lambda n: (ndtr((n - first) / second) - low) / (high - low)
        else:
            raise ValueError(f"prior {prior!r} is not covered")
        if not observed:
            return
        average, predict = _Averaged(observed, 0.56 * sd, refine), predictor(sd)
        count = refine * (2 + int((self.high - self.low) * (peak + 0.5 / average.companion)))
        other, weights = _gauss(np.linspace(self.low, self.high, count), 8)
        companions = [(_LOG3 - np.log(5.0 - other), predict)]

        def density(n):
            return np.exp(-0.5 * ((n - first) * peak) ** 2)

        def level(n):
            values = average(_LOG3 - np.log(5.0 - n), predict, companions)
            return values @ (weights * density(other))[:, None] if average.mean else values

        n = average.grid(self.low, self.high, 0.1 / np.hypot(1.0 / average.width, peak) / refine, level)
        self.low, self.high = n[0], n[-1]
        self.table = make_interp_spline(n, density(n) * level(n)[:, 0], k=5).antiderivative()

    def cumulative(self, a, log_mass, log_radius):
        """Return P(ln alpha <= a and the observables), up to a constant factor."""
        n = np.clip(5.0 - 3.0 * np.exp(-a), self.low, self.high)
        return self.table(n) - self.table(self.low) if self.table else self.prior(n)


def _estimates(function, t, low, high):
    """Return estimates of the integrals over boxes (box, score) and their errors, shape (1 + score, box)."""
    dims, half, scores = low.shape[1], 0.5 * (high - low), []
    for i in range(dims):
        u = (low[:, i] + half[:, i])[:, None] + half[:, i, None] * _NODES
        scores.append(u.reshape([-1] + [15 if j == i else 1 for j in range(dims)]))
    values = function(t.reshape([-1] + [1] * dims), *scores)
    for u in scores:
        values = values * np.exp(-0.5 * u * u) / np.sqrt(2.0 * np.pi)
    results = []
    for null in [None, *range(dims)]:
        contracted = values
        for i in reversed(range(dims)):
            contracted = contracted @ (_NULL if i == null else _RULE)
        results.append(contracted * half.prod(axis=1))
    return np.array(results)


def _expectation(function, edges, t, tolerance):
    """Return E[function(t, *scores)] over independent normal scores, shape (t,); `edges`: the first panels."""
    t = np.asarray(t, dtype=float)
    if not edges:
        return np.broadcast_to(function(t), t.shape)
    low, high = (
        np.tile(np.stack([x.ravel() for x in np.meshgrid(*sides, indexing="ij")], axis=1), (t.size, 1))
        for sides in ([e[:-1] for e in edges], [e[1:] for e in edges])
    )
    which, total = np.repeat(np.arange(t.size), len(low) // t.size), np.zeros(t.size)
    while which.size:
        blocks = np.array_split(np.arange(which.size), 1 + which.size * 15 ** len(edges) // 300_000)
        results = np.concatenate([_estimates(function, t[which[b]], low[b], high[b]) for b in blocks], axis=1)
        errors = np.abs(results[1:])
        bad = (errors.max(axis=0) > tolerance) & ((high - low).max(axis=1) > 1e-6)
        np.add.at(total, which[~bad], results[0][~bad])
        axis = errors.argmax(axis=0)[bad, None] == np.arange(len(edges))
        middle = 0.5 * (low[bad] + high[bad])
        low, high = (
            np.concatenate([low[bad], np.where(axis, middle, low[bad])]),
            np.concatenate([np.where(axis, middle, high[bad]), high[bad]]),
        )
        which = np.tile(which[bad], 2)
    return total


class _Distribution:
    """The distribution of ln Y: an expectation over what structure depends on, then folds of the rest."""

    def __init__(self, structure, sources, exponents, kind, pressure, ionisation, mu, refine):
        if kind not in ("binding", "potential", "coefficient") or pressure not in ("gas", "gas+radiation"):
            raise ValueError(f"kind {kind!r} or pressure {pressure!r} is not covered")
        self.structure, self.binding, self.refine = structure, kind == "binding", refine
        self.radiation = self.binding and pressure == "gas+radiation"
        self.ionisation = ionisation if self.binding else None
        self.exponents = dict(zip("MRL", (0, 0, 0) if kind == "coefficient" else exponents, strict=True))
        molecular_weight = Input("normal" if mu[1] else "exact", mu[0], mu[1], mu[1])
        sources = dict(zip("MRL", sources, strict=True)) | {"mu": molecular_weight}
        together = bool(structure.coupled or self.ionisation)
        matters = {"M": together or self.radiation, "R": together, "L": False, "mu": self.radiation}
        self.logs, self.coupled, self.edges, self.parts, self.shift = {}, {}, [], [], 0.0
        for name, source in sources.items():
            if source is None or source.shape == "exact":
                self.logs[name] = 0.0 if source is None else np.log(source.value)
            elif matters[name]:
                self.coupled[name] = source
                panels = _PANELS[::2] if name == "mu" else _PANELS
                edges = np.interp(np.arange(0.0, len(panels) - 1 + 1e-9, 1.0 / refine), np.arange(len(panels)), panels)
                kink = ndtri(source.tails(0.0)[0]) if source.shape == "split-normal" else 0.0
                self.edges.append(np.unique(np.append(edges, kink)))
            elif self.exponents.get(name):
                self.parts.append(_Measured(source, self.exponents[name]))
                self.shift += self.exponents[name] * np.log(source.value)
        self.scale, self.unbound, self.curve = 1.0, 0.0, None
        self.scale = float(self._expect([200.0], np.inf)[0])  # roughly, so that the tolerance is relative
        self.scale *= float(self._expect([200.0])[0])
        if self.ionisation:
            self.unbound = float(self._expect([-200.0])[0])
        if self.parts:
            self._fold_all_but_one()

    def _expect(self, t, tolerance=_TOLERANCE):
        return _expectation(self._conditional, self.edges, t, tolerance / self.refine**2)

    def _conditional(self, t, *scores):
        """Return P(ln Y <= t, observables | scores), without the terms that are folded in later."""
        pairs = zip(self.coupled.items(), scores, strict=True)
        logs = self.logs | {name: np.log(source.value) + source.log_ratio(u) for (name, source), u in pairs}
        y = t - sum(power * logs.get(name, 0.0) for name, power in self.exponents.items())
        log_mass, log_radius = logs.get("M", 0.0), logs.get("R", 0.0)
        if self.ionisation:  # alpha f = Y' + e R / (G M)
            y = np.logaddexp(y, np.log(self.ionisation * R_SUN / GM_SUN) + log_radius - log_mass)
        if self.binding:
            y = log_coefficient(y, 2.0 * logs["mu"] + log_mass) if self.radiation else y + _LOG2
        return self.structure.cumulative(y, log_mass, log_radius) / self.scale

    def _fold_all_but_one(self):
        """Store the distribution of all terms but the last, as a piecewise polynomial."""

        def function(s, tolerance=0.6 * _TOLERANCE):
            return (self._expect(s, tolerance * (1.0 - self.unbound)) - self.unbound) / (1.0 - self.unbound)

        trial, offsets = np.linspace(-40.0, 40.0, 4001), 0.05 * 1.6 ** np.arange(15.0)
        at_medians = self._conditional(trial.reshape([-1] + [1] * len(self.edges)), *[np.zeros(1)] * len(self.edges))
        if not at_medians.min() < 0.5 * at_medians.max():
            raise ValueError("the star is not bound at the medians")
        middle = trial[np.searchsorted(at_medians.ravel(), 0.5 * at_medians.max())]
        low = middle - offsets[np.append(function(middle - offsets[:-1], 1e-5) < 1e-9, True).argmax()]
        high = middle + offsets[np.append(function(middle + offsets[:-1], 1e-5) > 1.0 - 1e-9, True).argmax()]
        tolerance = 2e-7 / self.refine
        self.curve = _Curve(function, np.linspace(low, high, 8), tolerance, np.inf)
        for part in self.parts[:-1]:
            low, high = low + part.at(-8.3), high + part.at(8.3)
            self.curve = _Curve(self._folding(part), np.linspace(low, high, 24), tolerance, np.inf)

    def _folding(self, part):
        curve, base = self.curve, _base_edges(part, self.refine)
        return lambda s: _fold(curve, part, base, 16 * self.refine, s)

    def cumulative(self, t):
        """Return P(ln Y <= t), shape (t,)."""
        t = np.atleast_1d(np.asarray(t, dtype=float))
        if not self.parts:
            return self._expect(t)
        return self.unbound + (1.0 - self.unbound) * self._folding(self.parts[-1])(t - self.shift)


@lru_cache(maxsize=64)
def _distribution(family, inputs, exponents, observed, kind, pressure, ionisation, mu, refine):
    """Return the distribution; `family` is (state,) of the calibration or (prior, discrepancy)."""
    sources = [None if quoted is None else Input(quoted[3], *quoted[:3]) for quoted in inputs]
    medians = [None if source is None else float(source.quantile(0.5)) for source in sources]
    if len(family) == 1:
        parts, u = components(*medians[:2], family[0]), np.linspace(-5.2, 5.2, 53)
        logs = [np.log(s.value) + (0.0 * u if s.shape == "exact" else s.log_ratio(u)) for s in sources[:2]]
        m = parts[0].location(logs[0][:, None], logs[1][None, :])
        structure = _Calibrated(parts, medians[0], observed, (m.min(), m.max()), refine)
    else:
        structure = _Index(family[0], observed, family[1] * discrepancy_scale(medians[0]), refine)
    return _Distribution(structure, sources, exponents, kind, pressure, ionisation, mu, refine)


def _cumulative(t, family, inputs, exponents, observed, *rest):
    inputs = tuple(None if quoted is None else tuple(quoted) for quoted in inputs)
    return _distribution(family, inputs, tuple(exponents), tuple(map(tuple, observed)), *rest).cumulative(t)


def calibrated_cumulative(
    t, mass, radius, luminosity, exponents, state=None, kind="binding", mu=MU, observed=(), ionisation=None, refine=1
):
    """Return P(ln Y <= t) under the calibrated coefficient, with gas and radiation.

    Parameters
    ----------
    t : (T,) values of ln Y, dimensionless.
    mass, radius, luminosity : (value, upper error, lower error, shape), nominal solar units; luminosity may be None.
    exponents : (3,) over mass, radius and luminosity; ignored for the kind "coefficient".
    state : evolutionary state, or None.
    kind : "binding" (with ln f), "potential" or "coefficient".
    mu : mean molecular weight and its standard error or None.
    observed : of (name, value, upper, lower, shape); "mean_log_k2" with the weight of the star at the end.
    ionisation : J/kg, or None; only for the kind "binding".
    refine : integer that multiplies the resolution.

    Raises
    ------
    ValueError
        Where the calibration refuses the star, or the observables exclude the prior.
    """
    inputs, rest = (mass, radius, luminosity), (kind, "gas+radiation", ionisation, tuple(mu), refine)
    return _cumulative(t, (state,), inputs, exponents, observed, *rest)


def index_cumulative(
    t,
    prior,
    mass,
    radius,
    luminosity,
    exponents,
    kind="binding",
    pressure="gas",
    ionisation=None,
    mu=MU,
    observed=(),
    discrepancy=0.25,
    refine=1,
):
    """Return P(ln Y <= t), shape (T,), under a prior ("uniform", a, b) or ("normal", mean, sd) of the index.

    The normal one is truncated to [0, 5); `discrepancy` is the standard deviation of the latent delta at scale 1;
    `mass` and `radius` may be None (not known) where nothing depends on them.  The rest as in calibrated_cumulative.
    """
    inputs, rest = (mass, radius, luminosity), (kind, pressure, ionisation, tuple(mu), refine)
    return _cumulative(t, (tuple(prior), discrepancy), inputs, exponents, observed, *rest)


def medians(cumulatives, probability=0.5):
    """Return t with cumulative(t) = probability for each function of an array, by root finding."""
    found = []
    for cumulative in cumulatives:
        ends = np.array([-40.0, 40.0])
        for _ in range(3):
            trial = np.linspace(*ends, 17)
            i = int(np.searchsorted(cumulative(trial), probability))
            if i == 0:
                raise ValueError("more than this probability is unbound")
            ends = trial[i - 1 : i + 1]
        found.append(brentq(lambda t, f=cumulative: float(f(np.array([t]))[0]) - probability, *ends, xtol=1e-12))
    return np.array(found)
