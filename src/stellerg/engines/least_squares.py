"""Least squares in normal scores: the point where chi^2 = z' C^-1 z is least, for all stars at once.

Levenberg-Marquardt (Marquardt 1963, doi:10.1137/0111030) with a fixed number of steps; a step that does not
lower chi^2, or leaves the support of a distribution, is not taken and the damping grows.
"""

from dataclasses import dataclass

import numpy as np
from scipy.special import chdtrc

from stellerg.engines.target import scores
from stellerg.problem import Problem

__all__ = ["Fit", "fit"]

_STEPS = 60
_CONVERGED = 1e-6  # largest whitened gradient at an accepted minimum


@dataclass(frozen=True)
class Fit:
    """The least-squares point.

    Attributes
    ----------
    parameters : ndarray, (star, parameter)
    jacobian : ndarray, (star, input, parameter)
        Derivative of the whitened scores.
    chi2, probability : ndarray, (star,)
    degrees_of_freedom : int
    converged : ndarray of bool, (star,)
    """

    parameters: np.ndarray
    jacobian: np.ndarray
    chi2: np.ndarray
    probability: np.ndarray
    degrees_of_freedom: int
    converged: np.ndarray


def fit(problem: Problem) -> Fit:
    """Find the least-squares point; of exactly determined stars, that of the medians, where chi-squared is 0."""
    root = problem.precision_root
    theta = _start(problem, root)
    residual, jacobian = _residual(problem, root, theta)
    chi2 = _square(residual)
    damping = np.full(len(problem), 1e-3)
    unit = np.eye(problem.design.shape[1])
    for _ in range(_STEPS if problem.over_determined else 0):
        safe = np.where(np.isfinite(jacobian), jacobian, 0.0)
        normal = np.einsum("sjr,sjq->srq", safe, safe)
        gradient = np.einsum("sjr,sj->sr", safe, np.where(np.isfinite(residual), residual, 0.0))
        scale = np.einsum("srr->sr", normal) + 1e-300
        system = normal + damping[:, None, None] * scale[:, :, None] * unit
        step = np.linalg.solve(system + 1e-300 * unit, gradient[:, :, None])[:, :, 0]
        trial = theta - step
        trial_residual, trial_jacobian = _residual(problem, root, trial)
        trial_chi2 = _square(trial_residual)
        better = trial_chi2 <= chi2
        theta = np.where(better[:, None], trial, theta)
        residual = np.where(better[:, None], trial_residual, residual)
        jacobian = np.where(better[:, None, None], trial_jacobian, jacobian)
        chi2 = np.where(better, trial_chi2, chi2)
        damping = np.clip(np.where(better, damping * 0.1, damping * 10.0), 1e-15, 1e12)
    gradient = np.einsum("sjr,sj->sr", jacobian, residual)
    size = np.sqrt(np.einsum("sjr,sjr->sr", jacobian, jacobian))
    with np.errstate(invalid="ignore", divide="ignore"):
        relative = np.abs(gradient / size).max(axis=1)
    freedom = problem.design.shape[0] - problem.design.shape[1]
    converged = np.isfinite(chi2) & (relative < _CONVERGED * (1.0 + np.sqrt(chi2)))
    probability = chdtrc(freedom, chi2) if freedom else np.full(len(problem), np.nan)
    return Fit(theta, jacobian, chi2, probability, freedom, converged)


def _start(problem: Problem, root) -> np.ndarray:
    """Where to begin: generalised least squares in ln obs at the medians, (star, parameter).

    Where that lies beyond a hard end of a distribution, the best of the points at which one measurement after
    the other is believed a hundred times more than the rest.
    """
    offset = problem.log_median - problem.base
    theta = np.einsum("srj,sj->sr", problem.solution, offset)
    best = _square(_residual(problem, root, theta)[0])
    if np.isfinite(best).all():
        return theta
    for j in range(len(problem.inputs)):
        trust = np.where(np.arange(len(problem.inputs)) == j, 100.0, 1.0) / np.abs(problem.log_sd)
        weighted = trust[:, :, None] * problem.design
        normal = np.einsum("sjr,sjq->srq", weighted, weighted)
        right = np.einsum("sjr,sj->sr", weighted, trust * offset)
        trial = np.linalg.solve(normal, right[:, :, None])[:, :, 0]
        chi2 = _square(_residual(problem, root, trial)[0])
        better = chi2 < best
        theta, best = np.where(better[:, None], trial, theta), np.where(better, chi2, best)
    return theta


def _residual(problem: Problem, root, theta):
    score, log_slope, sign = scores(problem, theta[:, None, :])
    jacobian = (sign * np.exp(log_slope[:, 0]))[:, :, None] * problem.design
    residual = score[:, 0]
    if root is not None:
        residual = np.einsum("sij,sj->si", root, residual)
        jacobian = np.einsum("sij,sjr->sir", root, jacobian)
    return residual, jacobian


def _square(residual):
    with np.errstate(invalid="ignore", over="ignore"):
        chi2 = np.square(residual).sum(axis=-1)
    return np.where(np.isfinite(chi2), chi2, np.inf)
