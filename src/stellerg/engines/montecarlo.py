"""Monte Carlo: draws through the model (JCGM 101:2008, clause 7), of every shape, correlation and redundancy.

Low-discrepancy by default, with a standard error from independent randomisations; with `digits`, blocks of draws are
added until mean, standard deviation and quantiles of log10 Y stand (JCGM 101, clause 7.9).

When it is wrong: never by more than its stated error, but it is slow; and the weights of an over-determined
star whose measurements contradict each other strongly leave few effective draws (``mass = 1.0 ± 0.01`` and
``log_mass = 0.3 ± 0.01``), which is flagged, and below 100 is `not-converged`.
"""

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from functools import partial
from typing import ClassVar

import numpy as np

from stellerg.engines.adaptive import numerical_tolerance, run_blocks
from stellerg.engines.answer import REPORTED, density_of_draws
from stellerg.engines.sampling import Draws, Plan, sample
from stellerg.problem import Problem
from stellerg.status import Status

__all__ = ["MonteCarlo", "MonteCarloAnswer"]

_INTERVALS = (0.0, 0.6826894921370859, 0.9544997361036416)  # the median, one and two standard deviations
_LN10 = float(np.log(10.0))
_FEWEST_BLOCKS = 10  # two, as in the standard, stop too early for one star in seven (a test of `adaptive`)
_VALUES = 2**22  # doubles in one array of draws: bounds memory, changes no bit
_LEAST_EFFECTIVE = 100.0  # judgement: below, an interval of 95 % rests on two draws in each tail


@dataclass(frozen=True)
class MonteCarlo:
    """The engine.

    Attributes
    ----------
    draws : int
        Draws of each star; for low-discrepancy draws `randomisations` times a power of two.
    seed : int
    kind : str
        low-discrepancy or plain.
    randomisations : int
    digits : int or None
        Significant digits of the standard deviation of log10 Y that all reported numbers must be good to; None:
        one block of draws.
    most_blocks : int
        Cap on the blocks; a star that needs more is `not-converged`.
    """

    draws: int = 2**14
    seed: int = 0
    kind: str = "low-discrepancy"
    randomisations: int = 32
    digits: int | None = None
    most_blocks: int = 200
    name: ClassVar[str] = "montecarlo"
    reasons: ClassVar[tuple[str, ...]] = ("",)

    def __post_init__(self):
        self.plan  # noqa: B018 - its own checks are this engine's
        if self.digits is not None:
            numerical_tolerance(1.0, self.digits)

    @property
    def plan(self) -> Plan:
        """How it draws."""
        return Plan(self.draws, self.seed, self.kind, self.randomisations)

    def accepts(self, problem: Problem) -> np.ndarray:
        """Index into `reasons`, (star,): everything is accepted."""
        return np.zeros(len(problem), int)

    def solve(self, problem: Problem) -> "MonteCarloAnswer":
        """Answer a problem."""
        if self.digits is None:
            return MonteCarloAnswer(problem, self.plan, np.ones(len(problem), int), np.ones(len(problem), bool))
        blocks, standing = np.ones(len(problem), int), np.ones(len(problem), bool)
        for rows in _chunks(np.arange(len(problem)), problem, self.draws):
            found = run_blocks(
                partial(_draw_block, problem.take(rows), self.plan),
                len(rows),
                digits=self.digits,
                probability=_INTERVALS,
                most_blocks=self.most_blocks,
                fewest_blocks=min(_FEWEST_BLOCKS, self.most_blocks),
            )
            blocks[rows], standing[rows] = found.blocks, found.converged
        return MonteCarloAnswer(problem, self.plan, blocks, standing)


def _draw_block(problem: Problem, plan: Plan, number: int, rows: np.ndarray) -> np.ndarray:
    """log10 Y of one block of draws of some stars, (row, output, draw)."""
    return sample(problem.take(rows), replace(plan, first_block=number)).equally_weighted() / _LN10


def _chunks(rows: np.ndarray, problem: Problem, draws: int):
    """Split rows so that one array of draws fits the memory; no result depends on it."""
    size = max(1, _VALUES // (draws * (len(problem.inputs) + len(problem.outputs) + 2)))
    for start in range(0, len(rows), size):
        yield rows[start : start + size]


@dataclass(frozen=True)
class MonteCarloAnswer:
    """Distributions by draws, made anew (the same bits) whenever asked for. See `answer.Answer`.

    Attributes
    ----------
    problem : Problem
    plan : Plan
    blocks : ndarray of int, (star,)
        Blocks of draws of each star.
    standing : ndarray of bool, (star,)
        Whether its numbers stand to the digits asked for.
    """

    problem: Problem
    plan: Plan
    blocks: np.ndarray
    standing: np.ndarray
    _cache: dict = field(default_factory=dict, repr=False, compare=False)

    def draws(self):
        """Yield (rows, Draws) in pieces that fit the memory; the stars of a piece have as many blocks."""
        for count in np.unique(self.blocks):
            rows = np.flatnonzero(self.blocks == count)
            for some in _chunks(rows, self.problem, self.plan.draws * int(count)):
                yield some, sample(self.problem.take(some), replace(self.plan, blocks=int(count)))

    def take(self, which: np.ndarray) -> "MonteCarloAnswer":
        """Return some of the stars."""
        return MonteCarloAnswer(self.problem.take(which), self.plan, self.blocks[which], self.standing[which])

    def failure(self, star: int) -> str:
        """Why a star is not converged."""
        effective = self.diagnostics["effective_draws"][star]
        if effective == 0.0:
            return (
                "no value satisfies all measurements within the ends of their distributions; check them, or name the "
                "independent ones with use"
            )
        if not self.standing[star]:
            return (
                f"after {self.blocks[star]} blocks of {self.plan.draws} draws the numbers do not stand to the digits "
                "asked for; ask for fewer digits, or more blocks"
            )
        return (
            f"{effective:.0f} effective draws are left, {_LEAST_EFFECTIVE:.0f} are needed: the measurements hardly "
            "agree; check them, name the independent ones with use, or draw more"
        )

    @property
    def status(self) -> np.ndarray:
        """NOT_CONVERGED where too few effective draws are left, or the numbers do not stand, (star,)."""
        few = ~(self.diagnostics["effective_draws"] >= _LEAST_EFFECTIVE)
        few &= self.plan.draws >= _LEAST_EFFECTIVE
        return np.where(few | ~self.standing, Status.NOT_CONVERGED, Status.OK).astype(np.uint8)

    @property
    def log_mean(self) -> np.ndarray:
        """Mean of ln Y, (star, output)."""
        return self._summary(REPORTED)["mean"]

    @property
    def log_sd(self) -> np.ndarray:
        """Standard deviation of ln Y, (star, output)."""
        return self._summary(REPORTED)["sd"]

    @property
    def numerical_error(self) -> np.ndarray:
        """Standard error of the cumulative, the largest of the five standard quantiles, (star, output)."""
        return self._summary(REPORTED)["error"]

    @property
    def diagnostics(self) -> Mapping[str, np.ndarray]:
        """Number of draws and effective number of draws, (star,)."""
        return {
            "draws": (self.blocks * self.plan.draws).astype(float),
            "effective_draws": self._summary(REPORTED)["effective"],
        }

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """ln Y at cumulative probabilities p (m,): (star, output, m)."""
        return self._summary(tuple(np.atleast_1d(np.asarray(p, float))))["quantile"]

    def cumulative(self, log_value: np.ndarray) -> np.ndarray:
        """Cumulative probability at ln Y (star, output, m)."""
        out = np.empty(log_value.shape)
        for chunk, draws in self.draws():
            out[chunk] = _cumulative(draws.log_outputs, draws.weight, log_value[chunk])
        return out

    def density(self, log_value: np.ndarray) -> np.ndarray:
        """Density over ln Y at (star, output, m)."""
        return density_of_draws(self, log_value)

    def _summary(self, p: tuple[float, ...]) -> dict[str, np.ndarray]:
        """All that one pass over the draws gives."""
        if p not in self._cache:
            shape = (len(self.problem), len(self.problem.outputs))
            out = {name: np.empty(shape) for name in ("mean", "sd", "error")}
            out["quantile"] = np.empty((*shape, len(p)))
            out["effective"] = np.empty(shape[0])
            for chunk, draws in self.draws():
                values, weight = draws.log_outputs, draws.weight
                out["mean"][chunk], out["sd"][chunk] = _moments(values, weight)
                out["quantile"][chunk] = _quantile(values, weight, np.array(p))
                out["effective"][chunk] = np.where(draws.converged, draws.effective, 0.0)
                out["error"][chunk] = _error(draws, out["quantile"][chunk], np.array(p), self.plan)
            self._cache[p] = out
        return self._cache[p]


def _moments(values, weight):
    """Mean and standard deviation over the draws, (star, output, draw) to (star, output)."""
    share = 1.0 / values.shape[-1] if weight is None else weight[:, None, :]
    mean = (values * share).sum(axis=-1)
    return mean, np.sqrt((np.square(values - mean[..., None]) * share).sum(axis=-1))


def _quantile(values, weight, p):
    """Quantiles of (weighted) draws: linear between the midpoints of the steps, (star, output, m)."""
    count = values.shape[-1]
    if weight is None:
        ordered = np.sort(values, axis=-1)
        place = np.clip(p * count - 0.5, 0.0, count - 1.0)
        index = np.minimum(place.astype(int), max(count - 2, 0))
        low, high = ordered[..., index], ordered[..., np.minimum(index + 1, count - 1)]
        return low + (place - index) * (high - low)
    order = np.argsort(values, axis=-1, kind="stable")
    ordered = np.take_along_axis(values, order, axis=-1)
    share = np.take_along_axis(np.broadcast_to(weight[:, None, :], values.shape), order, axis=-1)
    middle = np.cumsum(share, axis=-1) - 0.5 * share
    out = np.empty((*values.shape[:-1], len(p)))
    for m, probability in enumerate(p):
        index = np.clip((middle < probability).sum(axis=-1) - 1, 0, count - 2)[..., None]
        below, above = (np.take_along_axis(middle, index + i, axis=-1) for i in (0, 1))
        low, high = (np.take_along_axis(ordered, index + i, axis=-1) for i in (0, 1))
        gap = above - below
        step = np.clip((probability - below) / np.where(gap > 0.0, gap, 1.0), 0.0, 1.0)
        out[..., m] = (low + step * (high - low))[..., 0]
    return out


def _cumulative(values, weight, at):
    """Share of the draws at or below values, (star, output, m); one value at a time bounds the memory."""
    out = np.empty(at.shape)
    for m in range(at.shape[-1]):
        below = values <= at[..., m, None]
        out[..., m] = below.mean(axis=-1) if weight is None else (below * weight[:, None, :]).sum(axis=-1)
    return out


def _error(draws: Draws, quantile, p, plan: Plan):
    """Standard error of the cumulative at the quantiles, the largest over p, (star, output)."""
    values, weight = draws.log_outputs, draws.weight
    if plan.kind == "plain" or plan.randomisations < 2:
        worst = np.sqrt(np.max(p * (1.0 - p)) / np.maximum(draws.effective, 1.0))
        return np.broadcast_to(worst[:, None], values.shape[:2])
    randomisations = plan.randomisations * (values.shape[-1] // plan.draws)
    blocks = values.reshape((*values.shape[:2], randomisations, -1))
    worst = np.zeros(values.shape[:2])
    for m in range(len(p)):
        below = blocks <= quantile[..., m, None, None]
        if weight is None:
            share = below.mean(axis=-1)
        else:
            block = weight.reshape(len(weight), 1, randomisations, -1)
            share = (below * block).sum(axis=-1) / np.maximum(block.sum(axis=-1), 1e-300)
        worst = np.maximum(worst, share.std(axis=-1, ddof=1) / np.sqrt(randomisations))
    return worst
