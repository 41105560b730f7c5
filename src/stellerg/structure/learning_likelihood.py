"""What observed structures say about a population of indices, as a density of its hyperparameters.

Normal scores are tabulated in n once, so that any quoted distribution costs the same. For each star the integral of
population times likelihood is a Gauss-Legendre rule over the window in which their product lies.
"""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr

from stellerg.measured import Measured
from stellerg.structure.observed import DISCREPANCY, INERTIA_SHARE
from stellerg.structure.polytrope import gravitational_coefficient
from stellerg.structure.relations import (
    LARGEST_TABULATED_INDEX,
    log10_apsidal_constant,
    log10_moment_of_inertia_factor,
)

__all__ = ["LEARNED_FROM", "TOP", "HyperPosterior", "ObservedStructures"]

TOP = LARGEST_TABULATED_INDEX
# Each observable with its part of the misfit and its logarithm for a polytrope.
LEARNED_FROM = {
    "log_k2": (1.0, lambda n: np.log(10.0) * log10_apsidal_constant(n)),
    "moment_of_inertia_factor": (INERTIA_SHARE, lambda n: np.log(10.0) * log10_moment_of_inertia_factor(n)),
    "structure_coefficient": (0.0, lambda n: np.log(gravitational_coefficient(n))),
}
# Half-Cauchy scale of the spread: judgement. Around 0.3, where main-sequence stars lie, it is level in ln spread, for
# which the intervals of a normal sample's standard deviation have the right coverage.
_SPREAD_SCALE = 0.3
_SLOPE_SD = 1.0  # of dn/d ln M: judgement; wide, as n itself spans about 2 among stars
# Limits of the spread: n as good as equal for all; nearly uniform over [0, 4.95], which no population of stars is.
# Without the upper one the half-Cauchy tail would decide the mean square of the spread for a handful of stars.
_LN_SPREAD = (float(np.log(1e-4)), float(np.log(2.5)))
_ROUNDS = 8  # of the approximation that the walkers start from
_STEP = 0.005  # in n, of the tables; they are interpolated linearly, which is good to 1e-4 of an error of 1 %
_FARTHEST = 1000.0  # of normal scores: as good as impossible, but finite where a hard end makes them infinite
_MARGIN = 2.5  # in n, of the tables at both ends: ten standard deviations of the misfit, which is clipped to it
_GRID = np.linspace(-_MARGIN, TOP + _MARGIN, round((TOP + 2.0 * _MARGIN) / _STEP) + 1)
_PER_INDEX = 1.0 / (_GRID[1] - _GRID[0])
_LEAST_SD = 1e-6  # of n: data sharper than this resolve nothing that is tabulated
# Gauss-Legendre on both sides of the mode, each out to a score of about 5. ln L is good to 2e-3 for a star, 5e-3 with
# three-quantile errors of ratio 5/3 (the tests compare with plain sums).
_NODES = 8
_NODE, _WEIGHT = np.polynomial.legendre.leggauss(_NODES)
_PLACE = 0.5 * (_NODE + 1.0)
_SIDES = np.array([-1.0, 0.0, 1.0])
_REACH, _FIRST_REACH = 5.0, 3.0  # the first is where the form of the integrand is looked at
_STRETCH = (0.4, 4.0)  # in one round: beyond a hard end the score is infinite, on a plateau zero
# Difference of a star's distances to the scores -4 and 4, over their sum, beyond which its window is looked for in two
# rounds: by trial, for the accuracy above.
_SKEWED = 0.25
_LEAST_KEPT = 1e-300  # probability within the range below which a population is impossible
_HALF_LOG_8PI = 0.5 * float(np.log(8.0 * np.pi))


@dataclass(frozen=True)
class _Table:
    """Normal scores of one observable, tabulated in n.

    `along` is the star's part of the misfit and `start` where its table is entered for n = 0, in steps of the table,
    both (star, 1); `score` and `rise`, to the next knot, are (star * knot,).
    """

    rows: slice | np.ndarray
    along: np.ndarray
    start: np.ndarray
    score: np.ndarray
    rise: np.ndarray


@dataclass(frozen=True)
class _Group:
    """Stars whose integrals need the same number of rounds; see `ObservedStructures` for the arrays."""

    rows: np.ndarray
    rounds: int
    centre: np.ndarray
    share: np.ndarray
    precision: np.ndarray
    tables: tuple[_Table, ...]

    def log_marginal(self, mean: np.ndarray, spread: np.ndarray, misfit: np.ndarray) -> np.ndarray:
        # where the table of each star is entered for n = 0
        entries = [table.start - table.along * misfit[table.rows] for table in self.tables]
        centre, below, above = self._window(mean, spread, misfit, entries)
        index = centre[..., None] + np.concatenate([below[..., None] * -_PLACE, above[..., None] * _PLACE], axis=-1)
        square = self._square(index, mean, spread, entries)
        least = square.min(axis=-1)
        square -= least[..., None]
        square *= -0.5
        np.exp(square, out=square)
        total = np.einsum("swn,n->sw", square[..., :_NODES], _WEIGHT) * below
        total += np.einsum("swn,n->sw", square[..., _NODES:], _WEIGHT) * above
        probability = _kept(mean, spread)
        with np.errstate(divide="ignore"):
            found = np.log(total / (spread * probability)) - 0.5 * least - _HALF_LOG_8PI
        return np.where(probability > _LEAST_KEPT, found, -np.inf)

    def _square(self, index, mean, spread, entries) -> np.ndarray:
        """Sum of the squared scores of population and data at `index`, (star, walker, node)."""
        square = index - mean[..., None]
        square /= spread[:, None]
        square *= square
        for table, entry in zip(self.tables, entries, strict=True):
            place = index[table.rows] * _PER_INDEX
            place += entry[..., None]
            knot = place.astype(np.intp)
            place -= knot
            place *= table.rise.take(knot)
            place += table.score.take(knot)
            place *= place
            square[table.rows] += place
        return square

    def _window(self, mean, spread, misfit, entries) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Mode of the integrand, and how far below and above it reaches; all within [0, 4.95].

        Both are those of normals at first. A round is a Gauss-Newton step of the mode, and a look at the scores at the
        ends, with which the reach is changed in proportion.
        """
        shared = spread**-2
        precision = self.precision[:, None] + shared
        centre = self.precision[:, None] * (self.centre[:, None] + self.share[:, None] * misfit) + mean * shared
        centre = _within(centre / precision)
        for _ in range(self.rounds):
            pull = (centre - mean) * shared
            precision = np.zeros(centre.shape) + shared
            for table, entry in zip(self.tables, entries, strict=True):
                place = entry + centre[table.rows] * _PER_INDEX
                knot = place.astype(np.intp)
                slope = table.rise.take(knot)
                place -= knot
                place *= slope
                place += table.score.take(knot)
                slope *= _PER_INDEX
                precision[table.rows] += slope * slope
                pull[table.rows] += place * slope
            centre = _within(centre - pull / precision)
        reach = (_FIRST_REACH / np.sqrt(precision))[..., None] * _SIDES
        for _ in range(self.rounds):
            ends = _within(centre[..., None] + reach)
            reach = ends - centre[..., None]
            square = self._square(ends, mean, spread, entries)
            square -= square[..., 1:2]
            stretch = _REACH / np.sqrt(np.maximum(square, 1e-9))
            reach *= np.maximum(np.minimum(stretch, _STRETCH[1]), _STRETCH[0])
        ends = _within(centre[..., None] + reach)
        return centre, centre - ends[..., 0], ends[..., 2] - centre


class ObservedStructures:
    """Structure observables of stars, as data on the index.

    Attributes
    ----------
    centre, share, precision : ndarray, (star,)
        A star's own data, taken as normal: n = centre + share d, with this precision (inverse variance).
    contrast : ndarray, (3, star)
        Coefficients c of c0 + 2 c1 d + c2 d^2, the chi^2 of a star's observables about n; 0 where there is only one.
    spare : ndarray, (star,)
        Degrees of freedom of that chi^2: observables beyond the first.

    Parameters
    ----------
    measured : mapping of str to Measured
        Observables of `LEARNED_FROM`; every star has at least one.
    misfit_scale : ndarray, (star,)
        By which the misfit of its stage is multiplied; from 0 to 1.
    """

    def __init__(self, measured: Mapping[str, Measured], misfit_scale: np.ndarray):
        stars = len(misfit_scale)
        self.precision, self.centre, self.share = np.zeros(stars), np.zeros(stars), np.zeros(stars)
        rounds, seen = np.ones(stars, int), []
        for name, values in measured.items():
            rows = np.flatnonzero(values.usable)
            part, logarithm = LEARNED_FROM[name]
            predicted = np.broadcast_to(logarithm(np.clip(_GRID, 0.0, TOP)), (len(rows), len(_GRID)))
            score = np.clip(values.take(rows).score(predicted)[0], -_FARTHEST, _FARTHEST)
            # k2 and the moment of inertia fall with n
            rising = score if part == 0.0 else -score
            ends = np.array([np.interp([-4.0, -1.0, 0.0, 1.0, 4.0], row, _GRID) for row in rising]).T
            skewness = np.abs(ends[0] + ends[4] - 2.0 * ends[2]) / np.maximum(ends[4] - ends[0], _LEAST_SD)
            rounds[rows] = np.where(skewness > _SKEWED, 2, rounds[rows])
            precision = np.maximum(0.5 * (ends[3] - ends[1]), _LEAST_SD) ** -2
            seen.append((rows, score, part * misfit_scale[rows], np.clip(ends[2], 0.0, TOP), precision))
        for rows, _, share, centre, precision in seen:
            self.precision[rows] += precision
            self.centre[rows] += precision * centre
            self.share[rows] += precision * share
        self.centre /= self.precision
        self.share /= self.precision
        self.contrast, self.spare = np.zeros((3, stars)), -np.ones(stars)
        for rows, _, share, centre, precision in seen:
            off, along = centre - self.centre[rows], share - self.share[rows]
            self.contrast[:, rows] += precision * np.array([off * off, off * along, along * along])
            self.spare[rows] += 1.0
        self._groups = [self._group(np.flatnonzero(rounds == count), int(count), seen) for count in np.unique(rounds)]

    def _group(self, stars: np.ndarray, rounds: int, seen: list) -> _Group:
        tables = []
        for rows, score, share, _, _ in seen:
            mine = np.isin(rows, stars)
            if not mine.any():
                continue
            place = np.searchsorted(stars, rows[mine])
            tables.append(
                _Table(
                    rows=slice(None) if len(place) == len(stars) else place,
                    along=share[mine, None] * _PER_INDEX,
                    start=(np.arange(len(place)) * len(_GRID) + _MARGIN * _PER_INDEX)[:, None],
                    score=score[mine].ravel(),
                    rise=np.diff(score[mine], axis=1, append=score[mine, -1:]).ravel(),
                )
            )
        return _Group(stars, rounds, self.centre[stars], self.share[stars], self.precision[stars], tuple(tables))

    def log_marginal(self, mean: np.ndarray, spread: np.ndarray, misfit: np.ndarray) -> np.ndarray:
        """Logarithm of the integral over n of population times likelihood.

        Parameters
        ----------
        mean : ndarray, (star, walker) or (1, walker)
            Of the population, at each star.
        misfit : ndarray, (star, walker)
            d of the star's stage.
        spread : ndarray, (walker,)

        Returns
        -------
        ndarray, (star, walker)
            Minus infinity where the population has no probability within [0, 4.95].
        """
        misfit = np.maximum(np.minimum(misfit, _MARGIN), -_MARGIN)
        if len(self._groups) == 1:
            return self._groups[0].log_marginal(mean, spread, misfit)
        found = np.empty(misfit.shape)
        for group in self._groups:
            own = mean if len(mean) == 1 else mean[group.rows]
            found[group.rows] = group.log_marginal(own, spread, misfit[group.rows])
        return found


def _within(index: np.ndarray) -> np.ndarray:
    """Clip to [0, 4.95], in place."""
    np.maximum(index, 0.0, out=index)
    return np.minimum(index, TOP, out=index)


@dataclass(frozen=True)
class HyperPosterior:
    """The posterior density of (mean, ln spread, [slope], misfit of each stage).

    Attributes
    ----------
    observed : ObservedStructures
    stages : tuple of str
        Those whose data see the misfit.
    stage : ndarray of int, (star,)
        Its place in `stages`; their number where the data do not see it.
    offset : ndarray, (star,), or None
        ln M minus its average, where a slope is wanted.
    """

    observed: ObservedStructures
    stages: tuple[str, ...]
    stage: np.ndarray
    offset: np.ndarray | None

    @classmethod
    def of(cls, observed: ObservedStructures, labels: np.ndarray, log_mass: np.ndarray | None) -> "HyperPosterior":
        """Number the stages.

        Parameters
        ----------
        observed : ObservedStructures
        labels : ndarray of str, (star,)
        log_mass : ndarray, (star,), or None
        """
        # a stage whose data do not see the misfit cannot tell it: there is nothing to sample
        stages = np.unique(labels[observed.share > 0.0])
        stage = np.searchsorted(stages, labels)
        stage[~np.isin(labels, stages)] = len(stages)
        return cls(observed, tuple(stages.tolist()), stage, None if log_mass is None else log_mass - log_mass.mean())

    @property
    def parameters(self) -> tuple[str, ...]:
        """Names of the coordinates."""
        slope = () if self.offset is None else ("slope",)
        return ("mean", "ln_spread", *slope, *(f"misfit {label}" for label in self.stages))

    @property
    def _first_misfit(self) -> int:
        return 2 if self.offset is None else 3

    def population(self, coordinates: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """Mean, (star, walker) or (1, walker), spread, (walker,), and misfit, (star, walker).

        Parameters
        ----------
        coordinates : ndarray, (walker, parameter)
        """
        mean = coordinates[None, :, 0]
        if self.offset is not None:
            mean = mean + self.offset[:, None] * coordinates[:, 2]
        misfit = np.zeros((len(self.stages) + 1, len(coordinates)))
        misfit[:-1] = coordinates[:, self._first_misfit :].T
        return mean, np.exp(np.clip(coordinates[:, 1], *_LN_SPREAD)), misfit[self.stage]

    def log_probability(self, coordinates: np.ndarray) -> np.ndarray:
        """Logarithm of the density at coordinates (walker, parameter), (walker,)."""
        mean, ln_spread = coordinates[:, 0], coordinates[:, 1]
        population, spread, misfit = self.population(coordinates)
        inside = (mean >= 0.0) & (mean < TOP) & (ln_spread > _LN_SPREAD[0]) & (ln_spread < _LN_SPREAD[1])
        prior = ln_spread - np.log1p((spread / _SPREAD_SCALE) ** 2)  # half-Cauchy, over ln spread
        prior -= 0.5 * np.square(coordinates[:, self._first_misfit :] / DISCREPANCY).sum(axis=1)
        if self.offset is not None:
            prior -= 0.5 * np.square(coordinates[:, 2] / _SLOPE_SD)
        return np.where(inside, prior + self.observed.log_marginal(population, spread, misfit).sum(axis=0), -np.inf)

    def approximation(self) -> tuple[np.ndarray, np.ndarray]:
        """Centre, and a root of the covariance, of the posterior with all data taken as normal."""
        data, first = self.observed, self._first_misfit
        size, stars = len(self.parameters), len(self.stage)
        seen = np.flatnonzero(self.stage < len(self.stages))
        place = first + self.stage[seen]
        design = np.zeros((stars, size))
        design[:, 0] = 1.0
        design[seen, place] = -data.share[seen]
        prior, shift = np.full(size, DISCREPANCY**-2), np.zeros(size)
        prior[:2] = TOP**-2, 1.0  # weak; the spread is put in below
        if self.offset is not None:
            design[:, 2], prior[2] = self.offset, _SLOPE_SD**-2
        np.add.at(prior, place, data.contrast[2, seen])
        np.add.at(shift, place, -data.contrast[1, seen])
        noise, best = 1.0 / data.precision, np.zeros(size)
        variance = float(np.var(data.centre)) + 0.25 * float(noise.mean())
        for _ in range(_ROUNDS):
            weight = 1.0 / (variance + noise)
            matrix = np.einsum("s,sp,sq->pq", weight, design, design) + np.diag(prior)
            best = np.linalg.solve(matrix, np.einsum("s,sp,s->p", weight, design, data.centre) + shift)
            left = np.square(data.centre - np.einsum("sp,p->s", design, best)) - noise
            # never below a share of the errors: the walkers need room
            variance = max(
                float(np.average(left, weights=weight**2)), 0.1 * float(noise.min()), np.exp(2 * _LN_SPREAD[0])
            )
        matrix[1, 1] = 2.0 * np.sum((weight * variance) ** 2) + 1.0
        best[0], best[1] = np.clip(best[0], 0.01, TOP - 0.01), 0.5 * np.log(variance)
        return best, np.linalg.inv(np.linalg.cholesky(matrix)).T


def _kept(mean: np.ndarray, spread: np.ndarray) -> np.ndarray:
    """Probability that a normal puts within [0, 4.95]."""
    low, high = -mean / spread, (TOP - mean) / spread
    # the smaller tails are subtracted, so that no digits are lost
    turned = low > 0.0
    return ndtr(np.where(turned, -low, high)) - ndtr(np.where(turned, -high, low))
