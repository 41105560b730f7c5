"""Figure of a learned structure prior: observed indices against replicated ones, and the densities (matplotlib)."""

from pathlib import Path

import matplotlib
import numpy as np
from matplotlib.figure import Figure
from scipy.special import ndtr

from stellerg.report.figures import ACCENT, INK, SHADES, STYLE, write
from stellerg.structure.learning import LearnedPrior
from stellerg.structure.relations import LARGEST_TABULATED_INDEX
from stellerg.wording import counted, label

__all__ = ["learned_figure", "predictive_figure"]

_FONT = 9.0
_BANDS = ((0.02275, 0.97725, "#d5e3ec", "95.45 % of replications"), (0.158655, 0.841345, "#a9c6d8", "68.27 %"))
_POINTS = 400
_MOST_DRAWS = 2000  # averaged over for the density of the population


def predictive_figure(learned: LearnedPrior, path: Path) -> None:
    """Write the figure of `learned_figure`; the ending of the name says which format.

    Raises
    ------
    InputError
        If the ending is not .png, .pdf or .svg, or the file cannot be written.
    """
    write(learned_figure(learned), Path(path))


def learned_figure(learned: LearnedPrior) -> Figure:
    """Draw how the observed indices compare with replicated ones, and what was learned.

    Left: share of stars below each index, observed and (bands) replicated under the posterior; the probabilities of the
    checks stand under it. Right: histogram of the observed indices, brought to the average ln M where there is a slope,
    with the learned density of n of a star. The two differ by the misfit, which moves all observed indices together,
    and by the errors, which widen them.

    Parameters
    ----------
    learned : LearnedPrior
    """
    with matplotlib.rc_context({**STYLE, "axes.titlesize": 10.0, "axes.labelsize": _FONT, "legend.fontsize": _FONT}):
        figure = Figure(figsize=(9.6, 4.0), layout="constrained")
        shares, densities = figure.subplots(1, 2)
        low, high = _limits(learned)
        _shares(shares, learned)
        _densities(densities, learned, np.linspace(low, high, _POINTS))
        for axis in (shares, densities):
            axis.set_xlim(low, high)
            axis.set_ylim(bottom=0.0)
            axis.set_xlabel("polytropic index n")
        named = ", ".join(label(name) for name in learned.observables)
        figure.suptitle(
            f"structure learned from {counted(learned.stars, 'star')} ({named})",
            x=0.01,
            ha="left",
            fontsize=10.0,
            color=INK,
        )
        judged = ", ".join(f"{check.name} {check.probability:.2g}" for check in learned.checks)
        text = f"two-sided predictive probability: {judged}"
        figure.supxlabel(text, x=0.01, ha="left", fontsize=_FONT, color=INK)
    return figure


def _limits(learned: LearnedPrior) -> tuple[float, float]:
    """The observed indices, and nearly all of the replicated ones and of the population."""
    mean, spread = learned.mean, learned.spread
    ends = [*np.quantile(learned.replicated, [0.002, 0.998]), learned.observed.min(), learned.observed.max()]
    ends += [np.quantile(mean - 2.5 * spread, 0.1), np.quantile(mean + 2.5 * spread, 0.9)]
    margin = 0.03 * (max(ends) - min(ends))
    return max(min(ends) - margin, 0.0), min(max(ends) + margin, LARGEST_TABULATED_INDEX)


def _shares(axis, learned: LearnedPrior) -> None:
    """Cumulative shares: a band between quantiles of the index of each rank."""
    ranks = np.arange(1, learned.stars + 1)
    share = np.repeat(np.concatenate([[0], ranks]) / learned.stars, 2)[1:-1]
    replicated = np.sort(learned.replicated, axis=1)
    for lower, upper, colour, text in _BANDS:
        left, right = np.quantile(replicated, [lower, upper], axis=0)
        axis.fill_betweenx(share, np.repeat(left, 2), np.repeat(right, 2), color=colour, lw=0.0, label=text)
    observed = np.repeat(np.sort(learned.observed), 2)
    axis.plot(observed, share, color=INK, lw=1.4, label="observed")
    axis.set_title("share of stars below n")
    axis.set_ylim(0.0, 1.0)
    axis.legend(frameon=False, loc="upper left")


def _densities(axis, learned: LearnedPrior, index: np.ndarray) -> None:
    """Histogram of the observed indices; density of n of a star, and of a star if the mean were known."""
    counts = min(max(round(1.5 * learned.stars**0.5), 6), 40)
    observed = learned.observed
    if learned.log_mass is not None:
        observed = observed - learned.slope.mean() * (learned.log_mass - learned.average_log_mass)
    axis.hist(observed, bins=counts, density=True, color="#d9d5cd", label="observed, misfit taken as 0")
    ticks = axis.get_xaxis_transform()
    axis.plot(observed, np.full(learned.stars, 0.012), "|", transform=ticks, color=INK, ms=7.0, mew=0.8)
    some = np.linspace(0, len(learned.draws) - 1, min(_MOST_DRAWS, len(learned.draws))).astype(int)
    learnt = _population(learned.mean[some], learned.spread[some], index).mean(axis=0)
    axis.plot(index, learnt, color=ACCENT, lw=1.6, label="learned: n of a star")
    within = _population(np.median(learned.mean)[None], np.median(learned.spread)[None], index)[0]
    axis.plot(index, within, color=SHADES[0], lw=1.2, ls="--", label="the same, were the mean known")
    axis.set_title("density of n" + ("" if learned.log_mass is None else " at the average ln M"))
    axis.set_yticks([])
    axis.margins(y=0.35)  # room for the legend
    axis.legend(frameon=False, loc="upper left")


def _population(mean: np.ndarray, spread: np.ndarray, index: np.ndarray) -> np.ndarray:
    """Density of n, (draw, point)."""
    score = (index - mean[:, None]) / spread[:, None]
    kept = ndtr((LARGEST_TABULATED_INDEX - mean) / spread) - ndtr(-mean / spread)
    return np.exp(-0.5 * score**2) / (np.sqrt(2.0 * np.pi) * (spread * kept)[:, None])
