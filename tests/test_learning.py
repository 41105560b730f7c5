"""A learned structure prior: its likelihood against plain sums, its posterior against closed forms, its coverage."""

import dataclasses
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context

import numpy as np
import pytest
from scipy.special import ndtr
from scipy.stats import binom, kstest

from stellerg.errors import EngineError, InputError
from stellerg.keyed_random import hash_identifiers
from stellerg.measured import Scale
from stellerg.measured.values import assign
from stellerg.report.learned_figure import predictive_figure
from stellerg.structure import learned_file
from stellerg.structure.files import parse_prior
from stellerg.structure.learned_file import learned_file_text
from stellerg.structure.learning import ChainSettings, learn_prior
from stellerg.structure.learning_likelihood import LEARNED_FROM, ObservedStructures
from stellerg.structure.model import AppliesTo
from stellerg.structure.relations import log10_apsidal_constant, log10_moment_of_inertia_factor

STARS = 30
TRUE_MEAN, TRUE_SPREAD = 3.0, 0.3
SHORT = ChainSettings(burn_in=50, times=8.0)  # for what needs no fine quantiles


def sample(random, *, stars=STARS, mean=TRUE_MEAN, spread=TRUE_SPREAD, error=0.03, misfit=None, offset=0.0):
    """Stars of a normal population, observed with relative errors (dex for k2), one misfit for all unless given."""
    index = random.normal(mean, spread, stars) + offset
    misfit = random.normal(0.0, 0.25) if misfit is None else misfit
    noise = error * random.standard_normal((3, stars))
    k2 = log10_apsidal_constant(index - misfit) + noise[0]
    inertia = 10.0 ** log10_moment_of_inertia_factor(index - 0.55 * misfit) * (1.0 + noise[1])
    coefficient = 3.0 / (5.0 - index) * (1.0 + noise[2])
    return {
        "log_k2": assign(k2, error, error, scale=Scale.DEX),
        "moment_of_inertia_factor": assign(inertia, error * inertia, error * inertia),
        "structure_coefficient": assign(coefficient, error * coefficient, error * coefficient),
    }


def some(measured, *names):
    return {name: measured[name] for name in names}


def keys(stars=STARS):
    return hash_identifiers([f"star {number}" for number in range(stars)])


# --- the likelihood ---

CASES = {
    "k2 normal": ("log_k2", [-1.9, -1.6, -2.4], [0.05, 0.01, 0.15], [0.05, 0.01, 0.15], None, Scale.DEX),
    "inertia normal": ("moment_of_inertia_factor", [0.07, 0.2, 0.02], [0.01, 0.002, 0.004], [0.01, 0.002, 0.004], None),
    "three-quantile": ("moment_of_inertia_factor", [0.07, 0.2, 0.02], [0.01, 0.02, 0.004], [0.006, 0.03, 0.003], None),
    "split normal": ("structure_coefficient", [1.5, 1.0, 2.5], [0.1, 0.2, 0.3], [0.15, 0.1, 0.2], "split-normal"),
    "log-normal": ("structure_coefficient", [1.5, 1.0, 0.7], [0.01, 0.2, 0.1], [0.01, 0.2, 0.1], "lognormal"),
}


@pytest.mark.parametrize("case", CASES)
def test_marginal_likelihood_is_the_integral_over_n(case):
    name, value, upper, lower, shape, *scale = CASES[case]
    measured = assign(value, upper, lower, shape=shape, scale=scale[0] if scale else Scale.LINEAR)
    observed = ObservedStructures({name: measured}, np.array([1.0, 0.5, 0.0]))
    # populations sharper and wider than the data, in the middle, and cut by each end of [0, 4.95]
    mean = np.broadcast_to([3.0, 2.9, 3.0, 0.1, 4.8], (3, 5))
    spread = np.array([0.3, 0.01, 2.0, 0.5, 0.4])
    misfit = np.broadcast_to([0.0, -0.2, 0.3, 0.5, -0.5], (3, 5))
    found = observed.log_marginal(mean, spread, misfit)
    index = np.linspace(0.0, 4.95, 49501)
    part, logarithm = LEARNED_FROM[name]
    for star in range(3):
        for walker in range(5):
            shift = part * (1.0, 0.5, 0.0)[star] * misfit[star, walker]
            score = measured.take([star]).score(logarithm(np.clip(index - shift, 0.0, 4.95))[None])[0][0]
            exponent = -0.5 * ((index - mean[star, walker]) / spread[walker]) ** 2 - 0.5 * score**2
            ends = (np.array([0.0, 4.95]) - mean[star, walker]) / spread[walker]
            factor = np.sqrt(2.0 * np.pi) * spread[walker] * (ndtr(ends[1]) - ndtr(ends[0]))
            top = exponent.max()
            integral = np.trapezoid(np.exp(exponent - top), index) / factor
            assert abs(found[star, walker] - np.log(integral) - top) < 5e-3, (star, walker)


def test_two_observables_multiply_and_each_star_counts_what_it_has():
    k2 = assign([-1.9, -1.7, np.nan], [0.05, 0.03, np.nan], [0.05, 0.03, np.nan], scale=Scale.DEX)
    inertia = assign([0.07, np.nan, 0.08], [0.01, np.nan, 0.01], [0.01, np.nan, 0.01])
    both = ObservedStructures({"log_k2": k2, "moment_of_inertia_factor": inertia}, np.ones(3))
    mean, misfit = np.full((3, 2), 3.0), np.full((3, 2), 0.1)
    found = both.log_marginal(mean, np.array([0.3, 0.1]), misfit)
    alone = ObservedStructures({"log_k2": k2.take([1])}, np.ones(1))
    np.testing.assert_allclose(found[1:2], alone.log_marginal(mean[1:2], np.array([0.3, 0.1]), misfit[1:2]), rtol=1e-13)
    alone = ObservedStructures({"moment_of_inertia_factor": inertia.take([2])}, np.ones(1))
    np.testing.assert_allclose(found[2:], alone.log_marginal(mean[2:], np.array([0.3, 0.1]), misfit[2:]), rtol=1e-13)
    # star 0: both scores at a point population
    point = both.log_marginal(np.full((3, 1), 3.0), np.array([1e-4]), np.full((3, 1), 0.1))[0, 0]
    scores = [
        (float(log10_apsidal_constant(2.9)) + 1.9) / 0.05,
        (10.0 ** float(log10_moment_of_inertia_factor(3.0 - 0.055)) - 0.07) / 0.01,
    ]
    # the normal restricted to positive values differs from the plain one by ndtr(-7)
    assert abs(point + 0.5 * np.sum(np.square(scores))) < 1e-3
    assert both.spare.tolist() == [1.0, 0.0, 0.0]


def test_an_impossible_population_has_no_likelihood():
    observed = ObservedStructures({"log_k2": assign([-1.9], 0.05, 0.05, scale=Scale.DEX)}, np.ones(1))
    found = observed.log_marginal(np.array([[60.0, 3.0]]), np.array([0.1, 0.1]), np.zeros((1, 2)))
    assert found[0, 0] == -np.inf
    assert np.isfinite(found[0, 1])


# --- the posterior ---


@pytest.fixture(scope="module")
def learned():
    """Fit of one sample with both observables of the misfit, and its misfit."""
    random = np.random.default_rng(4101)
    return learn_prior(some(sample(random, misfit=0.2), "log_k2", "moment_of_inertia_factor"), keys())


def test_sharp_coefficients_give_the_posterior_of_a_normal_sample():
    measured = some(sample(np.random.default_rng(4102), error=1e-4), "structure_coefficient")
    fit = learn_prior(measured, keys(), settings=ChainSettings(times=50.0))
    index = 5.0 - 3.0 / measured["structure_coefficient"].value
    # flat in the mean: mean | s is normal(average, s/sqrt N), and s keeps s^-(N-1) exp(-N v/(2 s^2)) times its prior
    ln_s = np.linspace(np.log(0.05), np.log(3.0), 20001)
    spread = np.exp(ln_s)
    weight = np.exp((2.0 - STARS) * ln_s - 0.5 * STARS * index.var() / spread**2) / (1.0 + (spread / 0.3) ** 2)
    weight /= weight.sum()
    expected, second = (weight * spread).sum(), (weight * spread**2).sum()
    sd_mean, sd_spread = np.sqrt(second / STARS), np.sqrt(second - expected**2)
    found = fit.summary()
    # about 3000 independent draws: 0.1 is five standard errors of a mean, and four of a standard deviation
    assert abs(found["mean"][0] - index.mean()) < 0.1 * sd_mean
    assert abs(found["mean"][1] / sd_mean - 1.0) < 0.1
    assert abs(found["spread"][0] - expected) < 0.1 * sd_spread
    assert abs(found["spread"][1] / sd_spread - 1.0) < 0.1
    assert fit.stages == ()  # nothing sees the misfit
    np.testing.assert_allclose(fit.observed, index, atol=1e-5)


def test_the_misfit_does_not_average_out():
    """However many stars and however sharp, k2 alone leaves the mean uncertain by the misfit of its stage."""
    random = np.random.default_rng(4103)
    few = learn_prior(some(sample(random, error=0.003), "log_k2"), keys(), settings=SHORT)
    many = learn_prior(some(sample(random, stars=300, error=0.003), "log_k2"), keys(300), settings=SHORT)
    # 0.25 with the share of the mean itself, spread/sqrt(stars); a tenth for the draws
    for fit, stars in ((few, 30), (many, 300)):
        assert fit.mean.std() == pytest.approx(np.hypot(0.25, TRUE_SPREAD / stars**0.5), rel=0.1)
    # control: what does not see the misfit averages out
    free = learn_prior(some(sample(random, error=0.003), "structure_coefficient"), keys(), settings=SHORT)
    assert free.mean.std() < 0.1


def test_two_observables_tell_the_misfit(learned):
    misfit, sd = learned.summary()["misfit all"]
    assert abs(misfit - 0.2) < 3.0 * sd
    assert sd < 0.05
    assert learned.mean.std() < 0.1


def test_stages_have_misfits_of_their_own():
    random = np.random.default_rng(4104)
    stage = np.array(["early", "late"] * 15)
    true = {"early": -0.1, "late": 0.3}
    measured = sample(random, misfit=np.array([true[label] for label in stage]), error=0.02)
    measured = some(measured, "log_k2", "moment_of_inertia_factor")
    fit = learn_prior(measured, keys(), stages=stage, settings=SHORT)
    assert fit.stages == ("early", "late")
    for label, misfit in true.items():
        found, sd = fit.summary()[f"misfit {label}"]
        assert abs(found - misfit) < 3.0 * sd < 0.2
    # control: taken as one stage, the observables of a star disagree and the check says so
    one = learn_prior(measured, keys(), settings=SHORT)
    probability = {check.name: check.probability for check in one.checks}
    assert probability["disagreement within stars"] < 0.01
    assert {check.name: check.probability for check in fit.checks}["disagreement within stars"] > 0.01


def test_stars_that_are_polytropes_have_no_misfit():
    random = np.random.default_rng(4105)
    measured = some(sample(random, misfit=0.0), "log_k2")
    fit = learn_prior(measured, keys(), misfit_scale=np.zeros(STARS), settings=SHORT)
    assert fit.stages == ()
    assert fit.mean.std() < 0.1
    assert abs(fit.mean.mean() - TRUE_MEAN) < 4.0 * fit.mean.std()


def test_a_slope_is_found():
    random = np.random.default_rng(4106)
    log_mass = np.linspace(0.0, 2.0, STARS)
    measured = some(sample(random, offset=0.5 * (log_mass - 1.0)), "structure_coefficient")
    fit = learn_prior(measured, keys(), log_mass=log_mass, settings=SHORT)
    slope, sd = fit.summary()["slope"]
    assert abs(slope - 0.5) < 3.0 * sd < 0.5
    assert fit.average_log_mass == pytest.approx(1.0)


def test_same_seed_same_draws():
    measured = some(sample(np.random.default_rng(4107)), "structure_coefficient")
    one, two = (learn_prior(measured, keys(), settings=SHORT) for _ in range(2))
    np.testing.assert_array_equal(one.draws, two.draws)
    np.testing.assert_array_equal(one.replicated, two.replicated)
    other = learn_prior(measured, keys(), settings=dataclasses.replace(SHORT, seed=1))
    assert not np.array_equal(one.draws[0], other.draws[0])


def test_stars_without_an_observable_are_left_out():
    measured = sample(np.random.default_rng(4108), stars=10)
    value = measured["structure_coefficient"].value.copy()
    value[3] = np.nan
    error = 0.03 * value
    fit = learn_prior({"structure_coefficient": assign(value, error, error)}, keys(10), settings=SHORT)
    assert fit.stars == 9
    assert keys(10)[3] not in fit.keys


# --- checks ---


def test_an_outlier_is_seen(learned):
    assert all(check.probability > 0.01 for check in learned.checks)
    measured = sample(np.random.default_rng(4109), error=0.02, spread=0.1)
    value = measured["structure_coefficient"].value.copy()
    value[0] = 3.0 / (5.0 - 4.2)  # twelve standard deviations of the others from their mean
    error = 0.02 * value
    fit = learn_prior({"structure_coefficient": assign(value, error, error)}, keys(), settings=SHORT)
    probability = {check.name: check.probability for check in fit.checks}
    assert probability["largest normalised deviation"] < 0.01


def test_replications_scatter_as_the_population_and_the_errors_do(learned):
    noise = np.mean(learned.observed_sd**2)
    expected = np.sqrt(np.mean(learned.spread**2) + noise)
    # 1000 replications of 30 stars: 2 % is more than four standard errors
    assert np.sqrt(learned.replicated.var(axis=1, ddof=1).mean()) == pytest.approx(expected, rel=0.02)
    assert learned.replicated.shape == (1000, STARS)


# --- refusals ---


@pytest.mark.parametrize(
    ("change", "words"),
    [
        ({"stars": 4}, "4 stars have a structure observable, at least 5"),
        ({"twice": True}, "a star stands twice"),
        ({"name": "mass"}, "'mass' does not observe structure"),
        ({"exact": True}, "given as exact for 1 star; it needs an error"),
        ({"log_mass": True}, "1 star without a mass"),
    ],
    ids=lambda value: value if isinstance(value, str) else next(iter(value)),
)
def test_refusals(change, words):
    stars = change.get("stars", 6)
    value = np.linspace(1.4, 1.6, stars)
    exact = np.zeros(stars, bool)
    exact[0] = change.get("exact", False)
    measured = {change.get("name", "structure_coefficient"): assign(value, 0.1, 0.1, exact=exact)}
    names = keys(stars)
    if "twice" in change:
        names[1] = names[0]
    log_mass = np.array([np.nan, *np.zeros(stars - 1)]) if "log_mass" in change else None
    with pytest.raises(InputError, match=words):
        learn_prior(measured, names, log_mass=log_mass)


def test_chains_that_do_not_converge_are_refused():
    measured = some(sample(np.random.default_rng(4110)), "log_k2")
    short = ChainSettings(burn_in=1, block=20, most_steps=20)
    with pytest.raises(EngineError, match=r"not converged: 20 steps are .* autocorrelation times .* nested R-hat"):
        learn_prior(measured, keys(), settings=short)


@pytest.mark.parametrize("wrong", [{"ensembles": 3}, {"walkers": 9}, {"walkers": 4}, {"block": 0}, {"most_steps": 50}])
def test_settings_that_cannot_be(wrong):
    with pytest.raises(EngineError):
        ChainSettings(**wrong)


# --- the file ---


def test_the_file_says_what_was_learned(learned):
    text = learned_file_text(learned)
    model = parse_prior(text, "learned")
    (component,) = model.intervals[0].mixture.components
    total = np.mean(learned.spread**2) + learned.mean.var()
    assert component.family.location == pytest.approx(learned.mean.mean(), rel=1e-5)
    assert component.family.scale == pytest.approx(np.sqrt(total), rel=1e-5)
    assert model.common.within == "all"
    assert model.common.fraction == pytest.approx(learned.mean.var() / total, rel=1e-5)
    assert model.training == tuple(int(key) for key in learned.keys)
    assert 'observables = ["log_k2", "moment_of_inertia_factor"]' in text
    assert "30 stars" in model.summary
    assert "judgement" in model.source
    assert model.applies_to == AppliesTo()


def test_words_and_limits_of_the_caller(learned):
    limits = AppliesTo((0.8, 1.5), ("main-sequence",))
    text = learned_file_text(learned, summary='my "own"\nwords \\ ½ \x7f', source="Nobody 1999", applies_to=limits)
    model = parse_prior(text)
    assert model.summary == 'my "own" words \\ ½ \x7f'
    assert model.source == "Nobody 1999"
    assert model.applies_to == limits


def test_a_slope_is_written_as_a_staircase(learned):
    log_mass = np.linspace(np.log(0.9), np.log(2.0), STARS)  # 0.799 wide: four treads
    draws = np.column_stack([learned.draws[:, :2], np.full(len(learned.draws), 0.7)])
    parameters = ("mean", "ln_spread", "slope")
    sloped = dataclasses.replace(learned, parameters=parameters, draws=draws, log_mass=log_mass)
    model = parse_prior(learned_file_text(sloped))
    assert len(model.intervals) == 4
    edges = np.linspace(np.log(0.9), np.log(2.0), 5)
    np.testing.assert_allclose(model.edges, edges[1:-1], atol=1e-5)
    for place, piece in enumerate(model.intervals):
        family = piece.mixture.components[0].family
        middle = 0.5 * (edges[place] + edges[place + 1])
        expected = learned.mean.mean() + 0.7 * (middle - log_mass.mean())
        assert family.location == pytest.approx(expected, rel=1e-5)
    assert "in steps of at most 0.2 in ln M from 0.9 to 2, constant beyond" in model.summary


def test_the_file_knows_every_observable():
    assert tuple(LEARNED_FROM) == learned_file._TRAINED_ON


def test_the_figure_shows_observed_and_replicated(learned, tmp_path):
    path = tmp_path / "learned.svg"
    predictive_figure(learned, path)
    text = path.read_text(encoding="utf-8")
    for words in ("share of stars below n", "density of n", "two-sided predictive probability", "30 stars"):
        assert words in text


# --- coverage ---

SAMPLES = 100
CONTROLS = 40


def shares_covered(fits):
    """How many fits cover the true mean and spread, by level: {(name, level): count}."""
    counts = {}
    for level in (0.6827, 0.9545):
        ends = [0.5 - 0.5 * level, 0.5 + 0.5 * level]
        for name, truth in (("mean", TRUE_MEAN), ("spread", TRUE_SPREAD)):
            inside = [np.quantile(getattr(fit, name), ends) for fit in fits]
            counts[name, level] = sum(bool(low <= truth <= high) for low, high in inside)
    return counts


def fitted(number):
    """The fit of one sample and, for the first, that of a misfit of each star's own (for processes)."""
    measured = some(sample(np.random.default_rng([4111, number])), "log_k2")
    settings = ChainSettings(seed=number, walkers=12, burn_in=20, block=70, times=6.0)
    fit = learn_prior(measured, keys(), settings=settings)
    if number >= CONTROLS:
        return fit, None
    # a misfit of its own for each star, integrated over: 0.25 in n, in dex at its own k2, added to its error
    value = measured["log_k2"].value
    slope = (log10_apsidal_constant(fit.observed + 0.01) - log10_apsidal_constant(fit.observed)) / 0.01
    error = np.hypot(measured["log_k2"].upper, 0.25 * slope)
    apart = {"log_k2": assign(value, error, error, scale=Scale.DEX)}
    return fit, learn_prior(apart, keys(), misfit_scale=np.zeros(STARS), settings=settings)


@pytest.mark.slow
def test_coverage_with_a_common_misfit():
    """Stated intervals hold the truth as often as they say; with individual misfits those of the mean do not."""
    with ProcessPoolExecutor(2, mp_context=get_context("spawn")) as pool:
        pairs = list(pool.map(fitted, range(SAMPLES)))
    fits, controls = [fit for fit, _ in pairs], [control for _, control in pairs if control is not None]
    for (name, level), count in shares_covered(fits).items():
        low, high = binom.interval(0.999, SAMPLES, level)
        assert low <= count <= high, (name, level, count)
    # where the truth lies in each posterior is uniform too: a finer test of the mean
    places = [np.mean(fit.mean < TRUE_MEAN) for fit in fits]
    assert kstest(places, "uniform").pvalue > 1e-3
    for level in (0.6827, 0.9545):
        assert shares_covered(controls)["mean", level] < binom.interval(0.999, CONTROLS, level)[0]
