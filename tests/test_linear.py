"""First-order propagation against the uncertainties package, JCGM 101's orders, and its own refusals."""

import numpy as np
import pytest
import uncertainties
from uncertainties import umath

from cases import random_star
from stellerg import Stars, propagate
from stellerg.engines.linear import Linear
from stellerg.engines.montecarlo import MonteCarlo
from stellerg.structure.files import parse_prior

OUTPUT = "kelvin_helmholtz_time"


def unit_value(prior="polytrope-3"):
    """t_KH in Myr at M = R = L = 1 for w = 3/2."""
    stars = Stars.of(mass="1 exact", radius="1 exact", luminosity="1 exact")
    return propagate(stars, prior=prior).median(OUTPUT)[0]


def test_linear_equals_the_uncertainties_package_with_correlations():
    correlation = {("mass", "radius"): 0.6, ("radius", "luminosity"): -0.2}
    stars = Stars.of(mass=(1.02, 0.03), radius=(1.05, 0.02), luminosity=(1.1, 0.12, 0.10), correlation=correlation)
    posterior = propagate(stars)
    measured = stars.measured
    pairs = [(measured[n].expectation[0], measured[n].standard_deviation[0]) for n in ("mass", "radius", "luminosity")]
    matrix = np.array([[1, 0.6, 0], [0.6, 1, -0.2], [0, -0.2, 1]])
    m, r, lum = uncertainties.correlated_values_norm(pairs, matrix)
    n = uncertainties.ufloat(2.25, 1.5 / np.sqrt(12))
    expected = unit_value() / 1.5 * m**2 / (r * lum) * (3 / (5 - n))
    assert posterior.linear_value(OUTPUT)[0] == pytest.approx(expected.n, rel=1e-10)
    # ln w is linearised at the mean index, so that w is too
    assert posterior.linear_uncertainty(OUTPUT)[0] == pytest.approx(expected.s, rel=1e-10)


def test_variables_of_a_star_stay_correlated_with_the_inputs():
    posterior = propagate(Stars.of(mass=(1.02, 0.03), radius=(1.05, 0.02), luminosity=(1.1, 0.1)))
    variables = posterior.linear(0)
    assert variables[OUTPUT].n == pytest.approx(posterior.linear_value(OUTPUT)[0], rel=1e-10)
    assert variables[OUTPUT].s == pytest.approx(posterior.linear_uncertainty(OUTPUT)[0], rel=1e-10)
    # |E|/(t L) is a constant: calculating on with both loses no correlation
    constant = variables["binding_energy"] / (variables[OUTPUT] * variables["luminosity"])
    assert constant.s / constant.n == pytest.approx(0.0, abs=1e-12)
    log = umath.log(variables["binding_energy"])
    assert log.derivatives[variables["radius"]] * variables["radius"].n == pytest.approx(-1.0, rel=1e-9)


def test_linear_of_random_stars_equals_the_uncertainties_package():
    rng = np.random.default_rng(5)
    for number in range(20):
        posterior = propagate(random_star(rng, number))
        variable = posterior.linear(0)[OUTPUT]
        assert posterior.linear_value(OUTPUT)[0] == pytest.approx(variable.n, rel=1e-10)
        assert posterior.linear_uncertainty(OUTPUT)[0] == pytest.approx(variable.s, rel=1e-10)


def bias(relative, prior):
    """ln(linear value) minus the exact mean of ln Y."""
    stars = Stars.of(mass=(1.0, relative), radius=(1.0, 0.7 * relative), luminosity=(1.0, 1.3 * relative))
    posterior = propagate(stars, prior=prior)
    return np.log(posterior.linear_value(OUTPUT)[0]) - np.log(10) * posterior.log10_mean(OUTPUT)[0]


def scaled(half_width):
    ends = f"lower={2.25 - half_width}\nupper={2.25 + half_width}"
    return parse_prior(f"summary='x'\nsource='test'\n[index]\ndistribution='uniform'\n{ends}")


def test_the_error_of_first_order_is_of_second_order():
    """Halving the errors, and the prior with them, divides it by four."""
    point = parse_prior("summary='x'\nsource='test'\n[index]\ndistribution='point'\nvalue=2.25")
    assert bias(0.08, point) / bias(0.04, point) == pytest.approx(4.0, abs=0.5)
    assert bias(0.08, scaled(0.75)) / bias(0.04, scaled(0.375)) == pytest.approx(4.0, abs=0.5)
    # a prior that does not shrink with the errors leaves a floor: the ratio is not four
    assert abs(bias(0.08, scaled(0.75)) / bias(0.04, scaled(0.75)) - 4.0) > 0.5


@pytest.mark.parametrize("coordinate", ["index", "coefficient", "log_coefficient"])
def test_structure_enters_by_the_variable_its_density_is_stated_on(coordinate):
    ends = {
        "index": (1.5, 3.0),
        "coefficient": (6 / 7, 1.5),
        "log_coefficient": (np.log(6 / 7), np.log(1.5)),
    }[coordinate]
    text = f"summary='x'\nsource='t'\n[{coordinate}]\ndistribution='uniform'\nlower={ends[0]!r}\nupper={ends[1]!r}"
    text = text.replace("np.float64(", "").replace(")", "")
    posterior = propagate(Stars.of(mass="1 exact", radius="1 exact", luminosity="1 exact"), prior=parse_prior(text))
    middle, sd = (ends[0] + ends[1]) / 2, (ends[1] - ends[0]) / np.sqrt(12)
    value = {"index": 3 / (5 - middle), "coefficient": middle, "log_coefficient": np.exp(middle)}[coordinate]
    slope = {"index": 3 / (5 - middle) ** 2, "coefficient": 1.0, "log_coefficient": value}[coordinate]
    unit = unit_value() / 1.5
    assert posterior.linear_value(OUTPUT)[0] / unit == pytest.approx(value, rel=1e-10)
    assert posterior.linear_uncertainty(OUTPUT)[0] / unit == pytest.approx(slope * sd, rel=1e-10)


def test_mixtures_and_boundaries_have_no_derivative():
    star = Stars.of(mass=(0.36, 0.03), radius=(0.36, 0.02), luminosity=(0.02, 0.002))
    straddling = propagate(star, prior="by-mass")
    assert straddling.table()["status"][0] == "ok"
    assert np.isnan(straddling.linear_value(OUTPUT)[0])
    with pytest.raises(ValueError, match="no derivative"):
        straddling.linear(0)
    refused = propagate(star, prior="by-mass", engine="linear")
    assert refused.table()["status"][0] == "engine-refused"
    assert "quadrature" in refused.status_text()[0]
    clear = propagate(Stars.of(mass=(0.2, 0.01), radius=(0.2, 0.02), luminosity=(0.02, 0.002)), prior="by-mass")
    assert np.isfinite(clear.linear_value(OUTPUT)[0])


@pytest.mark.parametrize("scale", ["log", "linear"])
def test_as_an_engine_it_is_close_for_small_errors_and_a_narrow_prior(scale):
    stars = Stars.of(mass=(1.0, 0.004), radius=(1.0, 0.004), luminosity=(1.0, 0.005))
    exact = propagate(stars, prior="present-sun")
    first_order = propagate(stars, prior="present-sun", engine=Linear(scale=scale))
    probabilities = (0.05, 0.5, 0.95)
    ratio = first_order.quantile(probabilities, OUTPUT) / exact.quantile(probabilities, OUTPUT)
    # what first order leaves out is of second order in the distance from the centre
    reach = 1.645 * first_order.log10_sd(OUTPUT)[0] * np.log(10)
    np.testing.assert_allclose(ratio, 1.0, atol=reach**2)
    # and far off, to either side, for the large error and wide prior of its docstring
    wide = Stars.of(mass=(1.0, 0.3), radius=(1.0, 0.02), luminosity=(1.0, 0.05))
    first_order = propagate(wide, prior="wide-index", engine=Linear(scale=scale)).quantile(0.02275, OUTPUT)
    right = propagate(wide, prior="wide-index", engine=MonteCarlo()).quantile(0.02275, OUTPUT)
    assert abs(first_order[0] / right[0] - 1.0) > 0.3


def test_linear_in_y_reaches_below_zero_and_says_so_as_zero():
    wide = Stars.of(mass=(1.0, 0.6), radius=(1.0, 0.02), luminosity=(1.0, 0.05))
    low = propagate(wide, prior="wide-index", engine=Linear(scale="linear")).quantile(0.02275, OUTPUT)
    assert low[0] == 0.0
