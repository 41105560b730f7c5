"""How linear forms of the measured quantities move with the normal score of the mass, and vary beside it."""

from dataclasses import dataclass

import numpy as np

from stellerg.binding import MEAN_MOLECULAR_WEIGHT
from stellerg.problem import Problem

__all__ = ["Carried", "along", "carried_forms", "input_cumulants"]


@dataclass(frozen=True)
class Carried:
    """How linear forms of the inputs move with the score of the mass, and vary beside it. Each (star, ...).

    A form is a row of weights over the inputs; `forms` holds those of the outputs, ln R and ln mu.
    """

    forms: np.ndarray  # (star, form, input)
    mean: np.ndarray  # (star, form)
    slope: np.ndarray  # (star, form): d mean/dz where the mass is jointly normal
    covariance: np.ndarray  # (star, form, form): beside the score of the mass, of all other inputs
    log_mass: np.ndarray  # (star,): its mean
    mass_slope: np.ndarray  # (star,)
    through: np.ndarray  # (star,): input that alone carries the mass, -1 where it is jointly normal

    def take(self, rows):
        """Return some of the stars."""
        return Carried(*(getattr(self, name)[rows] for name in self.__dataclass_fields__))


def carried_forms(problem: Problem) -> Carried:
    """Linear forms of a problem: its outputs, ln R and ln mu."""
    count, inputs = len(problem), len(problem.inputs)
    latents = np.broadcast_to(problem.latent_input_weights, (count, len(problem.latents), inputs))
    outputs = np.broadcast_to(problem.input_weights, (count, len(problem.outputs), inputs))
    molecular = (
        latents[:, problem.latent("mean_molecular_weight")] if _molecular(problem) else np.zeros((count, inputs))
    )
    forms = np.concatenate([outputs, latents[:, [problem.latent("radius")]], molecular[:, None]], axis=1)
    at_mean = problem.log_latents(problem.log_mean)
    mean = [problem.log_outputs(problem.log_mean), at_mean[:, [problem.latent("radius")]]]
    mean.append(
        at_mean[:, [problem.latent("mean_molecular_weight")]]
        if _molecular(problem)
        else np.full((count, 1), np.log(MEAN_MOLECULAR_WEIGHT))
    )
    of_mass = latents[:, problem.latent("mass")]
    normal = problem.log_normal
    through = np.full(count, -1)
    if inputs:
        through = np.where(((of_mass != 0.0) & ~normal).any(axis=1), np.argmax(of_mass != 0.0, axis=1), -1)
    covariance = problem.log_covariance
    own = np.eye(inputs, dtype=bool) & (through[:, None] == np.arange(inputs))[:, None, :]
    covariance = np.where(own, 0.0, covariance)  # what carries the mass is known, given its score
    along = np.einsum("sjk,sk->sj", covariance, np.where(normal, of_mass, 0.0))
    sd = np.sqrt(np.maximum(np.einsum("sj,sj->s", along, of_mass), 0.0))
    safe = np.where(sd > 0.0, sd, 1.0)
    slope = np.einsum("sfj,sj->sf", forms, along) / safe[:, None]
    beside = np.einsum("sfj,sjk,sgk->sfg", forms, covariance, forms) - slope[:, :, None] * slope[:, None, :]
    return Carried(
        forms,
        np.concatenate(mean, axis=1),
        slope,
        beside,
        at_mean[:, problem.latent("mass")],
        np.where(through < 0, sd, 0.0),
        through,
    )


def _molecular(problem: Problem) -> bool:
    return "mean_molecular_weight" in problem.latents


def along(problem: Problem, carried: Carried, score: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """ln M (star, node) and shifts of the forms (star, form, node) at scores of the mass."""
    log_mass = carried.log_mass[:, None] + carried.mass_slope[:, None] * score
    shift = carried.slope[:, :, None] * score[:, None, :]
    position = problem.latent("mass")
    for j in np.unique(carried.through[carried.through >= 0]):
        rows = np.flatnonzero(carried.through == j)
        measured = problem.measured[j].take(rows)
        moved = measured.log_quantile(score if len(score) == 1 else score[rows]) - measured.log_mean[:, None]
        weights = np.broadcast_to(problem.latent_input_weights, (len(problem), *problem.latent_input_weights.shape[1:]))
        log_mass[rows] = carried.log_mass[rows, None] + weights[rows, position, j, None] * moved
        shift[rows] = carried.forms[rows, :, j, None] * moved[:, None, :]
    return log_mass, shift


def input_cumulants(problem: Problem) -> np.ndarray:
    """Cumulants 3 to 6 of each ln obs, (4, star, input)."""
    if not problem.inputs:
        return np.zeros((4, len(problem), 0))
    return np.stack([m.log_cumulants for m in problem.measured], axis=2)
