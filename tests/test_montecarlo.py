"""Draws against quadrature, least squares and closed forms; with negative controls."""

from dataclasses import replace

import numpy as np
import pytest

from cases import PROBABILITIES, random_star
from stellerg import Conventions, Stars, load_prior, propagate
from stellerg.assembly import assemble
from stellerg.engines.adaptive import numerical_tolerance
from stellerg.engines.least_squares import fit
from stellerg.engines.montecarlo import MonteCarlo
from stellerg.engines.quadrature import Quadrature
from stellerg.engines.sampling import Plan, sample
from stellerg.errors import EngineError
from stellerg.inputs import measured_from
from stellerg.observables import OBSERVABLES

OUTPUTS = ("binding_energy", "kelvin_helmholtz_time")
DRAWS = 100_000
SEED = 20261201


def problem_of(stars, prior="uniform-index", use=None):
    return assemble(stars, OUTPUTS, Conventions(), load_prior(prior), use).problems[0]


def z_scores(problem, wrong=1.0):
    """z of the number of plain draws below quadrature's quantiles, (output, p)."""
    edges = Quadrature().solve(problem).quantile(PROBABILITIES) + np.log(wrong)
    answer = MonteCarlo(draws=DRAWS, seed=SEED, kind="plain").solve(problem)
    share = answer.cumulative(edges)[0, :2]
    return DRAWS * (share - PROBABILITIES) / np.sqrt(DRAWS * PROBABILITIES * (1 - PROBABILITIES))


def forty_problems():
    rng = np.random.default_rng(SEED)
    problems = [problem_of(random_star(rng, number)) for number in range(28)]
    for number in range(28, 40):  # correlated log-normal stars, some of them near the boundary of by-mass
        rho = rng.uniform(-0.9, 0.9)
        mass = 0.35 * np.exp(rng.normal(0.0, 0.1)) if number % 2 else 1.3
        stars = Stars.of(
            f"star {number}",
            shape="lognormal",
            correlation={("mass", "radius"): rho, ("radius", "luminosity"): 0.3},
            mass=(mass, 0.1 * mass),
            radius=(mass, 0.05 * mass),
            luminosity=(mass**3, 0.1 * mass**3),
        )
        problems.append(problem_of(stars, "by-mass" if number % 2 else "uniform-index"))
    return problems


@pytest.fixture(scope="module")
def scores():
    return np.array([z_scores(problem) for problem in forty_problems()])


def test_plain_draws_agree_with_quadrature_on_forty_random_stars(scores):
    assert np.abs(scores).max() < 5.0, f"largest |z| {np.abs(scores).max():.2f}"
    rms = np.sqrt(np.mean(scores**2, axis=0))
    assert ((rms > 0.65) & (rms < 1.4)).all(), f"rms over stars by output and p: {rms}"


def test_a_law_wrong_by_two_per_cent_fails_the_same_comparison():
    wrong = np.array([z_scores(problem, wrong=1.02) for problem in forty_problems()[::8]])
    rms = np.sqrt(np.mean(wrong**2, axis=0))
    assert np.abs(wrong).max() > 5.0
    assert not ((rms > 0.65) & (rms < 1.4)).all()


def test_low_discrepancy_draws_agree_within_their_standard_error():
    """The stated error is that of the cumulative: 40 stars, every |difference| below 5 of it."""
    ratios = []
    for problem in forty_problems():
        edges = Quadrature().solve(problem).quantile(PROBABILITIES)
        answer = MonteCarlo(draws=2**16, seed=SEED).solve(problem)
        difference = np.abs(answer.cumulative(edges) - PROBABILITIES).max(axis=-1)
        ratios.append((difference / answer.numerical_error)[0, :2])
    ratios = np.array(ratios)
    assert ratios.max() < 5.0
    # low-discrepancy points are worth more than plain draws of the same number
    plain = 0.5 / np.sqrt(2**16)
    assert np.median(answer.numerical_error) < 0.7 * plain


def test_draws_below_the_quantiles_of_montecarlo_are_its_probabilities():
    problem = forty_problems()[0]
    answer = MonteCarlo().solve(problem)
    share = answer.cumulative(answer.quantile(PROBABILITIES))
    np.testing.assert_allclose(share, np.broadcast_to(PROBABILITIES, share.shape), atol=1.01 / 2**14)


def repeated(count, value=1.0, relative=0.2):
    """A problem whose design repeats one row: `count` equal values of the mass; radius and luminosity exact."""
    base = problem_of(
        Stars.of(mass=(value, relative * value), radius="1 exact", luminosity="1 exact"), prior="polytrope-3"
    )
    return replace(
        base,
        inputs=("mass",) * count,
        measured=base.measured * count,
        design=np.repeat(base.design, count, axis=0),
        base=np.repeat(base.base, count, axis=1),
    )


@pytest.mark.parametrize("count", [2, 5, 10])
def test_equal_values_of_one_quantity_give_that_value_as_median(count):
    problem = repeated(count)
    answer = MonteCarlo(draws=2**18, seed=SEED).solve(problem)
    exact = problem_of(Stars.of(mass="1 exact", radius="1 exact", luminosity="1 exact"), prior="polytrope-3")
    expected = np.exp(0.5 * (exact.constant + np.log(1.5))[0, 0])  # |E| goes as M^2
    median = np.exp(0.5 * answer.quantile([0.5])[0, 0, 0])
    assert median / expected == pytest.approx(1.0, abs=1e-3)
    # the spread is that of the mean of `count` normal values: JCGM 101 and the reference density at work
    low, high = np.exp(0.5 * answer.quantile([0.158655, 0.841345])[0, 0]) / expected
    assert (high - low) / 2 == pytest.approx(0.2 / np.sqrt(count), rel=5e-3)


def test_a_target_without_its_reference_density_would_fail():
    """Negative control: dropping |J'J|^(1/2) moves the median of five equal values by more than 1e-3."""
    problem = repeated(5)
    draws = sample(problem, Plan(2**16, SEED))
    reference = draws.log_reference_density()
    possible = np.isfinite(draws.log_weight) & np.isfinite(reference)
    log_weight = np.where(possible, draws.log_weight - np.where(possible, reference, 0.0), -np.inf)
    weight = np.exp(log_weight - log_weight.max())
    order = np.argsort(draws.log_outputs[0, 0])
    half = np.searchsorted(np.cumsum(weight[0, order]) / weight.sum(), 0.5)
    answer = MonteCarlo(draws=2**16, seed=SEED).solve(problem)
    wrong = draws.log_outputs[0, 0, order[half]]
    assert abs(wrong - answer.quantile([0.5])[0, 0, 0]) > 2e-3


def test_over_determined_log_normal_rows_agree_with_quadrature():
    names = ("mass", "log_mass", "radius", "luminosity", "effective_temperature")
    stars = Stars.of(
        mass=(1.1, 0.05),
        log_mass=(0.03, 0.03),
        radius=(1.2, 0.05),
        luminosity=(1.6, 0.1),
        effective_temperature=(5700.0, 100.0),
        shape="lognormal",
        correlation={("mass", "radius"): 0.5},
    )
    problem = problem_of(stars, use=names)
    edges = Quadrature().solve(problem).quantile(PROBABILITIES)
    answer = MonteCarlo(draws=2**17, seed=SEED).solve(problem)
    assert answer.diagnostics["effective_draws"][0] > 0.3 * 2**17
    difference = np.abs(answer.cumulative(edges) - PROBABILITIES).max(axis=-1)
    assert (difference < 5.0 * answer.numerical_error).all()


def test_a_useless_extra_measurement_changes_nothing():
    given = {"mass": (1.2, 0.2), "radius": (1.3, 0.1, 0.2), "luminosity": (1.5, 0.3)}
    alone = problem_of(Stars.of(**given))
    joined = problem_of(Stars.of(log_mass=(0.5, 1e5), **given), use=(*given, "log_mass"))
    edges = Quadrature().solve(alone).quantile(PROBABILITIES)
    answer = MonteCarlo(draws=2**17, seed=SEED).solve(joined)
    difference = np.abs(answer.cumulative(edges) - PROBABILITIES).max(axis=-1)
    assert (difference < 5.0 * answer.numerical_error).all()


def test_least_squares_of_normal_values_is_their_weighted_mean():
    base = repeated(2)
    unequal = measured_from(OBSERVABLES["mass"], (1.3, 0.1))
    problem = replace(base, measured=(base.measured[0], unequal))
    found = fit(problem)
    weights = np.array([1 / 0.2**2, 1 / 0.1**2])
    mean = (weights @ [1.0, 1.3]) / weights.sum()
    mass = np.exp(problem.base[0, 0] + problem.design[0] @ found.parameters[0])
    assert mass == pytest.approx(mean, abs=2e-6)  # the cut at zero, 3e-7 of the probability, moves it
    assert found.chi2[0] == pytest.approx(0.3**2 / (0.2**2 + 0.1**2), rel=1e-5)
    assert found.converged[0]


def test_contradicting_measurements_are_flagged_and_hopeless_ones_are_not_converged():
    given = {"radius": (1.0, 0.05), "luminosity": (1.0, 0.05)}
    use = ("mass", "log_mass", "radius", "luminosity")
    odd = propagate(Stars.of(mass=(1.0, 0.1), log_mass=(0.25, 0.05), **given), use=use)
    assert odd.probability[0] < 0.01
    assert "inconsistent-observables" in odd.table()["flags"][0]
    # hard ends of two three-quantile masses that do not overlap: no mass satisfies both
    apart = propagate(Stars.of(mass=(1.0, 0.02, 0.01), log_mass=(-0.3, 0.01, 0.02), **given), use=use)
    assert apart.table()["status"][0] == "not-converged"
    assert "no value satisfies all measurements" in apart.status_text()[0]


def test_a_correlation_of_one_is_honoured():
    """Mass and radius in step: R^-1 takes back half of M^2."""
    given = {"mass": (1.0, 0.1), "radius": (1.0, 0.1), "luminosity": "1 exact"}
    stars = Stars.of(correlation={("mass", "radius"): 1.0}, shape="lognormal", **given)
    problem = problem_of(stars, "polytrope-3")
    answer = MonteCarlo(draws=2**14).solve(problem)
    assert answer.log_sd[0, 0] == pytest.approx(0.1, rel=5e-3)
    assert Quadrature().solve(problem).log_sd[0, 0] == pytest.approx(0.1, rel=1e-9)


def test_draws_store_u_from_which_the_coefficient_follows():
    posterior = propagate(
        Stars.of(["a", "b"], mass=([1.0, 2.0], [0.1, 0.2]), radius=([1.0, 2.0], [0.1, 0.1])),
        outputs=("binding_energy",),
    )
    draws = posterior.draws(512, seed=3)
    np.testing.assert_allclose(draws.outputs["structure_coefficient"], 3 / (5 - (1.5 + 1.5 * draws.u)), rtol=1e-12)
    assert set(draws.latents) == {"mass", "radius"}
    assert (draws.log_weight == 0.0).all()
    # draws of two stars are independent of each other along the draw index
    correlation = np.corrcoef(draws.u)[0, 1]
    assert abs(correlation) < 5 / np.sqrt(512)
    with pytest.raises(ValueError, match="names 2 stars"):
        propagate(Stars.of(["a", "a"], mass=([1.0, 2.0], [0.1, 0.2]), radius=([1.0, 2.0], [0.1, 0.1]))).draws(16)


def test_a_structure_model_leaves_the_posterior_of_mass_and_radius_untouched():
    stars = Stars.of("k", mass=(0.36, 0.03), radius=(0.36, 0.02), luminosity=(0.02, 0.002))
    drawn = [propagate(stars, prior=prior).draws(1024) for prior in ("uniform-index", "by-mass", "polytrope-3")]
    for name in ("mass", "radius", "luminosity"):
        for other in drawn[1:]:
            np.testing.assert_array_equal(other.latents[name], drawn[0].latents[name])
        share = (drawn[0].latents[name] < {"mass": 0.36, "radius": 0.36, "luminosity": 0.02}[name]).mean()
        assert share == pytest.approx(0.5, abs=0.01)  # low-discrepancy: far closer than plain draws


def test_wrong_plans_are_refused():
    for options in ({"draws": 1000}, {"draws": 0}, {"kind": "other"}, {"randomisations": 0}):
        with pytest.raises(EngineError):
            MonteCarlo(**options)


@pytest.mark.parametrize("digits", [1, 2])
def test_adaptive_draws_stand_to_the_digits_asked_for(digits):
    """Mean, standard deviation and quantiles of log10 Y lie within the tolerance of JCGM 101, 7.9.2, of the exact."""
    stars = Stars.of("a", mass=(1.0, 0.2), radius=(1.0, 0.1, 0.15), luminosity=(1.0, 0.1))
    problem = problem_of(stars)
    exact = Quadrature().solve(problem)
    answer = MonteCarlo(digits=digits, seed=SEED).solve(problem)
    assert answer.status[0] == 0
    scale = 1.0 / np.log(10.0)
    tolerance = numerical_tolerance(exact.log_sd * scale, digits)[0]
    for found, true in (
        (answer.log_mean, exact.log_mean),
        (answer.log_sd, exact.log_sd),
        *((answer.quantile([p])[..., 0], exact.quantile([p])[..., 0]) for p in PROBABILITIES),
    ):
        assert (np.abs(found - true)[0] * scale <= tolerance).all()
    assert answer.diagnostics["draws"][0] >= 10 * 2**14


def test_more_digits_take_more_draws_and_a_cap_is_not_converged():
    stars = Stars.of("a", mass=(1.0, 0.2), radius=(1.0, 0.1), luminosity=(1.0, 0.1))
    draws = [MonteCarlo(digits=d, kind="plain").solve(problem_of(stars)).diagnostics["draws"][0] for d in (1, 2)]
    assert draws[1] > draws[0]
    posterior = propagate(stars, engine=MonteCarlo(digits=3, kind="plain", most_blocks=3))
    assert posterior.table()["status"][0] == "not-converged"
    assert "after 3 blocks of 16384 draws" in posterior.status_text()[0]


def test_adaptive_draws_of_a_star_do_not_depend_on_its_company():
    given = {
        "mass": ([1.0, 1.0], [0.2, 0.02]),
        "radius": ([1.0, 1.0], [0.1, 0.1]),
        "luminosity": ([1.0, 2.0], [0.1, 0.1]),
    }
    stars = Stars.of(["a", "b"], **given)
    together = MonteCarlo(digits=2).solve(problem_of(stars))
    for row in range(2):
        alone = MonteCarlo(digits=2).solve(problem_of(stars.take(np.array([row]))))
        np.testing.assert_array_equal(alone.quantile(PROBABILITIES)[0], together.quantile(PROBABILITIES)[row])
        assert alone.blocks[0] == together.blocks[row]


def test_weighted_draws_are_adapted_too():
    stars = Stars.of("a", mass=(1.0, 0.2), log_mass=(0.0, 0.05), radius=(1.0, 0.1), luminosity=(1.0, 0.1))
    problem = problem_of(stars, use=("mass", "log_mass", "radius", "luminosity"))
    answer = MonteCarlo(digits=2, seed=SEED).solve(problem)
    plain = MonteCarlo(draws=2**19, seed=SEED + 1).solve(problem)
    tolerance = numerical_tolerance(plain.log_sd / np.log(10.0), 2)
    assert (np.abs(answer.log_mean - plain.log_mean) / np.log(10.0) <= tolerance).all()
