"""Rate of quadrature under the calibrated coefficient: python tests/benchmarks/benchmark_calibrated.py

The baseline is the hand-written Monte Carlo of `benchmark_compute`, which has no calibration to follow: 10,000 draws of
each input and of an index, star after star. Times are the best of the repetitions, interleaved, in one run. The bound
asserted at the end is the one for log-normal errors of 2 %, loose by a factor of two.
"""

from functools import partial

import numpy as np
from benchmark_compute import PROBABILITIES, best, by_hand

from stellerg import Conventions, Stars, load_prior
from stellerg.assembly import assemble
from stellerg.energetics import DEFAULT_OUTPUTS
from stellerg.engines import ENGINES
from stellerg.structure.files import main_sequence


def survey(count, relative, seed=1):
    """Values and errors of invented main-sequence stars."""
    rng = np.random.default_rng(seed)
    mass = np.exp(rng.uniform(np.log(0.5), np.log(20.0), count))
    columns = {"mass": mass, "radius": 1.1 * main_sequence().radius_zams(mass), "luminosity": mass**3.5}
    return {n: (v, v * relative * np.exp(rng.uniform(-0.7, 0.0, count))) for n, v in columns.items()}


def by_quadrature(columns, shape):
    """From measured values to quantiles, as `auto` does it."""
    stars, engine = Stars.of(shape=shape, **columns), ENGINES["quadrature"]()
    for problem in assemble(stars, DEFAULT_OUTPUTS, Conventions(), load_prior("main-sequence")).problems:
        part = problem.only(np.arange(2))
        engine.solve(part.take(np.flatnonzero(engine.accepts(part) == 0))).quantile(PROBABILITIES)


def main():
    """Print the rates and check the bound."""
    ratios = {}
    by_quadrature(survey(20, 0.02), "lognormal")  # tables are made once
    for shape in ("lognormal", "normal"):
        for relative in (0.003, 0.01, 0.02, 0.05, 0.1):
            hand, many = survey(200, relative), survey(20_000, relative)
            actions = {"by hand": partial(by_hand, hand, shape), "quadrature": partial(by_quadrature, many, shape)}
            times = best(actions)
            rates = 200 / times["by hand"], 20_000 / times["quadrature"]
            ratios[shape, relative] = rates[1] / rates[0]
            print(
                f"main-sequence, {shape} errors of {100 * relative:g} %: by hand {rates[0]:,.0f} stars/s, quadrature "
                f"{rates[1]:,.0f} stars/s, ratio {ratios[shape, relative]:,.1f}"
            )
    assert ratios["lognormal", 0.02] > 15.0


if __name__ == "__main__":
    main()
