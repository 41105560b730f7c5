"""Deterministic quadrature: no noise, every probability to 1e-6 or better for log-normal inputs.

The measured part of ln Y is normal for log-normal inputs (correlated or over-determined ones included), and
convolved on a grid scaled to the star for independent inputs of any shape; structure is then integrated over
its density. Where the structure model changes with the mass, the integral is taken interval by interval,
conditioned on the normal score of the mass.

When it is wrong: by no more than `numerical_error` states (1e-4 at the worst); where it would be, it refuses. Inputs
that are not log-normal and correlated or over-determined (``mass = 1.0 ± 0.3`` quoted twice) have no such sum, and the
steep side of a three-quantile error with a ratio beyond 2 (``1.0 +0.5 -0.1``) is too fine for a grid as wide as its
tail: use montecarlo.
"""

from dataclasses import dataclass, field
from functools import cached_property, partial
from typing import ClassVar

import numpy as np
from scipy.special import ndtri

from stellerg.binding import Kind
from stellerg.engines import smoothing
from stellerg.engines.answer import Answer
from stellerg.engines.calibrated import CalibratedSums, calibrated_refusal
from stellerg.engines.cells import CellsSums, cells_refusal
from stellerg.engines.convolution import convolve
from stellerg.engines.intervals import MassScore, mass_score, moments_of_structure
from stellerg.engines.joined import JoinedAnswer
from stellerg.engines.offsets import TABLE_ERROR, quantile_by_table
from stellerg.engines.parts import GaussianPart, GridPart, SharpPart
from stellerg.engines.straddling import mass_shift, straddling_terms
from stellerg.engines.summed import SummedAnswer
from stellerg.measured import Shape
from stellerg.problem import Problem
from stellerg.status import Status
from stellerg.structure.distributions import Point, Uniform
from stellerg.structure.model import Component, Coordinate, Mixture

__all__ = ["Quadrature", "QuadratureAnswer"]

_LARGEST_RATIO = 2.0 + 1e-9  # of three-quantile errors: beyond, the steep side is lost between the points of a grid
_NO_SPREAD = 1e-24  # variance of ln Y that is rounding
_CHUNK = 2048  # stars evaluated together: bounds memory, changes no bit
_NO_STRUCTURE = Mixture((1.0,), (Component(Coordinate.LOG_COEFFICIENT, Point(0.0)),))


@dataclass(frozen=True)
class Quadrature:
    """The engine. It has no options."""

    name: ClassVar[str] = "quadrature"
    reasons: ClassVar[tuple[str, ...]] = (
        "",
        "over-determined with inputs that are not log-normal: use montecarlo",
        "correlated inputs that are not log-normal: use montecarlo",
        "the structure model changes within the range of a mass that several inputs determine, not all "
        "log-normal: use montecarlo",
        "errors whose upper and lower side differ by more than a factor of two: use montecarlo",
        "errors too large for the expansions used with a calibrated coefficient, structure observables or a curved "
        "binding energy: use montecarlo",
    )

    def accepts(self, problem: Problem) -> np.ndarray:
        """Index into `reasons`, (star,)."""
        other = ~problem.log_normal
        reason = np.zeros(len(problem), int)
        reason[_steep(problem)] = 4
        if problem.interior.relation is not None:
            refusal = calibrated_refusal(problem.only(np.flatnonzero(problem.structured)))

            reason = np.where(refusal > 0, np.where(refusal == 1, 3, 5), reason)
        elif _needs_cells(problem):
            refusal = cells_refusal(problem)
            reason = np.where(refusal > 0, np.where(refusal == 1, 3, 5), reason)
        else:
            reason[~mass_score(problem).tractable] = 3
        if problem.correlation is not None:
            linked = (problem.correlation != 0.0).sum(axis=2) > 1
            reason[(linked & other).any(axis=1)] = 2
        if problem.over_determined:
            reason[other.any(axis=1)] = 1
        return reason

    def solve(self, problem: Problem) -> Answer:
        """Answer a problem."""
        parts = []
        for positions, kind in _sorted_outputs(problem):
            some = problem if len(positions) == len(problem.outputs) else problem.only(positions)
            parts.append((positions, kind(some)))
        return parts[0][1] if len(parts) == 1 else JoinedAnswer(problem, tuple(parts))


def _needs_cells(problem: Problem) -> bool:
    """Whether the density of ln w is a star's own, or the binding energy no constant share."""
    follows = np.isin(problem.kinds, (Kind.BINDING, Kind.INTERNAL)).any()
    return bool(problem.interior.cells) or (follows and not problem.binding.constant)


def _sorted_outputs(problem: Problem):
    """Yield the positions of outputs that are treated alike, and how."""
    carrying = problem.structured
    curved = partial(SummedAnswer, sums=CellsSums()) if _needs_cells(problem) else QuadratureAnswer
    carried = curved if problem.interior.relation is None else partial(SummedAnswer, sums=CalibratedSums())
    if carried is QuadratureAnswer:
        yield np.arange(len(carrying)), carried
        return
    for chosen, kind in ((carrying, carried), (~carrying, QuadratureAnswer)):
        positions = np.flatnonzero(chosen)
        if positions.size:
            yield positions, kind


@dataclass(frozen=True)
class QuadratureAnswer:
    """Distributions by quadrature; evaluated when asked for. See `stellerg.engines.answer.Answer`."""

    problem: Problem
    diagnostics: dict = field(default_factory=dict)

    def take(self, which: np.ndarray) -> "QuadratureAnswer":
        """Return some of the stars."""
        return QuadratureAnswer(self.problem.take(which))

    def failure(self, star: int) -> str:
        """Nothing fails."""
        return ""

    @property
    def status(self) -> np.ndarray:
        """Always OK, (star,)."""
        return np.full(len(self.problem), Status.OK, np.uint8)

    @property
    def log_mean(self) -> np.ndarray:
        """Mean of ln Y, (star, output)."""
        return self._moments[0]

    @property
    def log_sd(self) -> np.ndarray:
        """Standard deviation of ln Y, (star, output)."""
        return self._moments[1]

    @cached_property
    def numerical_error(self) -> np.ndarray:
        """Estimated error of the cumulative, (star, output)."""
        error = np.full((len(self.problem), len(self.problem.outputs)), TABLE_ERROR)
        for chunk, piece, output in self._pieces():
            view = error[chunk, output]
            for rows, _, estimate in _terms(piece, output):
                view[rows] += estimate
        return error

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """ln Y at cumulative probabilities p (m,): (star, output, m)."""
        p = np.atleast_1d(np.asarray(p, float))
        out = np.empty((len(self.problem), len(self.problem.outputs), len(p)))
        for chunk, piece, output in self._pieces():
            guess = self.log_mean[chunk, output, None] + self.log_sd[chunk, output, None] * ndtri(p)
            view = out[chunk, output]
            for rows, terms, _ in _terms(piece, output):
                start = guess[rows]
                if len(terms) == 1 and isinstance(terms[0][1], GaussianPart) and not terms[0][0].is_point:
                    mixture, part = terms[0]
                    looked_up = quantile_by_table(mixture, part.mean, part.sd, p)
                    view[rows] = looked_up
                    left = np.flatnonzero(np.isnan(looked_up[:, 0]))
                    if not left.size:
                        continue
                    rows, start, terms = rows[left], start[left], [(mixture, part.take(left))]
                if len(terms) == 1 and isinstance(terms[0][1], GridPart):
                    # the quantiles for a normal measured part of the same mean and width lie close by
                    mixture, part = terms[0]
                    normal = GaussianPart(part.mean, np.sqrt(piece.variance_of(piece.output_weights(output))[rows]))
                    start = smoothing.quantile([(mixture, normal)], p, start)
                view[rows] = smoothing.quantile(terms, p, start)
        return out

    def cumulative(self, log_value: np.ndarray) -> np.ndarray:
        """Cumulative probability at ln Y (star, output, m)."""
        return self._evaluate(log_value, 0)

    def density(self, log_value: np.ndarray) -> np.ndarray:
        """Density over ln Y at (star, output, m)."""
        return self._evaluate(log_value, 1)

    def _evaluate(self, log_value: np.ndarray, which: int) -> np.ndarray:
        out = np.empty(log_value.shape)
        for chunk, piece, output in self._pieces():
            view = out[chunk, output]
            for rows, terms, _ in _terms(piece, output):
                view[rows] = smoothing.evaluate(terms, log_value[chunk, output][rows])[which]
        return out

    def _pieces(self):
        for chunk, piece in self.problem.split(_CHUNK):
            for output in range(len(self.problem.outputs)):
                yield chunk, piece, output

    @cached_property
    def _moments(self) -> tuple[np.ndarray, np.ndarray]:
        """Mean and standard deviation of ln Y: exact sums, structure included."""
        problem = self.problem
        mean = problem.log_outputs(problem.log_mean)
        weights = np.broadcast_to(problem.input_weights, (*mean.shape, len(problem.inputs)))
        variance = np.einsum("soj,sjk,sok->so", weights, problem.log_covariance, weights)
        score = mass_score(problem)
        straddling = np.flatnonzero(score.interval < 0)
        for output in np.flatnonzero(problem.structured):
            for number, piece in enumerate(problem.interior.intervals):
                rows = score.interval == number
                mean[rows, output] += piece.mixture.moments[0]
                variance[rows, output] += piece.mixture.moments[1] ** 2
            for rows in _by_input(score, straddling):
                shift, _ = mass_shift(problem.take(rows), int(output), _rows(score, rows))
                first, second, covariance = moments_of_structure(problem, score, shift, rows)
                mean[rows, output] += first
                variance[rows, output] += second + 2.0 * covariance
        return mean, np.sqrt(np.maximum(variance, 0.0))


def _steep(problem: Problem) -> np.ndarray:
    """Where an input that matters has three-quantile errors with a ratio beyond the grid's reach, (star,)."""
    steep = np.zeros(len(problem), bool)
    matters = (problem.input_weights != 0.0).any(axis=(0, 1))
    for measured, matter in zip(problem.measured, matters, strict=True):
        if matter:
            with np.errstate(invalid="ignore"):
                ratio = np.maximum(measured.upper / measured.lower, measured.lower / measured.upper)
            steep |= (measured.shape == Shape.THREE_QUANTILE) & (ratio > _LARGEST_RATIO)
    return steep


def _amplified(mixture: Mixture) -> float:
    """How much errors of a gridded part grow in the closed form of a narrow uniform index."""
    grown = 0.0
    for weight, component in zip(mixture.weights, mixture.components, strict=True):
        family = component.family
        narrow = isinstance(family, Uniform) and component.coordinate is Coordinate.INDEX
        grown += weight * (3.0 / (family.upper - family.lower) * np.exp(-component.panels[0]) if narrow else 1.0)
    return max(grown, 1.0)


def _by_input(score: MassScore, rows: np.ndarray) -> list[np.ndarray]:
    """Split stars that straddle a boundary by the input through which their mass is uncertain."""
    return [rows[score.through[rows] == through] for through in np.unique(score.through[rows])]


def _rows(score: MassScore, rows: np.ndarray) -> MassScore:
    return MassScore(*(getattr(score, name)[rows] for name in score.__dataclass_fields__))


def _terms(problem: Problem, output: int):
    """Yield (rows, terms, error estimate) for groups of stars that are treated alike."""
    weights = problem.output_weights(output)
    mean = problem.log_outputs(problem.log_mean)[:, output]
    other = (weights != 0.0) & ~problem.log_normal
    variance = problem.variance_of(np.where(problem.log_normal, weights, 0.0))
    sharp = not (weights != 0.0).any()
    intervals = problem.interior.intervals
    score = mass_score(problem)
    structured = bool(problem.structured[output])
    for number in range(len(intervals)) if structured else (0,):
        here = score.interval == number if structured else np.ones(len(problem), bool)
        mixture = intervals[number].mixture if structured else _NO_STRUCTURE
        for gridded in (False, True):
            rows = np.flatnonzero(here & (other.any(axis=1) == gridded))
            if not rows.size:
                continue
            if not gridded:
                still = sharp | (variance[rows] <= _NO_SPREAD)
                for part, some in ((SharpPart, rows[still]), (GaussianPart, rows[~still])):
                    if some.size:
                        extra = () if part is SharpPart else (np.sqrt(variance[some]),)
                        yield some, [(mixture, part(mean[some], *extra))], 0.0
            else:
                terms = [(m.take(rows), weights[rows, j], other[rows, j]) for j, m in enumerate(problem.measured)]
                for some, part, error in convolve(terms, mean[rows], np.sqrt(variance[rows])):
                    yield rows[some], [(mixture, part)], error * _amplified(mixture)
    for rows in _by_input(score, np.flatnonzero(score.interval < 0)) if structured else ():
        yield from straddling_terms(problem.take(rows), output, rows, _rows(score, rows))
