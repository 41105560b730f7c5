"""How structure enters ln Y to first order: its value, its spread, and how it follows the measured quantities."""

from dataclasses import dataclass

import numpy as np

from stellerg.engines.intervals import mass_score
from stellerg.problem import Problem
from stellerg.structure.model import Component

__all__ = ["StructureTerm", "has_derivative", "structure_expectation", "structure_term"]

_STEP = 1e-3  # in the logarithms of mass, radius, molecular weight and coefficient: central differences, error 1e-6
_PROBABLE = 1024  # equally probable structures over which a posterior mean is taken
_FOLLOWED = ("mass", "radius", "mean_molecular_weight")


def structure_expectation(component: Component) -> tuple[float, float, float]:
    """Expectation and standard deviation of the variable a density is stated on, and d ln w/d(variable) there."""
    mean, sd = float(component.family.mean), float(component.family.standard_deviation)
    slope = float(np.exp(-component.coordinate.log_slope(component.coordinate.to_log_coefficient(mean))))
    return mean, sd, slope


@dataclass(frozen=True)
class StructureTerm:
    """Structure in ln Y at given measured quantities; zero for outputs without structure.

    Attributes
    ----------
    value, spread : ndarray, (star, output)
        Added to ln Y, and its standard deviation with the measured quantities held; NaN where it has no derivative (a
        mixture, or a model that changes within the range of the mass).
    weights : ndarray, (star, output, input)
        d(term)/d ln obs.
    """

    value: np.ndarray
    spread: np.ndarray
    weights: np.ndarray


def structure_term(problem: Problem, log_inputs: np.ndarray) -> StructureTerm:
    """Expand the structure of stars about measured quantities.

    Parameters
    ----------
    problem : Problem
    log_inputs : ndarray, (star, input)
        ln obs.
    """
    latents = problem.log_latents(log_inputs)
    known = {name: latents[:, k, None] for k, name in enumerate(problem.latents)}
    shape = (len(problem), len(problem.outputs))
    weights = np.zeros((*shape, len(problem.inputs)))
    if not problem.structured.any():
        return StructureTerm(np.zeros(shape), np.zeros(shape), weights)
    q, spread = (x[:, None] for x in _coefficient(problem, known))
    value = problem.log_structure(q, known)[..., 0]
    by_coefficient = _difference(lambda step: problem.log_structure(q + step, known)[..., 0])
    follows = problem.interior.relation is not None
    for name in _FOLLOWED:
        if name not in known or not (follows or not problem.binding.constant):
            continue

        def moved(step, name=name):
            there = {**known, name: known[name] + step}
            shifted = _coefficient(problem, there)[0][:, None] if follows else q
            return problem.log_structure(shifted, there)[..., 0]

        on_latent = problem.latent_input_weights[:, problem.latent(name)]
        weights += np.where(problem.structured, _difference(moved), 0.0)[:, :, None] * on_latent[:, None, :]
    return StructureTerm(
        np.where(problem.structured, value, 0.0),
        np.where(problem.structured, np.abs(by_coefficient) * spread, 0.0),
        weights,
    )


def _difference(function) -> np.ndarray:
    return (function(_STEP) - function(-_STEP)) / (2.0 * _STEP)


def _coefficient(problem: Problem, known: dict) -> tuple[np.ndarray, np.ndarray]:
    """ln w at the expectation of structure and its standard deviation to first order, (star,) each."""
    interior = problem.interior
    if interior.relation is not None:
        centre = interior.relation.centre(known["mass"], known["radius"])[:, 0]
        if interior.observed is None:
            return interior.relation.moments(centre)
        return _weighed(interior, known["mass"], known["radius"])
    interval = mass_score(problem).interval
    mean, spread = np.full((2, len(problem)), np.nan)
    if interior.cells:
        for number, cells in enumerate(interior.cells):
            rows = np.flatnonzero(interval == number)
            if rows.size:
                mean[rows], spread[rows] = cells.take(rows).moments
        return mean, spread
    for number, piece in enumerate(interior.intervals):
        rows = interval == number
        if rows.any() and len(piece.mixture.components) == 1:
            component = piece.mixture.components[0]
            expectation, sd, slope = structure_expectation(component)
            mean[rows] = component.coordinate.to_log_coefficient(expectation)
            spread[rows] = sd * slope
    return mean, spread


def _weighed(interior, log_mass: np.ndarray, log_radius: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Mean and standard deviation of ln w after structure observables, at given mass and radius, (star,) each."""
    u = np.broadcast_to((np.arange(_PROBABLE) + 0.5) / _PROBABLE, (len(log_mass), _PROBABLE))
    mass, radius = (np.broadcast_to(x, u.shape) for x in (log_mass, log_radius))
    q = interior.quantile(u, mass, radius)
    weight = interior.log_weight(q, mass, radius)
    weight = np.exp(weight - weight.max(axis=1, keepdims=True))
    weight = weight / weight.sum(axis=1, keepdims=True)
    mean = (weight * q).sum(axis=1)
    return mean, np.sqrt((weight * np.square(q - mean[:, None])).sum(axis=1))


def has_derivative(problem: Problem) -> np.ndarray:
    """Whether structure has a first order: it is no mixture, and does not change within the range of the mass."""
    if problem.interior.relation is not None:
        return problem.interior.relation.single
    if not problem.structured.any():
        return np.ones(len(problem), bool)
    interval = mass_score(problem).interval
    if problem.interior.cells:
        return interval >= 0
    single = np.array([len(piece.mixture.components) == 1 for piece in problem.interior.intervals])
    return (interval >= 0) & single[np.maximum(interval, 0)]
