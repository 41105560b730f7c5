"""Problem: stars that gave the same set of observables, with weights, structure and outputs.

This is all that an engine sees. With theta the combinations of (ln M, ln R, ln L, ln d) that the observables
determine,

    ln obs_j = base_j + sum_r design_jr theta_r          (the j-th measured quantity)
    ln Y_o   = constant_o + sum_r weights_or theta_r + [q + ln f(q, ln M, ln R, ln mu)],   q = S(u | ln M, ln R)

where the bracket stands for outputs that carry structure, and ln f for those that follow the binding energy.

With z_j(theta) the normal scores of the measured quantities, C their correlations and J = dz/dtheta, the
density of theta is exp(-z' C^-1 z/2) |J' C^-1 J|^(1/2). Exact values were eliminated before.
"""

from collections.abc import Mapping
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from stellerg.binding import MEAN_MOLECULAR_WEIGHT, Binding, Kind
from stellerg.measured import Measured, Scale
from stellerg.structure.interior import Interior

__all__ = ["COEFFICIENT", "Problem"]

COEFFICIENT = "structure_coefficient"  # the last output of every problem whose structure is determined


@dataclass(frozen=True)
class Problem:
    """Stars that share a set of observables.

    Attributes
    ----------
    rows : ndarray of int, (star,)
        Where the stars stand in the input.
    key : ndarray of uint64, (star,)
        What randomness is keyed by.
    inputs : tuple of str, (input,)
        Names of the measured quantities that are not exact.
    measured : tuple of Measured, (input,)
        Each over the stars.
    design : ndarray, (input, parameter)
        d ln obs/d theta; a row may repeat.
    base : ndarray, (star, input)
        ln obs at theta = 0.
    correlation : ndarray, (star, input, input), or None
        Correlations of the normal scores; None: independent.
    outputs : tuple of str, (output,)
    weights : ndarray, (output, parameter)
        d ln Y/d theta at fixed structure.
    constant : ndarray, (star, output)
        ln Y at theta = 0 and ln w = 0.
    kinds : ndarray of int, (output,)
        `stellerg.binding.Kind`: how structure enters each output.
    latents : tuple of str, (latent,)
        Which of mass, radius, luminosity, distance, mean molecular weight are determined.
    latent_weights : ndarray, (latent, parameter)
    latent_constant : ndarray, (star, latent)
    interior : Interior
        S(u | ln M, ln R).
    binding : Binding
        ln f; where it is one number, it stands in `constant`.
    """

    rows: np.ndarray
    key: np.ndarray
    inputs: tuple[str, ...]
    measured: tuple[Measured, ...]
    design: np.ndarray
    base: np.ndarray
    correlation: np.ndarray | None
    outputs: tuple[str, ...]
    weights: np.ndarray
    constant: np.ndarray
    kinds: np.ndarray
    latents: tuple[str, ...]
    latent_weights: np.ndarray
    latent_constant: np.ndarray
    interior: Interior
    binding: Binding

    def __len__(self) -> int:
        return len(self.rows)

    def take(self, which: np.ndarray) -> "Problem":
        """Return some of the stars, by position in this problem."""
        return replace(
            self,
            rows=self.rows[which],
            key=self.key[which],
            measured=tuple(m.take(which) for m in self.measured),
            base=self.base[which],
            correlation=None if self.correlation is None else self.correlation[which],
            constant=self.constant[which],
            latent_constant=self.latent_constant[which],
            interior=self.interior.take(which),
            binding=self.binding.take(which),
        )

    def only(self, outputs: np.ndarray) -> "Problem":
        """Return the same stars with some of the outputs, by position."""
        return replace(
            self,
            outputs=tuple(self.outputs[o] for o in outputs),
            weights=self.weights[outputs],
            constant=self.constant[:, outputs],
            kinds=self.kinds[outputs],
        )

    def split(self, size: int):
        """Yield (slice, problem) in pieces of at most `size` stars."""
        for start in range(0, len(self), size):
            piece = np.arange(start, min(start + size, len(self)))
            yield slice(piece[0], piece[-1] + 1), self.take(piece)

    @property
    def structured(self) -> np.ndarray:
        """Whether each output carries ln w, (output,)."""
        return self.kinds != Kind.NONE

    @property
    def over_determined(self) -> bool:
        """Whether there are more measured quantities than parameters."""
        return self.design.shape[0] > self.design.shape[1]

    @cached_property
    def log_normal(self) -> np.ndarray:
        """Whether each input of each star is log-normal, (star, input)."""
        return _columns([m.log_normal for m in self.measured], len(self)).astype(bool)

    @cached_property
    def log_mean(self) -> np.ndarray:
        """Mean of ln obs, (star, input)."""
        return _columns([m.log_mean for m in self.measured], len(self))

    @cached_property
    def log_sd(self) -> np.ndarray:
        """Signed standard deviation of ln obs, (star, input): negative where ln obs falls with the score."""
        return _columns([_sign(m) * m.log_sd for m in self.measured], len(self))

    @cached_property
    def log_median(self) -> np.ndarray:
        """Median of ln obs, (star, input)."""
        return _columns([m.log_median for m in self.measured], len(self))

    @cached_property
    def log_covariance(self) -> np.ndarray:
        """Covariance of ln obs to first order in the scores, (star, input, input); exact for log-normal inputs."""
        correlation = np.eye(len(self.inputs)) if self.correlation is None else self.correlation
        return self.log_sd[:, :, None] * correlation * self.log_sd[:, None, :]

    @cached_property
    def precision_root(self) -> np.ndarray | None:
        """L with L' L = C^-1, (star, input, input); None for independent inputs. C must not be singular."""
        if self.correlation is None:
            return None
        values, vectors = np.linalg.eigh(self.correlation)
        return np.swapaxes(vectors, 1, 2) / np.sqrt(values)[:, :, None]

    @cached_property
    def log_volume(self) -> np.ndarray:
        """ln |det D| - ln |C|/2 of exactly determined stars, (star, 1); what is left out where C is singular."""
        volume = np.full((len(self), 1), np.linalg.slogdet(self.design)[1])
        if self.correlation is None:
            return volume
        return volume - 0.5 * np.log(np.maximum(np.linalg.det(self.correlation), 1e-300))[:, None]

    @cached_property
    def solution(self) -> np.ndarray:
        """d theta/d ln obs, (star | 1, parameter, input).

        The inverse of the design where it is square; else generalised least squares in ln obs with the
        covariance of the assigned distributions (Aitken 1935), exact for log-normal inputs.
        """
        if not self.over_determined:
            return np.linalg.inv(self.design)[None] if len(self.inputs) else np.zeros((1, 0, 0))
        weighted = np.linalg.solve(self.log_covariance, np.broadcast_to(self.design, (len(self), *self.design.shape)))
        normal = np.einsum("sjr,jq->srq", weighted, self.design)
        return np.linalg.solve(normal, np.swapaxes(weighted, 1, 2))

    @cached_property
    def input_weights(self) -> np.ndarray:
        """d ln Y/d ln obs at fixed structure, (star | 1, output, input)."""
        return _clean(np.einsum("or,srj->soj", self.weights, self.solution))

    @cached_property
    def latent_input_weights(self) -> np.ndarray:
        """d ln(latent)/d ln obs, (star | 1, latent, input)."""
        return _clean(np.einsum("lr,srj->slj", self.latent_weights, self.solution))

    def log_outputs(self, log_inputs: np.ndarray) -> np.ndarray:
        """ln Y without structure at given ln obs, (star, output)."""
        return self.constant + np.einsum("soj,sj->so", self.input_weights, log_inputs - self.base)

    def log_latents(self, log_inputs: np.ndarray) -> np.ndarray:
        """ln(mass, radius, ...) at given ln obs, (star, latent)."""
        return self.latent_constant + np.einsum("slj,sj->sl", self.latent_input_weights, log_inputs - self.base)

    def output_weights(self, output: int) -> np.ndarray:
        """d ln Y/d ln obs of one output, (star, input)."""
        return np.broadcast_to(self.input_weights[:, output], (len(self), len(self.inputs)))

    def variance_of(self, weights: np.ndarray) -> np.ndarray:
        """Variance of a weighted sum of ln obs, (star,); weights (star, input)."""
        return np.einsum("sj,sjk,sk->s", weights, self.log_covariance, weights)

    def log_structure(self, q: np.ndarray, log_latents: Mapping[str, np.ndarray]) -> np.ndarray:
        """What structure adds to ln Y.

        Parameters
        ----------
        q : ndarray, (star, m)
            ln w.
        log_latents : mapping of str to ndarray, (star, m)
            ln(mass, radius, mean molecular weight), as far as they are determined.

        Returns
        -------
        ndarray, (star, output, m)
        """
        out = np.zeros((len(q), len(self.kinds), q.shape[-1]))
        for kind in np.unique(self.kinds[self.structured]):
            added = q
            if not self.binding.constant and kind != Kind.COEFFICIENT:
                molecular = log_latents.get("mean_molecular_weight", np.log(MEAN_MOLECULAR_WEIGHT))
                here = (log_latents["mass"], log_latents.get("radius"), molecular)
                added = q + self.binding.log_share(Kind(kind), q, *here)
            out[:, self.kinds == kind] = added[:, None]
        return out

    def latent(self, name: str) -> int:
        """Position of a latent quantity."""
        return self.latents.index(name)


def _sign(measured: Measured) -> float:
    return -1.0 if measured.scale is Scale.MAGNITUDE else 1.0


def _clean(weights: np.ndarray) -> np.ndarray:
    """Set to zero what is rounding of zero: exponents are of order one."""
    return np.where(np.abs(weights) < 1e-12, 0.0, weights)


def _columns(columns: list, count: int) -> np.ndarray:
    """Stack columns over stars, (star, input), also when there is none."""
    return np.stack(columns, axis=1) if columns else np.zeros((count, 0))
