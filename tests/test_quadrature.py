"""The deterministic engine against closed forms, mpmath and the brute-force oracle."""

import mpmath
import numpy as np
import pytest
from scipy.special import ndtri

import oracle
from cases import PROBABILITIES, SHAPES, VALUES, WEIGHTS, oracle_terms, quoted, random_star
from stellerg import Conventions, Stars, load_prior, propagate
from stellerg.assembly import assemble
from stellerg.engines.quadrature import Quadrature
from stellerg.engines.smoothing import uniform_index
from stellerg.structure.files import parse_prior

OUTPUT = "kelvin_helmholtz_time"
TOLERANCE = {"lognormal": 1e-6, "normal": 1e-5, "three-quantile": 1e-4, "split-normal": 1e-4}


def problem_of(stars, prior="uniform-index", **options):
    return assemble(stars, (OUTPUT,), Conventions(), load_prior(prior), **options).problems[0]


def worst_against_oracle(posterior, prior):
    """Largest error of the oracle's cumulative at the reported quantiles."""
    t = np.log(posterior.quantile(PROBABILITIES, OUTPUT))[0]
    constant, inputs, weights = oracle_terms(posterior.pieces[0].answer.problem, OUTPUT)
    found = [oracle.cumulative(x - constant, inputs, weights, prior) for x in t]
    return float(np.abs(np.array(found) - PROBABILITIES).max())


@pytest.mark.parametrize("shape", SHAPES)
@pytest.mark.parametrize("third", WEIGHTS)
@pytest.mark.parametrize(
    "relative",
    [
        (1e-4, 1e-4, 1e-4), (1e-3, 1e-3, 1e-3), (0.01, 0.01, 0.01), (0.05, 0.05, 0.05), (0.1, 0.1, 0.1),
        (0.3, 0.3, 0.3), (0.3, 1e-4, 1e-4), (1e-4, 0.3, 1e-4), (1e-4, 1e-4, 0.3), (1e-4, 0.01, 0.3),
        (0.3, 0.01, 1e-3), (0.02, 0.1, 0.005),
    ],
)  # fmt: skip
def test_cumulative_at_the_reported_quantiles_against_the_oracle(shape, third, relative):
    rng = np.random.default_rng(20261201)
    names = ("mass", "radius", third)
    given = {n: quoted(rng, n, shape, r) for n, r in zip(names, relative, strict=True)}
    posterior = propagate(Stars.of(shape=shape, **given))
    assert worst_against_oracle(posterior, ("uniform", 1.5, 3.0)) < TOLERANCE[shape]


@pytest.mark.parametrize(
    ("prior", "for_oracle"),
    [
        ("wide-index", ("uniform", 1.5, 4.0)),
        ("polytrope-3", ("point", 3.0)),
        ("present-sun", ("normal", 3.14, 0.03)),
        ("uniform-coefficient", ("uniform-coefficient", 6 / 7, 3 / 2)),
        ("uniform-log-coefficient", ("uniform-log-coefficient", 6 / 7, 3 / 2)),
    ],
)
@pytest.mark.parametrize("shape", ["lognormal", "normal", "three-quantile"])
@pytest.mark.parametrize("relative", [1e-3, 0.03, 0.2])
def test_every_index_and_coefficient_prior_against_the_oracle(prior, for_oracle, shape, relative):
    rng = np.random.default_rng(7)
    names = ("mass", "radius", "luminosity")
    given = {n: (1.0, *quoted(rng, n, shape, relative)[1:]) for n in names}
    posterior = propagate(Stars.of(shape=shape, **given), prior=prior)
    assert worst_against_oracle(posterior, for_oracle) < TOLERANCE[shape]


def test_forty_random_stars_of_mixed_shapes_against_the_oracle():
    rng = np.random.default_rng(40)
    worst = [worst_against_oracle(propagate(random_star(rng, number)), ("uniform", 1.5, 3.0)) for number in range(40)]
    assert max(worst) < 1e-4, worst


def test_the_oracle_notices_a_law_wrong_by_two_per_cent():
    posterior = propagate(Stars.of(mass=(1.2, 0.02), radius=(1.3, 0.02), luminosity=(1.5, 0.02)))
    t = np.log(1.02 * posterior.quantile(0.5, OUTPUT))[0]
    constant, inputs, weights = oracle_terms(posterior.pieces[0].answer.problem, OUTPUT)
    assert abs(oracle.cumulative(t - constant, inputs, weights, ("uniform", 1.5, 3.0)) - 0.5) > 1e-2


@pytest.mark.parametrize("sigma", [1e-4, 1e-3, 0.01, 0.1, 0.5, 1.0, 2.0])
def test_closed_form_for_a_uniform_index_against_mpmath(sigma):
    mpmath.mp.dps = 50
    s, low, high = mpmath.mpf(sigma), mpmath.mpf("1.5"), mpmath.mpf(3)
    a, b = (mpmath.log(3 / (5 - n)) for n in (low, high))

    def exact(t):
        t = mpmath.mpf(t)
        x, y = (t - a) / s, (t - b) / s
        tail = mpmath.exp(s * s / 2 - t) * (mpmath.ncdf(x - s) - mpmath.ncdf(y - s))
        return 3 / (high - low) * (mpmath.exp(-a) * mpmath.ncdf(x) - mpmath.exp(-b) * mpmath.ncdf(y) - tail)

    places = np.concatenate([np.linspace(float(a) - 12 * sigma, float(b) + 12 * sigma, 61), [float(a), float(b)]])
    found, density = uniform_index(places[None, :], np.array([[sigma]]), 1.5, 3.0)
    assert np.abs(found[0] - np.array([float(exact(t)) for t in places])).max() < 1e-9
    slope = [float(mpmath.diff(exact, mpmath.mpf(t))) for t in places[::6]]
    assert np.abs(density[0, ::6] - slope).max() < 1e-7 * max(1.0, np.max(slope))


def test_closed_form_is_the_integral_it_claims_to_be():
    """mpmath integrates the definition itself: n uniform, X normal."""
    mpmath.mp.dps = 30
    for sigma, t in ((0.05, 0.1), (0.5, -0.3)):
        direct = mpmath.quad(
            lambda n, sigma=sigma, t=t: mpmath.ncdf((t - mpmath.log(3 / (5 - n))) / sigma) / 1.5,
            [1.5, 2, 2.5, 3],
        )
        found, _ = uniform_index(np.array([[t]]), np.array([[sigma]]), 1.5, 3.0)
        assert abs(float(direct) - found[0, 0]) < 1e-9


@pytest.mark.parametrize("relative", [1e-4, 0.02, 0.3])
def test_point_prior_and_log_normal_inputs_give_an_exactly_normal_logarithm(relative):
    given = {n: (VALUES[n], relative * VALUES[n]) for n in ("mass", "radius", "luminosity")}
    posterior = propagate(Stars.of(shape="lognormal", **given), prior="polytrope-3")
    sigma = relative * np.sqrt(4 + 1 + 1)
    t = np.log(posterior.quantile(PROBABILITIES, OUTPUT))[0]
    centre = np.log(posterior.median(OUTPUT)[0])
    np.testing.assert_allclose(t - centre, sigma * ndtri(PROBABILITIES), rtol=1e-9, atol=1e-13)
    assert posterior.log10_sd(OUTPUT)[0] == pytest.approx(sigma / np.log(10), rel=1e-12)


def test_exact_inputs_and_a_point_prior_give_zero_width():
    posterior = propagate(Stars.of(mass="1 exact", radius="2 exact", luminosity="3 exact"), prior="polytrope-1.5")
    values = posterior.quantile((1e-6, 0.5, 1 - 1e-6), OUTPUT)[0]
    assert values[0] == values[1] == values[2]
    assert posterior.log10_sd(OUTPUT)[0] == 0.0
    assert posterior.linear_uncertainty(OUTPUT)[0] == 0.0


def test_exact_inputs_leave_the_prior_of_structure():
    posterior = propagate(Stars.of(mass="1 exact", radius="1 exact", luminosity="1 exact"))
    coefficient = posterior.quantile(PROBABILITIES, "structure_coefficient")[0]
    np.testing.assert_allclose(coefficient, 3 / (5 - (1.5 + 1.5 * PROBABILITIES)), rtol=1e-13)
    ratio = posterior.quantile(PROBABILITIES, OUTPUT)[0] / coefficient
    np.testing.assert_allclose(ratio, ratio[0], rtol=1e-12)


def test_over_determined_log_normal_rows_equal_generalised_least_squares():
    rng = np.random.default_rng(3)
    names = ("mass", "log_mass", "radius", "luminosity", "effective_temperature", "log_surface_gravity")
    design = np.array([[1, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1], [0, -0.5, 0.25], [1, -2, 0]])
    relative = np.array([0.03, 0.05, 0.02, 0.06, 0.01, 0.10])
    reference = np.array([0, 0, 0, 0, np.log(5772.0), np.log(100 * 1.3271244e20 / 6.957e8**2)])
    truth = design @ np.log([1.1, 1.2, 1.6]) + reference + 0.3 * relative * rng.standard_normal(6)
    given = {}
    for name, log, r in zip(names, truth, relative, strict=True):
        given[name] = (log / np.log(10), r / np.log(10)) if name.startswith("log_") else (np.exp(log), r * np.exp(log))
    correlation = {("mass", "radius"): 0.6, ("luminosity", "effective_temperature"): -0.3}
    stars = Stars.of(shape="lognormal", correlation=correlation, **given)
    posterior = propagate(stars, prior="polytrope-3", use=names)
    assert posterior.engines[posterior.engine[0]] == "quadrature"
    covariance = np.diag(relative**2)
    for (first, second), rho in correlation.items():
        i, j = names.index(first), names.index(second)
        covariance[i, j] = covariance[j, i] = rho * relative[i] * relative[j]
    precision = np.linalg.inv(covariance)
    spread = np.linalg.inv(design.T @ precision @ design)
    estimate = spread @ design.T @ precision @ (truth - reference)
    weights = np.array([2.0, -1.0, -1.0])
    unit = propagate(Stars.of(mass="1 exact", radius="1 exact", luminosity="1 exact"), prior="polytrope-3").median(
        OUTPUT
    )[0]
    assert np.log(posterior.median(OUTPUT)[0] / unit) == pytest.approx(weights @ estimate, abs=1e-10)
    assert posterior.log10_sd(OUTPUT)[0] * np.log(10) == pytest.approx(np.sqrt(weights @ spread @ weights), abs=1e-10)
    residual = truth - reference - design @ estimate
    assert posterior.chi2[0] == pytest.approx(residual @ precision @ residual, rel=1e-8)
    assert posterior.degrees_of_freedom[0] == 3


def test_a_useless_extra_measurement_changes_nothing():
    given = {"mass": (1.2, 0.05), "radius": (1.3, 0.04), "luminosity": (1.5, 0.1)}
    alone = propagate(Stars.of(shape="lognormal", **given))
    joined = propagate(Stars.of(shape="lognormal", log_mass=(0.9, 1e6), **given), use=(*given, "log_mass"))
    np.testing.assert_allclose(joined.quantile(PROBABILITIES, OUTPUT), alone.quantile(PROBABILITIES, OUTPUT), rtol=1e-9)


def test_correlated_log_normal_inputs_have_the_variance_of_their_covariance_matrix():
    rho = 0.7
    stars = Stars.of(
        shape="lognormal",
        correlation={("mass", "radius"): rho},
        mass=(1.0, 0.03),
        radius=(1.0, 0.02),
        luminosity=(1.0, 0.05),
    )
    posterior = propagate(stars, prior="polytrope-3")
    variance = 4 * 0.03**2 + 0.02**2 + 0.05**2 - 2 * 2 * rho * 0.03 * 0.02
    assert posterior.log10_sd(OUTPUT)[0] * np.log(10) == pytest.approx(np.sqrt(variance), rel=1e-12)
    assert posterior.budget(OUTPUT)["correlations"][0] == pytest.approx(-4 * rho * 0.03 * 0.02 / variance, rel=1e-9)


BEYOND = {  # case: inputs, and the mass as (median, relative error) of a log-normal, or an input of its own
    "log-normal": ({"mass": (0.36, 0.03), "radius": (0.35, 0.02), "luminosity": (0.012, 0.001)}, "lognormal"),
    "normal": ({"mass": (0.36, 0.03), "radius": (0.35, 0.02), "luminosity": (0.012, 0.001)}, None),
    "only the mass uncertain": (
        {"mass": (0.36, 0.03), "radius": "0.35 exact", "luminosity": "0.012 exact"},
        None,
    ),
    "asymmetric": ({"mass": (0.34, 0.02, 0.03), "radius": (0.35, 0.02), "luminosity": (0.012, 0.001)}, None),
    "falls with the mass": (
        {"mass": (0.33, 0.1), "radius": (0.35, 0.002), "luminosity": (0.012, 1e-5)},
        "lognormal",
    ),
}


@pytest.mark.parametrize("case", BEYOND)
def test_a_mass_that_straddles_a_boundary_is_integrated_interval_by_interval(case):
    """Brute force over the mass: a fine grid of exact masses, each under the prior of its side."""
    given, shape = BEYOND[case]
    posterior = propagate(Stars.of(shape=shape, **given), prior="by-mass")
    answer = posterior.pieces[0].answer
    problem = answer.problem
    t = np.log(posterior.quantile(PROBABILITIES, OUTPUT))
    # 4,000 midpoints of equal probability in the mass, split exactly at 0.35
    edge = float(problem.measured[0].score(np.log([[0.35]]))[0][0, 0])
    from scipy.special import ndtr

    below = ndtr(edge)
    found = np.zeros(len(PROBABILITIES))
    for low, high, prior in (
        (0.0, below, "[index]\ndistribution='normal'\nmean=1.5\nstandard_deviation=0.05"),
        (below, 1.0, "[index]\ndistribution='uniform'\nlower=1.5\nupper=4.0"),
    ):
        p = low + (high - low) * (np.arange(4000) + 0.5) / 4000
        masses = np.exp(problem.measured[0].log_quantile(ndtri(p)[None, :]))[0]
        model = parse_prior(f"summary='x'\nsource='test'\n{prior}")
        fixed = {k: v for k, v in given.items() if k != "mass"}
        many = {
            k: (np.full(4000, v[0]), np.full(4000, v[1]), np.full(4000, v[-1])) if isinstance(v, tuple) else [v] * 4000
            for k, v in fixed.items()
        }
        stars = Stars.of(shape=shape, mass=[f"{m:.17g} exact" for m in masses], **many)
        each = propagate(stars, prior=model).cumulative(np.exp(t), OUTPUT)
        found += (high - low) * each.mean(axis=0)
    assert np.abs(found - PROBABILITIES).max() < 1e-5


def test_straddling_moments_agree_with_the_quantiles():
    """Mean and variance of ln Y are integrals of its quantile function over probability."""
    posterior = propagate(
        Stars.of(mass=(0.36, 0.03), radius=(0.35, 0.02), luminosity=(0.012, 0.001), shape="lognormal"),
        prior="by-mass",
    )
    node, weight = np.polynomial.legendre.leggauss(120)
    z = 8.0 * node
    from scipy.special import ndtr

    logs = np.log(posterior.quantile(ndtr(z), OUTPUT))[0]
    density = 8.0 * weight * np.exp(-0.5 * z**2) / np.sqrt(2 * np.pi)
    mean = (density * logs).sum()
    assert posterior.log10_mean(OUTPUT)[0] * np.log(10) == pytest.approx(mean, abs=2e-4)
    sd = np.sqrt((density * (logs - mean) ** 2).sum())
    assert posterior.log10_sd(OUTPUT)[0] * np.log(10) == pytest.approx(sd, rel=2e-3)


def test_density_is_the_derivative_of_the_cumulative():
    stars = Stars.of(mass=(1.2, 0.1, 0.15), radius=(1.3, 0.2), luminosity=(1.5, 0.3))
    for prior in ("uniform-index", "present-sun", "by-mass", "uniform-coefficient"):
        if prior == "present-sun":
            stars = Stars.of(mass=(1.0, 0.1), radius=(1.0, 0.2), luminosity=(1.0, 0.3))
        posterior = propagate(stars, prior=prior)
        t = posterior.quantile((0.1, 0.5, 0.9), OUTPUT)[0]
        h = 1e-4 * t
        slope = (posterior.cumulative(t + h, OUTPUT) - posterior.cumulative(t - h, OUTPUT))[0] / (2 * h)
        np.testing.assert_allclose(posterior.density(t, OUTPUT)[0], slope, rtol=2e-3)


def test_refusals_name_the_engine_to_use():
    engine = Quadrature()
    correlated = problem_of(
        Stars.of(mass=(1, 0.1), radius=(1, 0.1), luminosity=(1, 0.1), correlation={("mass", "radius"): 0.5})
    )
    twice = problem_of(
        Stars.of(mass=(1, 0.1), log_mass=(0, 0.04), radius=(1, 0.1), luminosity=(1, 0.1)),
        use=("mass", "log_mass", "radius", "luminosity"),
    )
    sums = problem_of(
        Stars.of(log_surface_gravity=(4.9, 0.03), radius=(0.35, 0.02), luminosity=(0.01, 0.001)), "by-mass"
    )
    reasons = [engine.reasons[engine.accepts(p)[0]] for p in (correlated, twice, sums)]
    assert len(set(reasons)) == 3
    assert all("montecarlo" in reason for reason in reasons)


def test_the_numerical_error_bounds_what_the_oracle_finds():
    """The stated error of the grid is at least a third of the true one, and the guard is not idle."""
    rng = np.random.default_rng(11)
    for shape in ("normal", "three-quantile", "split-normal"):
        given = {n: quoted(rng, n, shape, 0.3) for n in ("mass", "radius", "effective_temperature")}
        posterior = propagate(Stars.of(shape=shape, **given))
        stated = posterior.numerical_error(OUTPUT)[0]
        assert 0.0 < stated < 1e-4
        assert worst_against_oracle(posterior, ("uniform", 1.5, 3.0)) < 3.0 * stated + 1e-7
