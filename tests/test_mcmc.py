"""Chains against the other engines, their verdict, and their independence of workers and interruptions."""

import json
import os
import signal
import subprocess
import sys
import time
from concurrent.futures import ProcessPoolExecutor
from multiprocessing import get_context

import numpy as np
import pytest
from arviz_stats.base import array_stats

from cases import PROBABILITIES, SHAPES, assert_like_normal_scores, quoted, random_star
from stellerg import ENGINES, Conventions, Stars, load_prior, propagate
from stellerg.assembly import assemble
from stellerg.engines.ensemble import Target
from stellerg.engines.mcmc import MarkovChain
from stellerg.engines.montecarlo import MonteCarlo
from stellerg.engines.quadrature import Quadrature
from stellerg.errors import EngineError
from stellerg.status import Status

OUTPUTS = ("binding_energy", "kelvin_helmholtz_time")
SEED = 20261202
ALL = ("mass", "log_mass", "radius", "luminosity", "effective_temperature")


def problem_of(stars, prior="uniform-index", use=None):
    return assemble(stars, OUTPUTS, Conventions(), load_prior(prior), use).problems[0]


def forty_problems():
    """All shapes, correlations of any shape, over-determined rows, exact values, and a prior that looks at the mass."""
    rng = np.random.default_rng(SEED)
    problems = [problem_of(random_star(rng, number, errors=(0.003, 0.3))) for number in range(14)]
    for number in range(14, 26):  # correlated, every other one not log-normal
        shape = SHAPES[number % 4]
        given = {n: quoted(rng, n, shape, rng.uniform(0.02, 0.2)) for n in ("mass", "radius", "luminosity")}
        correlation = {("mass", "radius"): rng.uniform(-0.8, 0.8), ("radius", "luminosity"): rng.uniform(-0.5, 0.5)}
        stars = Stars.of(f"star {number}", correlation=correlation, shape={n: [shape] for n in given}, **given)
        problems.append(problem_of(stars))
    for number in range(26, 36):  # over-determined, every other one not log-normal
        shape = SHAPES[number % 4]
        given = {n: quoted(rng, n, shape, rng.uniform(0.03, 0.2)) for n in ("mass", "radius", "luminosity")}
        stars = Stars.of(
            f"star {number}",
            log_mass=(np.log10(1.2) + rng.normal(0.0, 0.03), 0.05),
            effective_temperature=(5772.0 * (1.5 / 1.3**2) ** 0.25, 150.0),
            shape={n: [shape] for n in given},
            **given,
        )
        problems.append(problem_of(stars, use=ALL))
    for number in range(36, 40):  # an exact radius, and masses about the boundary of by-mass
        stars = Stars.of(
            f"star {number}",
            mass=(0.35 * np.exp(rng.normal(0.0, 0.05)), 0.03),
            radius="0.35 exact" if number % 2 else (0.35, 0.02),
            luminosity=(0.012, 0.002, 0.001),
        )
        problems.append(problem_of(stars, "by-mass"))
    return problems


def reference(problem):
    """Quantiles by quadrature, or from 2^20 draws where it refuses."""
    if (Quadrature().accepts(problem) == 0).all():
        return Quadrature().solve(problem).quantile(PROBABILITIES)
    return MonteCarlo(draws=2**20, seed=SEED).solve(problem).quantile(PROBABILITIES)


def z_scores(chains, edges, wrong=1.0):
    """z of the share of draws below the edges, with the Monte Carlo error of that indicator, (output, p)."""
    z = np.empty((2, len(PROBABILITIES)))
    for output in range(2):
        values = chains.log_outputs[output]
        for k, p in enumerate(PROBABILITIES):
            below = values <= edges[0, output, k] + np.log(wrong)
            # walkers of an ensemble are not independent: the error is that of the four series of ensemble means
            # (independent draws at the best: where a wrong law leaves no draw beyond an edge, the series do not move)
            error = max(array_stats.mcse(below.mean(axis=1), method="mean"), np.sqrt(p * (1 - p) / below.size))
            z[output, k] = (below.mean() - p) / error
    return z


def solved(number):
    """Problem, reference quantiles and chains of one of the forty (a function of the module, for processes)."""
    problem = forty_problems()[number]
    return problem, reference(problem), MarkovChain(seed=SEED).solve(problem)


@pytest.fixture(scope="module")
def forty():
    """Problems, reference quantiles and chains of forty stars."""
    with ProcessPoolExecutor(2, mp_context=get_context("spawn")) as pool:
        return list(pool.map(solved, range(40)))


@pytest.mark.slow
def test_chains_agree_with_the_other_engines_on_forty_random_stars(forty):
    z = np.array([z_scores(answer.stars[0], edges) for _, edges, answer in forty])
    assert_like_normal_scores(z)


@pytest.mark.slow
def test_a_law_wrong_by_five_per_cent_fails_the_same_comparison(forty):
    z = np.array([z_scores(answer.stars[0], edges, wrong=1.05) for _, edges, answer in forty])
    assert np.abs(z).max() > 5.0
    assert (np.sqrt(np.mean(z**2, axis=0)) > 1.4).any()


@pytest.mark.slow
def test_every_star_converges_with_a_thousand_effective_draws_of_each_output(forty):
    for _, _, answer in forty:
        chains = answer.stars[0]
        assert chains.reasons == ()
        assert chains.steps >= 50 * chains.autocorrelation
        assert (chains.effective[:2] >= 1000.0).all(), chains.effective


@pytest.mark.slow
def test_every_star_is_answered_by_two_engines_and_auto_finds_one(forty):
    for problem, _, _ in forty:
        accepting = [name for name, made in ENGINES.items() if name != "linear" and not made().accepts(problem).any()]
        assert len(accepting) >= 2
        assert set(accepting) & {"quadrature", "montecarlo"}


STAR = {"mass": (1.02, 0.1), "radius": (1.05, 0.2, 0.1), "luminosity": (1.1, 0.1)}


def test_a_run_too_short_is_not_converged_and_says_its_numbers():
    posterior = propagate(Stars.of("a", **STAR), engine=MarkovChain(most_steps=50, block=50))
    assert posterior.status[0] == Status.NOT_CONVERGED
    text = posterior.status_text()[0]
    assert "50 steps are" in text
    assert "autocorrelation times" in text
    assert "50 wanted" in text
    assert np.isnan(posterior.median("binding_energy")[0])
    assert posterior.diagnostics(0) == {}


def test_a_star_that_nothing_satisfies_takes_nothing_from_its_neighbour():
    """Hard ends of two three-quantile masses that do not overlap, beside a good star."""
    stars = Stars.of(
        ["good", "hopeless"],
        mass=([1.0, 1.0], [0.1, 0.02], [0.1, 0.01]),
        log_mass=([0.0, -0.3], [0.05, 0.01], [0.05, 0.02]),
        radius=([1.0, 1.0], [0.1, 0.1]),
    )
    posterior = propagate(stars, outputs=("binding_energy",), use=("mass", "log_mass", "radius"), engine=MarkovChain())
    assert posterior.status.tolist() == [Status.OK, Status.NOT_CONVERGED]
    assert "no value satisfies all measurements" in posterior.status_text()[1]
    assert np.isfinite(posterior.median("binding_energy")[0])
    assert np.isnan(posterior.median("binding_energy")[1])


def test_the_density_is_that_of_the_inputs_for_an_exactly_determined_star():
    """The target integrates to the assigned densities: log-normal inputs make it an exact normal."""
    problem = problem_of(Stars.of("a", shape="lognormal", mass=(1.0, 0.1), radius=(1.0, 0.05), luminosity=(1.0, 0.2)))
    target = Target.of(problem)
    coordinates = np.random.default_rng(1).standard_normal((64, 4))
    expected = -0.5 * np.square(coordinates).sum(axis=1)
    found = target.log_probability(coordinates)
    np.testing.assert_allclose(found - found[0], expected - expected[0], rtol=1e-9, atol=1e-9)


def test_impossible_values_are_counted_and_never_accepted():
    """A three-quantile error with a hard end close by: proposals beyond it have no probability."""
    stars = Stars.of("a", mass=(1.0, 0.1), radius=(1.0, 0.2, 0.05), luminosity=(1.0, 0.1))
    chains = MarkovChain(walkers=16, block=100, times=10.0).solve(problem_of(stars)).stars[0]
    assert chains.impossible > 0
    assert np.isfinite(chains.log_probability).all()
    radius = np.exp(chains.log_latents[1])
    assert radius.min() > 1.0 - 0.2 * 0.05 / (0.2 - 0.05)  # the end of the distribution: v - ab/(a - b)


def test_a_star_draws_the_same_whatever_its_company_and_another_star_does_not():
    engine = MarkovChain(walkers=16, block=50, most_steps=50)
    together = engine.solve(problem_of(Stars.of(["a", "b"], **{n: ([v[0]] * 2, [v[1]] * 2) for n, v in STAR.items()})))
    alone = engine.solve(problem_of(Stars.of("a", **{n: (v[0], v[1]) for n, v in STAR.items()})))
    np.testing.assert_array_equal(together.stars[0].log_outputs, alone.stars[0].log_outputs)
    assert (together.stars[0].u != together.stars[1].u).any()


@pytest.mark.slow
def test_the_number_of_workers_changes_nothing():
    stars = Stars.of(["a", "b", "c"], **{n: ([v[0]] * 3, [v[1]] * 3) for n, v in STAR.items()})
    answers = [MarkovChain(walkers=16, block=50, most_steps=100, workers=w).solve(problem_of(stars)) for w in (1, 2)]
    for one, two in zip(answers[0].stars, answers[1].stars, strict=True):
        np.testing.assert_array_equal(one.log_outputs, two.log_outputs)


def test_a_checkpoint_is_used_and_gives_the_same_chains(tmp_path):
    problem = problem_of(Stars.of("a", **STAR))
    options = {"walkers": 16, "block": 50, "most_steps": 200}
    plain = MarkovChain(**options).solve(problem).stars[0]
    MarkovChain(**{**options, "most_steps": 100}, checkpoint=str(tmp_path)).solve(problem)
    blocks = sorted(path.name for path in tmp_path.rglob("*.npz"))
    assert len(blocks) == 4 * 2
    longer = MarkovChain(**options, checkpoint=str(tmp_path)).solve(problem).stars[0]
    np.testing.assert_array_equal(longer.log_outputs, plain.log_outputs)
    assert len(list(tmp_path.rglob("*.npz"))) == 4 * 4
    # other settings are other chains: nothing of the old ones is taken for them
    MarkovChain(**options, seed=5, checkpoint=str(tmp_path)).solve(problem)
    assert len(list(tmp_path.iterdir())) == 2


@pytest.mark.slow
def test_killed_and_started_again_it_gives_the_same_answer(tmp_path):
    command = [sys.executable, "-c", "from stellerg.cli import main; main()", "star", "--json", "--engine", "mcmc"]
    command += ["--mass", "1.02 ± 0.1", "--radius", "1.05 +0.2 -0.1", "--luminosity", "1.1(1)"]
    undisturbed = subprocess.run(command, capture_output=True, text=True, check=True).stdout
    folder = tmp_path / "chains"
    running = subprocess.Popen([*command, "--checkpoint", str(folder)], stdout=subprocess.PIPE, stderr=subprocess.PIPE)
    deadline = time.monotonic() + 60.0
    while not list(folder.rglob("*.npz")) and time.monotonic() < deadline:
        time.sleep(0.01)
    os.kill(running.pid, signal.SIGKILL)
    running.communicate()
    before = {path: path.read_bytes() for path in folder.rglob("*.npz")}
    assert before
    assert running.returncode == -signal.SIGKILL
    again = subprocess.run([*command, "--checkpoint", str(folder)], capture_output=True, text=True, check=True).stdout
    assert json.loads(again) == json.loads(undisturbed)
    assert all(path.read_bytes() == content for path, content in before.items())


def test_a_singular_correlation_matrix_has_no_density():
    stars = Stars.of(
        "a", mass=(1.0, 0.1), radius=(1.0, 0.1), luminosity=(1.0, 0.1), correlation={("mass", "radius"): 1.0}
    )
    posterior = propagate(stars, engine="mcmc")
    assert posterior.status[0] == Status.ENGINE_REFUSED
    assert "use montecarlo" in posterior.status_text()[0]


def test_everything_exact_leaves_structure_alone():
    stars = Stars.of("a", mass="1 exact", radius="1 exact", luminosity="1 exact")
    posterior = propagate(stars, engine=MarkovChain(walkers=16, block=100))
    quantiles = posterior.quantile(PROBABILITIES, "n_effective")[0]
    np.testing.assert_allclose(quantiles, 1.5 + 1.5 * PROBABILITIES, atol=0.1)


@pytest.mark.parametrize("options", [{"ensembles": 3}, {"walkers": 10}, {"walkers": 17}, {"block": 0}, {"workers": 0}])
def test_wrong_options_are_refused(options):
    with pytest.raises(EngineError):
        MarkovChain(**options)
