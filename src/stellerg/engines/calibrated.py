"""Quadrature under a calibrated coefficient: conditioned on the mass, everything else is a narrow kernel.

    ln Y = w . ln obs + a(M) + b(M) ln R + e + ln f(q, M)

Given the normal score z of the mass, ln R, e and the other inputs enter linearly (ln f to second order in q); the sum
over z is a trapezoid whose spacing follows the slope of the kernel's mean over its width, spectrally accurate. A
half-normal spread towards the end of the main sequence adds nodes of its own, and so does an input too far from normal
for the expansion of the kernel.
"""

from dataclasses import dataclass

import numpy as np

from stellerg.engines.carried import Carried, along, carried_forms, input_cumulants
from stellerg.engines.kernels import expansion_error
from stellerg.engines.nodes import GAIN_NODES, REACH, Nodes, kinks
from stellerg.engines.summed import SummedAnswer
from stellerg.measured import Shape
from stellerg.problem import Problem

__all__ = ["CalibratedSums", "calibrated_refusal"]

_SPACING = 1.2  # of the nodes in normal scores, for a kernel much wider than the slope: exp(-2 pi^2/1.2^2) = 1e-6
_WHERE_SLOPE_COUNTS = 3.5  # normal scores within which the slope sets the spacing
_COUNTS = np.array([8, 10, 12, 14, 16, 20, 24, 28, 32, 40, 48, 56, 64, 80, 96, 128, 160, 192, 256, 320, 384, 512])
_VALUES = 2**17  # star-node pairs treated together: bounds memory, changes no bit
# Bounds on what the expansion leaves out: above the first an input gets nodes of its own (errors of the mass up to
# 5.5 %, and beyond; the error is a twentieth of it for normal errors of 5 to 10 %, a half for those of 20 %), above the
# second the first term left out decides whether the star is refused.
_GUARD = (3e-4, 5e-4)
_WORST = 1e-4
_HOPELESS = 0.3  # a bound above which a look at that term is not worth it
_LEFT_OUT = (1.5e-5, 8e-5)  # of the cumulative
# Normal errors s below 3 %: the standardised cumulants of ln are at most 3.1 s, 20.2 s^2, 213 s^3 and 3100 s^4, and the
# bound no more than this.
_MILD, _MILD_ERROR = 0.03, 3.6e-5
_SMALL = 0.055
_SLOPE_VARIES = 0.1  # by how much d ln w/d ln R may differ within the errors of a star
_FINER = 4.0  # times as many nodes with structure observables, whose likelihood may be so much sharper (judgement)
_CURVED_ABOVE = np.log(6.0)  # ln M: below, the curvature of ln f moves the cumulative by less than 1e-5


def calibrated_refusal(problem: Problem) -> np.ndarray:
    """Why stars are refused, (star,): 0 if they are not.

    1: the mass is a sum of terms that are not all normal; 2: errors too far from normal for the expansion.
    """
    of_mass = np.broadcast_to(
        problem.latent_input_weights[:, problem.latent("mass")], (len(problem), len(problem.inputs))
    )
    other = (of_mass != 0.0) & ~problem.log_normal
    refusal = np.where(other.any(axis=1) & ((of_mass != 0.0).sum(axis=1) > 1), 1, 0)
    left = np.flatnonzero(refusal == 0)
    if left.size and not problem.log_normal.all():
        bound = _own_nodes(problem.take(left))[1].max(axis=1)
        unsure = np.flatnonzero((bound > _WORST) & (bound < _HOPELESS))
        refusal[left[bound >= _HOPELESS]] = 2
        if unsure.size:  # the bound exceeds the error by far: the first term left out decides
            here = problem.take(left[unsure])
            error = SummedAnswer(here, CalibratedSums()).first_left_out()
            refusal[left[unsure]] = np.where(error > np.where(_small(here), *_LEFT_OUT), 2, 0)
    if problem.interior.observed is not None:  # nodes of three sorts and a likelihood at each: slower than draws
        refusal[(refusal == 0) & (problem.interior.relation.widening > 0.0) & ~problem.log_normal.all(axis=1)] = 2
    return refusal


def _small(problem: Problem) -> np.ndarray:
    """Whether the error of the mass is small, (star,)."""
    of_mass = problem.latent_input_weights[:, problem.latent("mass")]
    return np.sqrt(problem.variance_of(np.broadcast_to(of_mass, (len(problem), len(problem.inputs))))) <= _SMALL


def _own_nodes(problem: Problem) -> tuple[np.ndarray, np.ndarray]:
    """Input that needs nodes of its own (-1: none), and the error of the expansion that is left, (star, output)."""
    shape = (len(problem), len(problem.outputs))
    own, error = np.full(shape, -1), np.zeros(shape)
    if problem.log_normal.all():
        return own, error
    mild = np.zeros(len(problem), bool)
    if problem.interior.observed is None:
        narrow = [m.log_normal | ((m.shape == Shape.NORMAL) & (m.log_sd < _MILD)) for m in problem.measured]
        mild = np.logical_and.reduce(narrow)
    error[mild] = _MILD_ERROR
    rest = np.flatnonzero(~mild)
    if rest.size:
        own[rest], error[rest] = _judged_nodes(problem.take(rest))
    return own, error


def _judged_nodes(problem: Problem) -> tuple[np.ndarray, np.ndarray]:
    """What `_own_nodes` returns, from the cumulants."""
    carried = carried_forms(problem)
    counts = len(problem.outputs)
    beside = np.einsum("sff->sf", carried.covariance)[:, :counts]
    scatter = np.minimum(problem.interior.relation.scatter, problem.interior.relation.convective_sd)
    sd = np.sqrt(np.maximum(beside, 0.0) + scatter[:, None] ** 2)
    free = (np.arange(len(problem.inputs)) != carried.through[:, None])[:, None, :]
    bare = carried.forms[:, :counts]
    radius = carried.forms[:, [counts]]
    slope = problem.interior.relation.line(carried.log_mass[:, None])[1][:, :, None]
    weights = (np.abs(bare + slope * radius) + _SLOPE_VARIES * np.abs(radius)) * free
    cumulants = input_cumulants(problem)
    powers = np.stack([weights**k for k in range(3, 7)])
    standard = sd ** np.arange(3, 7)[:, None, None]
    each = powers * cumulants[:, :, None, :] / standard[..., None]
    whole = expansion_error(np.abs(each).sum(axis=-1))
    if not problem.inputs:
        return np.full(whole.shape, -1), whole
    single = expansion_error(np.abs(each))
    worst = np.argmax(single, axis=2)
    rest = np.where(np.arange(len(problem.inputs)) == worst[:, :, None], 0.0, each)
    needs = whole > np.where(_small(problem), *_GUARD)[:, None]
    if problem.interior.observed is not None:
        # a radius that is not normal is weighed by the structure observables: it needs nodes in any case
        carries = np.abs(radius[:, 0]) * free[:, 0] * ~problem.log_normal
        own = carries.max(axis=1) > 0.0
        worst = np.where(own[:, None], np.argmax(carries, axis=1)[:, None], worst)
        needs |= own[:, None]
        rest = np.where(np.arange(len(problem.inputs)) == worst[:, :, None], 0.0, each)
    left = expansion_error(np.abs(rest).sum(axis=-1))
    return np.where(needs, worst, -1), np.where(needs, left, whole)


@dataclass(frozen=True)
class CalibratedSums:
    """Kernels at the nodes of each star. See `stellerg.engines.summed.Sums`."""

    def parts(self, problem: Problem, *, coarser: bool = False):
        """Yield (rows, output, Kernels) of stars with as many nodes of each sort."""
        own = _own_nodes(problem)[0]
        alone = (own >= 0).any(axis=1)  # an input gets nodes of its own for one output, and not for another
        for rows in (np.flatnonzero(~alone),) if (~alone).any() else ():
            for some, output, kernels in _sorted(problem.take(rows), own[rows, 0], coarser):
                yield rows[some], output, kernels
        rows = np.flatnonzero(alone)
        for output in range(len(problem.outputs)) if rows.size else ():
            for some, _, kernels in _sorted(problem.take(rows).only(np.array([output])), own[rows, output], coarser):
                yield rows[some], output, kernels

    def other_error(self, problem: Problem) -> np.ndarray:
        """What lies beyond the nodes, (star, output)."""
        return np.full((len(problem), len(problem.outputs)), 1e-6)

    def error_of(self, difference: np.ndarray) -> np.ndarray:
        """The error of a spectral rule falls with the square of the number of nodes in the exponent."""
        return difference**2


def _sorted(problem: Problem, own: np.ndarray, coarser: bool):
    """Yield (rows, output, Kernels) of stars in groups alike."""
    relation, carried = problem.interior.relation, carried_forms(problem)
    first, second = _plan(problem, carried, own)
    sorts = [first, second, own + 1, relation.widening > 0.0, carried.through + 1, relation.convective > 0.0]
    sorts += [relation.convective < 1.0, _curved(problem)]
    sorts += [~np.isnan(kinks(problem, named)) for named in (carried.through, own)]
    for rows, sort in _alike(sorts):
        counts = (int(sort[0]), int(sort[1]))
        size = max(1, _VALUES // (counts[0] * counts[1] * (GAIN_NODES if sort[3] else 1)))
        for start in range(0, len(rows), size):
            some = rows[start : start + size]
            kind = (counts, int(sort[2]) - 1, bool(sort[7]), 2 if coarser else 1)
            work = Nodes(problem.take(some), carried.take(some), *kind)
            for output in range(len(problem.outputs)):
                yield some, output, work.kernels(output)


def _alike(sorts: list[np.ndarray]):
    """Yield (rows, values) of stars that agree in several small whole numbers, (star,) each."""
    code, scale = np.zeros(len(sorts[0]), np.int64), 1
    for values in sorts:
        code += scale * values
        scale *= int(values.max(initial=0)) + 1
    order = np.argsort(code, kind="stable")
    starts = np.flatnonzero(np.diff(code[order], prepend=-1))
    for rows in np.split(order, starts[1:]):
        yield rows, [int(values[rows[0]]) for values in sorts]


def _curved(problem: Problem) -> np.ndarray:
    """Whether a kernel of a star is not normal, (star,): inputs that are not log-normal, or a curved share."""
    other = (~problem.log_normal).any(axis=1)
    if problem.interior.observed is not None:
        return np.ones(len(problem), bool)
    return other | (~problem.binding.constant & (problem.interior.relation.log_mass > _CURVED_ABOVE))


def _plan(problem: Problem, carried: Carried, own: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """How many nodes over the score of the mass and of the input with nodes of its own, (star,) each."""
    relation = problem.interior.relation
    score = np.linspace(-_WHERE_SLOPE_COUNTS, _WHERE_SLOPE_COUNTS, 11)[None, :]
    count, outputs = len(problem), len(problem.outputs)
    log_mass, shift = along(problem, carried, score)
    height, slope = relation.line(log_mass)
    radius = carried.mean[:, outputs, None] + shift[:, outputs]
    mean = shift[:, :outputs] + (height + slope * radius)[:, None, :]
    steepest = np.abs(np.diff(mean, axis=2)).max(axis=2) / (score[0, 1] - score[0, 0])
    beside = carried.covariance
    straight = np.einsum("sff->sf", beside)[:, :outputs, None]
    follow = slope[:, None, :]
    variance = straight + 2.0 * follow * beside[:, :outputs, outputs, None]
    variance = variance + follow**2 * beside[:, outputs, outputs][:, None, None]
    scatter = np.where(
        relation.convective > 0.0, np.minimum(relation.scatter, relation.convective_sd), relation.scatter
    )
    variance = variance.min(axis=2) + scatter[:, None] ** 2
    ratio = (steepest / np.sqrt(variance)).max(axis=1)
    if problem.interior.observed is not None:
        ratio = ratio * _FINER  # observables narrow what is summed over, and the kernels
    moving = (carried.mass_slope > 0.0) | (carried.through >= 0)
    first = np.where(moving, _count(ratio), 1)
    second = np.ones(count, int)
    for j in np.unique(own[own >= 0]):
        rows = np.flatnonzero(own == j)
        form = carried.forms[rows, :, j]
        size = np.abs(form[:, :outputs]) + np.abs(form[:, [outputs]] * np.abs(slope[rows]).max(axis=1)[:, None])
        step = problem.measured[j].take(rows).log_quantile(score)
        steep = np.abs(np.diff(step, axis=1)).max(axis=1) / (score[0, 1] - score[0, 0])
        left = variance[rows] - form[:, :outputs] ** 2 * problem.log_sd[rows, j, None] ** 2
        left = np.maximum(left, scatter[rows, None] ** 2)
        finer = 1.0 if problem.interior.observed is None else _FINER
        second[rows] = _count(finer * (size * steep[:, None] / np.sqrt(left)).max(axis=1))
    return first, second


def _count(ratio: np.ndarray) -> np.ndarray:
    wanted = 2.0 * REACH / _SPACING * np.hypot(1.0, ratio)
    return _COUNTS[np.minimum(np.searchsorted(_COUNTS, wanted), len(_COUNTS) - 1)]
