"""The error budget: the share of the variance of ln Y that each quantity, correlations and structure carry."""

import numpy as np

from stellerg.engines.answer import Answer
from stellerg.engines.first_order import structure_term
from stellerg.engines.intervals import mass_score
from stellerg.problem import COEFFICIENT
from stellerg.structure.calibration import Calibration
from stellerg.structure.model import StructureModel

__all__ = ["CORRELATIONS", "MASS_AND_STRUCTURE", "STRUCTURE", "budget", "tail_names"]

CORRELATIONS = "correlations"
MASS_AND_STRUCTURE = "mass_and_structure"
STRUCTURE = "structure"


def budget(answer: Answer) -> tuple[tuple[str, ...], np.ndarray]:
    """Shares of the variance of ln Y.

    Variances of the measured quantities are those of their assigned distributions in ln; correlations enter to first
    order in the normal scores (exactly for log-normal inputs). A calibrated coefficient follows mass and radius: their
    net effect counts. A structure model that changes with the mass makes the two share a part of the variance
    (``mass_and_structure``).

    Parameters
    ----------
    answer : Answer

    Returns
    -------
    names : tuple of str
        The inputs, ``correlations``, ``mass_and_structure`` for models that look at the mass, ``structure``.
    shares : ndarray, (star, output, name)
        Sum to one; NaN where nothing is uncertain. With correlations some may be negative.
    """
    problem = answer.problem
    count = len(problem.inputs)
    term = structure_term(problem, problem.log_median)
    weights = problem.input_weights + term.weights
    covariance = problem.log_covariance
    tail = tail_names(problem.interior.model)
    parts = np.zeros((len(problem), len(problem.outputs), count + len(tail)))
    parts[:, :, :count] = np.square(weights) * np.einsum("sjj->sj", covariance)[:, None, :]
    if problem.correlation is not None:
        shared = np.where(np.eye(count, dtype=bool), 0.0, covariance)
        parts[:, :, count] = np.einsum("soj,sjk,sok->so", weights, shared, weights)
    if COEFFICIENT in problem.outputs:
        spread = answer.log_sd[:, [problem.outputs.index(COEFFICIENT)]]
        if problem.interior.relation is not None:  # of which mass and radius carry a part, counted with them
            spread = term.spread
        parts[:, :, -1] = np.where(problem.structured, spread**2, 0.0)
        if MASS_AND_STRUCTURE in tail:
            straddling = (mass_score(problem).interval < 0)[:, None] & problem.structured
            shared = answer.log_sd**2 - parts.sum(axis=-1)
            shared[:, problem.outputs.index(COEFFICIENT)] = 0.0
            parts[:, :, count + 1] = np.where(straddling, shared, 0.0)
    whole = parts.sum(axis=-1, keepdims=True)
    with np.errstate(invalid="ignore"):
        shares = parts / np.where(whole > 0.0, whole, np.nan)
    return (*problem.inputs, *tail), shares


def tail_names(structure: StructureModel | Calibration) -> tuple[str, ...]:
    """Names in a budget beside the measured quantities."""
    shared = (MASS_AND_STRUCTURE,) if len(getattr(structure, "intervals", ())) > 1 else ()
    return (CORRELATIONS, *shared, STRUCTURE)
