"""First-order propagation (JCGM 101:2008, 5.7; the law of propagation of uncertainty), in Y and in ln Y.

Each input enters by the expectation and standard deviation of its assigned density (clause 6), structure by
those of the variable on which its density is stated; the model is linearised at these expectations. The
result is Y with a standard uncertainty; `scale` says whether a normal is put on Y or on ln Y.

When it is wrong: wide structure priors and large errors. With ``mass = 1.0 ± 0.3`` the linear value of |E|
lacks the term (u/M)^2 = 9 %; under `wide-index` the 95 % interval in Y reaches below any polytrope's energy.
Structure that is a mixture, or changes within the range of the mass, has no derivative: refused.
"""

from dataclasses import dataclass, field, replace
from functools import cached_property
from typing import ClassVar

import numpy as np
from scipy.special import ndtr, ndtri

from stellerg.engines.first_order import StructureTerm, has_derivative, structure_expectation, structure_term
from stellerg.engines.intervals import mass_score
from stellerg.errors import EngineError
from stellerg.problem import Problem
from stellerg.status import Status

__all__ = ["Linear", "LinearAnswer"]


@dataclass(frozen=True)
class Linear:
    """The engine.

    Attributes
    ----------
    scale : str
        ``log`` (quantiles of a log-normal Y) or ``linear`` (of a normal Y, cut at zero).
    """

    scale: str = "log"
    name: ClassVar[str] = "linear"
    reasons: ClassVar[tuple[str, ...]] = (
        "",
        "the structure model is a mixture, or changes within the range of the mass: there is no derivative; "
        "use quadrature or montecarlo",
    )

    def __post_init__(self):
        if self.scale not in ("log", "linear"):
            raise EngineError(f"scale of the linear engine: {self.scale!r} is unknown; choose log or linear")

    def accepts(self, problem: Problem) -> np.ndarray:
        """Index into `reasons`, (star,)."""
        return (~has_derivative(problem) & problem.structured.any()).astype(int)

    def solve(self, problem: Problem) -> "LinearAnswer":
        """Answer a problem."""
        return LinearAnswer(problem, self.scale)


@dataclass(frozen=True)
class LinearAnswer:
    """First-order result. See `stellerg.engines.answer.Answer`; rows that `accepts` refuses are NaN."""

    problem: Problem
    scale: str = "log"
    diagnostics: dict = field(default_factory=dict)

    def take(self, which: np.ndarray) -> "LinearAnswer":
        """Return some of the stars."""
        return LinearAnswer(self.problem.take(which), self.scale)

    def failure(self, star: int) -> str:
        """Nothing fails."""
        return ""

    @property
    def status(self) -> np.ndarray:
        """Always OK, (star,)."""
        return np.full(len(self.problem), Status.OK, np.uint8)

    @cached_property
    def relative_gradient(self) -> np.ndarray:
        """Relative change of Y for one standard deviation of each input, structure included, (star, output, input)."""
        problem = self.problem
        steps = [_log_step(m) for m in problem.measured]
        relative = np.stack(steps, axis=1) if steps else np.zeros((len(problem), 0))
        return (problem.input_weights + self.term.weights) * relative[:, None, :]

    @cached_property
    def _log_inputs(self) -> np.ndarray:
        """ln obs at the expectations, (star, input)."""
        log_inputs = [_log_of_expectation(m) for m in self.problem.measured]
        return np.stack(log_inputs, axis=1) if log_inputs else np.zeros((len(self.problem), 0))

    @cached_property
    def _result(self) -> tuple[np.ndarray, np.ndarray]:
        """ln of the linear value, and its relative standard uncertainty, (star, output)."""
        problem = self.problem
        value = problem.log_outputs(self._log_inputs) + self.term.value
        gradient = self.relative_gradient
        correlation = np.eye(len(problem.inputs))[None] if problem.correlation is None else problem.correlation
        correlation = np.broadcast_to(correlation, (len(problem), *correlation.shape[1:]))
        variance = np.einsum("soj,sjk,sok->so", gradient, correlation, gradient)
        return value, np.sqrt(np.maximum(variance + self.term.spread**2, 0.0))

    @cached_property
    def term(self) -> StructureTerm:
        """Structure at the expectations of the inputs; NaN where it is refused."""
        term = structure_term(self.problem, self._log_inputs)
        refused = (Linear().accepts(self.problem) != 0)[:, None] & self.problem.structured
        return replace(term, value=np.where(refused, np.nan, term.value), spread=np.where(refused, np.nan, term.spread))

    @property
    def value(self) -> np.ndarray:
        """Linear value of Y, (star, output)."""
        return np.exp(self._result[0])

    @property
    def standard_uncertainty(self) -> np.ndarray:
        """Standard uncertainty of Y, (star, output)."""
        return self.value * self._result[1]

    @property
    def log_mean(self) -> np.ndarray:
        """ln of the linear value, (star, output)."""
        return self._result[0]

    @property
    def log_sd(self) -> np.ndarray:
        """Relative standard uncertainty, (star, output)."""
        return self._result[1]

    @property
    def numerical_error(self) -> np.ndarray:
        """Not estimated: the error of first order is no numerical one, (star, output) of NaN."""
        return np.full(self._result[0].shape, np.nan)

    def quantile(self, p: np.ndarray) -> np.ndarray:
        """ln Y at cumulative probabilities p (m,): (star, output, m); -inf where a normal Y is not positive."""
        value, relative = (x[:, :, None] for x in self._result)
        score = ndtri(np.atleast_1d(np.asarray(p, float)))
        if self.scale == "log":
            return value + relative * score
        with np.errstate(divide="ignore"):
            return value + np.log(np.maximum(1.0 + relative * score, 0.0))

    def cumulative(self, log_value: np.ndarray) -> np.ndarray:
        """Cumulative probability at ln Y (star, output, m)."""
        return ndtr(self._score(log_value))

    def density(self, log_value: np.ndarray) -> np.ndarray:
        """Density over ln Y at (star, output, m)."""
        value, relative = (x[:, :, None] for x in self._result)
        with np.errstate(divide="ignore", invalid="ignore"):
            density = np.exp(-0.5 * self._score(log_value) ** 2) / (np.sqrt(2.0 * np.pi) * relative)
        return density if self.scale == "log" else density * np.exp(log_value - value)

    def variables(self, star: int) -> dict:
        """Variables of the `uncertainties` package for one star, to calculate on with.

        Parameters
        ----------
        star : int
            Position in the problem.

        Returns
        -------
        dict of str to uncertainties.UFloat
            Inputs in their quoted scale, ``structure`` (in the variable its density is stated on; a normal score
            under a calibration or with structure observables) where it is not exact, and every output in its unit; the
            outputs are correlated with the inputs.
        """
        import uncertainties
        from uncertainties import umath

        problem = self.problem
        pairs = [(float(m.expectation[star]), float(m.standard_deviation[star])) for m in problem.measured]
        if problem.correlation is None:
            values = [uncertainties.ufloat(*pair, tag=name) for name, pair in zip(problem.inputs, pairs, strict=True)]
        else:
            values = uncertainties.correlated_values_norm(pairs, problem.correlation[star])
        found = dict(zip(problem.inputs, values, strict=True))
        logs = [m.to_log_of_variable(v, umath.log) for m, v in zip(problem.measured, values, strict=True)]
        structure = self._variable(star, found) if problem.structured.any() else {}
        weights = np.broadcast_to(problem.input_weights, (len(problem), *problem.input_weights.shape[1:]))[star]
        at = self._log_inputs[star]
        for o, name in enumerate(problem.outputs):
            log_value = problem.constant[star, o] + structure.get(o, 0.0)
            for j, log_input in enumerate(logs):
                log_value = log_value + weights[o, j] * (log_input - problem.base[star, j])
                log_value = log_value + self.term.weights[star, o, j] * (log_input - at[j])
            found[name] = umath.exp(log_value)
        return found

    def _variable(self, star: int, found: dict) -> dict:
        """What structure adds to ln Y of each output that carries it; its variable is entered in `found`."""
        import uncertainties

        problem, term = self.problem, self.term
        carrying = np.flatnonzero(problem.structured)
        if not np.isfinite(term.value[star, carrying]).all():
            raise EngineError(f"linear: {Linear.reasons[1]}")
        spread = term.spread[star]
        if not spread[carrying].any():
            return {int(o): float(term.value[star, o]) for o in carrying}
        mean, sd = 0.0, 1.0
        if problem.interior.relation is None and not problem.interior.cells:
            number = int(mass_score(problem).interval[star])
            mean, sd, _ = structure_expectation(problem.interior.model.intervals[number].mixture.components[0])
        found["structure"] = uncertainties.ufloat(mean, sd, tag="structure")
        score = (found["structure"] - mean) / sd
        return {int(o): float(term.value[star, o]) + float(spread[o]) * score for o in carrying}

    def _score(self, log_value):
        value, relative = (x[:, :, None] for x in self._result)
        distance = log_value - value if self.scale == "log" else np.expm1(log_value - value)
        with np.errstate(divide="ignore", invalid="ignore"):
            score = distance / relative
        return np.where(distance == 0.0, 0.0, score)


def _log_of_expectation(measured):
    """ln of the quantity at the expectation in its quoted scale, (star,)."""
    return measured.to_log(measured.expectation)


def _log_step(measured):
    """Change of ln(quantity), signed, for one standard deviation in the quoted scale, at the expectation."""
    return measured.log_derivative(measured.expectation) * measured.standard_deviation
