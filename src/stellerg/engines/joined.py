"""An answer put together from answers for some of the outputs each."""

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from stellerg.engines.answer import Answer
from stellerg.problem import Problem

__all__ = ["JoinedAnswer"]


@dataclass(frozen=True)
class JoinedAnswer:
    """Answers side by side. See `stellerg.engines.answer.Answer`.

    Attributes
    ----------
    problem : Problem
    parts : tuple of (ndarray of int, Answer)
        Positions of outputs, and the answer that gives them; of the same stars.
    """

    problem: Problem
    parts: tuple[tuple[np.ndarray, Answer], ...]

    def take(self, which: np.ndarray) -> "JoinedAnswer":
        """Return some of the stars."""
        return JoinedAnswer(self.problem.take(which), tuple((at, answer.take(which)) for at, answer in self.parts))

    def failure(self, star: int) -> str:
        """Why a star is not converged."""
        return "; ".join(text for _, answer in self.parts if (text := answer.failure(star)))

    @property
    def status(self) -> np.ndarray:
        """The worst of the parts', (star,)."""
        return np.max([answer.status for _, answer in self.parts], axis=0)

    @property
    def diagnostics(self) -> Mapping[str, np.ndarray]:
        """Of all parts, (star,) each."""
        return {name: values for _, answer in self.parts for name, values in answer.diagnostics.items()}

    @property
    def log_mean(self) -> np.ndarray:
        """Mean of ln Y, (star, output)."""
        return self._side_by_side([answer.log_mean for _, answer in self.parts])

    @property
    def log_sd(self) -> np.ndarray:
        """Standard deviation of ln Y, (star, output)."""
        return self._side_by_side([answer.log_sd for _, answer in self.parts])

    @property
    def numerical_error(self) -> np.ndarray:
        """Estimated error of the cumulative, (star, output)."""
        return self._side_by_side([answer.numerical_error for _, answer in self.parts])

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """ln Y at cumulative probabilities p (m,): (star, output, m)."""
        return self._side_by_side([answer.quantile(p) for _, answer in self.parts])

    def cumulative(self, log_value: np.ndarray) -> np.ndarray:
        """Cumulative probability at ln Y (star, output, m)."""
        return self._side_by_side([answer.cumulative(log_value[:, at]) for at, answer in self.parts])

    def density(self, log_value: np.ndarray) -> np.ndarray:
        """Density over ln Y at (star, output, m)."""
        return self._side_by_side([answer.density(log_value[:, at]) for at, answer in self.parts])

    def _side_by_side(self, values: list[np.ndarray]) -> np.ndarray:
        out = np.empty((len(self.problem), len(self.problem.outputs), *values[0].shape[2:]))
        for (at, _), some in zip(self.parts, values, strict=True):
            out[:, at] = some
        return out
