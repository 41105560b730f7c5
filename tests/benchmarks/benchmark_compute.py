"""Rate of the engines beside what a user would write by hand: python tests/benchmarks/benchmark_compute.py

The hand-written baseline loops over stars, draws 10,000 values of each input and of the index with NumPy, and
takes five quantiles of two outputs. All ratios are of times measured in one run, best of the repetitions,
interleaved. The bounds asserted at the end are loose by a factor of two.
"""

import time
from functools import partial

import numpy as np

from stellerg import Conventions, Stars, load_prior
from stellerg.assembly import assemble
from stellerg.energetics import DEFAULT_OUTPUTS
from stellerg.engines import ENGINES

PROBABILITIES = np.array([0.02275, 0.158655, 0.5, 0.841345, 0.97725])
DRAWS = 10_000
REPETITIONS = 5


def survey(count, relative, seed=1):
    """Values and errors of invented stars."""
    rng = np.random.default_rng(seed)
    mass = np.exp(rng.uniform(np.log(0.5), np.log(5.0), count))
    columns = {"mass": mass, "radius": mass**0.8, "luminosity": mass**3.5}
    return {n: (v, v * relative * np.exp(rng.uniform(-0.7, 0.0, count))) for n, v in columns.items()}


def by_hand(columns, shape):
    """What a user would write: one star after the other."""
    rng = np.random.default_rng(0)
    rows = []
    for star in range(len(columns["mass"][0])):
        drawn = {}
        for name, (value, error) in columns.items():
            if shape == "lognormal":
                drawn[name] = value[star] * np.exp(rng.normal(0.0, error[star] / value[star], DRAWS))
            else:
                drawn[name] = rng.normal(value[star], error[star], DRAWS)
        coefficient = 3.0 / (5.0 - rng.uniform(1.5, 3.0, DRAWS))
        energy = 0.5 * coefficient * 3.793e48 * drawn["mass"] ** 2 / drawn["radius"]
        time_scale = energy / drawn["luminosity"]
        rows.append([np.quantile(y, PROBABILITIES) for y in (energy, time_scale)])
    return np.array(rows)


def by_quadrature(columns, shape):
    """The package's way, from measured values to quantiles; reading and writing files are timed elsewhere."""
    stars = Stars.of(shape=shape, **columns)
    problem = assemble(stars, DEFAULT_OUTPUTS, Conventions(), load_prior("uniform-index")).problems[0]
    return ENGINES["quadrature"]().solve(problem.only(np.arange(2))).quantile(PROBABILITIES)


def best(actions):
    """Best time of each action over interleaved repetitions, in seconds."""
    times = {name: [] for name in actions}
    for _ in range(REPETITIONS):
        for name, action in actions.items():
            start = time.perf_counter()
            action()
            times[name].append(time.perf_counter() - start)
    return {name: min(found) for name, found in times.items()}


def main():
    """Print the rates and check the loose bounds."""
    rates = {}
    for shape, relative in (("lognormal", 0.05), ("normal", 0.05), ("normal", 0.25)):
        few, many, most = (survey(count, relative) for count in (200, 10_000, 100_000))
        actions = {
            "by hand, 200": partial(by_hand, few, shape),
            "quadrature, 10,000": partial(by_quadrature, many, shape),
        }
        times = best(actions)
        start = time.perf_counter()
        by_quadrature(most, shape)
        large = time.perf_counter() - start
        hand, ours = 200 / times["by hand, 200"], 10_000 / times["quadrature, 10,000"]
        growth = large / times["quadrature, 10,000"]
        label = f"{shape} errors of {relative:.0%}"
        rates[label] = (ours / hand, growth)
        print(
            f"{label}: by hand {hand:,.0f} stars/s, quadrature {ours:,.0f} stars/s, ratio {ours / hand:,.1f}; "
            f"100,000 stars take {growth:.1f} times as long as 10,000"
        )
    for label, (ratio, growth) in rates.items():
        assert growth <= 15.0, f"{label}: {growth}"
        assert ratio > (20.0 if label.startswith("log") else 2.0), f"{label}: {ratio}"


if __name__ == "__main__":
    main()
