"""What a result leaves out or contradicts of a star's inside: radiation, ionisation, what a prior predicted."""

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np

from stellerg.binding import MEAN_MOLECULAR_WEIGHT, Kind, ionisation_share, radiation_share
from stellerg.problem import Problem
from stellerg.status import Flag

__all__ = ["Inside", "inside"]

_NEGLECTED = 0.03  # share of radiation in the pressure (judgement)
_CONFLICT = 0.01  # two-sided predictive probability (judgement)


@dataclass(frozen=True)
class Inside:
    """Judgements of stars, (star,) each; NaN where they do not apply.

    Attributes
    ----------
    radiation : ndarray
        Share of radiation in the pressure, weighted by pressure, at the medians.
    ionisation : ndarray
        Energy of ionisation over the binding energy without it, at the medians.
    predictive : dict of str to ndarray
        Two-sided predictive probability of each structure observable.
    convective : ndarray
        Weight of a fully convective interior, of stars whose calibrated structure has two kinds.
    branches : ndarray, (star, 2)
        Median structure coefficient of the fully convective interior and of the other, of these stars.
    flags : ndarray of int64
    """

    radiation: np.ndarray
    ionisation: np.ndarray
    predictive: Mapping[str, np.ndarray] = field(default_factory=dict)
    convective: np.ndarray | None = None
    branches: np.ndarray | None = None
    flags: np.ndarray | None = None

    def take(self, which: np.ndarray) -> "Inside":
        """Return some of the stars."""
        return Inside(
            self.radiation[which],
            self.ionisation[which],
            {name: values[which] for name, values in self.predictive.items()},
            self.convective[which],
            self.branches[which],
            self.flags[which],
        )


def inside(problem: Problem, ionisation_energy: np.ndarray) -> Inside:
    """Judge the inside of stars.

    Parameters
    ----------
    problem : Problem
    ionisation_energy : ndarray, (star,)
        J/kg.
    """
    count = len(problem)
    radiation, ionisation, convective = np.full((3, count), np.nan)
    flags = np.zeros(count, np.int64)
    follows = np.isin(problem.kinds, (Kind.BINDING, Kind.INTERNAL)).any()
    at = problem.log_latents(problem.log_median)
    known = {name: at[:, k, None] for k, name in enumerate(problem.latents)}
    mass, radius = known.get("mass"), known.get("radius")
    if follows and mass is not None:
        q = problem.interior.quantile(np.full((count, 1), 0.5), mass, radius)
        molecular = known.get("mean_molecular_weight", np.log(MEAN_MOLECULAR_WEIGHT))
        radiation = radiation_share(q, mass, molecular)[:, 0]
        if not problem.binding.radiation:
            flags[radiation > _NEGLECTED] |= int(Flag.RADIATION_NEGLECTED)
        if radius is not None and problem.binding.gas > 0.0:
            counted = (1.0 - radiation) if problem.binding.radiation else 1.0
            of_potential = ionisation_share(ionisation_energy[:, None], q, mass, radius)[:, 0]
            ionisation = of_potential / (problem.binding.gas * counted)
    relation, branches = problem.interior.relation, np.full((count, 2), np.nan)
    if relation is not None:
        convective = np.where(relation.single, np.nan, relation.convective)
        both = np.stack([relation.log_convective, relation.centre(mass, radius)[:, 0]], axis=1)
        branches = np.where(relation.single[:, None], np.nan, np.exp(both))
    predictive = {}
    if problem.interior.observed is not None and problem.structured.any():
        medians = (None if x is None else x[:, 0] for x in (mass, radius))
        predictive = problem.interior.predictive_probability(*medians)
        for probability in predictive.values():
            with np.errstate(invalid="ignore"):
                flags[probability < _CONFLICT] |= int(Flag.PRIOR_DATA_CONFLICT)
    return Inside(radiation, ionisation, predictive, convective, branches, flags)
