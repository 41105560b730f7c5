"""Random stars for tests, and the way from a Posterior to the oracle's terms."""

import numpy as np

from stellerg.measured import Shape
from stellerg.stars import Stars

PROBABILITIES = np.array([0.02275, 0.158655, 0.5, 0.841345, 0.97725])
SHAPES = ("lognormal", "normal", "three-quantile", "split-normal")
# exponents over (mass, radius, luminosity) and (mass, radius, effective_temperature) of t_KH
WEIGHTS = {"luminosity": (2, -1, -1), "effective_temperature": (2, -3, -4)}
VALUES = {"mass": 1.2, "radius": 1.3, "luminosity": 1.5, "effective_temperature": 5600.0}
WORDS = {
    Shape.LOGNORMAL: "lognormal",
    Shape.NORMAL: "normal",
    Shape.THREE_QUANTILE: "three-quantile",
    Shape.SPLIT_NORMAL: "split-normal",
    Shape.EXACT: "exact",
}


def quoted(rng, name, shape, relative):
    """A value with its upper and lower error."""
    value = VALUES[name]
    upper = relative * value
    lower = upper * rng.uniform(2 / 3, 3 / 2) if shape in ("three-quantile", "split-normal") else upper
    return value, upper, lower


def random_star(rng, number, *, errors=(1e-4, 0.3)):
    """An exactly determined star with independent inputs: (Stars, weights of t_KH over its inputs)."""
    third = ("luminosity", "effective_temperature")[number % 2]
    given, shapes = {}, {}
    for name in ("mass", "radius", third):
        shapes[name] = SHAPES[rng.integers(len(SHAPES))]
        relative = float(np.exp(rng.uniform(*np.log(errors))))
        given[name] = quoted(rng, name, shapes[name], relative)
    return Stars.of(f"star {number}", shape={k: [v] for k, v in shapes.items()}, **given)


def oracle_terms(problem, output, star=0):
    """Constant, inputs and weights of ln Y = constant + sum_j w_j ln(v_j) + q for the oracle."""
    import oracle

    position = problem.outputs.index(output)
    weights = problem.input_weights[0, position]
    constant = problem.constant[star, position] - weights @ problem.base[star]
    inputs = [
        oracle.Input(WORDS[Shape(m.shape[star])], m.value[star], m.upper[star], m.lower[star]) for m in problem.measured
    ]
    return constant, inputs, tuple(weights)


def assert_like_normal_scores(z):
    """Scores (star, output, p) of a comparison: none far off, and their spread over stars that of a standard normal."""
    assert np.abs(z).max() < 5.0, f"largest |z| {np.abs(z).max():.2f}"
    rms = np.sqrt(np.mean(np.square(z), axis=0))
    assert ((rms > 0.65) & (rms < 1.4)).all(), f"rms over stars by output and p: {rms}"
