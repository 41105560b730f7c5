"""Posterior: the answers of all engines, scattered back to the rows of the input."""

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace

import numpy as np

from stellerg.errors import InputError
from stellerg.posterior.piece import Piece, StarDraws
from stellerg.status import STATUS_TEXT, VALUE, Status, carries_results
from stellerg.wording import counted

__all__ = ["INTERVAL68", "INTERVAL95", "STANDARD_PROBABILITIES", "Piece", "Posterior", "StarDraws"]

# Central intervals of 68.27 % and 95.45 %: the probabilities within one and two standard deviations.
INTERVAL68 = (0.15865525393145707, 0.8413447460685429)
INTERVAL95 = (0.02275013194817921, 0.9772498680518208)
STANDARD_PROBABILITIES = (0.5, *INTERVAL68, *INTERVAL95)
COEFFICIENT = "structure_coefficient"
EFFECTIVE_INDEX = "n_effective"
LN10 = float(np.log(10.0))


@dataclass(frozen=True)
class Posterior:
    """Posterior distributions of the outputs of many stars; the row order is that of the input.

    Attributes
    ----------
    star : ndarray of str, (star,)
    outputs : tuple of str
    units, descriptions : dict of str to str
        By output.
    status : ndarray of uint8, (star,)
    flags : ndarray of int64, (star,)
    engine : ndarray of int8, (star,)
        Index into `engines`; -1 where no engine ran.
    engines : tuple of str
    use : tuple of str
        Measurements named as independent; empty where none were named.
    prior, prior_summary, energy_convention, time_convention : str
    chi2, probability : ndarray, (star,)
        Of over-determined stars; NaN elsewhere.
    degrees_of_freedom : ndarray of int, (star,)
    pieces : tuple of Piece
    radiation_counted, ionisation_counted : bool
        Whether they enter the binding energy.
    calibrated_medians : dict of str to ndarray, (star,)
        By output: see `calibrated`.
    """

    star: np.ndarray
    outputs: tuple[str, ...]
    units: Mapping[str, str]
    descriptions: Mapping[str, str]
    status: np.ndarray
    reason: np.ndarray
    sentences: tuple[str, ...]
    quoted: Mapping[int, str]
    flags: np.ndarray
    aside: np.ndarray
    aside_sets: tuple[tuple[str, ...], ...]
    engine: np.ndarray
    engine_reason: np.ndarray
    engines: tuple[str, ...]
    engine_reasons: tuple[str, ...]
    use: tuple[str, ...]
    prior: str
    prior_summary: str
    energy_convention: str
    time_convention: str
    chi2: np.ndarray
    degrees_of_freedom: np.ndarray
    probability: np.ndarray
    pieces: tuple[Piece, ...]
    sampler: Callable = field(repr=False)
    radiation_counted: bool = False
    ionisation_counted: bool = False
    calibrated_medians: Mapping[str, np.ndarray] = field(default_factory=dict, repr=False)
    _cache: dict = field(default_factory=dict, repr=False, compare=False)

    def __len__(self) -> int:
        return len(self.star)

    def __repr__(self) -> str:
        return f"<Posterior of {counted(len(self), 'star')}: {', '.join(self.outputs)}>"

    @property
    def has_results(self) -> np.ndarray:
        """Whether a row carries results, (star,)."""
        return carries_results(self.status)

    def take(self, rows) -> "Posterior":
        """Return some of the stars, in the order asked for.

        Parameters
        ----------
        rows : array_like of int, (m,)

        Raises
        ------
        InputError
            If a row does not exist.
        """
        rows = np.atleast_1d(np.asarray(rows, int))
        if rows.size and not (rows.min() >= 0 and rows.max() < len(self)):
            raise InputError(f"rows: {rows.tolist()[:5]} are not all among the {len(self)} rows")
        per_star = ("star", "status", "reason", "flags", "aside", "engine", "engine_reason")
        per_star += ("chi2", "degrees_of_freedom", "probability")
        pieces = []
        for piece in self.pieces:
            moved = np.flatnonzero(np.isin(rows, piece.rows))
            if moved.size:
                order = np.argsort(piece.rows)
                chosen = order[np.searchsorted(piece.rows, rows[moved], sorter=order)]
                taken = (piece.answer.take(chosen), piece.linear.take(chosen))
                judged = piece.inside.take(chosen)
                pieces.append(Piece(moved, *taken, piece.budget_names, piece.budget[chosen], judged))
        return replace(
            self,
            **{name: getattr(self, name)[rows] for name in per_star},
            quoted={k: self.quoted[row] for k, row in enumerate(rows.tolist()) if row in self.quoted},
            pieces=tuple(pieces),
            calibrated_medians={name: values[rows] for name, values in self.calibrated_medians.items()},
            _cache={},
        )

    def status_text(self) -> list[str]:
        """A sentence for each row: what is wrong, the value got, the way out; empty for `ok`."""
        texts = np.array([sentence.replace(VALUE, "") for sentence in self.sentences], dtype=object)[self.reason]
        for row, cell in self.quoted.items():
            texts[row] = self.sentences[self.reason[row]].replace(VALUE, f" = {cell}")
        return texts.tolist()

    def quantile(self, p, output: str) -> np.ndarray:
        """Quantiles of an output.

        Parameters
        ----------
        p : float or array_like, (m,)
            Cumulative probabilities in (0, 1).
        output : str
            An output, ``structure_coefficient`` or ``n_effective``.

        Returns
        -------
        ndarray, (star,) or (star, m)
            In `units[output]`; NaN where a star has no result.

        Raises
        ------
        InputError
            If the output was not asked for, or p does not lie in (0, 1).
        """
        scalar = np.ndim(p) == 0
        probabilities = np.atleast_1d(np.asarray(p, float))
        if not ((probabilities > 0.0) & (probabilities < 1.0)).all():
            raise InputError(f"p: probabilities must lie between 0 and 1, got {p}")
        name = COEFFICIENT if output == EFFECTIVE_INDEX else output
        values = np.exp(self._scatter(name, lambda a, o: self._quantiles(a, probabilities)[:, o], len(probabilities)))
        if output == EFFECTIVE_INDEX:
            values = 5.0 - 3.0 / values
        return values[:, 0] if scalar else values

    def median(self, output: str) -> np.ndarray:
        """Median of an output, (star,)."""
        return self.quantile(STANDARD_PROBABILITIES, output)[:, 0]

    def calibrated(self, output: str) -> np.ndarray:
        """Median under the calibrated coefficient where the prior excludes its value, (star,); NaN elsewhere."""
        self._check(output)
        return self.calibrated_medians.get(output, np.full(len(self), np.nan)).copy()

    def interval(self, output: str, probability: float = INTERVAL68[1] - INTERVAL68[0]) -> np.ndarray:
        """Central interval of an output, (star, 2)."""
        if not 0.0 < probability < 1.0:
            raise InputError(f"probability: must lie between 0 and 1, got {probability}")
        tail = 0.5 * (1.0 - probability)
        return self.quantile((tail, 1.0 - tail), output)

    def cumulative(self, values, output: str) -> np.ndarray:
        """Cumulative probability at values (m,) or (star, m) of an output, (star, m)."""
        return self._evaluate("cumulative", values, output)

    def density(self, values, output: str) -> np.ndarray:
        """Density of the output (per its unit) at values (m,) or (star, m), (star, m)."""
        at = np.atleast_1d(np.asarray(values, float))
        return self._evaluate("density", at, output) / np.where(at == 0.0, 1.0, at)

    def log10_mean(self, output: str) -> np.ndarray:
        """Mean of log10 of an output, (star,). The mean of the output itself need not exist."""
        return self._scatter(output, lambda a, o: a.log_mean[:, o, None], 1)[:, 0] / LN10

    def log10_sd(self, output: str) -> np.ndarray:
        """Standard deviation of log10 of an output, (star,)."""
        return self._scatter(output, lambda a, o: a.log_sd[:, o, None], 1)[:, 0] / LN10

    def numerical_error(self, output: str) -> np.ndarray:
        """Estimated error of the cumulative at a reported quantile, (star,)."""
        return self._scatter(output, lambda a, o: a.numerical_error[:, o, None], 1)[:, 0]

    def radiation_share(self) -> np.ndarray:
        """Share of radiation in the pressure, weighted by pressure, at the medians, (star,); NaN if mass is unknown."""
        return self._judged(lambda inside: inside.radiation)

    def ionisation_share(self) -> np.ndarray:
        """Energy of ionisation over the binding energy without it, at the medians, (star,)."""
        return self._judged(lambda inside: inside.ionisation)

    def convective_share(self) -> np.ndarray:
        """Weight of a fully convective interior where the calibrated structure is a mixture of two, (star,)."""
        return self._judged(lambda inside: inside.convective)

    def branches(self) -> np.ndarray:
        """Median structure coefficient of the fully convective interior and of the other of such stars, (star, 2)."""
        out = np.full((len(self), 2), np.nan)
        for piece in self.pieces:
            out[piece.rows] = piece.inside.branches
        return out

    def predictive_probabilities(self) -> dict[str, np.ndarray]:
        """Two-sided predictive probability of each structure observable, (star,) each; NaN where there is none."""
        names = dict.fromkeys(name for piece in self.pieces for name in piece.inside.predictive)
        nothing = np.nan
        return {name: self._judged(lambda inside, n=name: inside.predictive.get(n, nothing)) for name in names}

    def _judged(self, read: Callable) -> np.ndarray:
        out = np.full(len(self), np.nan)
        for piece in self.pieces:
            out[piece.rows] = read(piece.inside)
        return out

    def linear_value(self, output: str) -> np.ndarray:
        """First-order value, (star,); NaN where it does not exist."""
        return self._scatter(output, lambda p, o: p.linear.value[:, o, None], 1, whole=True)[:, 0]

    def linear_uncertainty(self, output: str) -> np.ndarray:
        """First-order standard uncertainty, (star,); NaN where it does not exist."""
        return self._scatter(output, lambda p, o: p.linear.standard_uncertainty[:, o, None], 1, whole=True)[:, 0]

    def linear(self, row: int = 0) -> dict:
        """Variables of the `uncertainties` package for one star: inputs and outputs, correlated.

        Raises
        ------
        InputError
            If there is no such row, or the star has no result.
        """
        if not 0 <= row < len(self):
            raise InputError(f"row: {row} is not one of the {len(self)} rows (0 to {len(self) - 1})")
        for piece in self.pieces:
            position = np.flatnonzero(piece.rows == row)
            if position.size:
                return piece.linear.variables(int(position[0]))
        raise InputError(f"row {row} has no result: {STATUS_TEXT[Status(self.status[row])].word}")

    def budget_names(self) -> tuple[str, ...]:
        """Every quantity that stands in the budget of some star, in the order of first appearance."""
        names = dict.fromkeys(name for piece in self.pieces for name in piece.budget_names)
        tail = [name for name in ("correlations", "mass_and_structure", "structure") if name in names]
        return (*(name for name in names if name not in tail), *tail)

    def budget(self, output: str) -> dict[str, np.ndarray]:
        """Share of the variance of ln(output) by quantity, (star,) each; NaN where a star has no such quantity."""
        shares = {name: np.full(len(self), np.nan) for name in self.budget_names()}
        for piece in self.pieces:
            position = piece.position(output)
            if position is not None:
                for k, name in enumerate(piece.budget_names):
                    shares[name][piece.rows] = piece.budget[:, position, k]
        return shares

    def draws(self, count: int = 1024, seed: int = 0) -> StarDraws:
        """Draws of every star, keyed by its identifier; u is stored with them.

        Parameters
        ----------
        count : int
            A power of two.
        seed : int

        Raises
        ------
        InputError
            If two stars have the same identifier: their draws would be the same.
        """
        self._check_draws(count)
        shape = (len(self), count)
        outputs = {name: np.full(shape, np.nan) for name in (*self.outputs, COEFFICIENT)}
        latents: dict[str, np.ndarray] = {}
        u, weight, reference = (np.full(shape, np.nan) for _ in range(3))
        for piece in self.pieces:
            drawn = self.sampler(piece.answer.problem, count, seed)
            u[piece.rows] = drawn.u
            whole = drawn.whole_log_weight
            weight[piece.rows] = 0.0 if whole is None else whole
            reference[piece.rows] = drawn.log_reference_density()
            for k, name in enumerate(piece.answer.problem.latents):
                latents.setdefault(name, np.full(shape, np.nan))[piece.rows] = np.exp(drawn.log_latents[:, k])
            for k, name in enumerate(piece.answer.problem.outputs):
                outputs[name][piece.rows] = np.exp(drawn.log_outputs[:, k])
        return StarDraws(u, latents, outputs, weight, reference)

    def to_arviz(self, count: int = 1024, seed: int = 0):
        """Return draws or chains as an xarray DataTree, which arviz summarises and plots.

        Parameters
        ----------
        count : int
            Draws of each star from engines that keep no chains; a power of two.
        seed : int

        Raises
        ------
        InputError
            If no star has a result, or as `draws`.
        """
        from stellerg.posterior.datatree import to_datatree

        if not self.pieces:
            raise InputError("to_arviz: no star has a result")
        self._check_draws(count)
        return to_datatree(self, count, seed)

    def diagnostics(self, row: int = 0) -> dict[str, float]:
        """Numbers that judge the engine's work on one star: empty for quadrature."""
        for piece in self.pieces:
            position = np.flatnonzero(piece.rows == row)
            if position.size:
                return {name: float(v[position[0]]) for name, v in piece.answer.diagnostics.items()}
        return {}

    def table(self):
        """Return a table of the summary (astropy QTable with units and descriptions)."""
        from stellerg.posterior.table import to_table

        return to_table(self)

    def _repr_html_(self) -> str:
        """What a notebook shows."""
        from stellerg.posterior.html import posterior_html

        return posterior_html(self)

    def _check_draws(self, count: int) -> None:
        if count < 1 or count & (count - 1):
            raise InputError(f"count: {count} must be a power of two (512, 1024, 2048, ...)")
        names, repeats = np.unique(self.star, return_counts=True)
        if (repeats > 1).any():
            raise InputError(
                f"star: {names[repeats > 1][0]!r} names {repeats.max()} stars; draws are keyed by the identifier, "
                "give each star its own"
            )

    def _quantiles(self, answer, probabilities: np.ndarray) -> np.ndarray:
        key = (id(answer), tuple(probabilities))
        if key not in self._cache:
            self._cache[key] = answer.quantile(probabilities)
        return self._cache[key]

    def _evaluate(self, what: str, values, output: str) -> np.ndarray:
        at = np.atleast_1d(np.asarray(values, float))
        at = np.broadcast_to(at, (len(self), at.shape[-1]))
        positive = at > 0.0
        logs = np.log(np.where(positive, at, 1.0))
        out = np.full(at.shape, np.nan)
        self._check(output)
        for piece in self.pieces:
            position = piece.position(output)
            if position is not None:
                outputs = piece.answer.problem.outputs
                cube = np.repeat(logs[piece.rows][:, None, :], len(outputs), axis=1)
                found = getattr(piece.answer, what)(cube)[:, position]
                # nothing lies at or below zero; what is no number stays none
                found = np.where(positive[piece.rows], found, np.where(np.isnan(at[piece.rows]), np.nan, 0.0))
                out[piece.rows] = found
        return out

    def _scatter(self, output: str, read: Callable, width: int, whole: bool = False) -> np.ndarray:
        """Fill (star, width) from what `read(answer, position)` gives for each piece."""
        self._check(output)
        out = np.full((len(self), width), np.nan)
        for piece in self.pieces:
            position = piece.position(output)
            if position is not None:
                out[piece.rows] = read(piece if whole else piece.answer, position)
        return out

    def _check(self, output: str) -> None:
        if output not in (*self.outputs, COEFFICIENT):
            raise InputError(
                f"output: {output!r} was not asked for; here are {', '.join(self.outputs)} and {COEFFICIENT}"
            )
