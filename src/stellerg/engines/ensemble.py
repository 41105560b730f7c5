"""The chains of one star: independent emcee ensembles in whitened coordinates, extended block by block.

Coordinates are t, with theta = centre + root t around the least-squares point, and the normal score of u. Each
ensemble has a random state keyed by (seed, star, ensemble). Differential-evolution moves (ter Braak 2006,
doi:10.1007/s11222-006-8769-1; Nelson et al. 2014, doi:10.1088/0067-0049/210/1/11) through emcee
(Foreman-Mackey et al. 2013, doi:10.1086/670067).
"""

import hashlib
import os
from dataclasses import dataclass, fields
from pathlib import Path

import emcee
import numpy as np
from scipy.special import ndtr

from stellerg.engines.least_squares import fit
from stellerg.engines.target import log_target
from stellerg.keyed_random import words
from stellerg.problem import Problem

__all__ = ["Chains", "Settings", "Target", "run_chains"]

_SEED_DIMENSION = 4096  # first dimension of the keyed words that seed ensembles; draws use low dimensions
# Share of steps by whole differences (ter Braak 2006: every tenth). emcee's snooker move is left out: in 3.1.6 it does
# not leave a normal density unchanged (variance 0.74 instead of 1), and the chains would be wrong by 5 standard errors.
_JUMPS = 0.1


@dataclass(frozen=True)
class Settings:
    """How chains are run; see `stellerg.engines.mcmc.MarkovChain`."""

    seed: int
    walkers: int
    ensembles: int
    block: int
    most_steps: int
    times: float


@dataclass(frozen=True)
class Target:
    """The density of one star in whitened coordinates.

    Attributes
    ----------
    problem : Problem
        Of one star.
    centre : ndarray, (parameter,)
    root : ndarray, (parameter, parameter)
    """

    problem: Problem
    centre: np.ndarray
    root: np.ndarray

    @classmethod
    def of(cls, problem: Problem) -> "Target":
        """Whiten a problem of one star around its least-squares point."""
        size = problem.design.shape[1]
        if size == 0:
            return cls(problem, np.zeros(0), np.zeros((0, 0)))
        best = fit(problem)
        jacobian = best.jacobian[0]
        normal = jacobian.T @ jacobian
        if not np.isfinite(normal).all() or np.linalg.eigvalsh(normal)[0] <= 0.0:
            normal = np.eye(size)
        values, vectors = np.linalg.eigh(normal)
        return cls(problem, best.parameters[0], vectors / np.sqrt(values))

    @property
    def dimensions(self) -> int:
        """Number of coordinates."""
        return len(self.centre) + 1

    @property
    def _observes(self) -> bool:
        """Whether structure observables weigh the structure."""
        return self.problem.interior.observed is not None and bool(self.problem.structured.any())

    def parameters(self, coordinates: np.ndarray) -> np.ndarray:
        """theta of coordinates, (..., dimension) to (..., parameter)."""
        return self.centre + np.einsum("rq,...q->...r", self.root, coordinates[..., :-1])

    def log_probability(self, coordinates: np.ndarray) -> np.ndarray:
        """Logarithm of the density at coordinates (walker, dimension), (walker,); not finite: minus infinity."""
        density = log_target(self.problem, self.parameters(coordinates)[None])[0] - 0.5 * coordinates[:, -1] ** 2
        if self._observes:
            density = density + self._log_likelihood(coordinates)
        return np.where(np.isfinite(density), density, -np.inf)

    def _log_likelihood(self, coordinates: np.ndarray) -> np.ndarray:
        """Log likelihood of the structure observables, averaged over their misfit, (walker,)."""
        known = self._latents(self.parameters(coordinates)[None])
        mass, radius = known.get("mass"), known.get("radius")
        q = self.problem.interior.prior_quantile(ndtr(coordinates[None, :, -1]), mass, radius)
        return self.problem.interior.log_likelihood(q, mass, radius)[0]

    def _latents(self, theta: np.ndarray) -> dict[str, np.ndarray]:
        """ln of the latents at theta (1, draw, parameter), (1, draw) each."""
        problem = self.problem
        values = np.einsum("lr,sdr->sld", problem.latent_weights, theta) + problem.latent_constant[:1, :, None]
        return {name: values[:, k] for k, name in enumerate(problem.latents)}

    def quantities(self, coordinates: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
        """u, ln of the latents and ln Y of coordinates.

        Parameters
        ----------
        coordinates : ndarray, (..., dimension)

        Returns
        -------
        u : ndarray, (...)
        log_latents : ndarray, (latent, ...)
        log_outputs : ndarray, (output, ...)
        """
        problem = self.problem
        theta = self.parameters(coordinates)
        u = ndtr(coordinates[..., -1])
        latents = np.einsum("lr,...r->l...", problem.latent_weights, theta)
        latents = latents + problem.latent_constant[0].reshape(-1, *([1] * u.ndim))
        outputs = np.einsum("or,...r->o...", problem.weights, theta)
        outputs = outputs + problem.constant[0].reshape(-1, *([1] * u.ndim))
        if problem.structured.any():
            # one star: its draws along the second axis
            known = {name: values.reshape(1, -1) for name, values in zip(problem.latents, latents, strict=True)}
            q = problem.interior.prior_quantile(u.reshape(1, -1), known.get("mass"), known.get("radius"))
            outputs = outputs + problem.log_structure(q, known)[0].reshape(outputs.shape)
        return u, latents, outputs


@dataclass(frozen=True)
class Chains:
    """Raw chains of one star.

    Attributes
    ----------
    coordinates : ndarray, (ensemble, step, walker, dimension)
    log_probability : ndarray, (ensemble, step, walker)
    accepted : float
        Share of proposals accepted.
    impossible : int
        Evaluations that were not finite.
    autocorrelation : float
        Largest integrated autocorrelation time of any output or coordinate, in steps.
    """

    coordinates: np.ndarray
    log_probability: np.ndarray
    accepted: float
    impossible: int
    autocorrelation: float


def run_chains(target: Target, settings: Settings, checkpoint: Path | None) -> Chains:
    """Run the ensembles of one star until N >= `times` tau, or the cap.

    Parameters
    ----------
    target : Target
    settings : Settings
    checkpoint : Path or None
        Folder in which finished blocks are kept and found again.
    """
    folder = None if checkpoint is None else _folder(checkpoint, target.problem, settings)
    ensembles = [_Ensemble(target, settings, number, folder) for number in range(settings.ensembles)]
    tau, block = np.inf, 0
    while block * settings.block < settings.most_steps:
        for ensemble in ensembles:
            ensemble.advance(block)
        block += 1
        tau = max(_autocorrelation(target, e) for e in ensembles)
        if block * settings.block >= settings.times * tau:
            break
    return Chains(
        coordinates=np.stack([np.concatenate(e.coordinates) for e in ensembles]),
        log_probability=np.stack([np.concatenate(e.log_probability) for e in ensembles]),
        accepted=float(np.mean([np.mean(e.accepted) for e in ensembles])),
        impossible=int(np.sum([np.sum(e.impossible) for e in ensembles])),
        autocorrelation=float(tau),
    )


def _autocorrelation(target: Target, ensemble: "_Ensemble") -> float:
    """Largest integrated autocorrelation time, in steps, over coordinates and outputs (Goodman & Weare 2010)."""
    coordinates = np.concatenate(ensemble.coordinates)
    outputs = np.moveaxis(target.quantities(coordinates)[2], 0, -1)
    every = np.concatenate([coordinates, outputs], axis=-1)
    moving = np.ptp(every, axis=(0, 1)) > 1e-12 * (1.0 + np.abs(every).max(axis=(0, 1)))
    times = emcee.autocorr.integrated_time(every[..., moving], tol=0, quiet=True)
    return float(np.nanmax(np.maximum(times, 1.0)))


class _Ensemble:
    """One ensemble: its state between blocks, kept in a checkpoint if there is a folder."""

    def __init__(self, target: Target, settings: Settings, number: int, folder: Path | None):
        self.target, self.settings, self.number, self.folder = target, settings, number, folder
        self.coordinates: list[np.ndarray] = []
        self.log_probability: list[np.ndarray] = []
        self.accepted: list[np.ndarray] = []
        self.impossible: list[int] = []
        self.state: emcee.State | None = None
        # steps by whole differences (gamma = 1) change between modes: ter Braak 2006
        moves = [(emcee.moves.DEMove(), 1.0 - _JUMPS), (emcee.moves.DEMove(gamma0=1.0), _JUMPS)]
        self._counted = 0
        self.sampler = emcee.EnsembleSampler(
            settings.walkers, target.dimensions, self._log_probability, moves=moves, vectorize=True
        )

    def _log_probability(self, coordinates: np.ndarray) -> np.ndarray:
        density = self.target.log_probability(coordinates)
        self._counted += int(np.isneginf(density).sum())
        return density

    def advance(self, block: int) -> None:
        """Run one block of steps, or read it from the checkpoint."""
        path = None if self.folder is None else self.folder / f"ensemble-{self.number}-block-{block:05d}.npz"
        if path is not None and path.exists():
            self._append(**_read(path))
            return
        start = self._start() if self.state is None else self.state
        self.sampler.reset()
        self._counted = 0
        for _ in self.sampler.sample(start, iterations=self.settings.block, skip_initial_state_check=True):
            pass
        _, keys, position, has_gauss, cached = self.sampler.random_state
        done = {
            "coordinates": self.sampler.get_chain(),
            "log_probability": self.sampler.get_log_prob(),
            "accepted": self.sampler.acceptance_fraction,
            "impossible": np.array(self._counted),
            "random_keys": keys,
            "random_rest": np.array([position, has_gauss, cached], float),
        }
        if path is not None:
            _write(path, done)
        self._append(**done)

    def _start(self) -> emcee.State:
        """Walkers drawn from the normal approximation, pulled towards its centre until all are possible."""
        seed = words(self.settings.seed, self.target.problem.key, _SEED_DIMENSION + self.number, 4)[0]
        random = np.random.RandomState(seed.view(np.uint32))
        coordinates = random.standard_normal((self.settings.walkers, self.target.dimensions))
        for _ in range(60):
            impossible = ~np.isfinite(self.target.log_probability(coordinates))
            if not impossible.any():
                break
            coordinates[impossible] *= 0.7
        return emcee.State(coordinates, random_state=random.get_state())

    def _append(self, coordinates, log_probability, accepted, impossible, random_keys, random_rest) -> None:
        position, has_gauss, cached = random_rest
        random = ("MT19937", random_keys, int(position), int(has_gauss), float(cached))
        self.coordinates.append(coordinates)
        self.log_probability.append(log_probability)
        self.accepted.append(accepted)
        self.impossible.append(int(impossible))
        self.state = emcee.State(coordinates[-1], log_prob=log_probability[-1], random_state=random)


def _write(path: Path, arrays: dict[str, np.ndarray]) -> None:
    """Write a block under a temporary name; it gets its own when it is whole."""
    path.parent.mkdir(parents=True, exist_ok=True)
    temporary = path.with_name(f".{path.name}.{os.getpid()}.tmp")
    with temporary.open("wb") as file:
        np.savez(file, **arrays)
    os.replace(temporary, path)


def _read(path: Path) -> dict[str, np.ndarray]:
    with np.load(path, allow_pickle=False) as arrays:
        return {name: arrays[name] for name in arrays.files}


def _folder(checkpoint: Path, problem: Problem, settings: Settings) -> Path:
    """Folder of one star's blocks: named by its key and by a hash of all that its chains depend on."""
    digest = hashlib.sha256()
    options = {f.name: getattr(settings, f.name) for f in fields(settings)}
    options.pop("most_steps")  # a longer run goes on from a shorter one
    options.pop("times")
    binding = problem.binding
    words = [sorted(options.items()), problem.inputs, problem.outputs, problem.interior.model.text]
    digest.update(repr((*words, binding.gas, binding.radiation)).encode())
    arrays = [problem.design, problem.base, problem.weights, problem.constant, problem.kinds]
    arrays += [binding.ionisation] if binding.ionisation is not None else []
    arrays += [problem.correlation] if problem.correlation is not None else []
    for measured in problem.measured:
        arrays += [measured.value, measured.upper, measured.lower, measured.shape, np.array(measured.scale.value)]
    for array in arrays:
        digest.update(np.ascontiguousarray(array).tobytes())
    return checkpoint / f"{int(problem.key[0]):016x}-{digest.hexdigest()[:16]}"
