"""Assigned distributions against scipy.stats and quadrature, the rules of `assign`, laws of the scores."""

import itertools
import math

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st
from scipy import integrate, stats

from stellerg.errors import InputError
from stellerg.measured import Measured, Scale, Shape, assign
from stellerg.measured.shapes import base_score, base_value
from stellerg.status import Status

NAN = float("nan")
LN10 = math.log(10.0)
SCORES = np.linspace(-4.0, 4.0, 33)[None, :]
PROBABILITIES = stats.norm.cdf(SCORES[0])
LAWS = settings(derandomize=True, deadline=None)
# Tolerances: rounding of closed forms; scipy's own quantiles; the kink of the split normal at its mode.
ROUNDING, SCIPY, KINK = 1e-13, 1e-9, 1e-5


def one(value, upper, lower=None, **options) -> Measured:
    return assign(value, upper, upper if lower is None else lower, **options)


def restricted_pdf(value, upper, lower, shape):
    """Density of x > 0 in the quoted scale from scipy's distributions, not from the package."""
    if shape == "three-quantile":
        g = math.log(upper / lower)
        width = upper * lower / abs(upper - lower)
        if g > 0.0:
            base = stats.lognorm(g, loc=value - width, scale=width)
            pdf, below = base.pdf, base.cdf(0.0)
        else:
            base = stats.lognorm(-g, loc=-value - width, scale=width)
            pdf, below = (lambda x: base.pdf(-x)), base.sf(0.0)
    else:

        def pdf(x):
            side = lower if x < value else upper
            return 2.0 / (upper + lower) * side * stats.norm.pdf(x, value, side)

        below = 2.0 * lower / (upper + lower) * stats.norm.cdf(0.0, value, lower)
    return (lambda x: pdf(x) / (1.0 - below)), below


# --- each shape against scipy ---


@pytest.mark.parametrize("error", [0.001, 0.1, 0.4, 1.0, 2.0])
def test_normal_is_scipys_truncated_normal(error):
    quantity = one(1.0, error)
    reference = stats.truncnorm(-1.0 / error, np.inf, 1.0, error)
    x = reference.ppf(PROBABILITIES)
    assert quantity.log_quantile(SCORES)[0] == pytest.approx(np.log(x), abs=SCIPY)
    density = reference.logpdf(x) + np.log(x)
    assert quantity.log_density(np.log(x)[None, :])[0] == pytest.approx(density, abs=1e-7)
    assert quantity.removed[0] == pytest.approx(stats.norm.cdf(-1.0 / error), rel=ROUNDING)
    assert quantity.expectation[0] == pytest.approx(reference.mean(), rel=1e-8)
    assert quantity.standard_deviation[0] == pytest.approx(reference.std(), rel=1e-8)


@pytest.mark.parametrize("error", [0.001, 0.1, 1.0, 2.0])
def test_lognormal_is_scipys_lognormal(error):
    """Median v, standard deviation of ln s/v; nothing lies below zero."""
    quantity = one(3.0, 3.0 * error, shape="lognormal")
    reference = stats.lognorm(error, scale=3.0)
    x = reference.ppf(PROBABILITIES)
    assert quantity.log_quantile(SCORES)[0] == pytest.approx(np.log(x), abs=SCIPY)
    density = reference.logpdf(x) + np.log(x)
    assert quantity.log_density(np.log(x)[None, :])[0] == pytest.approx(density, abs=SCIPY)
    assert quantity.log_mean[0] == pytest.approx(math.log(3.0), rel=ROUNDING)
    assert quantity.log_sd[0] == pytest.approx(error, rel=ROUNDING)
    assert quantity.expectation[0] == pytest.approx(reference.mean(), rel=ROUNDING)
    assert quantity.standard_deviation[0] == pytest.approx(reference.std(), rel=1e-12)
    assert quantity.removed[0] == 0.0


PAIRS = [(2.0, 1.0), (1.0, 2.0), (1.3, 1.2), (0.1, 0.9), (5.0, 0.5)]


@pytest.mark.parametrize(("upper", "lower"), PAIRS)
def test_three_quantile_goes_through_its_three_quantiles(upper, lower):
    value = 10.0
    scores = np.array([-2.0, -1.0, 0.0, 1.0, 2.0])
    ends = [-lower * (1.0 + lower / upper), -lower, 0.0, upper, upper * (1.0 + upper / lower)]
    found = base_value(Shape.THREE_QUANTILE, scores, value, np.array(upper), np.array(lower))
    assert found == pytest.approx(value + np.array(ends), rel=ROUNDING)


@pytest.mark.parametrize(("upper", "lower"), PAIRS)
def test_three_quantile_has_a_hard_end(upper, lower):
    """At v - ab/(a - b): below for a > b, above for a < b; the score is infinite beyond."""
    end = 10.0 - upper * lower / (upper - lower)
    outside, inside = end + np.sign(lower - upper) * 1e-6, end - np.sign(lower - upper) * 1e-6
    scores = [base_score(Shape.THREE_QUANTILE, np.array(x), 10.0, upper, lower) for x in (outside, inside)]
    assert scores[0] == np.sign(lower - upper) * np.inf
    assert np.isfinite(scores[1])
    beyond = 400.0 * np.sign(lower - upper)
    far = base_value(Shape.THREE_QUANTILE, beyond, 10.0, np.array(upper), np.array(lower))
    assert far == pytest.approx(end, abs=1e-9)


def test_beyond_a_hard_end_there_is_no_density():
    quantity = one(10.0, 2.0, 1.0)  # hard end at 8
    score, slope = quantity.score(np.log([[7.9, 8.1]]))
    assert score[0, 0] == slope[0, 0] == quantity.log_density(np.log([[7.9]]))[0, 0] == -np.inf
    assert np.isfinite([score[0, 1], slope[0, 1]]).all()


@pytest.mark.parametrize("shape", ["three-quantile", "split-normal"])
@pytest.mark.parametrize(
    ("value", "upper", "lower"), [(10.0, 2.0, 1.0), (10.0, 1.0, 2.0), (1.0, 0.5, 0.9), (1.0, 2.0, 0.8)]
)
def test_asymmetric_shapes_against_scipy_and_quad(shape, value, upper, lower):
    quantity = one(value, upper, lower, shape=shape)
    pdf, below = restricted_pdf(value, upper, lower, shape)
    assert quantity.removed[0] == pytest.approx(below, rel=1e-10, abs=1e-300)
    logs = quantity.log_quantile(SCORES)
    found = np.exp(quantity.log_density(logs)[0] - logs[0])
    assert found == pytest.approx([pdf(x) for x in np.exp(logs[0])], rel=1e-7)

    start, stop = np.exp(quantity.log_quantile(np.array([[-9.0, 9.0]]))[0])
    points = np.exp(quantity.log_quantile(np.array([[-6.0, -4.0, -2.0, -1.0, 0.0, 1.0, 2.0, 4.0, 6.0]]))[0])
    cuts = np.unique([start, *points, value, stop])

    def mean_of(function):
        return sum(
            integrate.quad(lambda x: function(x) * pdf(x), a, b, epsabs=1e-13, epsrel=1e-12)[0]
            for a, b in itertools.pairwise(cuts)
        )

    assert mean_of(lambda x: 1.0) == pytest.approx(1.0, abs=1e-10)
    log_mean, mean = mean_of(math.log), mean_of(lambda x: x)
    log_sd = math.sqrt(mean_of(lambda x: (math.log(x) - log_mean) ** 2))
    sd = math.sqrt(mean_of(lambda x: (x - mean) ** 2))
    tolerance = KINK if shape == "split-normal" else 1e-8
    assert quantity.log_mean[0] == pytest.approx(log_mean, abs=tolerance * log_sd)
    assert quantity.log_sd[0] == pytest.approx(log_sd, rel=tolerance)
    assert quantity.expectation[0] == pytest.approx(mean, abs=tolerance * sd)
    assert quantity.standard_deviation[0] == pytest.approx(sd, rel=tolerance)


@pytest.mark.parametrize("error", [0.02, 0.3, 1.5])
def test_moments_of_the_logarithm_of_a_restricted_normal(error):
    quantity = one(1.0, error)
    reference = stats.truncnorm(-1.0 / error, np.inf, 1.0, error)
    cuts = [1e-14, *reference.ppf([1e-6, 1e-3, 0.1, 0.5, 0.9, 1.0 - 1e-6]), 1.0 + 9.0 * error]

    def mean_of(function):
        return sum(
            integrate.quad(lambda q: function(q) * np.exp(q) * reference.pdf(np.exp(q)), a, b, epsabs=1e-13)[0]
            for a, b in itertools.pairwise(np.log(cuts))
        )

    mean = mean_of(lambda q: q)
    assert quantity.log_mean[0] == pytest.approx(mean, abs=1e-8)
    assert quantity.log_sd[0] == pytest.approx(math.sqrt(mean_of(lambda q: (q - mean) ** 2)), abs=1e-8)


@pytest.mark.parametrize(("upper", "lower"), [(2.0, 1.0), (1.0, 3.0)])
def test_split_normal_is_continuous_with_its_mode_at_the_value(upper, lower):
    quantity = one(20.0, upper, lower, shape="split-normal")
    x = np.array([20.0 - 1e-7, 20.0 + 1e-7, 19.5, 20.5])
    density = np.exp(quantity.log_density(np.log(x)[None, :])[0]) / x
    peak = 2.0 / (math.sqrt(2.0 * math.pi) * (upper + lower))
    assert density[:2] == pytest.approx(peak, rel=1e-9)
    assert density[2:] == pytest.approx(peak * np.exp(-0.125 / np.array([lower, upper]) ** 2), rel=1e-9)
    assert np.all(density[2:] < peak)


# --- scales ---


def test_dex():
    quantity = one(4.4, 0.1, scale=Scale.DEX)
    assert quantity.shape[0] == Shape.LOGNORMAL
    assert quantity.log_median[0] == pytest.approx(4.4 * LN10, rel=ROUNDING)
    assert quantity.log_sd[0] == pytest.approx(0.1 * LN10, rel=ROUNDING)
    assert (quantity.expectation[0], quantity.standard_deviation[0], quantity.removed[0]) == (4.4, 0.1, 0.0)


def test_negative_dex_and_magnitudes_are_values_like_others():
    for scale in (Scale.DEX, Scale.MAGNITUDE):
        assert one([-0.5, 0.0], 0.1, scale=scale).usable.all()


def test_a_magnitude_is_minus_two_and_a_half_times_the_logarithm():
    quantity = one(4.74, 0.02, scale=Scale.MAGNITUDE)
    assert quantity.log_median[0] == pytest.approx(-0.4 * LN10 * 4.74, rel=ROUNDING)
    assert quantity.log_sd[0] == pytest.approx(0.4 * LN10 * 0.02, rel=ROUNDING)


@pytest.mark.parametrize("shape", ["three-quantile", "split-normal"])
def test_the_upper_error_of_a_magnitude_is_the_lower_side_in_luminosity(shape):
    quantity = one(0.0, 0.3, 0.1, scale=Scale.MAGNITUDE, shape=shape)
    faint, bright = quantity.log_quantile(np.array([[2.0, -2.0]]))[0]
    assert faint < 0.0 < bright
    assert -faint > bright
    if shape == "three-quantile":
        ends = quantity.log_quantile(np.array([[1.0, -1.0]]))[0]
        assert ends == pytest.approx([-0.4 * LN10 * 0.3, 0.4 * LN10 * 0.1], rel=ROUNDING)


@pytest.mark.parametrize(("scale", "factor"), [(Scale.DEX, LN10), (Scale.MAGNITUDE, -0.4 * LN10)])
def test_moments_in_a_logarithmic_scale(scale, factor):
    """The quoted number of a shifted log-normal: mean v + c (e^(g^2/2) - 1)/g, variance in closed form."""
    a, b = 0.3, 0.2
    g = math.log(a / b)
    c = a * g / math.expm1(g)
    quantity = one(1.0, a, b, scale=scale)
    mean = 1.0 + c * math.expm1(g * g / 2.0) / g
    sd = c / g * math.exp(g * g / 2.0) * math.sqrt(math.expm1(g * g))
    assert quantity.expectation[0] == pytest.approx(mean, rel=1e-12)
    assert quantity.standard_deviation[0] == pytest.approx(sd, rel=1e-12)
    assert quantity.log_mean[0] == pytest.approx(factor * mean, rel=1e-12)
    assert quantity.log_sd[0] == pytest.approx(abs(factor) * sd, rel=1e-12)


# --- laws ---


@st.composite
def quantities(draw):
    scale = draw(st.sampled_from(Scale))
    value = draw(st.floats(0.1, 10.0))
    upper = value * draw(st.floats(1e-3, 1.5))
    shape = draw(st.sampled_from(["normal", "lognormal", "three-quantile", "split-normal"]))
    ratio = draw(st.floats(1.0 / 3.0, 3.0)) if "-" in shape else 1.0
    return one(value, upper, upper * ratio, shape=shape, scale=scale)


@LAWS
@given(quantities(), st.floats(-5.0, 5.0))
def test_score_is_the_inverse_of_the_quantile(quantity, z):
    found, _ = quantity.score(quantity.log_quantile(np.array([[z]])))
    assert found[0, 0] == pytest.approx(z, abs=1e-6)


@LAWS
@given(quantities(), st.floats(-4.0, 4.0))
def test_log_slope_is_the_derivative_of_the_score(quantity, z):
    log_x = quantity.log_quantile(np.array([[z]]))
    _, slope = quantity.score(log_x)
    step = 1e-4 * math.exp(-slope[0, 0])
    around, _ = quantity.score(log_x + np.array([[-step, step]]))
    difference = math.log(abs(around[0, 1] - around[0, 0]) / (2.0 * step))
    assert slope[0, 0] == pytest.approx(difference, abs=1e-4)


@LAWS
@given(quantities(), st.floats(-5.0, 4.9), st.floats(0.01, 0.1))
def test_quantiles_increase_except_in_magnitudes(quantity, z, step):
    low, high = quantity.log_quantile(np.array([[z, z + step]]))[0]
    assert low > high if quantity.scale is Scale.MAGNITUDE else low < high


@LAWS
@given(st.floats(0.1, 10.0), st.floats(1e-3, 1.5), st.floats(1.0 / 3.0, 3.0), st.floats(1e-6, 1e6), st.data())
def test_a_change_of_unit_is_a_shift_of_the_logarithm(value, relative, ratio, factor, data):
    shape = data.draw(st.sampled_from(["three-quantile", "split-normal"]))
    assume(ratio != 1.0)
    upper, lower = value * relative, value * relative * ratio
    scores = np.array([[-3.0, 0.0, 3.0]])
    here = one(value, upper, lower, shape=shape).log_quantile(scores)
    there = one(value * factor, upper * factor, lower * factor, shape=shape).log_quantile(scores)
    assert there == pytest.approx(here + math.log(factor), abs=1e-9)


@LAWS
@given(st.floats(0.1, 10.0), st.floats(1e-3, 0.3), st.floats(-1e-6, 1e-6))
def test_nearly_equal_errors_are_nearly_normal(value, relative, difference):
    upper = value * relative
    scores = np.array([[-3.0, -1.0, 0.0, 1.0, 3.0]])
    for shape in ("three-quantile", "split-normal"):
        nearly = one(value, upper, upper * (1.0 + difference), shape=shape).log_quantile(scores)
        assert nearly == pytest.approx(one(value, upper).log_quantile(scores), abs=1e-4)


# --- the rules of assign ---


def test_exact_missing_and_zero_are_three_things():
    error = [NAN, NAN, 0.0, NAN]
    quantity = assign([1.0, 1.0, 1.0, NAN], error, error, exact=[True, False, False, False])
    assert quantity.shape.tolist() == [Shape.EXACT, Shape.ABSENT, Shape.ABSENT, Shape.ABSENT]
    assert quantity.fault.tolist() == [Status.OK, Status.ERROR_MISSING, Status.ERROR_ZERO, Status.OK]
    assert quantity.exact.tolist() == [True, False, False, False]
    assert quantity.usable.tolist() == [True, False, False, False]
    assert (quantity.log_mean[0], quantity.log_sd[0], quantity.removed[0]) == (0.0, 0.0, 0.0)
    assert (quantity.expectation[0], quantity.standard_deviation[0]) == (1.0, 0.0)
    assert quantity.log_quantile(np.array([[-3.0, 3.0]]))[0].tolist() == [0.0, 0.0]
    assert np.isnan(quantity.log_mean[1:]).all()


FAULTS = [
    (math.inf, 0.1, 0.1, "", Status.NOT_A_NUMBER),
    (1.0, math.inf, 0.1, "", Status.NOT_A_NUMBER),
    (1.0, 0.1, math.inf, "", Status.NOT_A_NUMBER),
    (0.0, 0.1, 0.1, "", Status.NOT_POSITIVE),
    (-1.0, 0.1, 0.1, "", Status.NOT_POSITIVE),
    (-1.0, NAN, NAN, "exact", Status.NOT_POSITIVE),
    (1.0, -0.1, 0.1, "", Status.NOT_POSITIVE),
    (1.0, 0.1, -0.1, "", Status.NOT_POSITIVE),
    (1.0, NAN, NAN, "", Status.ERROR_MISSING),
    (1.0, 0.1, NAN, "", Status.ERROR_MISSING),
    (1.0, NAN, 0.1, "", Status.ERROR_MISSING),
    (1.0, 0.0, 0.0, "", Status.ERROR_ZERO),
    (1.0, 0.1, 0.0, "", Status.ERROR_ZERO),
    (1.0, 0.0, 0.1, "", Status.ERROR_ZERO),
    (1.0, 0.1, 0.1, "gamma", Status.SHAPE_INVALID),
    (1.0, 0.1, 0.2, "normal", Status.SHAPE_INVALID),
    (1.0, 0.1, 0.2, "lognormal", Status.SHAPE_INVALID),
    (NAN, 0.1, 0.2, "gamma", Status.OK),  # an empty cell is no fault
]


def test_every_fault():
    value, upper, lower, shape, expected = (list(column) for column in zip(*FAULTS, strict=True))
    quantity = assign(value, upper, lower, shape=shape)
    assert quantity.fault.tolist() == expected
    assert not quantity.usable.any()


def test_a_fault_found_while_reading_is_kept():
    quantity = assign([1.0, NAN], [NAN, NAN], [NAN, NAN], fault=[Status.LIMIT_ONLY, Status.NOT_A_NUMBER])
    assert quantity.fault.tolist() == [Status.LIMIT_ONLY, Status.NOT_A_NUMBER]


@pytest.mark.parametrize("shape", ["gamma", "exact"])
def test_a_shape_for_all_rows_must_exist_and_have_an_error(shape):
    with pytest.raises(InputError, match=f"'{shape}' cannot be the shape .* choose one of normal, lognormal"):
        assign(1.0, 0.1, 0.1, shape=shape)


@pytest.mark.parametrize(
    ("shape", "scale", "symmetric", "asymmetric"),
    [
        (None, Scale.LINEAR, Shape.NORMAL, Shape.THREE_QUANTILE),
        (None, Scale.DEX, Shape.LOGNORMAL, Shape.THREE_QUANTILE),
        (None, Scale.MAGNITUDE, Shape.LOGNORMAL, Shape.THREE_QUANTILE),
        # one name for all rows applies where it fits
        ("lognormal", Scale.LINEAR, Shape.LOGNORMAL, Shape.THREE_QUANTILE),
        ("normal", Scale.DEX, Shape.LOGNORMAL, Shape.THREE_QUANTILE),
        ("split-normal", Scale.LINEAR, Shape.NORMAL, Shape.SPLIT_NORMAL),
        ("split-normal", Scale.DEX, Shape.LOGNORMAL, Shape.SPLIT_NORMAL),
        # equal errors make the asymmetric shapes normal
        (["three-quantile", "three-quantile"], Scale.LINEAR, Shape.NORMAL, Shape.THREE_QUANTILE),
        (["lognormal", "split-normal"], Scale.LINEAR, Shape.LOGNORMAL, Shape.SPLIT_NORMAL),
        (["", None], Scale.LINEAR, Shape.NORMAL, Shape.THREE_QUANTILE),
    ],
)
def test_shapes_by_default_and_by_name(shape, scale, symmetric, asymmetric):
    quantity = assign([1.0, 1.0], [0.1, 0.2], [0.1, 0.1], shape=shape, scale=scale)
    assert quantity.shape.tolist() == [symmetric, asymmetric]
    assert quantity.log_normal.tolist() == [symmetric == Shape.LOGNORMAL, False]


def test_a_row_is_not_disturbed_by_the_shapes_of_others():
    value, upper, lower = [1.0, 2.0, 3.0, 4.0, 5.0], [0.1, 0.2, 0.9, 0.4, NAN], [0.1, 0.2, 0.3, 0.5, NAN]
    shape = ["normal", "lognormal", "three-quantile", "split-normal", "exact"]
    codes = [Shape.NORMAL, Shape.LOGNORMAL, Shape.THREE_QUANTILE, Shape.SPLIT_NORMAL, Shape.EXACT]
    together = assign(value, upper, lower, shape=shape)
    assert len(together) == 5
    for row in range(5):
        taken = together.take(np.array([row]))
        alone = assign(value[row], upper[row], lower[row], shape=shape[row : row + 1])
        assert taken.shape.tolist() == alone.shape.tolist() == [codes[row]]
        for name in ("log_mean", "log_sd", "expectation", "standard_deviation", "removed"):
            assert getattr(together, name)[row] == getattr(taken, name)[0] == getattr(alone, name)[0]
        assert together.log_quantile(SCORES)[row].tobytes() == alone.log_quantile(SCORES)[0].tobytes()


@pytest.mark.parametrize("shape", ["normal", "lognormal", "three-quantile", "split-normal"])
def test_a_row_alone_has_the_same_bits_as_among_its_like(shape):
    lower = 0.2 if "-" in shape else 0.3
    alone, among = one(2.2, 0.3, lower, shape=shape), assign([2.2] * 3, [0.3] * 3, [lower] * 3, shape=shape)
    for name in ("log_mean", "log_sd", "expectation", "standard_deviation", "removed", "log_median"):
        assert getattr(among, name).tolist() == getattr(alone, name).tolist() * 3, name


def test_take_keeps_everything_that_belongs_to_a_row():
    quantity = assign([1.0, 2.0, NAN], [0.1, NAN, NAN], [0.2, NAN, NAN], scale=Scale.DEX)
    taken = quantity.take(np.array([1, 0, 0]))
    assert taken.value.tolist() == [2.0, 1.0, 1.0]
    assert taken.upper.tolist()[1:] == [0.1, 0.1]
    assert taken.lower.tolist()[1:] == [0.2, 0.2]
    assert taken.fault.tolist() == [Status.ERROR_MISSING, Status.OK, Status.OK]
    assert taken.scale is Scale.DEX
