"""Figure of one star's answers under every prior that applies (matplotlib)."""

import textwrap

import matplotlib
import numpy as np
from matplotlib.figure import Figure
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from stellerg.errors import InputError
from stellerg.report.comparison import Comparison, PriorAnswer
from stellerg.report.figures import ACCENT, INK, STYLE
from stellerg.wording import label

__all__ = ["comparison_figure"]

_FONT = 9.0
_PANEL, _NAMES, _ROW, _FRAME = 3.1, 1.9, 0.44, 0.75  # inches: a panel's width, names, a row's height, title and axis
_TITLE = 0.24  # inches: from the top to the legend
_MOST_ACROSS = 3
# (95.45 %, 68.27 %): they differ in lightness, so that they are told apart without colours too
_COLOURS = {"in use": ("#efc9bd", ACCENT), "other": ("#c9dbe6", "#5f8fab"), "limit": ("#dcdcdc", "#8a8a8a")}
_FAINT = "#6b6b6b"
_BAR, _GAP, _HEIGHT = 0.2, 0.7, 0.6  # in rows: thickness of a bar, space before the limits, height of a density
_POINTS = 300
_TAIL = 0.002  # probability left out at each end of a density
_LOGARITHMIC = 30.0  # ratio of the ends above which an axis is logarithmic (judgement)


def comparison_figure(comparison: Comparison) -> Figure:
    """Draw, in a panel for each output, a bar for each prior: median, 68.27 % and 95.45 % interval, and the density.

    The order of priors is the same in every panel. Densities are drawn each to its own height. A dotted line marks the
    median under the prior in use; priors without a result are named at the foot.

    Parameters
    ----------
    comparison : Comparison
        Of a star with a result under some prior.

    Raises
    ------
    InputError
        If there is no result under any prior.
    """
    answers, outputs = comparison.given, comparison.outputs
    if not answers:
        raise InputError(f"plot: {comparison.star} has no result under any prior")
    across = min(len(outputs), _MOST_ACROSS)
    down = -(-len(outputs) // across)
    places = _places(answers)
    width = _NAMES + _PANEL * max(across, 2)  # the title needs the width of two
    words = _foot(comparison, width)
    height = down * (_ROW * (places[-1] + 1.6) + _FRAME) + 1.05 + 0.17 * words.count("\n")
    with matplotlib.rc_context({**STYLE, "axes.labelsize": _FONT, "xtick.labelsize": _FONT, "ytick.labelsize": _FONT}):
        figure = Figure(figsize=(width, height), layout="constrained")
        figure.get_layout_engine().set(wspace=0.04, hspace=0.04)
        axes = figure.subplots(down, across, sharey=True, squeeze=False).ravel()
        for axis, output in zip(axes, outputs, strict=False):
            _panel(axis, comparison, output, places)
        for axis in axes[len(outputs) :]:
            axis.remove()
        _names(axes[::across], answers, places)
        # two empty lines make room for the legend
        figure.suptitle(
            f"{comparison.star}: the answer under each structure prior\n \n ",
            x=0.01,
            ha="left",
            fontsize=10.0,
            color=INK,
            parse_math=False,
        )
        figure.supxlabel(words, x=0.01, ha="left", fontsize=_FONT, color=INK, parse_math=False)
        figure.legend(
            handles=_handles(),
            loc="upper left",
            bbox_to_anchor=(0.0, 1.0 - _TITLE / height),
            ncols=4,
            frameon=False,
            fontsize=_FONT,
        )
    return figure


def _places(answers: tuple[PriorAnswer, ...]) -> np.ndarray:
    """Where each prior stands, downwards, with a space before the limits, (prior,)."""
    rows = np.arange(len(answers), dtype=float)
    limits = np.array([answer.limit for answer in answers])
    return rows + _GAP * (limits & bool(not limits[0]))


def _division(answers: tuple[PriorAnswer, ...], places: np.ndarray) -> float | None:
    """Where the limits are set apart from the other priors; None where there are not both."""
    first = [answer.limit for answer in answers].index(True) if any(answer.limit for answer in answers) else 0
    return float(places[first] - 0.5 * _BAR - _HEIGHT - 0.2) if first else None


def _foot(comparison: Comparison, width: float) -> str:
    """Conventions, and the priors that are not shown, in lines that fit."""
    lines = [f"{names}: {words}" for words, names in comparison.conventions().items()]
    refused = [f"{answer.name} ({answer.document['status']})" for answer in comparison.refused]
    if refused:
        lines.append(f"no result: {', '.join(refused)}")
    return "\n".join(textwrap.fill(line, int(14.5 * width)) for line in lines)


def _kind(answer: PriorAnswer) -> str:
    return "in use" if answer.in_use else "limit" if answer.limit else "other"


def _panel(axis, comparison: Comparison, output: str, places: np.ndarray) -> None:
    rows = [(a, place, a.document["outputs"][output]) for a, place in zip(comparison.given, places, strict=True)]
    for _, place, values in rows:
        if values is None:
            axis.text(0.01, place, "not given", transform=axis.get_yaxis_transform(), va="center", color=_FAINT)
    rows = [row for row in rows if row[2] is not None]
    power = comparison.power(output)
    scale = 10.0**power
    at = np.array([place for _, place, _ in rows])
    ends = [_ends(answer, output, values) for answer, _, values in rows]
    low, high = min(a for a, _ in ends), max(b for _, b in ends)
    if high > _LOGARITHMIC * low:
        axis.set_xscale("log")
        axis.set_xlim(low / scale / 1.1, high / scale * 1.1)
    else:
        margin = 0.04 * (high - low) or 0.1 * high
        axis.set_xlim((low - margin) / scale, (high + margin) / scale)
    for (answer, place, values), span in zip(rows, ends, strict=True):
        _density(axis, answer, output, place, span, scale)
        if answer.in_use:
            axis.axvline(values["median"] / scale, color=ACCENT, lw=0.9, ls=":", zorder=1)
    for shade, key in enumerate(("interval95", "interval68")):
        span = np.array([values[key] for _, _, values in rows]) / scale
        colours = [_COLOURS[_kind(answer)][shade] for answer, _, _ in rows]
        axis.barh(at, span[:, 1] - span[:, 0], left=span[:, 0], height=_BAR, color=colours, label=key, zorder=3)
    medians = np.array([values["median"] for _, _, values in rows]) / scale
    axis.plot(medians, at, "|", color=INK, ms=9.0, mew=1.8, label="median", zorder=4)
    divided = _division(comparison.given, places)
    if divided is not None:
        axis.axhline(divided, color=_FAINT, lw=0.5, zorder=0)
    axis.set_title(label(output))
    unit = comparison.answers[0].posterior.units[output]
    axis.set_xlabel(" ".join(x for x in (rf"$10^{{{power}}}$" if power else "", unit) if x))
    axis.tick_params(axis="y", length=0.0)
    axis.spines["left"].set_visible(False)


def _ends(answer: PriorAnswer, output: str, values: dict) -> tuple[float, float]:
    """What is shown of a density: nearly all, but no tail that would squeeze the rest."""
    low, high = answer.posterior.quantile((_TAIL, 1.0 - _TAIL), output)[0]
    median, (low95, high95) = values["median"], values["interval95"]
    return max(low, median - 2.0 * (median - low95)), min(high, median + 2.0 * (high95 - median))


def _density(axis, answer: PriorAnswer, output: str, place: float, span: tuple[float, float], scale: float) -> None:
    """The density as a faint hill on its bar, to a height of its own; nothing where there is no width."""
    if not span[1] > span[0] * (1.0 + 1e-9):
        return
    values = np.geomspace(*span, _POINTS)
    density = answer.posterior.density(values, output)[0]
    if axis.get_xscale() == "log":  # per logarithm, so that areas are probabilities there too
        density = density * values
    foot = place - 0.5 * _BAR - 0.03
    hill = foot - _HEIGHT * density / density.max()
    colours = _COLOURS[_kind(answer)]
    axis.fill_between(values / scale, hill, foot, color=colours[0], alpha=0.55, lw=0.0, zorder=2)
    axis.plot(values / scale, hill, color=colours[1], lw=0.7, alpha=0.7, zorder=2)


def _names(axes, answers: tuple[PriorAnswer, ...], places: np.ndarray) -> None:
    """Names of the priors at the left of each row of panels, which share the axis."""
    names = [f"{a.name}\n(in use)" if a.in_use else a.name for a in answers]
    colours = [ACCENT if a.in_use else INK for a in answers]
    divided = _division(answers, places)
    if divided is not None:
        places, names, colours = [*places, divided], [*names, "limits"], [*colours, _FAINT]
    axes[0].set_yticks(places, names)
    axes[0].set_ylim(max(places) + 0.5, -0.5 * _BAR - _HEIGHT - 0.15)
    for axis in axes:
        for text, colour in zip(axis.get_yticklabels(), colours, strict=True):
            text.set_parse_math(False)
            text.set_color(colour)


def _handles() -> list:
    """The legend: shades stand for every colour."""
    pale, deep = _COLOURS["other"]
    return [
        Line2D([], [], color=INK, marker="|", ls="", ms=9.0, mew=1.8, label="median"),
        Patch(color=deep, label="68.27 %"),
        Patch(color=pale, label="95.45 %"),
        Patch(facecolor=pale, edgecolor=deep, alpha=0.55, label="density, each to its own height"),
    ]
