"""Figures of one star's answer (matplotlib, which only this file and the `*_figure` files import)."""

from pathlib import Path

import matplotlib
import numpy as np
from matplotlib.figure import Figure

from stellerg.errors import InputError
from stellerg.posterior import Posterior
from stellerg.posterior.document import star_document
from stellerg.wording import label

__all__ = ["ACCENT", "INK", "SHADES", "STYLE", "check_ending", "star_figure", "write"]

STYLE = {
    "font.size": 9.0,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "axes.titlesize": 10.0,
    "axes.titlelocation": "left",
    "svg.fonttype": "none",
}
INK, _FILL, _DEEP, ACCENT = "#1f2a36", "#c9dbe6", "#7fa8bf", "#b5482f"
SHADES = ("#35566b", "#5f8a8b", "#94a86b", "#d9b650", "#c98a4b", "#8c6d8f", "#6b7a8f", "#a3a3a3")
_STRUCTURE = "#b9b2a6"
_POINTS = 400


def star_figure(posterior: Posterior, row: int = 0) -> Figure:
    """Draw the densities of all outputs of one star, the linear approximation over them, and the budget.

    Parameters
    ----------
    posterior : Posterior
    row : int
        A star with results.
    """
    if len(posterior) > 1:
        posterior, row = posterior.take([row]), 0
    answer = star_document(posterior, row)
    outputs = [name for name in posterior.outputs if answer["outputs"][name] is not None]
    with matplotlib.rc_context(STYLE):
        figure = Figure(figsize=(7.2, 2.5 * len(outputs) + 1.2 + 0.3 * len(outputs)), layout="constrained")
        heights = [2.5] * len(outputs) + [0.7 + 0.35 * len(outputs)]
        axes = figure.subplots(len(outputs) + 1, 1, height_ratios=heights, squeeze=False)[:, 0]
        for axis, name in zip(axes, outputs, strict=False):
            _density(axis, posterior, answer["outputs"][name], name, row)
        _budget(axes[-1], {name: answer["outputs"][name]["budget"] for name in outputs})
        figure.suptitle(
            f"{answer['star']}: prior {answer['prior']}, {answer['convention']['energy']}, "
            f"{answer['convention']['time']}",
            x=0.01,
            ha="left",
            parse_math=False,
            fontsize=9.0,
            color=INK,
        )
    return figure


def _density(axis, posterior: Posterior, output: dict, name: str, row: int) -> None:
    low, high = posterior.quantile((1e-4, 1.0 - 1e-4), name)[row]
    median = output["median"]
    # a long tail must not squeeze the rest: the 95.45 % are shown, and six times what lies within 68.27 %
    (low68, high68), (low95, high95) = output["interval68"], output["interval95"]
    low = max(low, min(median - 6.0 * (median - low68), low95))
    high = min(high, max(median + 6.0 * (high68 - median), high95))
    axis.set_title(label(name))
    axis.set_yticks([])
    power = int(np.floor(np.log10(median)))
    power = power if not -3 < power < 5 else 0
    unit = " ".join(x for x in (rf"$10^{{{power}}}$" if power else "", output["unit"]) if x)
    axis.set_xlabel(unit)
    scale = 10.0**power
    if not high > low * (1.0 + 1e-9):
        axis.axvline(median / scale, color=INK)
        axis.text(median / scale, 0.5, "  exact: no width", transform=axis.get_xaxis_transform(), color=INK)
        return
    margin = 0.08 * (high - low)
    values = np.linspace(max(low - margin, 1e-3 * median), high + margin, _POINTS)
    density = _row_density(posterior, values, name, row)
    axis.plot(values / scale, density, color=INK, lw=1.4, label="posterior")
    for key, colour, text in (("interval95", _FILL, "95.45 %"), ("interval68", _DEEP, "68.27 %")):
        inside = (values >= output[key][0]) & (values <= output[key][1])
        axis.fill_between(values / scale, density, where=inside, color=colour, lw=0, label=text)
    axis.axvline(median / scale, color=INK, lw=0.9, ls=":")
    value, uncertainty = output["linear"]["value"], output["linear"]["standard_uncertainty"]
    if value is not None and uncertainty:
        normal = np.exp(-0.5 * ((values - value) / uncertainty) ** 2) / (np.sqrt(2.0 * np.pi) * uncertainty)
        axis.plot(values / scale, normal, color=ACCENT, lw=1.2, ls="--", label="first order")
    axis.set_ylim(bottom=0.0)
    axis.set_xlim(values[0] / scale, values[-1] / scale)
    handles, labels = axis.get_legend_handles_labels()
    order = sorted(
        range(len(labels)), key=lambda k: ("posterior", "68.27 %", "95.45 %", "first order").index(labels[k])
    )
    axis.legend([handles[k] for k in order], [labels[k] for k in order], frameon=False, fontsize=8.0)


def _row_density(posterior: Posterior, values: np.ndarray, name: str, row: int) -> np.ndarray:
    return posterior.density(values, name)[row]


def _budget(axis, budgets: dict[str, dict[str, float]]) -> None:
    """Stacked bars of the shares; negative ones (correlations) to the left of zero."""
    quantities = dict.fromkeys(key for shares in budgets.values() for key in shares)
    shown = [q for q in quantities if any(abs(shares.get(q) or 0.0) > 5e-4 for shares in budgets.values())]
    colours = dict(zip([q for q in shown if q != "structure"], SHADES * 3, strict=False))
    colours["structure"] = _STRUCTURE
    for place, shares in enumerate(budgets.values()):
        right = left = 0.0
        for quantity in shown:
            share = 100.0 * (shares.get(quantity) or 0.0)
            start = right if share >= 0.0 else left
            axis.barh(
                place,
                share,
                left=start,
                color=colours[quantity],
                label=label(quantity) if place == 0 else None,
            )
            if abs(share) >= 6.0:
                dark = colours[quantity] in SHADES[:2]
                ink = "white" if dark else INK
                axis.text(
                    start + share / 2,
                    place,
                    f"{share:.0f} %",
                    ha="center",
                    va="center",
                    fontsize=8.0,
                    color=ink,
                )
            right, left = (right + share, left) if share >= 0.0 else (right, left + share)
    axis.set_yticks(range(len(budgets)), [label(name) for name in budgets])
    axis.invert_yaxis()
    axis.set_title("share of the variance of the logarithm")
    axis.set_xlabel("per cent")
    if shown:
        axis.legend(frameon=False, fontsize=8.0, loc="center left", bbox_to_anchor=(1.0, 0.5))


def check_ending(path: Path) -> None:
    """Refuse a name that does not say which format is wanted.

    Raises
    ------
    InputError
        If the ending is not .png, .pdf or .svg.
    """
    if path.suffix.lower() not in (".png", ".pdf", ".svg"):
        raise InputError(f"plot: the ending of {str(path)!r} is no figure format; use .png, .pdf or .svg")


def write(figure: Figure, path: Path) -> None:
    """Write a figure; the ending of the name says which format.

    Raises
    ------
    InputError
        If the ending is unknown or the file cannot be written.
    """
    check_ending(path)
    # no date in the file: the same answer has the same bytes
    undated = {".svg": {"Date": None}, ".pdf": {"CreationDate": None}, ".png": None}[path.suffix.lower()]
    try:
        with matplotlib.rc_context({**STYLE, "svg.hashsalt": "stellerg"}):
            figure.savefig(path, dpi=160, metadata=undated)
    except OSError as problem:
        raise InputError(f"plot: cannot write {str(path)!r}: {problem.strerror}") from None
