"""One contract for every engine of the table: an engine cannot be added untested."""

import numpy as np
import pytest

from cases import PROBABILITIES
from stellerg import ENGINES, Conventions, Stars, load_prior, propagate
from stellerg.assembly import assemble
from stellerg.engines import AUTO_ORDER
from stellerg.engines.answer import Answer, Engine
from stellerg.status import Status

OUTPUTS = ("potential_energy", "kelvin_helmholtz_time", "free_fall_time")
STARS = Stars.of(
    ["Alder 1", "Alder 2", "Birch", "Cedar", "Dogwood"],
    mass=([1.0, 1.3, 0.8, 2.0, 5.0], [0.05, 0.1, 0.01, 0.3, 0.1], [0.05, 0.08, 0.02, 0.2, 0.1]),
    radius=([1.0, 1.5, 0.8, 2.0, 3.0], [0.02, 0.1, 0.01, 0.1, 0.1]),
    luminosity=([1.0, 4.0, 0.4, 20.0, 500.0], [0.1, 0.3, 0.01, 3.0, 20.0]),
)


def problem_of(stars=STARS, prior="uniform-index", **options):
    return assemble(stars, OUTPUTS, Conventions(), load_prior(prior), **options).problems[0]


# chains of these tests are short: they are about the vocabulary, not about digits
SHORT = {"mcmc": {"walkers": 24, "block": 200, "times": 20.0}}


@pytest.fixture(params=ENGINES)
def engine(request):
    return ENGINES[request.param](**SHORT.get(request.param, {}))


def problem_for(engine):
    """Five stars; two for the slowest engine."""
    return problem_of().take(np.arange(2)) if engine.name == "mcmc" else problem_of()


def test_the_table_names_every_engine_by_its_own_name():
    assert {name: made.name for name, made in ENGINES.items()} == {name: name for name in ENGINES}
    assert set(AUTO_ORDER) <= set(ENGINES)


def test_an_engine_says_which_stars_it_accepts_and_why_not(engine):
    assert isinstance(engine, Engine)
    assert engine.reasons[0] == ""
    problem = problem_for(engine)
    verdict = engine.accepts(problem)
    assert verdict.shape == (len(problem),)
    assert (verdict == 0).all()
    assert all(len(reason) > 20 for reason in engine.reasons[1:])
    assert "When it is wrong" in __import__(type(engine).__module__, fromlist=["x"]).__doc__


def test_an_answer_has_the_one_vocabulary(engine):
    problem = problem_for(engine)
    answer = engine.solve(problem)
    assert isinstance(answer, Answer)
    assert answer.problem is problem
    shape = (len(problem), len(problem.outputs))
    for name in ("log_mean", "log_sd", "numerical_error"):
        assert getattr(answer, name).shape == shape, name
    assert answer.status.shape == (len(problem),)
    assert (answer.status == Status.OK).all()
    quantiles = answer.quantile(PROBABILITIES)
    assert quantiles.shape == (*shape, len(PROBABILITIES))
    assert (np.diff(quantiles, axis=-1) > 0).all()
    step = 1e-3
    edges = np.stack([quantiles[..., 2] - step, quantiles[..., 2], quantiles[..., 2] + step], axis=-1)
    assert answer.cumulative(edges).shape == edges.shape
    np.testing.assert_allclose(answer.cumulative(quantiles), np.broadcast_to(PROBABILITIES, quantiles.shape), atol=2e-3)
    assert (answer.density(quantiles) > 0).all()


def test_a_row_alone_has_the_same_bits_as_in_a_catalogue(engine):
    problem = problem_for(engine)
    together = engine.solve(problem)
    quantiles = together.quantile(PROBABILITIES)
    for row in range(len(problem)):
        alone = engine.solve(problem.take(np.array([row])))
        np.testing.assert_array_equal(alone.quantile(PROBABILITIES)[0], quantiles[row])
        np.testing.assert_array_equal(alone.log_mean[0], together.log_mean[row])
        np.testing.assert_array_equal(alone.log_sd[0], together.log_sd[row])
        np.testing.assert_array_equal(together.take(np.array([row])).quantile(PROBABILITIES)[0], quantiles[row])
    if engine.name != "mcmc":  # star after star: an order of stars is nothing new
        backwards = engine.solve(problem.take(np.arange(len(problem))[::-1]))
        np.testing.assert_array_equal(backwards.quantile(PROBABILITIES)[::-1], quantiles)


def test_every_engine_tells_about_the_same_story(engine):
    """Medians of the engines lie within a tenth of a standard deviation of quadrature's (0.35 for first order)."""
    problem = problem_for(engine)
    reference = ENGINES["quadrature"]().solve(problem)
    distance = np.abs(engine.solve(problem).quantile([0.5]) - reference.quantile([0.5]))[..., 0]
    assert (distance < (0.35 if engine.name == "linear" else 0.1) * reference.log_sd).all()


def test_no_input_and_no_spread_is_answered_too(engine):
    exact = Stars.of(mass="1 exact", radius="1 exact", luminosity="1 exact")
    answer = engine.solve(problem_of(exact, "polytrope-3"))
    assert np.ptp(answer.quantile(PROBABILITIES)) >= 0.0
    np.testing.assert_allclose(np.ptp(answer.quantile(PROBABILITIES), axis=-1), 0.0, atol=1e-14)


def test_auto_takes_the_cheapest_exact_engine_for_each_star_and_says_why():
    stars = Stars.of(
        ["plain", "correlated"],
        mass=([1.0, 1.0], [0.1, 0.1]),
        radius=([1.0, 1.0], [0.1, 0.1]),
        luminosity=([1.0, 1.0], [0.1, 0.1]),
        correlation={("mass", "radius"): [0.0, 0.5]},
    )
    posterior = propagate(stars)
    assert [posterior.engines[e] for e in posterior.engine] == ["quadrature", "montecarlo"]
    reasons = [posterior.engine_reasons[r] for r in posterior.engine_reason]
    assert "cheapest" in reasons[0]
    assert "correlated inputs that are not log-normal" in reasons[1]


def test_a_refused_star_has_a_status_that_names_the_way_out():
    stars = Stars.of(mass=(1.0, 0.1), radius=(1.0, 0.1), luminosity=(1.0, 0.1), correlation={("mass", "radius"): 0.5})
    posterior = propagate(stars, engine="quadrature")
    assert posterior.status[0] == Status.ENGINE_REFUSED
    assert "use montecarlo" in posterior.status_text()[0]
    assert np.isnan(posterior.median("binding_energy")[0])
    with pytest.raises(ValueError, match="choose from auto, quadrature"):
        propagate(stars, engine="guess")
