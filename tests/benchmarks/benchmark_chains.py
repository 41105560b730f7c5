"""Effective draws per second of mcmc beside bare emcee: python tests/benchmarks/benchmark_chains.py

Both sample the same density, evaluated by the same function. Bare emcee is what a user would write: one ensemble of
stretch moves, as many steps as the engine took, without a verdict; the engine's time includes starting points,
autocorrelation times, outputs and verdict. Effective draws are those of the median of ln t_KH, from the series of
ensemble means for both. Best of the repetitions, interleaved.
"""

import time

import emcee
import numpy as np

from stellerg import Conventions, Stars, load_prior
from stellerg.assembly import assemble
from stellerg.diagnostics import quantile_judgement
from stellerg.energetics import DEFAULT_OUTPUTS
from stellerg.engines.ensemble import Target
from stellerg.engines.mcmc import MarkovChain

REPETITIONS = 3
STARS = {
    "exactly determined, normal and three-quantile": (
        {"mass": (1.02, 0.1), "radius": (1.05, 0.2, 0.1), "luminosity": (1.1, 0.1)},
        None,
    ),
    "over-determined, normal": (
        {"mass": (1.0, 0.1), "log_mass": (0.02, 0.05), "radius": (1.0, 0.1), "luminosity": (1.0, 0.1)},
        ("mass", "log_mass", "radius", "luminosity"),
    ),
}


def problem_of(given, use):
    """The problem of one star."""
    prior = load_prior("uniform-index")
    return assemble(Stars.of("a", **given), DEFAULT_OUTPUTS, Conventions(), prior, use).problems[0]


def bare(target, steps, seed):
    """Effective draws of bare emcee."""
    random = np.random.default_rng(seed)
    sampler = emcee.EnsembleSampler(32, target.dimensions, target.log_probability, vectorize=True)
    sampler.run_mcmc(random.standard_normal((32, target.dimensions)), steps, skip_initial_state_check=True)
    values = target.quantities(sampler.get_chain(discard=steps // 10))[2][1]
    return quantile_judgement(values.T[None], 0.5)[0]


def main():
    """Print both rates and check the bound."""
    for label, (given, use) in STARS.items():
        problem = problem_of(given, use)
        target = Target.of(problem)
        rates = {"mcmc": [], "bare emcee": []}
        for seed in range(REPETITIONS):
            start = time.perf_counter()
            chains = MarkovChain(seed=seed).solve(problem).stars[0]
            rates["mcmc"].append(chains.effective[1, 0] / (time.perf_counter() - start))
            start = time.perf_counter()
            effective = bare(target, 4 * chains.steps, seed)
            rates["bare emcee"].append(effective / (time.perf_counter() - start))
        ours, theirs = (float(np.median(rates[name])) for name in rates)
        print(f"{label}: mcmc {ours:,.0f} and bare emcee {theirs:,.0f} effective draws/s, ratio {ours / theirs:.2f}")
        assert ours > theirs / 3.0


if __name__ == "__main__":
    main()
