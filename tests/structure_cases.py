"""Random stars with what part of their inside is known: calibrated, observed, with radiation and ionisation."""

import numpy as np

from cases import SHAPES
from stellerg import Conventions, Stars, load_prior
from stellerg.assembly import assemble
from stellerg.structure.files import main_sequence

OUTPUTS = ("binding_energy", "kelvin_helmholtz_time")
SEED = 20261208
GAS_AND_RADIATION = Conventions(pressure="gas+radiation")
IONISED = Conventions(pressure="gas+radiation", ionisation=True)


def problem_of(stars, prior, conventions=None):
    """The one problem of stars of one kind."""
    (problem,) = assemble(stars, OUTPUTS, conventions or Conventions(), load_prior(prior)).problems
    return problem


def quoted(rng, value, shape, relative):
    """A value with errors of a shape; asymmetric shapes get a ratio of up to 1.4."""
    error = relative * value
    if shape in ("three-quantile", "split-normal"):
        ratio = rng.uniform(1.0, 1.4)
        return (value, error * ratio, error)
    return (value, error)


def main_sequence_star(rng, number, ratio=None, mass=None, errors=(0.003, 0.05), shape=None, **more):
    """A star on the main sequence, with errors of one shape."""
    mass = np.exp(rng.uniform(np.log(0.15), np.log(30.0))) if mass is None else mass
    end = main_sequence().boundaries.at("end", np.log([mass]))[0]
    ratio = rng.uniform(0.95, 0.9 * end) if ratio is None else ratio
    radius = ratio * main_sequence().radius_zams(np.array(mass))
    shape = SHAPES[number % 4] if shape is None else shape
    relative = np.exp(rng.uniform(*np.log(errors), 3))
    given = {
        "mass": quoted(rng, mass, shape, relative[0]),
        "radius": quoted(rng, float(radius), shape, relative[1]),
        "luminosity": quoted(rng, mass**3.5, shape, relative[2]),
    }
    return Stars.of(f"star {number}", shape={n: [shape] for n in given}, **given, **more)


def forty():
    """Problems of forty stars, the same every time."""
    rng = np.random.default_rng(SEED)
    problems = [problem_of(main_sequence_star(rng, k), "main-sequence") for k in range(12)]
    for k in range(12, 18):  # stated contracting: one branch, the other, and between
        mass, ratio = (0.9, 1.7) if k % 3 == 0 else (rng.uniform(0.5, 1.3), rng.uniform(1.05, 1.35))
        star = main_sequence_star(rng, k, ratio, mass, evolutionary_state="pre-main-sequence")
        problems.append(problem_of(star, "main-sequence"))
    for k in range(18, 22):  # towards the end of the main sequence
        mass = rng.uniform(1.2, 8.0)
        end = main_sequence().boundaries.at("end", np.log([mass]))[0]
        problems.append(problem_of(main_sequence_star(rng, k, 0.985 * end, mass), "main-sequence"))
    for k in range(22, 28):  # structure observables and a density
        inside = {"log_k2": (rng.uniform(-2.2, -1.5), 0.05)}
        if k % 2:
            inside["moment_of_inertia_factor"] = (0.075, 0.004)
        star = main_sequence_star(rng, k, **inside)
        problems.append(problem_of(star, "wide-index" if k % 3 else "uniform-index"))
    for k in range(28, 32):  # structure observables and the calibration
        mass = (0.3, 1.0, 1.5, 4.0)[k - 28]
        star = main_sequence_star(rng, k, 1.1, mass, log_k2=((-0.9, -1.7, -2.3, -2.3)[k - 28], 0.06))
        problems.append(problem_of(star, "main-sequence"))
    for k in range(32, 40):  # a curved binding energy
        mass = np.exp(rng.uniform(np.log(3.0), np.log(35.0)))
        molecular = {} if k % 2 else {"mean_molecular_weight": (0.61, 0.015)}
        star = main_sequence_star(rng, k, 1.2, mass, errors=(0.003, 0.04), **molecular)
        problems.append(problem_of(star, "wide-index", IONISED if k % 4 < 2 else GAS_AND_RADIATION))
    return problems
