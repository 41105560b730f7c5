"""Flags: what to know about a result, each with its rule (see `stellerg.status.FLAG_TEXT`)."""

import numpy as np
from scipy.special import ndtr

from stellerg.engines.answer import Answer
from stellerg.measured import Shape
from stellerg.problem import Problem
from stellerg.status import Flag

__all__ = ["flags"]

_ASYMMETRY = 2.0  # judgement
_REMOVED = 1e-3  # judgement
_PARALLAX_ERROR = 0.10  # common practice
_INCONSISTENT = 0.01  # judgement
_EDDINGTON = 3.84e4  # L/Lsun per M/Msun: 4 pi G M c/kappa with kappa = 0.2 (1 + X) cm2/g, X = 0.7
_EDDINGTON_PROBABILITY = 0.05  # judgement
_MASS_RANGE = (0.075, 150.0)  # judgement
_FEW_DRAWS = 1000.0  # judgement


def flags(problem: Problem, answer: Answer, probability: np.ndarray) -> np.ndarray:
    """Bit mask of `Flag` for each star.

    Parameters
    ----------
    problem : Problem
    answer : Answer
    probability : ndarray, (star,)
        Of chi-squared; NaN where a star is exactly determined.
    """
    found = np.zeros(len(problem), np.int64)

    def mark(flag: Flag, where: np.ndarray) -> None:
        found[where] |= int(flag)

    matters = (problem.input_weights != 0.0).any(axis=(0, 1))
    for name, measured, matter in zip(problem.inputs, problem.measured, matters, strict=True):
        through_radiation = name == "mean_molecular_weight" and problem.binding.radiation
        if not (matter or through_radiation):  # a measurement that moves no output says nothing about the result
            continue
        with np.errstate(invalid="ignore"):
            ratio = measured.upper / measured.lower
            mark(Flag.STRONGLY_ASYMMETRIC, (ratio > _ASYMMETRY) | (ratio < 1.0 / _ASYMMETRY))
        mark(Flag.POSITIVITY_RESTRICTED, measured.removed > _REMOVED)
        if name == "parallax":
            relative = np.maximum(measured.upper, measured.lower) / measured.value
            mark(Flag.PARALLAX_IMPRECISE, (relative > _PARALLAX_ERROR) & (measured.shape != Shape.EXACT))
    with np.errstate(invalid="ignore"):
        mark(Flag.INCONSISTENT_OBSERVABLES, probability < _INCONSISTENT)
    if "mass" in problem.latents:
        mass = np.exp(problem.log_latents(problem.log_median)[:, problem.latent("mass")])
        mark(Flag.MASS_OUT_OF_RANGE, (mass < _MASS_RANGE[0]) | (mass > _MASS_RANGE[1]))
        if "luminosity" in problem.latents:
            mark(Flag.ABOVE_EDDINGTON_LIMIT, _eddington_probability(problem) > _EDDINGTON_PROBABILITY)
    if "effective_draws" in answer.diagnostics and problem.over_determined:
        mark(Flag.FEW_EFFECTIVE_DRAWS, answer.diagnostics["effective_draws"] < _FEW_DRAWS)
    return found


def _eddington_probability(problem: Problem) -> np.ndarray:
    """Probability that L exceeds the limit, with ln(L/M) taken as normal, (star,)."""
    contrast = np.zeros(len(problem.latents))
    contrast[problem.latent("luminosity")], contrast[problem.latent("mass")] = 1.0, -1.0
    latents = problem.log_latents(problem.log_mean)
    excess = latents[:, problem.latent("luminosity")] - latents[:, problem.latent("mass")] - np.log(_EDDINGTON)
    weights = np.einsum("l,slj->sj", contrast, problem.latent_input_weights)
    weights = np.broadcast_to(weights, (len(problem), len(problem.inputs)))
    sd = np.sqrt(np.maximum(np.einsum("sj,sjk,sk->s", weights, problem.log_covariance, weights), 0.0))
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.where(sd > 0.0, ndtr(excess / sd), (excess > 0.0).astype(float))
