"""Draws through the model, keyed by star: plain or low-discrepancy, weighted where rows are over-determined.

Exactly determined stars are drawn through the quantiles of their measured quantities. Over-determined ones
are drawn from a multivariate Student distribution around the least-squares point (4 degrees of freedom: its
tails are heavier than the target's) and carry importance weights.
"""

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from scipy.special import ndtri

from stellerg import keyed_random
from stellerg.engines.least_squares import fit
from stellerg.engines.target import log_reference_density, log_target, scores
from stellerg.errors import EngineError
from stellerg.problem import Problem

__all__ = ["Draws", "Plan", "sample"]

_BLOCK_DIMENSIONS = 64  # dimensions set apart for each block of a star; no problem has as many
_FREEDOM = 4.0  # a chi-squared of 4 degrees of freedom is -2 ln of a product of two uniforms


@dataclass(frozen=True)
class Plan:
    """How to draw.

    Attributes
    ----------
    draws : int
        Number of draws of each star in a block.
    seed : int
    kind : str
        ``low-discrepancy`` (scrambled Sobol' points, Owen 1998, with digital shifts keyed by star) or ``plain``.
    randomisations : int
        Independent randomisations of the low-discrepancy points, from which standard errors are taken.
    shuffled : bool
        Put each star's draws into an order of its own, so that the n-th draws of two stars are independent.
    blocks, first_block : int
        How many independent blocks, and the number of the first.
    """

    draws: int
    seed: int = 0
    kind: str = "low-discrepancy"
    randomisations: int = 32
    shuffled: bool = False
    blocks: int = 1
    first_block: int = 0

    def __post_init__(self):
        if self.kind not in ("plain", "low-discrepancy"):
            raise EngineError(f"kind of draws: {self.kind!r} is unknown; choose plain or low-discrepancy")
        if self.draws < 1 or self.randomisations < 1:
            raise EngineError(f"draws: {self.draws} in {self.randomisations} randomisations; both must be positive")
        if self.kind == "low-discrepancy":
            each, rest = divmod(self.draws, self.randomisations)
            if rest or each & (each - 1) or not each:
                raise EngineError(
                    f"draws: {self.draws} must be {self.randomisations} randomisations times a power of two"
                )


@dataclass(frozen=True)
class Draws:
    """Draws of stars.

    Attributes
    ----------
    problem : Problem
    log_inputs : ndarray, (star, input, draw)
        ln of the measured quantities.
    u : ndarray, (star, draw)
        Uniform variate of structure: storing it lets one structure be exchanged for another.
    log_weight : ndarray or None, (star, draw)
        Logarithm of importance weights; None where all are equal.
    parameters : ndarray or None, (star, draw, parameter)
        Given for over-determined stars.
    converged : ndarray of bool, (star,)
        Whether the least-squares point was found.
    """

    problem: Problem
    log_inputs: np.ndarray
    u: np.ndarray
    log_weight: np.ndarray | None
    parameters: np.ndarray | None
    converged: np.ndarray

    def _linear(self, weights, constant, solution_weights):
        """constant + weights . theta for all draws, (star, row, draw)."""
        if self.parameters is not None:
            return constant[:, :, None] + np.einsum("or,sdr->sod", weights, self.parameters)
        offset = self.log_inputs - self.problem.base[:, :, None]
        return constant[:, :, None] + np.einsum("soj,sjd->sod", solution_weights, offset)

    @cached_property
    def log_latents(self) -> np.ndarray:
        """ln(mass, radius, luminosity, distance) as far as determined, (star, latent, draw)."""
        p = self.problem
        return self._linear(p.latent_weights, p.latent_constant, p.latent_input_weights)

    @cached_property
    def log_coefficient(self) -> np.ndarray:
        """ln w = S(u | ln M, ln R), (star, draw)."""
        known = self._known
        return self.problem.interior.quantile(self.u, known.get("mass"), known.get("radius"))

    @property
    def _known(self) -> dict[str, np.ndarray]:
        return dict(zip(self.problem.latents, np.swapaxes(self.log_latents, 0, 1), strict=True))

    @cached_property
    def log_outputs(self) -> np.ndarray:
        """ln Y, (star, output, draw)."""
        p = self.problem
        measured = self._linear(p.weights, p.constant, p.input_weights)
        if not p.structured.any():
            return measured
        return measured + p.log_structure(self.log_coefficient, self._known)

    @cached_property
    def whole_log_weight(self) -> np.ndarray | None:
        """Logarithm of all weights, those of structure observables included, (star, draw); None where all are equal."""
        interior = self.problem.interior
        if not (interior.weighs and self.problem.structured.any()):
            return self.log_weight
        known = self._known
        weight = interior.log_weight(self.log_coefficient, known["mass"], known.get("radius"))
        return weight if self.log_weight is None else weight + self.log_weight

    @property
    def weight(self) -> np.ndarray | None:
        """Importance weights that sum to one, (star, draw)."""
        log_weight = self.whole_log_weight
        if log_weight is None:
            return None
        top = log_weight.max(axis=1, keepdims=True)
        weight = np.exp(log_weight - np.where(np.isfinite(top), top, 0.0))
        total = weight.sum(axis=1, keepdims=True)
        return weight / np.where(total > 0.0, total, 1.0)

    def equally_weighted(self) -> np.ndarray:
        """ln Y of draws that all count the same, (star, output, draw): weighted ones are resampled systematically."""
        weight = self.weight
        if weight is None:
            return self.log_outputs
        count = self.u.shape[1]
        running = np.cumsum(weight, axis=1)
        places = (np.arange(count) + 0.5) / count
        # the number of draws whose running weight lies below each place, star by star in one sorted merge
        order = np.argsort(np.concatenate([running, np.tile(places, (len(weight), 1))], axis=1), axis=1, kind="stable")
        is_draw = order < count
        chosen = np.minimum(np.cumsum(is_draw, axis=1)[~is_draw].reshape(len(weight), count), count - 1)
        return np.take_along_axis(self.log_outputs, chosen[:, None, :], axis=2)

    @property
    def effective(self) -> np.ndarray:
        """Effective number of draws, (sum w)^2/sum w^2 (Kish 1965), (star,)."""
        weight = self.weight
        if weight is None:
            return np.full(len(self.u), float(self.u.shape[1]))
        squares = np.square(weight).sum(axis=1)
        return np.where(squares > 0.0, 1.0 / np.where(squares > 0.0, squares, 1.0), 0.0)

    def log_reference_density(self) -> np.ndarray:
        """ln |J' C^-1 J|^(1/2) of each draw: what a population study divides out, (star, draw)."""
        p = self.problem
        if not p.inputs:
            return np.zeros(self.u.shape)
        theta = self.parameters
        if theta is None:
            offset = self.log_inputs - p.base[:, :, None]
            theta = np.einsum("srj,sjd->sdr", p.solution, offset)
        _, log_slope, sign = scores(p, theta)
        return log_reference_density(p, log_slope, sign)


def sample(problem: Problem, plan: Plan) -> Draws:
    """Draw from the distribution of each star.

    Parameters
    ----------
    problem : Problem
    plan : Plan
    """
    weighted = problem.over_determined
    parameters = problem.design.shape[1]
    dimensions = (parameters + 2 if weighted else len(problem.inputs)) + 1
    u = _uniforms(problem.key, plan, dimensions)
    converged = np.ones(len(problem), bool)
    if weighted:
        theta, log_weight, converged = _weighted(problem, u[:-1])
        log_inputs = problem.base[:, :, None] + np.einsum("jr,sdr->sjd", problem.design, theta)
        return Draws(problem, log_inputs, u[-1], log_weight, theta, converged)
    score = ndtri(np.stack(u[:-1], axis=1)) if problem.inputs else np.zeros((len(problem), 0, u[-1].shape[1]))
    if problem.correlation is not None:
        # a square root that also serves singular matrices
        values, vectors = np.linalg.eigh(problem.correlation)
        root = vectors * np.sqrt(np.maximum(values, 0.0))[:, None, :]
        score = np.einsum("sij,sjd->sid", root, score)
    log_inputs = np.empty(score.shape)
    for j, measured in enumerate(problem.measured):
        log_inputs[:, j] = measured.log_quantile(score[:, j])
    return Draws(problem, log_inputs, u[-1], None, None, converged)


def _uniforms(key, plan: Plan, dimensions: int) -> list[np.ndarray]:
    """Uniform variates of each dimension, (star, draw) each, block after block; the last is that of structure."""
    blocks = [
        _block_of_uniforms(key, plan, dimensions, number * _BLOCK_DIMENSIONS)
        for number in range(plan.first_block, plan.first_block + plan.blocks)
    ]
    if len(blocks) == 1:
        return blocks[0]
    return [np.concatenate([block[d] for block in blocks], axis=1) for d in range(dimensions)]


def _block_of_uniforms(key, plan: Plan, dimensions: int, offset: int) -> list[np.ndarray]:
    if plan.kind == "plain":
        return [keyed_random.uniform(plan.seed, key, offset + d, plan.draws) for d in range(dimensions)]
    each = plan.draws // plan.randomisations
    points = keyed_random.low_discrepancy_set(plan.seed, dimensions, each.bit_length() - 1)
    uniforms = []
    for d in range(dimensions):
        shift = keyed_random.words(plan.seed, key, offset + d, plan.randomisations)
        uniforms.append(keyed_random.shifted(points[d], shift).reshape(len(key), plan.draws))
    if plan.shuffled:
        order = keyed_random.random_order(plan.seed, key, offset + dimensions, plan.draws)
        uniforms = [np.take_along_axis(u, order, axis=1) for u in uniforms]
    return uniforms


def _weighted(problem: Problem, uniforms: list[np.ndarray]):
    """Student draws around the least-squares point with their importance weights."""
    best = fit(problem)
    size = problem.design.shape[1]
    normal = np.einsum("sjr,sjq->srq", best.jacobian, best.jacobian)
    usable = best.converged & np.isfinite(normal).all(axis=(1, 2))
    safe = np.where(usable[:, None, None], normal, np.eye(size))
    values, vectors = np.linalg.eigh(safe)
    usable &= values[:, 0] > 0.0
    root = vectors / np.sqrt(np.maximum(values, 1e-300))[:, None, :]
    spread = -2.0 * (np.log(uniforms[size]) + np.log(uniforms[size + 1]))
    t = ndtri(np.stack(uniforms[:size], axis=2)) * np.sqrt(_FREEDOM / spread)[:, :, None]
    theta = best.parameters[:, None, :] + np.einsum("srq,sdq->sdr", root, t)
    proposal = -0.5 * (_FREEDOM + size) * np.log1p(np.square(t).sum(axis=-1) / _FREEDOM)
    log_weight = log_target(problem, theta) - proposal
    usable &= np.isfinite(log_weight).any(axis=1)
    return theta, np.where(usable[:, None], log_weight, 0.0), usable
