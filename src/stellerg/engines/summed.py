"""Deterministic answers made of sums: what is common to the kernels of a calibration and the cells of a density."""

from collections.abc import Iterator
from dataclasses import dataclass, field
from functools import cached_property
from typing import Protocol

import numpy as np

from stellerg.engines.answer import REPORTED
from stellerg.engines.inversion import Evaluated
from stellerg.problem import Problem
from stellerg.status import Status

__all__ = ["Sum", "SummedAnswer", "Sums"]


class Sum(Evaluated, Protocol):
    """The distribution of one output of some stars."""

    @property
    def moments(self) -> tuple[np.ndarray, np.ndarray]:
        """Mean and standard deviation, (star,) each."""
        ...

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """Values at cumulative probabilities p (m,): (star, m)."""
        ...

    def left_out(self, t: np.ndarray) -> np.ndarray:
        """What the next order of the expansions would add to the cumulative at t, (star, m)."""
        ...


class Sums(Protocol):
    """A way to sum."""

    def parts(self, problem: Problem, *, coarser: bool = False) -> Iterator[tuple[np.ndarray, int, Sum]]:
        """Yield (rows, output, Sum); `coarser`: with half as many terms."""
        ...

    def other_error(self, problem: Problem) -> np.ndarray:
        """Error of the cumulative beside those of the number of terms and of the expansions, (star, output)."""
        ...

    def error_of(self, difference: np.ndarray) -> np.ndarray:
        """Error of the cumulative, from its difference with half as many terms."""
        ...


@dataclass(frozen=True)
class SummedAnswer:
    """Distributions evaluated when asked for. See `stellerg.engines.answer.Answer`."""

    problem: Problem
    sums: Sums
    diagnostics: dict = field(default_factory=dict)

    def take(self, which: np.ndarray) -> "SummedAnswer":
        """Return some of the stars."""
        return SummedAnswer(self.problem.take(which), self.sums)

    def failure(self, star: int) -> str:
        """Nothing fails."""
        return ""

    @property
    def status(self) -> np.ndarray:
        """Always OK, (star,)."""
        return np.full(len(self.problem), Status.OK, np.uint8)

    @property
    def log_mean(self) -> np.ndarray:
        """Mean of ln Y, (star, output)."""
        return self._moments[0]

    @property
    def log_sd(self) -> np.ndarray:
        """Standard deviation of ln Y, (star, output)."""
        return self._moments[1]

    @cached_property
    def _moments(self) -> np.ndarray:
        out = np.empty((2, *self._shape))
        for rows, output, part in self.sums.parts(self.problem):
            out[0, rows, output], out[1, rows, output] = part.moments
        return out

    @property
    def _shape(self) -> tuple[int, int]:
        return len(self.problem), len(self.problem.outputs)

    @cached_property
    def numerical_error(self) -> np.ndarray:
        """Estimated error of the cumulative, (star, output): against half as many terms, and of the expansions."""
        p, quantiles = np.array(REPORTED), self.quantile(np.array(REPORTED))
        error = self.sums.other_error(self.problem)
        for rows, output, part in self.sums.parts(self.problem):
            error[rows, output] += np.abs(part.left_out(quantiles[rows, output])).max(axis=1)
        for rows, output, part in self.sums.parts(self.problem, coarser=True):
            below, _ = part.evaluate(quantiles[rows, output])
            error[rows, output] += self.sums.error_of(np.abs(below - p).max(axis=1))
        return error

    def first_left_out(self) -> np.ndarray:
        """Largest of the first terms the expansions leave out, at the reported quantiles of all outputs, (star,)."""
        p, found = np.array(REPORTED), np.zeros(len(self.problem))
        for rows, _, part in self.sums.parts(self.problem):
            found[rows] = np.maximum(found[rows], np.abs(part.left_out(part.quantile(p))).max(axis=1))
        return found

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """ln Y at cumulative probabilities p (m,): (star, output, m)."""
        p = np.atleast_1d(np.asarray(p, float))
        out = np.empty((*self._shape, len(p)))
        for rows, output, part in self.sums.parts(self.problem):
            out[rows, output] = part.quantile(p)
        return out

    def cumulative(self, log_value: np.ndarray) -> np.ndarray:
        """Cumulative probability at ln Y (star, output, m)."""
        return self._evaluate(log_value, 0)

    def density(self, log_value: np.ndarray) -> np.ndarray:
        """Density over ln Y at (star, output, m)."""
        return self._evaluate(log_value, 1)

    def _evaluate(self, log_value, which):
        out = np.empty(log_value.shape)
        for rows, output, part in self.sums.parts(self.problem):
            out[rows, output] = part.evaluate(log_value[rows, output])[which]
        return out
