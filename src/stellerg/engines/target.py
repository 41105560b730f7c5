"""The density of what the measurements determine: what weights and chains evaluate.

With z the normal scores of the inputs, C their correlations and J = dz/dtheta, the density of theta is
exp(-z' C^-1 z/2) |J' C^-1 J|^(1/2). For exactly determined stars that is the change of variables of JCGM 101,
for log-normal inputs generalised least squares; it does not depend on the scale in which a quantity is quoted.
"""

import numpy as np

from stellerg.problem import Problem

__all__ = ["log_reference_density", "log_target", "scores"]


def scores(problem: Problem, parameters: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Scores of the inputs at parameters, and the logarithm and sign of their slopes.

    Parameters
    ----------
    parameters : ndarray, (star, draw, parameter)

    Returns
    -------
    score, log_slope : ndarray, (star, draw, input)
        Normal scores z, and ln |dz/d ln obs|.
    sign : ndarray, (input,)
        Sign of dz/d ln obs.
    """
    log_inputs = problem.base[:, None, :] + np.einsum("jr,sdr->sdj", problem.design, parameters)
    columns = [m.score(log_inputs[:, :, j]) for j, m in enumerate(problem.measured)]
    score = np.stack([c[0] for c in columns], axis=2)
    log_slope = np.stack([c[1] for c in columns], axis=2)
    return score, log_slope, np.sign(problem.log_sd[0])


def log_target(problem: Problem, parameters: np.ndarray) -> np.ndarray:
    """Logarithm of the density (not normalised), (star, draw); minus infinity beyond a hard end.

    Parameters
    ----------
    parameters : ndarray, (star, draw, parameter)
    """
    if not problem.inputs:
        return np.zeros(parameters.shape[:2])
    score, log_slope, sign = scores(problem, parameters)
    root = problem.precision_root
    whitened = score if root is None else np.einsum("sij,sdj->sdi", root, score)
    with np.errstate(invalid="ignore", over="ignore"):
        square = np.square(whitened).sum(axis=-1)
    possible = np.isfinite(square)
    density = log_reference_density(problem, np.where(possible[..., None], log_slope, 0.0), sign)
    return np.where(possible & ~np.isnan(density), density - 0.5 * np.where(possible, square, 0.0), -np.inf)


def log_reference_density(problem: Problem, log_slope: np.ndarray, sign: np.ndarray) -> np.ndarray:
    """ln |J' C^-1 J|^(1/2) from the slopes of the scores, (star, draw, input) to (star, draw).

    For exactly determined stars it is a sum: ln |det D| + sum ln |dz/d ln obs| - ln |C|/2.
    """
    if not problem.over_determined:
        return log_slope.sum(axis=-1) + problem.log_volume
    jacobian = (sign * np.exp(log_slope))[..., None] * problem.design
    if problem.correlation is not None:
        jacobian = np.einsum("sij,sdjr->sdir", problem.precision_root, jacobian)
    gram = np.einsum("sdjr,sdjq->sdrq", jacobian, jacobian)
    with np.errstate(divide="ignore"):
        if gram.shape[-1] == 1:
            return 0.5 * np.log(gram[..., 0, 0])
        return 0.5 * np.linalg.slogdet(gram)[1]
