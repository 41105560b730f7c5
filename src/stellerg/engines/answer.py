"""What every engine gives back: distributions of ln Y over (star, output)."""

from collections.abc import Mapping
from typing import Protocol, runtime_checkable

import numpy as np

from stellerg.problem import Problem

__all__ = ["REPORTED", "Answer", "Engine", "density_of_draws"]

# Probabilities of the reported quantiles: median, and one and two standard deviations of a normal to either side.
REPORTED = (0.5, 0.15865525393145707, 0.8413447460685429, 0.02275013194817921, 0.9772498680518208)
_BANDWIDTH = 0.15  # half width of a density's window in standard deviations (bias 0.4 % at a normal peak)


@runtime_checkable
class Answer(Protocol):
    """Distributions of the natural logarithm of each output.

    Attributes
    ----------
    problem : Problem
    status : ndarray of uint8, (star,)
        OK, or NOT_CONVERGED.
    log_mean, log_sd : ndarray, (star, output)
        Mean and standard deviation of ln Y.
    numerical_error : ndarray, (star, output)
        Estimated error of the cumulative at a reported quantile (a standard error for draws).
    diagnostics : mapping of str to ndarray, (star,)
    """

    problem: Problem
    status: np.ndarray
    log_mean: np.ndarray
    log_sd: np.ndarray
    numerical_error: np.ndarray
    diagnostics: Mapping[str, np.ndarray]

    def take(self, which: np.ndarray) -> "Answer":
        """Return some of the stars, by position."""
        ...

    def failure(self, star: int) -> str:
        """Why a star is NOT_CONVERGED, with its numbers and the way out."""
        ...

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """ln Y at cumulative probabilities p (m,): (star, output, m)."""
        ...

    def cumulative(self, log_value: np.ndarray) -> np.ndarray:
        """Cumulative probability at ln Y (star, output, m)."""
        ...

    def density(self, log_value: np.ndarray) -> np.ndarray:
        """Density over ln Y at (star, output, m)."""
        ...


@runtime_checkable
class Engine(Protocol):
    """A method. Its fields are all its options."""

    name: str
    reasons: tuple[str, ...]

    def accepts(self, problem: Problem) -> np.ndarray:
        """Index into `reasons` for each star: 0 where the engine answers, else why not."""
        ...

    def solve(self, problem: Problem) -> Answer:
        """Answer a problem all of whose stars are accepted."""
        ...


def density_of_draws(answer: Answer, log_value: np.ndarray) -> np.ndarray:
    """Density over ln Y at (star, output, m) of an answer made of draws: the share in a window of 0.3 sd."""
    half = _BANDWIDTH * answer.log_sd[:, :, None]
    half = np.where(half > 0.0, half, 1e-12)
    return (answer.cumulative(log_value + half) - answer.cumulative(log_value - half)) / (2.0 * half)
