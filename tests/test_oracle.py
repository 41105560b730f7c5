"""Checks of the brute-force reference of oracle.py against closed forms, other quadratures and draws."""

import math
from itertools import pairwise

import mpmath
import numpy as np
import pytest
from scipy.integrate import quad
from scipy.special import ndtr, ndtri

from oracle import Input, cumulative, lognormal_cumulative, moments, quantile

pytestmark = pytest.mark.filterwarnings("error")

SEED = 71423  # chosen before the first run and not changed since
PROBABILITIES = (0.001, 0.02, 0.16, 0.5, 0.84, 0.98, 0.999)


def lognormal(value, relative):
    return Input("lognormal", value, relative * value, relative * value)


def normal(value, relative):
    return Input("normal", value, relative * value, relative * value)


def three(value, upper, lower):
    return Input("three-quantile", value, upper * value, lower * value)


def split(value, upper, lower):
    return Input("split-normal", value, upper * value, lower * value)


# Stars for which no closed form exists; widths are relative.
STARS = {
    "wide normals": (
        [normal(1.0, 0.3), normal(2.0, 0.3), normal(3.0, 0.3)],
        (2, -1, -1),
        ("uniform", 0, 4.5),
    ),
    "wide and narrow": (
        [normal(1.0, 0.3), split(2.0, 1e-4, 2e-4), three(3.0, 0.01, 0.003)],
        (2, -3, -4),
        ("uniform", 1.5, 3.0),
    ),
    "four": (
        [normal(1.0, 0.3), split(2.0, 0.3, 1e-4), three(3.0, 0.01, 0.003), lognormal(0.4, 1e-4)],
        (2, -3, -4, 1),
        ("normal", 3.0, 0.2),
    ),
    "narrow under a broad prior": ([normal(1.0, 1e-4), split(2.0, 1e-4, 2e-3)], (2, -1), ("uniform", 0, 5)),
    "three split normals": (
        [split(1.0, 1e-4, 0.3), split(2.0, 0.3, 0.01), split(3.0, 1e-3, 1e-4)],
        (2, -3, -4),
        ("uniform-log-coefficient", 0.7, 1.4),
    ),
    "nearly equal widths": (
        [three(1.0, 0.2, 0.25), split(2.0, 0.3, 0.2), three(3.0, 0.1, 0.15)],
        (2, -1, -1),
        ("uniform-coefficient", 0.6, 1.5),
    ),
    "all narrow": (
        [normal(5.0, 1e-4), split(2e30, 1e-4, 2e-4), three(7e8, 1e-4, 3e-4)],
        (2, -3, -4),
        ("point", 3.0),
    ),
    "extreme asymmetry": (
        [three(1.0, 0.3, 1e-4), split(2.0, 0.3, 1e-4), three(3.0, 1e-4, 0.3)],
        (2, -3, -4),
        ("uniform-coefficient", 0.7, 1.4),
    ),
    "hardly any freedom in n": (
        [normal(1.0, 1e-4), split(2.0, 0.05, 0.02), normal(3.0, 2e-3)],
        (2, -1, -1),
        ("uniform", 2.999, 3.001),
    ),
    "prior cut at both ends": ([normal(1.0, 0.02), three(2.0, 0.3, 0.1)], (2, -1), ("normal", 2.5, 2.5)),
}


# --- the assigned distributions ---------------------------------------------------------------------


def plain_density(source, v):
    """Unnormalised density of an input at v, written straight from the definition."""
    m, a, b = source.value, source.upper, source.lower
    if source.shape == "normal":
        return math.exp(-0.5 * ((v - m) / a) ** 2)
    if source.shape == "lognormal":
        return math.exp(-0.5 * (math.log(v / m) / (a / m)) ** 2) / v
    if source.shape == "split-normal":
        return math.exp(-0.5 * ((v - m) / (b if v < m else a)) ** 2)
    g = math.log(a / b)
    c = a * g / (math.exp(g) - 1.0)
    inside = 1.0 + g * (v - m) / c
    if inside <= 0.0:
        return 0.0
    return math.exp(-0.5 * (math.log(inside) / g) ** 2) / inside


@pytest.mark.parametrize(
    "source",
    [
        normal(3.0, 0.3),
        normal(3.0, 0.9),
        lognormal(3.0, 0.25),
        split(3.0, 0.2, 0.3),
        split(3.0, 0.3, 0.05),
        three(3.0, 0.2, 0.3),
        three(3.0, 0.3, 0.2),
        three(3.0, 0.3, 0.05),
        three(3.0, 1.5, 1.2),
    ],
    ids=str,
)
def test_cumulative_of_an_input_is_the_integral_of_its_density(source):
    m, a, b = source.value, source.upper, source.lower

    def mass(low, high):
        steps = np.array([0.0, 1.0, 4.0, 20.0, 100.0, 1e3, 1e4, 1e5])
        marks = np.unique(np.clip([low, m - 3 * b, m - b, *(m + a * steps), high], low, high))
        ends = pairwise(marks)
        return sum(quad(lambda v: plain_density(source, v), *pair, epsabs=1e-13, limit=200)[0] for pair in ends)

    total = mass(1e-12 if source.shape == "lognormal" else 0.0, m + 1e6 * a)
    for v in (m - 2.5 * b, m - b, m - 0.2 * b, m + 0.5 * a, m + 3.0 * a):
        if v > 0.0:
            expected = mass(1e-12 if source.shape == "lognormal" else 0.0, v) / total
            assert source.cumulative(v) == pytest.approx(expected, abs=2e-11)
    assert source.cumulative(0.0) == 0.0
    p = np.array([1e-9, 1e-5, 0.01, 0.3, 0.5, 0.8, 0.99, 1 - 1e-6])
    np.testing.assert_allclose(source.cumulative(source.quantile(p)), p, rtol=1e-6, atol=1e-15)


def test_three_quantile_has_its_quantiles_and_the_normal_limit():
    source = three(3.0, 0.02, 0.01)
    got = source.quantile(ndtr(np.array([-1.0, 0.0, 1.0])))
    np.testing.assert_allclose(got, [2.97, 3.0, 3.06], rtol=1e-13)
    p = np.array([1e-4, 0.2, 0.6, 0.999])
    for nudge in (0.0, 1e-13, 1e-9):
        near = three(3.0, 0.3 * (1.0 + nudge), 0.3)
        np.testing.assert_allclose(near.quantile(p), normal(3.0, 0.3).quantile(p), rtol=1e-7)


@pytest.mark.parametrize("arguments", [("cauchy", 1, 1, 1), ("normal", 1, 0.1, 0.2), ("normal", -1, 1, 1)])
def test_inputs_outside_the_definitions_are_refused(arguments):
    with pytest.raises(ValueError, match=r"shape|positive"):
        Input(*arguments)


# --- closed forms -------------------------------------------------------------------------------------


@pytest.mark.parametrize("widths", [(0.3, 0.3, 0.3), (0.3, 1e-4, 0.01), (1e-4, 3e-4, 2e-4), (1e-4, 0.1, 0.3)])
@pytest.mark.parametrize("weights", [(2, -1, -1), (2, -3, -4)])
def test_lognormals_with_a_point_prior_are_exactly_normal(widths, weights):
    inputs = [lognormal(m, s) for m, s in zip((1.1, 0.7, 3.0), widths, strict=True)]
    mean = sum(w * math.log(i.value) for w, i in zip(weights, inputs, strict=True)) + math.log(1.5)
    sd = math.sqrt(sum((w * s) ** 2 for w, s in zip(weights, widths, strict=True)))
    for z in (-6.0, -3.0, -1.2, 0.0, 0.4, 2.0, 5.0):
        assert cumulative(mean + z * sd, inputs, weights, ("point", 3)) == pytest.approx(ndtr(z), abs=2e-12)
    assert moments(inputs, weights, ("point", 3)) == pytest.approx((mean, sd), abs=1e-13)
    assert quantile(0.2, inputs, weights, ("point", 3)) == pytest.approx(mean + sd * ndtri(0.2), abs=1e-11)


def uniform_index_closed_form(t, location, sigma, n1, n2):
    """F(t) of a normal term plus ln w(n), n uniform, at 40 digits."""
    with mpmath.workdps(40):
        t, s = mpmath.mpf(t) - mpmath.mpf(location), mpmath.mpf(sigma)
        a, b = (mpmath.log(mpmath.mpf(3) / (5 - mpmath.mpf(n))) for n in (n1, n2))
        za, zb = (t - a) / s, (t - b) / s
        first = mpmath.exp(-a) * mpmath.ncdf(za) - mpmath.exp(-b) * mpmath.ncdf(zb)
        second = mpmath.exp(s**2 / 2 - t) * (mpmath.ncdf(za - s) - mpmath.ncdf(zb - s))
        return float(3 * (first - second) / (mpmath.mpf(n2) - mpmath.mpf(n1)))


@pytest.mark.parametrize("bounds", [(0.0, 4.5), (1.5, 3.0), (2.99, 3.01)])
@pytest.mark.parametrize("widths", [(1e-4,), (0.01,), (0.3,), (0.3, 1e-4), (0.05, 0.1, 2e-4)])
def test_lognormals_with_a_uniform_index_follow_the_closed_form(bounds, widths):
    weights = (2, -3, -4)[: len(widths)]
    inputs = [lognormal(1.0, s) for s in widths]
    sigma = math.sqrt(sum((w * s) ** 2 for w, s in zip(weights, widths, strict=True)))
    q1, q2 = (math.log(3.0 / (5.0 - n)) for n in bounds)
    for t in (q1 - 2 * sigma, q1, q1 + 0.3 * sigma, 0.5 * (q1 + q2), q2 - sigma, q2, q2 + 3 * sigma):
        expected = uniform_index_closed_form(t, 0.0, sigma, *bounds)
        assert cumulative(t, inputs, weights, ("uniform", *bounds)) == pytest.approx(expected, abs=3e-12)
        assert lognormal_cumulative(t, 0.0, sigma, ("uniform", *bounds)) == pytest.approx(expected, abs=1e-11)


@pytest.mark.parametrize(
    "prior",
    [
        ("point", 3.0),
        ("uniform", 0.0, 5.0),
        ("normal", 3.0, 0.1),
        ("normal", 0.1, 0.5),
        ("normal", 4.8, 0.4),
        ("uniform-coefficient", 0.6, 1.9),
        ("uniform-log-coefficient", 0.6, 1.9),
    ],
)
@pytest.mark.parametrize("sigma", [1e-4, 0.02, 0.5])
def test_the_two_routes_agree_for_a_lognormal_part(prior, sigma):
    inputs, weights = [lognormal(2.0, sigma / 2.0)], (2,)
    location = 2.0 * math.log(2.0)
    for p in PROBABILITIES:
        t = quantile(p, inputs, weights, prior)
        got = cumulative(t, inputs, weights, prior)
        assert got == pytest.approx(p, abs=1e-9)
        assert lognormal_cumulative(t, location, sigma, prior) == pytest.approx(got, abs=1e-10)


# --- other quadratures ----------------------------------------------------------------------------------


@pytest.mark.parametrize(("relative", "weight"), [(0.3, -1), (0.3, 2), (0.01, -4)])
def test_one_normal_with_a_uniform_index_at_high_precision(relative, weight):
    n1, n2 = 1.0, 4.0
    for t in (-0.1, 0.3, 0.8):
        with mpmath.workdps(25):
            s = mpmath.mpf(relative)

            def prior_cumulative(q):
                return min(max((5 - 3 * mpmath.exp(-q) - n1) / (n2 - n1), 0), 1)

            def integrand(v, s=s, t=t, prior_cumulative=prior_cumulative):
                return mpmath.npdf(v, 1, s) * prior_cumulative(t - weight * mpmath.log(v))

            kinks = [mpmath.exp((t - mpmath.log(3 / (5 - mpmath.mpf(n)))) / weight) for n in (n1, n2)]
            marks = [1 + k * s for k in (-12, -6, -3, -1, 0, 1, 3, 6, 12)] + kinks
            marks = sorted({mpmath.mpf("1e-30"), *(v for v in marks if v > 0)})
            expected = float(mpmath.quad(integrand, marks) / mpmath.ncdf(1 / s))
        got = cumulative(t, [normal(1.0, relative)], (weight,), ("uniform", n1, n2))
        assert got == pytest.approx(expected, abs=1e-11)


def panels(edges, nodes):
    """Gauss-Legendre abscissae and weights on consecutive panels, each of shape (points,)."""
    x, w = np.polynomial.legendre.leggauss(nodes)
    half = 0.5 * np.diff(edges)[:, None]
    return (0.5 * (edges[1:] + edges[:-1])[:, None] + half * x).ravel(), (half * w).ravel()


def pieces(source, nodes):
    """Points ln(v / value) and probabilities, from the definition, in the score of the unrestricted shape."""
    m, a, b = source.value, source.upper, source.lower
    a, b = a / m, b / m
    regular = np.linspace(-9.0, 9.0, 37)
    if source.shape == "lognormal":
        z, w = panels(regular, nodes)
        return a * z, w * np.exp(-0.5 * z**2) / math.sqrt(2 * math.pi)
    g = 0.0
    if source.shape == "three-quantile":
        g = math.log(a / b)
        c = a * g / math.expm1(g)
        end = math.log(1.0 - g / c) / g if g < c else -math.inf
    else:
        end = -1.0 / b
    edges = regular[regular > end]
    if end > -9.0:
        edges = np.concatenate([end + (edges[0] - end) * 0.5 ** np.arange(45.0, 0.0, -1.0), edges])
    z, w = panels(edges, nodes)
    w = w * np.exp(-0.5 * z**2)
    if g:
        v = 1.0 + c * np.expm1(g * z) / g
    else:
        v = 1.0 + np.where(z < 0.0, b, a) * z
        w = w * np.where(z < 0.0, b, a)
    return np.log(np.maximum(v, 1e-300)), w / w.sum()


def characteristic(inputs, weights, prior, sigma, length):
    """Frequencies, their step and the characteristic function of T there.

    `sigma` is the standard deviation of a log-normal part of T, which bounds the frequencies needed;
    `length` is a period well beyond the support of T.
    """
    step = 2.0 * math.pi / length
    tau = step * (np.arange(math.ceil(8.0 / sigma / step)) + 0.5)
    phi = np.ones_like(tau, dtype=complex)
    for source, weight in zip(inputs, weights, strict=True):
        y, p = pieces(source, 48)
        x = weight * (y + math.log(source.value))
        phi *= np.concatenate([np.exp(1j * np.outer(part, x)) @ p for part in np.array_split(tau, 8)])
    if prior[0] == "point":
        phi *= np.exp(1j * tau * math.log(3.0 / (5.0 - prior[1])))
    else:
        kind, first, second = prior
        if kind == "normal":
            n, p = panels(np.linspace(max(0.0, first - 9 * second), min(first + 9 * second, 4.9999), 200), 20)
            p = p * np.exp(-0.5 * ((n - first) / second) ** 2)
        else:
            n, p = panels(np.linspace(first, second, 60), 20)
        w = 3.0 / (5.0 - n) if kind in ("normal", "uniform") else n
        phi *= np.exp(1j * np.outer(tau, np.log(w))) @ (p / p.sum())
    return tau, step, phi


@pytest.mark.parametrize(
    ("inputs", "weights", "prior", "sigma", "length"),
    [
        (
            [lognormal(1.0, 0.3), normal(2.0, 0.3), split(3.0, 1e-4, 3e-4)],
            (2, -1, -1),
            ("uniform", 0.0, 4.5),
            0.6,
            100.0,
        ),
        (
            [lognormal(1.0, 0.1), normal(2.0, 0.28), three(3.0, 0.3, 0.05)],
            (2, -3, -4),
            ("normal", 3.0, 0.3),
            0.2,
            200.0,
        ),
        (
            [lognormal(1.0, 0.05), split(2.0, 0.3, 0.01), three(3.0, 0.02, 0.2), normal(0.5, 1e-3)],
            (2, -1, -1, 3),
            ("uniform-coefficient", 0.6, 1.5),
            0.1,
            60.0,
        ),
        (
            [lognormal(1.0, 2e-4), split(2.0, 1e-4, 3e-4), three(3.0, 2e-4, 1e-4), normal(2.0, 1e-4)],
            (2, -3, -4, 1),
            ("point", 1.5),
            4e-4,
            0.5,
        ),
    ],
)
def test_inversion_of_the_characteristic_function_agrees(inputs, weights, prior, sigma, length):
    tau, step, phi = characteristic(inputs, weights, prior, sigma, length)
    for p in PROBABILITIES:
        t = quantile(p, inputs, weights, prior)
        got = cumulative(t, inputs, weights, prior)
        inverted = 0.5 - np.sum((phi * np.exp(-1j * tau * t)).imag / tau) * step / math.pi
        assert inverted == pytest.approx(got, abs=1e-10)


@pytest.mark.parametrize(
    ("wide", "narrow"),
    [
        (split(2.0, 0.3, 0.1), split(0.6, 1e-3, 3e-3)),
        (three(2.0, 0.3, 0.1), split(0.6, 3e-3, 1e-3)),
        (normal(2.0, 0.3), three(0.6, 1e-3, 4e-3)),
    ],
)
def test_nested_quadrature_of_kinked_terms_agrees(wide, narrow):
    inputs, weights, bounds = [wide, narrow], (2, -3), (1.0, 4.0)
    q1, q2 = (math.log(3.0 / (5.0 - n)) for n in bounds)
    y, p = pieces(wide, 200)
    outer = 2.0 * (y + math.log(wide.value))
    y, r = pieces(narrow, 6)
    inner = -3.0 * (y + math.log(narrow.value))
    for t in (0.6, 2.4, 3.6):
        expected = 0.0
        for rows, masses in zip(np.array_split(outer, 40), np.array_split(p, 40), strict=True):
            q = np.clip(t - rows[:, None] - inner, q1, q2)
            expected += masses @ (((5.0 - 3.0 * np.exp(-q) - bounds[0]) / (bounds[1] - bounds[0])) @ r)
        # the kinks inside the panels of this plain rule limit it, not the reference
        assert cumulative(t, inputs, weights, ("uniform", *bounds)) == pytest.approx(expected, abs=1e-7)


# --- draws ----------------------------------------------------------------------------------------------


def draw(source, rng, size):
    """Draws of one input, positive by rejection."""
    m, a, b = source.value, source.upper, source.lower

    def unrestricted(count):
        z = rng.standard_normal(count)
        if source.shape == "normal":
            return m + a * z
        if source.shape == "lognormal":
            return m * np.exp(z * a / m)
        if source.shape == "split-normal":
            return m + np.where(rng.random(count) < a / (a + b), a, -b) * np.abs(z)
        g = math.log(a / b)
        return m + a * np.expm1(g * z) / math.expm1(g)

    v = unrestricted(size)
    while (bad := np.flatnonzero(v <= 0.0)).size:
        v[bad] = unrestricted(bad.size)
    return v


def draw_structure(prior, rng, size):
    """Draws of q."""
    kind, first, second = prior[0], prior[1], prior[-1]
    if kind == "point":
        return np.full(size, math.log(3.0 / (5.0 - first)))
    if kind == "uniform-log-coefficient":
        return rng.uniform(math.log(first), math.log(second), size)
    if kind == "uniform-coefficient":
        return np.log(rng.uniform(first, second, size))
    n = rng.uniform(first, second, size) if kind == "uniform" else rng.normal(first, second, size)
    while (bad := np.flatnonzero((n < 0.0) | (n >= 5.0))).size:
        n[bad] = rng.normal(first, second, bad.size)
    return np.log(3.0 / (5.0 - n))


@pytest.mark.parametrize(("number", "star"), list(enumerate(STARS)))
def test_draws_agree(number, star):
    inputs, weights, prior = STARS[star]
    rng = np.random.default_rng([SEED, number])
    size = 4_000_000
    total = draw_structure(prior, rng, size)
    for source, weight in zip(inputs, weights, strict=True):
        total += weight * np.log(draw(source, rng, size))
    for p in PROBABILITIES:
        t = quantile(p, inputs, weights, prior)
        z = (np.count_nonzero(total <= t) / size - p) / math.sqrt(p * (1.0 - p) / size)
        assert abs(z) < 5.0, (star, p, z)
    mean, sd = moments(inputs, weights, prior)
    assert abs(total.mean() - mean) < 5.0 * sd / math.sqrt(size)
    kurtosis = np.mean(((total - mean) / sd) ** 4)
    assert abs(total.std() / sd - 1.0) < 5.0 * math.sqrt((kurtosis - 1.0) / size) / 2.0


# --- self-consistency -----------------------------------------------------------------------------------


@pytest.mark.parametrize("star", STARS)
def test_doubling_the_nodes_changes_nothing(star):
    inputs, weights, prior = STARS[star]
    mean, sd = moments(inputs, weights, prior)
    assert moments(inputs, weights, prior, refine=2) == pytest.approx((mean, sd), rel=1e-11)
    previous = 0.0
    for z in np.linspace(-4.0, 4.0, 41):
        once = cumulative(mean + z * sd, inputs, weights, prior)
        twice = cumulative(mean + z * sd, inputs, weights, prior, refine=2)
        assert once == pytest.approx(twice, abs=2e-11)
        assert previous - 1e-12 <= once <= 1.0 + 1e-12
        previous = once


def test_order_of_the_inputs_and_exact_inputs_do_not_matter():
    inputs, weights, prior = STARS["four"]
    t = quantile(0.3, inputs, weights, prior)
    again = cumulative(t, inputs[::-1], weights[::-1], prior)
    assert again == pytest.approx(0.3, abs=1e-10)
    more = [*inputs, Input("exact", 7.0, 0.0, 0.0)]
    assert cumulative(t - math.log(7.0), more, (*weights, -1), prior) == pytest.approx(0.3, abs=1e-10)


def test_a_star_without_errors_is_a_step():
    exact = [Input("exact", 2.0, 0.0, 0.0)]
    t = quantile(0.5, exact, (3,), ("point", 3.0))
    assert t == pytest.approx(math.log(8.0 * 1.5), rel=1e-15)
    assert cumulative(t - 1e-9, exact, (3,), ("point", 3.0)) == 0.0
    assert cumulative(t + 1e-9, exact, (3,), ("point", 3.0)) == 1.0


def test_mirrored_weights_mirror_the_distribution():
    inputs, weights, prior = STARS["all narrow"]
    zero = math.log(3.0 / (5.0 - prior[1]))
    mean, sd = moments(inputs, weights, prior)
    for z in (-2.0, -0.3, 0.9):
        t = mean + z * sd - zero
        mirrored = cumulative(zero - t, inputs, [-w for w in weights], prior)
        assert cumulative(zero + t, inputs, weights, prior) == pytest.approx(1.0 - mirrored, abs=1e-10)
