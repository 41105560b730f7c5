"""Stars whose mass may lie in several intervals of a structure model: the measured part, interval by interval."""

import numpy as np

from stellerg.engines.convolution import convolve, part_on_grid
from stellerg.engines.intervals import MassScore
from stellerg.engines.parts import GaussianPart, MassShift, RestrictedPart, SharpPart
from stellerg.problem import Problem

__all__ = ["mass_shift", "straddling_terms"]

_CELLS = 12.0  # grid cells in the standard deviation of what is left beside the mass, the narrowest feature
_SIZES = 2 ** np.arange(7, 12)
_REACH = 6.0  # normal scores of the mass that a grid covers: 2e-9 lies beyond
_BATCH = 64  # stars put on grids together; bounds memory, changes no bit


def mass_shift(problem: Problem, output: int, score: MassScore) -> tuple[MassShift, np.ndarray]:
    """How the measured part moves with the score of the mass; and the variance that normal inputs leave.

    All stars straddle a boundary and have the mass through the same input, or jointly normal.
    """
    weights = problem.output_weights(output)
    gaussian = np.where(problem.log_normal, weights, 0.0)
    variance = problem.variance_of(gaussian)
    position = problem.latent("mass")
    on_mass = np.broadcast_to(problem.latent_input_weights[:, position], weights.shape)
    sd = np.sqrt(problem.variance_of(on_mass))
    slope = np.einsum("sj,sjk,sk->s", gaussian, problem.log_covariance, on_mass) / np.where(sd > 0.0, sd, 1.0)
    slope = np.where(np.abs(slope) < 1e-12, 0.0, slope)
    through = int(score.through[0]) if len(problem) else -1
    if through < 0:
        return MassShift(slope, np.zeros(len(problem)), None), np.maximum(variance - slope**2, 0.0)
    measured = problem.measured[through]
    return MassShift(weights[:, through].copy(), measured.log_mean, measured), variance


def straddling_terms(problem: Problem, output: int, rows: np.ndarray, score: MassScore):
    """Terms of stars (at `rows`) whose mass may lie in several intervals, uncertain through the same input."""
    intervals = problem.interior.intervals
    shift, variance = mass_shift(problem, output, score)
    weights = problem.output_weights(output)
    mean = problem.log_outputs(problem.log_mean)[:, output]
    other = (weights != 0.0) & ~problem.log_normal
    if score.through[0] >= 0:
        other[:, score.through[0]] = False
    # what is left beside the mass is taken for nothing where it is rounding
    spread = np.sqrt(variance) > 1e-12 * np.maximum(np.abs(shift.slope), 1.0)
    for rest, group, error, width in _rests(problem, weights, mean, variance, other, spread):
        terms = []
        for number, interval in enumerate(intervals):
            low, high = score.bounds(number, len(intervals))
            terms.append((interval.mixture, RestrictedPart(rest, shift.take(group), low[group], high[group])))
        for some, tabulated, more in _tabulated(terms, mean[group], width):
            yield rows[group][some], tabulated, (error[some] if np.ndim(error) else error) + more


def _rests(problem: Problem, weights, mean, variance, other, spread):
    """Yield what is left of the measured part once the score of the mass is given: (part, rows, error, width)."""
    gridded = other.any(axis=1)
    rows = np.flatnonzero(~gridded & ~spread)
    if rows.size:
        yield SharpPart(mean[rows]), rows, 0.0, np.zeros(len(rows))
    rows = np.flatnonzero(~gridded & spread)
    if rows.size:
        yield GaussianPart(mean[rows], np.sqrt(variance[rows])), rows, 0.0, np.sqrt(variance[rows])
    rows = np.flatnonzero(gridded)
    if rows.size:
        terms = [(m.take(rows), weights[rows, j], other[rows, j]) for j, m in enumerate(problem.measured)]
        width = np.sqrt(variance[rows] + np.where(other, (weights * problem.log_sd) ** 2, 0.0)[rows].sum(axis=-1))
        for some, part, error in convolve(terms, mean[rows], np.sqrt(variance[rows])):
            yield part, rows[some], error, width[some]


def _tabulated(terms: list, mean: np.ndarray, width: np.ndarray):
    """Put the restricted parts of stars on grids, so that each is integrated once and not at every step of a root.

    Yields (rows, terms, error). Stars whose grids would be too long, or that have no width to resolve, keep their
    parts as they are.
    """
    ends = [_window(part) for _, part in terms]
    low, high = np.min([e[0] for e in ends], axis=0), np.max([e[1] for e in ends], axis=0)
    with np.errstate(divide="ignore", invalid="ignore"):
        size = np.searchsorted(_SIZES, _CELLS * (high - low) / width)
    for number in np.unique(size):
        rows = np.flatnonzero(size == number)
        if number == len(_SIZES):
            yield rows, [(mixture, part.take(rows)) for mixture, part in terms], 0.0
            continue
        step = (high - low) / (_SIZES[number] - 1)
        for start in range(0, len(rows), _BATCH):
            some = rows[start : start + _BATCH]
            points = low[some, None] + step[some, None] * np.arange(_SIZES[number])
            parts = [part_on_grid(part.take(some), points, step[some], mean[some]) for _, part in terms]
            error = np.sum([part[1] for part in parts], axis=0)
            yield some, [(mixture, part[0]) for (mixture, _), part in zip(terms, parts, strict=True)], error


def _window(part: RestrictedPart) -> tuple[np.ndarray, np.ndarray]:
    """Where a part has probability, but for 1e-9 of it, (star,) each."""
    scores = [np.clip(end, -_REACH, _REACH)[:, None] for end in (part.low, part.high)]
    shifts = np.concatenate([part.shift.at(score) for score in scores], axis=1)
    return shifts.min(axis=1) + part.rest.lower, shifts.max(axis=1) + part.rest.upper
