"""Where a star's mass lies among the intervals of a structure model, and how it moves with the inputs."""

from dataclasses import dataclass

import numpy as np
from scipy.special import ndtr

from stellerg.engines.parts import MassShift
from stellerg.problem import Problem

__all__ = ["MassScore", "mass_score", "moments_of_structure"]

_GAUSSIAN_REACH = 7.0  # normal scores: 1e-12 lies beyond
_OTHER_REACH = 5.0  # 3e-7 lies beyond each end of each input
_NODE, _WEIGHT = np.polynomial.legendre.leggauss(64)


@dataclass(frozen=True)
class MassScore:
    """The mass as a function of one normal score z, against the boundaries of the intervals of mass.

    Attributes
    ----------
    interval : ndarray of int, (star,)
        Interval of a star whose mass lies in one; -1 where it straddles a boundary.
    through : ndarray of int, (star,)
        Input through which alone the mass is uncertain; -1 where it is jointly normal.
    tractable : ndarray of bool, (star,)
        False where the mass straddles a boundary and is a sum of terms that are not all normal.
    edges : ndarray, (star, boundary)
        Normal score of the mass at each boundary, increasing; finite where the star straddles.
    reversed : ndarray of bool, (star,)
        True where the mass falls with the score.
    """

    interval: np.ndarray
    through: np.ndarray
    tractable: np.ndarray
    edges: np.ndarray
    reversed: np.ndarray

    def bounds(self, number: int, count: int) -> tuple[np.ndarray, np.ndarray]:
        """Scores between which the mass lies in interval `number` of `count`, (star,) each."""
        first = np.full(len(self.interval), -np.inf)
        last = np.full(len(self.interval), np.inf)
        low = self.edges[:, number - 1] if number > 0 else first
        high = self.edges[:, number] if number < count - 1 else last
        flipped_low = self.edges[:, number] if number < count - 1 else first
        flipped_high = self.edges[:, number - 1] if number > 0 else last
        return np.where(self.reversed, flipped_low, low), np.where(self.reversed, flipped_high, high)


def mass_score(problem: Problem) -> MassScore:
    """Place the masses of a problem among the intervals of its structure model."""
    count = len(problem)
    boundaries = problem.interior.edges
    nowhere = np.zeros(count, int)
    if not len(boundaries) or "mass" not in problem.latents:
        none = np.zeros((count, len(boundaries)))
        return MassScore(nowhere, nowhere - 1, np.ones(count, bool), none, np.zeros(count, bool))
    position = problem.latent("mass")
    weights = np.broadcast_to(problem.latent_input_weights[:, position], (count, len(problem.inputs)))
    active = weights != 0.0
    other = active & ~problem.log_normal
    mean = problem.log_latents(problem.log_mean)[:, position]
    variance = np.einsum("sj,sjk,sk->s", weights, problem.log_covariance, weights)
    sd = np.sqrt(variance)
    low, high = mean - _GAUSSIAN_REACH * sd, mean + _GAUSSIAN_REACH * sd
    edges = (boundaries - mean[:, None]) / np.where(sd > 0.0, sd, 1.0)[:, None]
    through = np.full(count, -1)
    falls = np.zeros(count, bool)
    mixed = other.any(axis=1)
    if mixed.any():
        ends = [m.log_quantile(np.array([[-_OTHER_REACH, _OTHER_REACH]])) for m in problem.measured]
        spans = np.stack(ends, axis=1) - problem.base[:, :, None]
        reach = np.sort(weights[:, :, None] * spans, axis=2).sum(axis=1)
        constant = problem.latent_constant[:, position]
        low = np.where(mixed, constant + reach[:, 0], low)
        high = np.where(mixed, constant + reach[:, 1], high)
    interval = np.searchsorted(boundaries, low, side="right")
    interval = np.where(interval == np.searchsorted(boundaries, high, side="right"), interval, -1)
    single = mixed & (active.sum(axis=1) == 1)
    for j, measured in enumerate(problem.measured):
        rows = np.flatnonzero(single & other[:, j] & (interval < 0))
        if rows.size:
            through[rows] = j
            weight = weights[rows, j, None]
            quoted = problem.base[rows, j, None] + (boundaries - problem.latent_constant[rows, position, None]) / weight
            edges[rows] = measured.take(rows).score(quoted)[0]
            two = measured.take(rows).log_quantile(np.array([[-1.0, 1.0]]))
            falls[rows] = weight[:, 0] * (two[:, 1] - two[:, 0]) < 0.0
    tractable = (interval >= 0) | ~mixed | single
    return MassScore(interval, through, tractable, edges, falls)


def moments_of_structure(
    problem: Problem, score: MassScore, shift: MassShift, rows: np.ndarray
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Mean and variance of ln w, and its covariance with the measured part, for stars that straddle.

    Parameters
    ----------
    problem, score : of all stars
    shift : MassShift
        How the measured part moves with the score of the mass, for `rows`.
    rows : ndarray of int, (m,)

    Returns
    -------
    mean, variance, covariance : ndarray, (m,)
    """
    intervals = problem.interior.intervals
    first = np.zeros(len(rows))
    second = np.zeros(len(rows))
    moved = np.zeros(len(rows))
    average = np.zeros(len(rows))
    for number, piece in enumerate(intervals):
        low, high = (np.clip(end[rows], -9.0, 9.0) for end in score.bounds(number, len(intervals)))
        mean, sd = piece.mixture.moments
        share = ndtr(high) - ndtr(low)
        z = 0.5 * (low + high)[:, None] + 0.5 * (high - low)[:, None] * _NODE
        weight = 0.5 * (high - low)[:, None] * _WEIGHT * np.exp(-0.5 * z**2) / np.sqrt(2.0 * np.pi)
        here = (weight * shift.at(z)).sum(axis=-1)
        first += share * mean
        second += share * (mean**2 + sd**2)
        moved += mean * here
        average += here
    return first, second - first**2, moved - first * average
