"""The interior of the stars of a problem: S(u | ln M, ln R), star by star, from a model and what was measured."""

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from stellerg.structure.calibration import Calibration
from stellerg.structure.informed import COMPANIONS, Cells, cells_of, equally_probable
from stellerg.structure.model import MassInterval, StructureModel
from stellerg.structure.observed import Observed
from stellerg.structure.relation import Relation

__all__ = ["Interior"]

_AROUND = 1.2  # in ln w about the median of a calibrated star: beyond lies nothing for errors below 50 %
_POINTS = 1024
_DEEPEST = 900.0  # below the largest log likelihood of a table: 45 normal scores, those of the misfit
_POINTS_WITH_COMPANIONS = 256  # each is an average over companions: dear, and smoother
_PREDICTIVE = 512  # equally probable structures over which a prediction is averaged


@dataclass(frozen=True)
class Interior:
    """What is known of the structure of the stars of a problem.

    Attributes
    ----------
    model : StructureModel or Calibration
    relation : Relation or None
        Of calibrated stars.
    observed : Observed or None
        Structure observables, where a star has any.
    cells : tuple of Cells
        Under a density: what prior and observables give, for each interval of mass; empty without observables.
    """

    model: StructureModel | Calibration
    relation: Relation | None = None
    observed: Observed | None = None
    cells: tuple[Cells, ...] = ()

    @classmethod
    def of(cls, model, relation: Relation | None, observed: Observed | None, count: int) -> "Interior":
        """Bring a model and structure observables together, for stars of one kind: all with observables, or none."""
        if observed is None or relation is not None:
            return cls(model, relation, observed)
        return cls(model, None, observed, tuple(cells_of(p.mixture, observed, count) for p in model.intervals))

    @property
    def intervals(self) -> tuple[MassInterval, ...]:
        """Intervals of mass with a density each; none under a calibration."""
        return () if isinstance(self.model, Calibration) else self.model.intervals

    @property
    def edges(self) -> np.ndarray:
        """Inner boundaries of the intervals in ln M."""
        return np.zeros(0) if isinstance(self.model, Calibration) else self.model.edges

    def take(self, which: np.ndarray) -> "Interior":
        """Return some of the stars."""
        return Interior(
            self.model,
            self.relation and self.relation.take(which),
            self.observed and self.observed.take(which),
            tuple(cells.take(which) for cells in self.cells),
        )

    def prior_quantile(self, u: np.ndarray, log_mass: np.ndarray | None, log_radius: np.ndarray | None) -> np.ndarray:
        """ln w at cumulative probability u before anything was measured of the inside, (star, m) each."""
        if self.relation is not None:
            return self.relation.quantile(u, log_mass, log_radius)
        return self.model.quantile(u, log_mass, log_radius)

    def quantile(self, u: np.ndarray, log_mass: np.ndarray | None, log_radius: np.ndarray | None) -> np.ndarray:
        """S(u | ln M, ln R): ln w at cumulative probability u, (star, m) each; None where the model needs none.

        With structure observables: after them under a density; before them, to be weighed with `log_weight`, under a
        calibration.
        """
        if not self.cells:
            return self.prior_quantile(u, log_mass, log_radius)
        found = [cells.quantile(u) for cells in self.cells]
        if len(found) == 1:
            return found[0]
        which = np.searchsorted(self.edges, log_mass, side="right")
        return np.select([which == number for number in range(len(found))], found)

    @property
    def weighs(self) -> bool:
        """Whether draws of mass, radius and structure need the weights of `log_weight`."""
        return self.observed is not None and (self.relation is not None or len(self.cells) > 1)

    def log_weight(self, q: np.ndarray, log_mass: np.ndarray, log_radius: np.ndarray | None) -> np.ndarray:
        """Logarithm of the weight that structure observables give to draws of `quantile`, (star, m)."""
        if self.cells:
            evidence = [np.broadcast_to(cells.log_evidence[:, None], q.shape) for cells in self.cells]
            which = np.searchsorted(self.edges, log_mass, side="right")
            return np.select([which == number for number in range(len(evidence))], evidence)
        centre = self.relation.centre(log_mass, log_radius)
        return self._of_both(q, centre, self.likelihood(q), self.convective_likelihood)

    def log_likelihood(self, q, log_mass, log_radius) -> np.ndarray:
        """Log likelihood of the structure observables at ln w, averaged over misfit and companion, (star, m)."""
        if self.relation is None:
            found = [self._likelihood(self.observed, q, number) for number in range(len(self.intervals))]
            which = None if len(found) == 1 else np.searchsorted(self.edges, log_mass, side="right")
            return found[0] if which is None else np.select([which == k for k in range(len(found))], found)
        centre = self.relation.centre(log_mass, log_radius)
        return self._of_both(q, centre, self.likelihood(q), self.convective_likelihood)

    def likelihood(self, q: np.ndarray) -> np.ndarray:
        """Log likelihood of the structure observables of calibrated stars that are not fully convective, (star, m)."""
        return self._likelihood(self.observed, q, 0)

    def convective_likelihood(self, q: np.ndarray) -> np.ndarray:
        """The same of calibrated stars that are fully convective."""
        return self._likelihood(self.observed.convective(), q, -1)

    def _likelihood(self, observed: Observed, q: np.ndarray, number: int) -> np.ndarray:
        """Log likelihood, from a table where each value is an average; `number`: interval of mass, -1 convective."""
        blunt = np.flatnonzero(observed.blunt)
        if not blunt.size:
            return observed.marginal(q)
        out = np.empty(q.shape)
        for rows, table in self._tables[number]:
            out[rows] = table.at(q[rows])
        sharp = np.flatnonzero(~observed.blunt)
        if sharp.size:
            out[sharp] = observed.take(sharp).marginal(q[sharp])
        return out

    @cached_property
    def _tables(self) -> tuple:
        """Log likelihoods over all of ln w that matter, one for each interval of mass."""
        if self.relation is None:
            ends = [(piece.mixture.bracket, self._companions_of(piece)) for piece in self.intervals]
            count = len(self.observed.misfit)
            return tuple(
                _tabulated(self.observed, np.broadcast_to(np.array(bracket), (count, 2)), companions)
                for bracket, companions in ends
            )
        middle = self.relation.centre(self.relation.log_mass[:, None], self.relation.log_radius[:, None])
        around = np.concatenate([middle - _AROUND, middle + _AROUND], axis=1)
        usual = _tabulated(self.observed, around, self._companions)
        if not self.relation.convective.any():
            return (usual,)
        return usual, _tabulated(self.observed.convective(), around, self._companions)

    def _companions_of(self, piece: MassInterval) -> np.ndarray | None:
        """Equally probable ln w of companions under the density of an interval of mass, (star, k)."""
        if not self.observed.has_companion.any():
            return None
        return equally_probable(piece.mixture, len(self.observed.misfit))

    def _of_both(self, q, centre, usual, convective):
        """A log likelihood, averaged over the two kinds of interior a calibrated star may have, given ln w."""
        if not self.relation.convective.any():
            return usual
        share = self.relation.log_convective_share(q, centre)
        with np.errstate(divide="ignore"):
            rest = np.log(-np.expm1(np.minimum(share, 0.0)))
        return np.logaddexp(share + convective(q), rest + usual)

    @cached_property
    def _companions(self) -> np.ndarray | None:
        """Equally probable ln w of the companions of calibrated stars: of the same mass and radius, (star, k)."""
        if not self.observed.has_companion.any():
            return None
        u = np.broadcast_to((np.arange(COMPANIONS) + 0.5) / COMPANIONS, (len(self.observed.misfit), COMPANIONS))
        relation = self.relation
        return relation.quantile(u, relation.log_mass[:, None], relation.log_radius[:, None])

    def predictive_probability(self, log_mass, log_radius) -> dict[str, np.ndarray]:
        """Two-sided predictive probability of each structure observable, (star,), at medians of mass and radius."""
        count = len(self.observed.misfit)
        u = np.broadcast_to((np.arange(_PREDICTIVE) + 0.5) / _PREDICTIVE, (count, _PREDICTIVE))
        mass = None if log_mass is None else np.broadcast_to(log_mass[:, None], u.shape)
        radius = None if log_radius is None else np.broadcast_to(log_radius[:, None], u.shape)
        q = self.prior_quantile(u, mass, radius)
        # the companion's structures in an order that has nothing to do with the star's: a step that shares no factor
        other = q[:, (np.arange(_PREDICTIVE) * 197) % _PREDICTIVE] if self.observed.has_companion.any() else None
        return {name: self.observed.predictive_probability(name, q, other) for name in self.observed.measured}


def _tabulated(observed: Observed, ends: np.ndarray, companions: np.ndarray | None) -> list:
    """Tables of the stars whose likelihood is an average, with their rows: those with companions apart."""
    tables = []
    for with_companion in (False, True):
        rows = np.flatnonzero(observed.blunt & (observed.has_companion == with_companion))
        if rows.size:
            pairs = companions[rows] if with_companion else None
            tables.append((rows, _Tabulated.of(observed.take(rows), ends[rows], pairs)))
    return tables


@dataclass(frozen=True)
class _Tabulated:
    """A log likelihood of ln w on an equally spaced grid; cubic between four points."""

    start: np.ndarray
    step: np.ndarray
    values: np.ndarray

    @classmethod
    def of(cls, observed: Observed, q: np.ndarray, companions) -> "_Tabulated":
        points = _POINTS if companions is None else _POINTS_WITH_COMPANIONS
        low, high = q.min(axis=1), q.max(axis=1)
        step = (high - low + 1e-9) / (points - 4)
        start = low - 1.5 * step
        values = observed.marginal(start[:, None] + step[:, None] * np.arange(points), companions)
        # beyond the reach of a misfit a sharp measurement falls off a cliff, over which a cubic would leap
        return cls(start, step, np.maximum(values, values.max(axis=1, keepdims=True) - _DEEPEST))

    def at(self, q: np.ndarray) -> np.ndarray:
        place = (q - self.start[:, None]) / self.step[:, None]
        cell = np.clip(np.floor(place).astype(np.intp), 1, self.values.shape[1] - 3)
        t = place - cell
        y = [np.take_along_axis(self.values, cell + k, axis=1) for k in (-1, 0, 1, 2)]
        cubic = (
            -t * (t - 1.0) * (t - 2.0) / 6.0 * y[0]
            + (t + 1.0) * (t - 1.0) * (t - 2.0) / 2.0 * y[1]
            - (t + 1.0) * t * (t - 2.0) / 2.0 * y[2]
            + (t + 1.0) * t * (t - 1.0) / 6.0 * y[3]
        )
        finite = np.isfinite(cubic)
        return np.where(finite, cubic, np.minimum(y[1], y[2]))
