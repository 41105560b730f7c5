"""Figure of a structure model: its density in n, in w and in ln w (matplotlib)."""

import matplotlib
import numpy as np
from matplotlib.figure import Figure

from stellerg.report.figures import ACCENT, INK, SHADES, STYLE
from stellerg.report.prior_document import LANDMARKS, mass_words
from stellerg.report.prior_view import View
from stellerg.structure.model import Coordinate, StructureModel
from stellerg.structure.polytrope import LARGEST_INDEX

__all__ = ["prior_figure"]

_TITLES = {
    Coordinate.INDEX: "polytropic index n",
    Coordinate.COEFFICIENT: "structure coefficient w",
    Coordinate.LOG_COEFFICIENT: "ln w",
}
_MARKED = {"convective star": ("n = 3/2", "--"), "radiative star": ("n = 3", ":")}
_POINTS = 800
_STEP = 1e-9  # either side of an end, so that a density that stops is drawn upright


def prior_figure(model: StructureModel) -> Figure:
    """Draw the density of a structure model in three coordinates; a curve for each mass interval.

    A value that has a probability of its own is an upright line with a dot; n = 3/2 and n = 3 are marked.

    Parameters
    ----------
    model : StructureModel
    """
    with matplotlib.rc_context(STYLE):
        figure = Figure(figsize=(9.6, 3.6), layout="constrained")
        axes = figure.subplots(1, len(_TITLES))
        for axis, coordinate in zip(axes, _TITLES, strict=True):
            _panel(axis, model, coordinate)
        axes[0].set_ylabel("probability density" if len(axes[0].get_yticks()) else "probability")
        figure.legend(
            *axes[0].get_legend_handles_labels(),
            loc="outside lower left",
            ncols=4,
            frameon=False,
            fontsize=8.0,
        )
        # a file may be called anything: no mathematics is read into its name
        figure.suptitle(model.name, x=0.01, ha="left", fontsize=10.0, color=INK, parse_math=False)
    return figure


def _panel(axis, model: StructureModel, coordinate: Coordinate) -> None:
    views = [View(piece.mixture, coordinate) for piece in model.intervals]
    marks = {name: float(_from_index(coordinate, LANDMARKS[name])) for name in _MARKED}
    ends = [_window(view) for view in views]
    low, high = min(a for a, _ in ends), max(b for _, b in ends)
    low, high = min(low, *marks.values()), max(high, *marks.values())
    margin = 0.06 * (high - low)
    low, high = low - margin, high + margin
    for place, (piece, view) in enumerate(zip(model.intervals, views, strict=True)):
        label = mass_words(piece) if len(views) > 1 else "density"
        _curve(axis, view, (low, high), SHADES[place % len(SHADES)], label)
    for name, (text, style) in _MARKED.items():
        axis.axvline(marks[name], color=ACCENT, lw=1.0, ls=style, label=f"{name}, {text}", zorder=4)
    axis.set_title(_TITLES[coordinate])
    axis.set_xlim(low, high)
    axis.set_ylim(bottom=0.0)
    if not any(line.get_gid() == "density" for line in axis.lines):
        axis.set_yticks([])


def _curve(axis, view: View, limits: tuple[float, float], colour: str, label: str) -> None:
    """The density, and upright lines for values with a probability of their own."""
    if len(view.atoms) < len(view.mixture.components):
        x = _abscissae(view, limits)
        y = view.density(x)
        axis.plot(x, y, color=colour, lw=1.4, label=label, gid="density", zorder=3)
        axis.fill_between(x, y, color=colour, alpha=0.2, lw=0.0, zorder=2)
        label = "_"
    for value, probability in view.atoms:
        # the height is the probability, in units of the axes: a point has no density
        axis.plot(
            [value, value],
            [0.0, 0.92 * probability],
            transform=axis.get_xaxis_transform(),
            color=colour,
            lw=2.0,
            marker="o",
            markevery=[1],
            markersize=4.0,
            label="all the probability" if label == "density" else label,
            gid="point",
            zorder=3,
        )
        label = "_"
        if probability < 1.0:
            axis.annotate(
                f"{100.0 * probability:.3g} %",
                (value, 0.92 * probability),
                xycoords=axis.get_xaxis_transform(),
                xytext=(6.0, 0.0),
                textcoords="offset points",
                va="center",
                fontsize=8.0,
                color=INK,
                bbox={"facecolor": "white", "edgecolor": "none", "pad": 0.5},
                zorder=5,
            )


def _abscissae(view: View, limits: tuple[float, float]) -> np.ndarray:
    """Points to draw at: evenly spread over the axis and over each range, and close to sharp ends."""
    found = [np.linspace(*limits, _POINTS)]
    for lower, upper in view.ranges:
        lower, upper = max(lower, limits[0]), min(upper, limits[1])
        found.append(np.linspace(lower, upper, _POINTS))
        found.append(np.array([lower - _STEP, lower + _STEP, upper - _STEP, upper + _STEP]))
    return np.unique(np.clip(np.concatenate(found), *limits))


def _window(view: View) -> tuple[float, float]:
    """What to show of a density: nearly all, but not the far end of a long tail nor what no star has."""
    most = float(_from_index(view.coordinate, LARGEST_INDEX))
    found = (min(view.quantile(p), most) for p in (1e-4, 0.02275, 0.5, 0.97725, 1 - 1e-4))
    low, inner_low, middle, inner_high, high = found
    return max(low, 2.0 * inner_low - middle), min(high, 2.0 * inner_high - middle)


def _from_index(coordinate: Coordinate, index: float) -> float:
    return coordinate.from_log_coefficient(Coordinate.INDEX.to_log_coefficient(index))
