"""The interior of the stars of a problem: S(u | ln M, ln R), star by star, from a model and what was measured."""

from dataclasses import dataclass, replace

import numpy as np

from stellerg.structure.calibration import Calibration
from stellerg.structure.model import MassInterval, StructureModel
from stellerg.structure.relation import Relation

__all__ = ["Interior"]


@dataclass(frozen=True)
class Interior:
    """What is known of the structure of the stars of a problem.

    Attributes
    ----------
    model : StructureModel or Calibration
    relation : Relation or None
        Of calibrated stars.
    """

    model: StructureModel | Calibration
    relation: Relation | None = None

    @property
    def intervals(self) -> tuple[MassInterval, ...]:
        """Intervals of mass with a density each; none under a calibration."""
        return () if isinstance(self.model, Calibration) else self.model.intervals

    @property
    def edges(self) -> np.ndarray:
        """Inner boundaries of the intervals in ln M."""
        return np.zeros(0) if isinstance(self.model, Calibration) else self.model.edges

    @property
    def follows_radius(self) -> bool:
        """Whether ln w depends on the mass and the radius of a star continuously."""
        return isinstance(self.model, Calibration)

    def take(self, which: np.ndarray) -> "Interior":
        """Return some of the stars."""
        return self if self.relation is None else replace(self, relation=self.relation.take(which))

    def quantile(self, u: np.ndarray, log_mass: np.ndarray | None, log_radius: np.ndarray | None) -> np.ndarray:
        """S(u | ln M, ln R): ln w at cumulative probability u, (star, m) each; None where the model needs none."""
        if self.relation is not None:
            return self.relation.quantile(u, log_mass, log_radius)
        return self.model.quantile(u, log_mass, log_radius)
