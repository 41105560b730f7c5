"""The error budget: the share of the variance of ln Y that each quantity, correlations and structure carry."""

import numpy as np

from stellerg.engines.answer import Answer
from stellerg.engines.intervals import mass_score
from stellerg.problem import COEFFICIENT

__all__ = ["CORRELATIONS", "STRUCTURE", "budget"]

CORRELATIONS = "correlations"
STRUCTURE = "structure"


def budget(answer: Answer) -> tuple[tuple[str, ...], np.ndarray]:
    """Shares of the variance of ln Y.

    Variances of the measured quantities are those of their assigned distributions in ln; correlations enter
    to first order in the normal scores (exactly for log-normal inputs). Where the structure model changes
    within the range of the mass, what mass and structure share is counted under correlations.

    Parameters
    ----------
    answer : Answer

    Returns
    -------
    names : tuple of str
        The inputs, ``correlations`` and ``structure``.
    shares : ndarray, (star, output, name)
        Sum to one; NaN where nothing is uncertain. With correlations some may be negative.
    """
    problem = answer.problem
    count = len(problem.inputs)
    weights = np.broadcast_to(problem.input_weights, (len(problem), len(problem.outputs), count))
    covariance = problem.log_covariance
    parts = np.zeros((len(problem), len(problem.outputs), count + 2))
    parts[:, :, :count] = np.square(weights) * np.einsum("sjj->sj", covariance)[:, None, :]
    total = np.einsum("soj,sjk,sok->so", weights, covariance, weights)
    if problem.correlation is not None:
        parts[:, :, count] = total - parts[:, :, :count].sum(axis=-1)
    if COEFFICIENT in problem.outputs:
        spread = answer.log_sd[:, problem.outputs.index(COEFFICIENT)] ** 2
        parts[:, :, count + 1] = np.where(problem.structured, spread[:, None], 0.0)
        straddling = (mass_score(problem).interval < 0)[:, None] & problem.structured
        shared = answer.log_sd**2 - parts.sum(axis=-1)
        shared[:, problem.outputs.index(COEFFICIENT)] = 0.0
        parts[:, :, count] += np.where(straddling, shared, 0.0)
    whole = parts.sum(axis=-1, keepdims=True)
    with np.errstate(invalid="ignore"):
        shares = parts / np.where(whole > 0.0, whole, np.nan)
    return (*problem.inputs, CORRELATIONS, STRUCTURE), shares
