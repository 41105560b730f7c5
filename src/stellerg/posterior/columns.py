"""The columns of a summary: names, units, descriptions and values, for every table that is written."""

from dataclasses import dataclass

import numpy as np

from stellerg.posterior.result import STANDARD_PROBABILITIES, Posterior
from stellerg.status import STATUS_TEXT, Status, flag_words

__all__ = ["Column", "conventions", "joined", "summary_columns"]

_ENDS = ("", "_lower68", "_upper68", "_lower95", "_upper95")
_MEANING = (
    "median",
    "lower end of 68.27 %",
    "upper end of 68.27 %",
    "lower end of 95.45 %",
    "upper end of 95.45 %",
)


@dataclass(frozen=True)
class Column:
    """A column; NaN in numbers stands for "no value"."""

    name: str
    values: np.ndarray
    unit: str
    description: str


def _words(codes: np.ndarray, word) -> np.ndarray:
    """Words of small integers: one look-up for each different code."""
    different, which = np.unique(codes, return_inverse=True)
    return np.array([word(int(code)) for code in different], dtype=object)[which.ravel()]


def summary_columns(
    posterior: Posterior, budget_names: tuple[str, ...] | None = None, structure_names: tuple[str, ...] | None = None
) -> list[Column]:
    """Columns of the summary, one row per star in the order of the input.

    Parameters
    ----------
    posterior : Posterior
    budget_names : tuple of str, optional
        Quantities that have a budget column; default: those that some star has. Parts of one catalogue
        share one list.
    structure_names : tuple of str, optional
        Structure observables that have a column of predictive probability; default: those that some star has.
    """
    nothing = np.full(len(posterior), np.nan)
    engines = (*posterior.engines, "")
    columns = [
        Column("star", posterior.star.astype(object), "", "identifier"),
        Column(
            "status",
            _words(posterior.status, lambda c: STATUS_TEXT[Status(c)].word),
            "",
            "what became of the row",
        ),
        Column("status_text", np.array(posterior.status_text(), dtype=object), "", "why, and the way out"),
        Column(
            "flags",
            _words(posterior.flags, lambda c: " ".join(flag_words(c))),
            "",
            "what to know of the result",
        ),
        Column("engine", _words(posterior.engine, lambda c: engines[c]), "", "method that gave the result"),
    ]
    for output in posterior.outputs:
        unit, meaning = posterior.units[output], posterior.descriptions[output]
        values = posterior.quantile(STANDARD_PROBABILITIES, output)
        for k, (end, which) in enumerate(zip(_ENDS, _MEANING, strict=True)):
            columns.append(Column(output + end, values[:, k], unit, f"{meaning}: {which}"))
        if output in posterior.calibrated_medians:
            text = f"{meaning}: median under the calibrated coefficient, where the prior excludes it"
            columns.append(Column(f"{output}_calibrated", posterior.calibrated(output), unit, text))
        logarithm = f"log10 of the {meaning}" + (f" in {unit}" if unit else "")
        columns.append(Column(f"{output}_log10_mean", posterior.log10_mean(output), "", f"mean of {logarithm}"))
        columns.append(
            Column(f"{output}_log10_sd", posterior.log10_sd(output), "", f"standard deviation of {logarithm}")
        )
        value, uncertainty = posterior.linear_value(output), posterior.linear_uncertainty(output)
        columns.append(Column(f"{output}_linear", value, unit, f"{meaning}: first-order value"))
        columns.append(Column(f"{output}_linear_u", uncertainty, unit, f"{meaning}: first-order standard uncertainty"))
        shares = posterior.budget(output)
        for name in shares if budget_names is None else budget_names:
            share = shares.get(name, nothing)
            columns.append(
                Column(f"{output}_budget_{name}", share, "", f"share of {name} in the variance of ln {output}")
            )
    columns += _inside(posterior, structure_names)
    if posterior.use:  # measurements named as independent may be redundant, and then say whether they agree
        freedom = np.where(np.isnan(posterior.probability), np.nan, posterior.degrees_of_freedom)
        columns += [
            Column("chi2", posterior.chi2, "", "chi-squared of the redundant measurements"),
            Column("degrees_of_freedom", freedom, "", "of chi2"),
            Column("chi2_probability", posterior.probability, "", "probability of a larger chi2"),
        ]
    return columns


def _inside(posterior: Posterior, names: tuple[str, ...] | None) -> list[Column]:
    """What a result leaves out or contradicts of the inside of stars."""
    text = "energy of ionisation over the binding energy, at medians"
    columns = [
        Column("radiation_share", posterior.radiation_share(), "", "share of radiation in the pressure, at medians"),
        Column("ionisation_share", posterior.ionisation_share(), "", text),
    ]
    probabilities = posterior.predictive_probabilities()
    nothing = np.full(len(posterior), np.nan)
    for name in probabilities if names is None else names:
        values = probabilities.get(name, nothing)
        text = f"two-sided predictive probability of {name} under the prior"
        columns.append(Column(f"{name}_predictive_probability", values, "", text))
    return columns


def joined(parts: list[list[Column]]) -> list[Column]:
    """Join the columns of parts of one table, in order."""
    if len(parts) == 1:
        return parts[0]
    return [
        Column(same[0].name, np.concatenate([c.values for c in same]), same[0].unit, same[0].description)
        for same in zip(*parts, strict=True)
    ]


def conventions(posterior: Posterior) -> dict[str, str]:
    """What a reader of the numbers must know."""
    return {
        "prior": posterior.prior,
        "energy_convention": posterior.energy_convention,
        "time_convention": posterior.time_convention,
    }
