"""What a posterior is made of: rows answered together, and draws."""

from dataclasses import dataclass
from typing import Any

import numpy as np

__all__ = ["Piece", "StarDraws"]


@dataclass(frozen=True)
class Piece:
    """Rows answered together.

    Attributes
    ----------
    rows : ndarray of int, (m,)
    answer : engines' Answer
    linear : engines' LinearAnswer
    budget_names : tuple of str
    budget : ndarray, (m, output, name)
        Outputs in the order of the answer's problem.
    inside : checks' Inside
        Radiation, ionisation, predictions of structure observables.
    """

    rows: np.ndarray
    answer: Any
    linear: Any
    budget_names: tuple[str, ...]
    budget: np.ndarray
    inside: Any

    def position(self, output: str) -> int | None:
        """Position of an output in this piece; None where it is not given."""
        outputs = self.answer.problem.outputs
        return outputs.index(output) if output in outputs else None


@dataclass(frozen=True)
class StarDraws:
    """Draws of all stars, (star, draw) each; NaN where a star has no result.

    Attributes
    ----------
    u : ndarray
        Uniform variate of structure.
    latents : dict of str to ndarray
        mass, radius, luminosity (nominal solar), distance (pc), where determined.
    outputs : dict of str to ndarray
        In the units of the posterior; with the structure coefficient.
    log_weight : ndarray
        Logarithm of importance weights; 0 for exactly determined stars.
    log_reference_density : ndarray
        ln |J' C^-1 J|^(1/2), over the determined combinations of ln M, ln R, ln L and ln d.
    """

    u: np.ndarray
    latents: dict[str, np.ndarray]
    outputs: dict[str, np.ndarray]
    log_weight: np.ndarray
    log_reference_density: np.ndarray
