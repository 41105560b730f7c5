"""A structure prior learned from stars whose structure was observed: a hierarchical model of the index n.

    n_i ~ normal(mean + slope (ln M_i - its average), spread), restricted to [0, 4.95]
    log k2 observes the polytrope of index n_i - d, I/(M R^2) that of n_i - 0.55 d, w = 3/(5 - n_i) directly

d is the misfit of one index to several integrals of a real star. It follows the evolutionary stage and does not average
out: it is one unknown for all stars of a stage, d ~ normal(0, 0.25), so that many stars with k2 alone leave the mean
uncertain by about 0.25 however sharp their data. The likelihood of a quantity is exp(-z^2/2) with z its normal score.

Each n_i is integrated over by quadrature; emcee (Foreman-Mackey et al. 2013, doi:10.1086/670067) samples the rest: the
mean, ln spread, the slope if wanted, and one d for each stage.

When it is wrong: if the stars are not like those the prior is meant for; if a stage is made of stars with different
misfits; if n is not normal among them (the predictive checks tell); with few stars the spread is that of its own prior.
"""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import emcee
import numpy as np
from scipy.special import chdtri, ndtr, ndtri

from stellerg import diagnostics
from stellerg.errors import EngineError, InputError
from stellerg.keyed_random import hash_identifiers, uniform, words
from stellerg.measured import Measured
from stellerg.structure.learning_likelihood import LEARNED_FROM, TOP, HyperPosterior, ObservedStructures
from stellerg.wording import counted

__all__ = ["LEARNED_FROM", "ChainSettings", "LearnedPrior", "PredictiveCheck", "learn_prior"]

_FEWEST = 5  # stars; judgement: with fewer the priors of the hyperparameters decide
_JUMPS = 0.1  # share of steps by whole differences (ter Braak 2006: every tenth)
_LARGEST_RHAT = 1.02  # judgement, as for single stars
_REPLICATIONS = 1000
_FIRST_DIMENSION = 8192  # of the keyed words of a star that replicate its data; draws use low dimensions


@dataclass(frozen=True)
class ChainSettings:
    """How the chains are run.

    Attributes
    ----------
    seed : int
    walkers : int
        Of each ensemble, at least; four times the number of parameters where that is more.
    ensembles : int
        Independent ones, at least 4.
    burn_in : int
        Steps left out at the start.
    block : int
        Steps after which it is judged whether to go on.
    most_steps : int
        After the burn-in.
    times : float
        Autocorrelation times that the steps must exceed.
    """

    seed: int = 0
    walkers: int = 16
    ensembles: int = 4
    burn_in: int = 100
    block: int = 100
    most_steps: int = 10_000
    times: float = 25.0

    def __post_init__(self):
        if self.ensembles < 4:
            raise EngineError(f"ensembles: {self.ensembles} must be at least 4; the ensembles judge each other")
        if self.walkers < 8 or self.walkers % 2:
            raise EngineError(f"walkers: {self.walkers} must be an even number, at least 8")
        if min(self.burn_in, self.block, self.most_steps) < 1 or self.most_steps < self.block:
            raise EngineError("burn_in and block must be at least 1, most_steps at least one block")


@dataclass(frozen=True)
class PredictiveCheck:
    """One statistic of the observed indices against data replicated under the posterior.

    The spread of the indices is what was fitted, and so rarely stands out; the largest deviation shows a star that is
    not of the population, the disagreement within stars a misfit that is not common, or errors quoted too small.

    Attributes
    ----------
    name : str
        What the statistic is.
    observed : float
        Its median over draws: where the statistic looks at parameters it differs from draw to draw.
    interval : tuple of float
        Central 95.45 % of the statistic in replicated data.
    probability : float
        Two-sided predictive probability: twice the smaller share of replications beyond the observed value.
    """

    name: str
    observed: float
    interval: tuple[float, float]
    probability: float


@dataclass(frozen=True)
class LearnedPrior:
    """Posterior of the hyperparameters, and what it rests on.

    Attributes
    ----------
    parameters : tuple of str
        ``mean``, ``ln_spread``, ``slope`` where it was wanted, and ``misfit LABEL`` of each stage.
    draws : ndarray, (draw, parameter)
    stages : tuple of str
    keys : ndarray of uint64, (star,)
        Of the stars used: their structure observables must not be used with this prior again.
    observables : tuple of str
        Those that were used.
    log_mass : ndarray, (star,), or None
        ln of the mass in nominal solar masses, where a slope was wanted.
    observed : ndarray, (star,)
        Index of each star by its own data with the misfit taken as zero; of several observables their weighted mean.
    observed_sd : ndarray, (star,)
        Its standard deviation by the quoted errors alone.
    replicated : ndarray, (replication, star)
        The same of replicated data.
    checks : tuple of PredictiveCheck
    diagnostics : dict of str to float
        Largest nested R-hat, largest autocorrelation time (steps), steps of each ensemble after the burn-in, share of
        proposals accepted.
    """

    parameters: tuple[str, ...]
    draws: np.ndarray
    stages: tuple[str, ...]
    keys: np.ndarray
    observables: tuple[str, ...]
    log_mass: np.ndarray | None
    observed: np.ndarray
    observed_sd: np.ndarray
    replicated: np.ndarray
    checks: tuple[PredictiveCheck, ...]
    diagnostics: dict[str, float] = field(default_factory=dict)

    @property
    def stars(self) -> int:
        """Number of stars used."""
        return len(self.keys)

    @property
    def average_log_mass(self) -> float:
        """Where the mean holds, in ln of the mass in nominal solar masses; 0 without a slope."""
        return 0.0 if self.log_mass is None else float(self.log_mass.mean())

    @property
    def mean(self) -> np.ndarray:
        """Draws of the mean index (at the average ln M), (draw,)."""
        return self.draws[:, 0]

    @property
    def spread(self) -> np.ndarray:
        """Draws of the standard deviation of n from star to star, (draw,)."""
        return np.exp(self.draws[:, 1])

    @property
    def slope(self) -> np.ndarray:
        """Draws of dn/d ln M, (draw,); zero where no slope was wanted."""
        return self.draws[:, 2] if "slope" in self.parameters else np.zeros(len(self.draws))

    def summary(self) -> dict[str, tuple[float, float]]:
        """Posterior mean and standard deviation of mean, spread, slope (where wanted) and the misfit of each stage."""
        columns = dict(zip(self.parameters, self.draws.T, strict=True))
        del columns["ln_spread"]
        columns = {"mean": columns.pop("mean"), "spread": self.spread, **columns}
        return {name: (float(values.mean()), float(values.std())) for name, values in columns.items()}


def learn_prior(
    measured: Mapping[str, Measured],
    keys: np.ndarray,
    *,
    stages: Sequence[str] | None = None,
    log_mass: np.ndarray | None = None,
    misfit_scale: np.ndarray | None = None,
    settings: ChainSettings = ChainSettings(),
) -> LearnedPrior:
    """Learn the distribution of the index from stars whose structure was observed.

    Parameters
    ----------
    measured : mapping of str to Measured, (star,)
        Any of ``log_k2``, ``moment_of_inertia_factor``, ``structure_coefficient``. Stars without any are left out.
    keys : ndarray of uint64, (star,)
        Keys of the stars, all different.
    stages : sequence of str, (star,), optional
        Label of each star's evolutionary stage: stars of one label share one misfit. Omitted: one stage.
    log_mass : ndarray, (star,), optional
        ln of the mass in nominal solar masses; given, the mean index may change with it, linearly.
    misfit_scale : ndarray, (star,), optional
        By which the misfit of the stage is multiplied, 0 to 1: 0 for fully convective stars, which are polytropes.
        Omitted: 1.
    settings : ChainSettings

    Raises
    ------
    InputError
        If there are fewer than 5 stars, a key stands twice, an error is missing, or a mass or stage is.
    EngineError
        If the chains have not converged.
    """
    unknown = [name for name in measured if name not in LEARNED_FROM]
    if unknown:
        raise InputError(f"learning: {unknown[0]!r} does not observe structure; give any of {', '.join(LEARNED_FROM)}")
    used = np.zeros(len(keys), bool)
    for name, values in measured.items():
        if values.exact.any():
            given = counted(int(values.exact.sum()), "star")
            raise InputError(f"learning: {name} is given as exact for {given}; it needs an error")
        used |= values.usable
    rows = np.flatnonzero(used)
    if len(rows) < _FEWEST:
        raise InputError(f"learning: {len(rows)} stars have a structure observable, at least {_FEWEST} are wanted")
    keys = np.asarray(keys, np.uint64)[rows]
    if len(np.unique(keys)) < len(keys):
        raise InputError("learning: a star stands twice; give every star once, or its data would count twice")
    parts = {name: values.take(rows) for name, values in measured.items() if values.usable.any()}
    scale = np.ones(len(rows)) if misfit_scale is None else np.asarray(misfit_scale, float)[rows]
    if not ((scale >= 0.0) & (scale <= 1.0)).all():
        raise InputError("learning: the scale of the misfit must lie in [0, 1]")
    observed = ObservedStructures(parts, scale)
    labels = np.array(["all"] * len(rows) if stages is None else [str(stages[row]) for row in rows])
    if log_mass is not None:
        log_mass = np.asarray(log_mass, float)[rows]
        if not np.isfinite(log_mass).all():
            missing = counted(int(np.count_nonzero(~np.isfinite(log_mass))), "star")
            raise InputError(f"learning: {missing} without a mass; leave them out, or learn without a slope")
    target = HyperPosterior.of(observed, labels, log_mass)
    chains, judged = _run(target, settings)
    draws = np.ascontiguousarray(chains.reshape(-1, chains.shape[-1]))
    replicated, checks = _check(target, draws, keys, settings.seed)
    return LearnedPrior(
        parameters=target.parameters,
        draws=draws,
        stages=target.stages,
        keys=keys,
        observables=tuple(parts),
        log_mass=log_mass,
        observed=observed.centre,
        observed_sd=observed.precision**-0.5,
        replicated=replicated,
        checks=checks,
        diagnostics=judged,
    )


def _run(target: HyperPosterior, settings: ChainSettings) -> tuple[np.ndarray, dict[str, float]]:
    """Chains, (ensemble, walker, step, parameter), run until they are long enough; judged."""
    size = len(target.parameters)
    walkers = max(settings.walkers, 4 * size)
    samplers, states = [], []
    for number in range(settings.ensembles):
        moves = [(emcee.moves.DEMove(), 1.0 - _JUMPS), (emcee.moves.DEMove(gamma0=1.0), _JUMPS)]
        sampler = emcee.EnsembleSampler(walkers, size, target.log_probability, moves=moves, vectorize=True)
        state = sampler.run_mcmc(_start(target, walkers, number, settings.seed), settings.burn_in)
        sampler.reset()
        samplers.append(sampler)
        states.append(state)
    steps, tau, rhat, enough = 0, np.inf, np.inf, False
    while not enough and steps + settings.block <= settings.most_steps:
        states = [s.run_mcmc(state, settings.block) for s, state in zip(samplers, states, strict=True)]
        steps += settings.block
        chains = np.stack([sampler.get_chain() for sampler in samplers])
        tau = max(float(emcee.autocorr.integrated_time(chain, tol=0, quiet=True).max()) for chain in chains)
        chains = chains.transpose(0, 2, 1, 3)
        rhat = max(diagnostics.nested_rhat(np.ascontiguousarray(chains[..., place])) for place in range(size))
        enough = steps >= settings.times * tau and rhat <= _LARGEST_RHAT
    accepted = float(np.mean([sampler.acceptance_fraction.mean() for sampler in samplers]))
    if not enough:
        raise EngineError(
            f"learning: the chains have not converged: {steps} steps are {steps / tau:.1f} autocorrelation times of "
            f"{tau:.1f} steps ({settings.times:g} wanted), nested R-hat {rhat:.3f} (at most {_LARGEST_RHAT} wanted); "
            "allow more steps, or fewer stages"
        )
    return chains, {"rhat": rhat, "autocorrelation": tau, "steps": float(steps), "accepted": accepted}


def _start(target: HyperPosterior, walkers: int, number: int, seed: int) -> emcee.State:
    """Walkers drawn from the normal approximation, pulled towards its centre until all are possible."""
    word = words(seed, hash_identifiers(["structure prior"]), number, 4)[0]
    random = np.random.RandomState(word.view(np.uint32))
    centre, root = target.approximation()
    step = np.einsum("pq,wq->wp", root, random.standard_normal((walkers, len(centre))))
    for _ in range(60):
        impossible = ~np.isfinite(target.log_probability(centre + step))
        if not impossible.any():
            break
        step[impossible] *= 0.7
    return emcee.State(centre + step, random_state=random.get_state())


def _check(target: HyperPosterior, draws: np.ndarray, keys: np.ndarray, seed: int):
    """Replicated indices, (replication, star), and the statistics of the observed ones against them."""
    data = target.observed
    some = draws[np.linspace(0, len(draws) - 1, _REPLICATIONS).astype(int)]
    mean, spread, misfit = target.population(some)
    u, v, w = (uniform(seed, keys, _FIRST_DIMENSION + place, len(some)) for place in range(3))
    low, high = ndtr(-mean / spread), ndtr((TOP - mean) / spread)
    index = np.clip(mean + spread * ndtri(low + (high - low) * u), 0.0, TOP)
    noise = data.precision[:, None] ** -0.5
    replicated = np.clip(index - data.share[:, None] * misfit + noise * ndtri(v), 0.0, TOP)
    expected, sd = mean - data.share[:, None] * misfit, np.hypot(spread, noise)

    def extreme(values):
        return np.abs((values - expected) / sd).max(axis=0)

    observed = np.broadcast_to(data.centre[:, None], replicated.shape)
    statistics = [
        ("spread of the indices", observed.std(axis=0), replicated.std(axis=0)),
        ("largest normalised deviation", extreme(observed), extreme(replicated)),
    ]
    if data.spare.any():
        apart, across, along = data.contrast[:, :, None]
        disagreement = (apart + 2.0 * across * misfit + along * misfit**2).sum(axis=0)
        statistics.append(("disagreement within stars", disagreement, chdtri(data.spare.sum(), w[0])))
    return np.ascontiguousarray(replicated.T), tuple(_judge(*statistic) for statistic in statistics)


def _judge(name: str, observed: np.ndarray, replicated: np.ndarray) -> PredictiveCheck:
    above, below = np.mean(replicated >= observed), np.mean(replicated <= observed)
    low, high = np.quantile(replicated, [0.02275, 0.97725])
    probability = min(2.0 * float(min(above, below)), 1.0)
    return PredictiveCheck(name, float(np.median(observed)), (float(low), float(high)), probability)
