"""Markov chains: emcee on the density itself, with a verdict.

The engine evaluates densities and never quantile functions of the measurements, so it shares least with the
others. At least four independent ensembles; R-hat is nested over them, since walkers are not independent.

When it is wrong: its error is that of the stated effective number of draws, provided the verdict is good; a run
too short (``MarkovChain(most_steps=100)``) is `not-converged`, with its numbers. A singular correlation matrix
has no density: refused.
"""

from collections.abc import Mapping
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from functools import partial
from multiprocessing import get_context
from pathlib import Path
from typing import ClassVar

import numpy as np

from stellerg import diagnostics as arviz_diagnostics
from stellerg.engines.answer import REPORTED, density_of_draws
from stellerg.engines.ensemble import Settings, Target, run_chains
from stellerg.errors import EngineError
from stellerg.problem import Problem
from stellerg.status import Status

__all__ = ["MarkovChain", "MarkovChainAnswer", "StarChains"]

_LARGEST_RHAT = 1.02  # judgement
_LEAST_EFFECTIVE = 400.0  # of each reported quantile; judgement
_SINGULAR = 1e-10


@dataclass(frozen=True)
class MarkovChain:
    """The engine.

    Attributes
    ----------
    seed : int
    walkers : int
        Of each ensemble.
    ensembles : int
        Independent ensembles, at least 4.
    block : int
        Steps between two looks at the autocorrelation time.
    most_steps : int
        Cap on the steps of an ensemble.
    times : float
        Autocorrelation times that the steps must exceed.
    workers : int
        Processes; the result does not depend on it.
    checkpoint : str or None
        Folder in which finished blocks are kept; a run that was cut short goes on from them.
    """

    seed: int = 0
    walkers: int = 32
    ensembles: int = 4
    block: int = 250
    most_steps: int = 20_000
    times: float = 50.0
    workers: int = 1
    checkpoint: str | None = None
    name: ClassVar[str] = "mcmc"
    reasons: ClassVar[tuple[str, ...]] = ("", "the correlation matrix is singular: use montecarlo")

    def __post_init__(self):
        if self.ensembles < 4:
            raise EngineError(f"ensembles: {self.ensembles} are too few to tell whether they agree; at least 4")
        if self.walkers < 16 or self.walkers % 2:
            raise EngineError(f"walkers: {self.walkers} must be an even number, at least 16")
        for name in ("block", "most_steps", "workers"):
            if getattr(self, name) < 1:
                raise EngineError(f"{name}: must be positive, got {getattr(self, name)}")

    def accepts(self, problem: Problem) -> np.ndarray:
        """Index into `reasons`, (star,)."""
        if problem.correlation is None:
            return np.zeros(len(problem), int)
        return (np.linalg.eigvalsh(problem.correlation)[:, 0] < _SINGULAR).astype(int)

    def solve(self, problem: Problem) -> "MarkovChainAnswer":
        """Answer a problem: star after star, on as many processes as asked for."""
        singles = [problem.take(np.array([star])) for star in range(len(problem))]
        work = partial(solve_star, engine=self)
        if self.workers > 1 and len(singles) > 1:
            count = min(self.workers, len(singles))
            with ProcessPoolExecutor(count, mp_context=get_context("spawn")) as pool:
                stars = list(pool.map(work, singles))
        else:
            stars = [work(single) for single in singles]
        return MarkovChainAnswer(problem, tuple(stars))


@dataclass(frozen=True)
class StarChains:
    """Thinned chains of one star, after the first steps were left out, and the verdict on them.

    Attributes
    ----------
    u, log_probability : ndarray, (ensemble, walker, draw)
    log_latents : ndarray, (latent, ensemble, walker, draw)
    log_outputs : ndarray, (output, ensemble, walker, draw)
    steps : int
        Steps of each ensemble.
    autocorrelation : float
        In steps.
    rhat : ndarray, (output,)
        Nested R-hat.
    effective, quantile_error : ndarray, (output, p)
        Effective draws, and standard error in ln Y, of each reported quantile.
    accepted : float
    impossible : int
    reasons : tuple of str
        Why the chains are not good enough; empty if they are.
    """

    u: np.ndarray
    log_probability: np.ndarray
    log_latents: np.ndarray
    log_outputs: np.ndarray
    steps: int
    autocorrelation: float
    rhat: np.ndarray
    effective: np.ndarray
    quantile_error: np.ndarray
    accepted: float
    impossible: int
    reasons: tuple[str, ...]


def solve_star(problem: Problem, engine: MarkovChain) -> StarChains:
    """Run and judge the chains of one star (a function of the module, so that processes can call it)."""
    target = Target.of(problem)
    if not np.isfinite(target.log_probability(np.zeros((1, target.dimensions))))[0]:
        return _nowhere(problem, engine.ensembles)
    settings = Settings(engine.seed, engine.walkers, engine.ensembles, engine.block, engine.most_steps, engine.times)
    chains = run_chains(target, settings, Path(engine.checkpoint) if engine.checkpoint else None)
    steps = chains.coordinates.shape[1]
    tau = chains.autocorrelation
    first = min(int(np.ceil(5.0 * tau)), steps // 2)
    every = max(1, int(tau / 2.0))
    kept = np.swapaxes(chains.coordinates[:, first::every], 1, 2)
    u, log_latents, log_outputs = target.quantities(kept)
    rhat = np.array([arviz_diagnostics.nested_rhat(values) for values in log_outputs])
    judged = np.array([[arviz_diagnostics.quantile_judgement(v, p) for p in REPORTED] for v in log_outputs])
    return StarChains(
        u=u,
        log_probability=np.swapaxes(chains.log_probability[:, first::every], 1, 2),
        log_latents=log_latents,
        log_outputs=log_outputs,
        steps=steps,
        autocorrelation=tau,
        rhat=rhat,
        effective=judged[..., 0],
        quantile_error=judged[..., 1],
        accepted=chains.accepted,
        impossible=chains.impossible,
        reasons=_reasons(steps, tau, engine.times, rhat, judged[..., 0]),
    )


def _nowhere(problem: Problem, ensembles: int) -> StarChains:
    """What is given for a star whose measurements no value satisfies."""
    empty = np.full((ensembles, 1, 1), np.nan)
    outputs = np.full((len(problem.outputs), *empty.shape), np.nan)
    latents = np.full((len(problem.latents), *empty.shape), np.nan)
    judged = np.full((len(problem.outputs), len(REPORTED)), np.nan)
    reason = "no value satisfies all measurements within the ends of their distributions"
    return StarChains(
        empty, empty, latents, outputs, 0, np.inf, judged[:, 0], judged, judged, 0.0, 0, reasons=(reason,)
    )


def _reasons(steps: int, tau: float, times: float, rhat: np.ndarray, effective: np.ndarray) -> tuple[str, ...]:
    """What is not good enough, with its numbers."""
    found = []
    if not steps >= times * tau:
        found.append(f"{steps} steps are {steps / tau:.1f} autocorrelation times of {tau:.1f} steps, {times:g} wanted")
    if not np.all(rhat <= _LARGEST_RHAT):
        found.append(f"the ensembles disagree: nested R-hat {np.max(rhat):.3f}, at most {_LARGEST_RHAT} wanted")
    if not np.all(effective >= _LEAST_EFFECTIVE):
        found.append(f"a quantile rests on {np.min(effective):.0f} effective draws, {_LEAST_EFFECTIVE:.0f} wanted")
    return tuple(found)


@dataclass(frozen=True)
class MarkovChainAnswer:
    """Distributions by chains. See `stellerg.engines.answer.Answer`."""

    problem: Problem
    stars: tuple[StarChains, ...]

    def take(self, which: np.ndarray) -> "MarkovChainAnswer":
        """Return some of the stars."""
        return replace(self, problem=self.problem.take(which), stars=tuple(self.stars[int(k)] for k in which))

    def failure(self, star: int) -> str:
        """Why a star is not converged, with its numbers."""
        way_out = "run longer chains, or use another engine" if self.stars[star].steps else "check them"
        return "; ".join((*self.stars[star].reasons, way_out))

    @property
    def status(self) -> np.ndarray:
        """NOT_CONVERGED where the verdict has reasons, (star,)."""
        return np.array([Status.NOT_CONVERGED if s.reasons else Status.OK for s in self.stars], np.uint8)

    @property
    def log_mean(self) -> np.ndarray:
        """Mean of ln Y, (star, output)."""
        return np.array([s.log_outputs.mean(axis=(1, 2, 3)) for s in self.stars])

    @property
    def log_sd(self) -> np.ndarray:
        """Standard deviation of ln Y, (star, output)."""
        return np.array([s.log_outputs.std(axis=(1, 2, 3)) for s in self.stars])

    @property
    def numerical_error(self) -> np.ndarray:
        """Standard error of the cumulative, the largest of the reported quantiles, (star, output)."""
        p = np.array(REPORTED)
        return np.array([np.sqrt(p * (1.0 - p) / s.effective).max(axis=1) for s in self.stars])

    @property
    def diagnostics(self) -> Mapping[str, np.ndarray]:
        """The verdict's numbers, (star,) each."""
        return {
            "effective_draws": np.array([s.effective.min() for s in self.stars]),
            "steps": np.array([s.steps for s in self.stars], float),
            "autocorrelation_time": np.array([s.autocorrelation for s in self.stars]),
            "nested_rhat": np.array([s.rhat.max() for s in self.stars]),
            "largest_quantile_error": np.array([s.quantile_error.max() for s in self.stars]),
            "accepted": np.array([s.accepted for s in self.stars]),
            "impossible": np.array([s.impossible for s in self.stars], float),
        }

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """ln Y at cumulative probabilities p (m,): (star, output, m)."""
        p = np.atleast_1d(np.asarray(p, float))
        return np.array([np.quantile(_flat(s), p, axis=1).T for s in self.stars])

    def cumulative(self, log_value: np.ndarray) -> np.ndarray:
        """Cumulative probability at ln Y (star, output, m)."""
        out = np.empty(log_value.shape)
        for star, chains in enumerate(self.stars):
            for output, values in enumerate(np.sort(_flat(chains), axis=1)):
                out[star, output] = np.searchsorted(values, log_value[star, output], side="right") / values.size
        return out

    def density(self, log_value: np.ndarray) -> np.ndarray:
        """Density over ln Y at (star, output, m)."""
        return density_of_draws(self, log_value)


def _flat(chains: StarChains) -> np.ndarray:
    """All draws of each output, (output, draw)."""
    return chains.log_outputs.reshape(len(chains.log_outputs), -1)
