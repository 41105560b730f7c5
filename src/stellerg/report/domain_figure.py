"""Figure of a calibrated coefficient: the plane of mass and radius, its regions, and stars in it (matplotlib)."""

from dataclasses import dataclass

import matplotlib
import numpy as np
from matplotlib.colors import LogNorm
from matplotlib.figure import Figure
from matplotlib.ticker import FixedLocator, NullLocator

from stellerg.report.figures import ACCENT, INK, STYLE
from stellerg.report.prior_domain import MARKS, PlacedStars
from stellerg.structure.calibration import Calibration

__all__ = ["domain_figure"]

_FONT = 9.0
# From ColorBrewer (Brewer, Harrower & Hatchard 2003): lightness falls steadily, for every kind of colour vision; the
# dark end is left out, so that text and marks stand out.
_COLOURS, _LIGHTEST, _DARKEST = "YlGnBu", 0.03, 0.62
_MASSES, _RADII = 320, 60  # cells of one piece of the plane
_ROUND = (1.0, 2.0, 5.0)
_ROOM = 1.22  # factor of mass beyond the domain that is shown
_OUTLINE = {"facecolor": "white", "edgecolor": "none", "pad": 1.5, "alpha": 0.75}

# name: (label, style) of a line
_LINES = {
    "end": ("end of the main sequence", {"color": INK, "lw": 1.8}),
    "zero age": ("age zero", {"color": INK, "lw": 1.2, "ls": (0, (6, 2))}),
    "radius limit": (
        "radius limit: inflated above",
        {"color": ACCENT, "lw": 1.6, "ls": (0, (3, 1.2))},
    ),
    "full convection": (
        "fully convective above, if stated pre-main-sequence",
        {"color": "#0072b2", "lw": 1.6, "ls": (0, (7, 2, 1.5, 2))},
    ),
    "smallest": ("smallest radius", {"color": INK, "lw": 1.4, "ls": (0, (1, 1.5))}),
}
_MARK_SIZE = 7.0
# Marks differ in shape; colours of Okabe & Ito 2008 (from memory), told apart by every kind of colour vision.
_MARKS = dict(
    zip(MARKS, (("o", "#000000"), ("s", "#d55e00"), ("^", "#0072b2"), ("D", "#cc79a7"), ("X", "#ffffff")), strict=True)
)


@dataclass(frozen=True)
class _Plane:
    """What is shown of the plane of mass and radius, with the calibration's lines in it."""

    calibration: Calibration
    left: float
    right: float
    bottom: float
    top: float

    @property
    def ends(self) -> tuple[float, float]:
        """The masses covered."""
        return float(self.calibration.nodes.mass[0]), float(self.calibration.nodes.mass[-1])

    @property
    def evolved_from(self) -> float:
        """The mass from which large stars may have evolved."""
        return float(np.clip(self.calibration.none_evolved_below, *self.ends))

    @property
    def contracting_to(self) -> float:
        """The largest mass of a star described as contracting beyond the main sequence."""
        return float(np.clip(self.calibration.boundaries.last_mass("convective_above"), *self.ends))

    def radius_zams(self, mass: np.ndarray) -> np.ndarray:
        return np.exp(self.calibration.relation_at(np.log(mass))[..., 0])

    def radius(self, name: str, mass: np.ndarray) -> np.ndarray:
        """Radius of a line, nominal solar."""
        ratio = {"zero age": 1.0, "smallest": self.calibration.smallest}.get(name)
        if ratio is None:
            boundary = {"full convection": "convective_above", "radius limit": "radius_limit"}.get(name, name)
            ratio = self.calibration.boundaries.at(boundary, np.log(mass))
        return ratio * self.radius_zams(mass)

    def masses(self, name: str) -> np.ndarray:
        """Masses at which a line is drawn: close together, and where it has a kink."""
        low, high = self.ends
        last = {"full convection": "convective_above", "radius limit": "radius_limit"}.get(name)
        if last is not None:
            high = min(high, self.calibration.boundaries.last_mass(last))
        kinks = np.concatenate([self.calibration.nodes.mass, self.calibration.boundaries.mass])
        masses = np.concatenate([np.geomspace(low, max(low, high), 400), kinks])
        return np.unique(masses[(masses >= low) & (masses <= high)])


def domain_figure(calibration: Calibration, stars: PlacedStars | None = None) -> Figure:
    """Draw the plane of mass and radius: the coefficient in colour where it is calibrated, boundaries, and stars.

    Parameters
    ----------
    calibration : Calibration
    stars : PlacedStars, optional
        Drawn with their 68.27 % intervals and a mark for each kind of place.
    """
    with matplotlib.rc_context({**STYLE, "legend.fontsize": _FONT, "hatch.linewidth": 0.5}):
        figure = Figure(figsize=(9.6, 7.4), layout="constrained")
        axis = figure.subplots()
        plane = _plane(calibration, stars)
        axis.set(xscale="log", yscale="log", xlim=(plane.left, plane.right), ylim=(plane.bottom, plane.top))
        axis.set_xlabel("mass, nominal solar")
        axis.set_ylabel("radius, nominal solar")
        for side in (axis.xaxis, axis.yaxis):
            ticks = [base * 10.0**power for power in range(-6, 9) for base in _ROUND]
            side.set_major_locator(FixedLocator(ticks))
            side.set_major_formatter("{x:g}")
            side.set_minor_locator(NullLocator())
        colours = _coefficient(axis, plane)
        _stated_only(axis, plane)
        for name, (label, style) in _LINES.items():
            mass = plane.masses(name)
            axis.plot(mass, plane.radius(name, mass), label=label, gid=name, zorder=3, **style)
        _limits(axis, plane)
        _names(axis, plane)
        if stars is not None:
            _stars(axis, stars)
        bar = figure.colorbar(colours, ax=axis, pad=0.01, aspect=40)
        bar.set_label("structure coefficient w (median) of a star not stated pre-main-sequence")
        low, high = colours.norm.vmin, colours.norm.vmax
        bar.ax.yaxis.set_major_locator(FixedLocator(_colour_ticks(low, high)))
        bar.ax.yaxis.set_major_formatter("{x:g}")
        bar.ax.yaxis.set_minor_locator(NullLocator())
        figure.legend(loc="outside lower left", ncols=3, frameon=False)
        # a file may be called anything: no mathematics is read into its name
        title = f"{calibration.name}: the stars it describes"
        figure.suptitle(title, x=0.01, ha="left", fontsize=10.0, color=INK, parse_math=False)
    return figure


def _plane(calibration: Calibration, stars: PlacedStars | None) -> _Plane:
    """What to show: the domain, room for names beyond it, and all stars."""
    whole = _Plane(calibration, *[np.nan] * 4)
    ends = calibration.nodes.mass[[0, -1]]
    radius = np.concatenate([whole.radius(name, whole.masses(name)) for name in _LINES])
    x, y = [ends[0] / _ROOM, ends[1] * _ROOM], [radius.min() / 1.3, radius.max() * 1.8]
    if stars is not None and len(stars.place):
        x += [stars.mass.min() / _ROOM, stars.mass.max() * _ROOM]
        y += [stars.radius.min() / _ROOM, stars.radius.max() * _ROOM]
    return _Plane(calibration, min(x), max(x), min(y), max(y))


def _coefficient(axis, plane: _Plane):
    """Colour the domain: cells whose edges follow the boundaries."""
    calibration, (low, high), light = plane.calibration, plane.ends, plane.evolved_from
    pieces = []
    for first, last, beyond in ((low, light, False), (light, high, False), (low, light, True)):
        if first < last:
            mass = np.geomspace(first, last, _MASSES + 1)
            end = plane.radius("end", mass)
            lower, upper = (end, np.full(mass.shape, plane.top)) if beyond else (plane.radius("smallest", mass), end)
            pieces.append(_cells(calibration, np.log(mass), np.log(lower), np.log(upper)))
    values = [values for _, _, values in pieces]
    norm = LogNorm(min(v.min() for v in values), max(v.max() for v in values))
    cmap = matplotlib.colormaps[_COLOURS]
    cmap = matplotlib.colors.ListedColormap(cmap(np.linspace(_LIGHTEST, _DARKEST, 256)))
    for mass, radius, value in pieces:
        # an image within a vector figure: it would have 50,000 polygons
        drawn = axis.pcolormesh(mass, radius, value, norm=norm, cmap=cmap, rasterized=True, zorder=1)
    return drawn


def _cells(calibration: Calibration, log_mass: np.ndarray, lower: np.ndarray, upper: np.ndarray):
    """Corners (mass, radius) of cells between two lines, and the median w at their centres."""
    share = np.linspace(0.0, 1.0, _RADII + 1)
    log_radius = lower[:, None] + (upper - lower)[:, None] * share
    corners = np.broadcast_to(log_mass[:, None], log_radius.shape)
    centre_mass, centre_radius = (
        0.25 * (c[1:, 1:] + c[1:, :-1] + c[:-1, 1:] + c[:-1, :-1]) for c in (corners, log_radius)
    )
    at = centre_mass.ravel(), centre_radius.ravel()
    relation = calibration.relation(*at, np.zeros(at[0].shape, bool))
    median = relation.quantile(np.full((at[0].size, 1), 0.5), at[0][:, None], at[1][:, None])
    return np.exp(corners), np.exp(log_radius), np.exp(median).reshape(centre_mass.shape)


def _colour_ticks(low: float, high: float) -> list[float]:
    return [tick for tick in (0.6, 0.8, 1.0, 1.25, 1.5, 2.0, 2.5, 3.0, 4.0, 5.0, 7.0, 10.0) if low <= tick <= high]


def _stated_only(axis, plane: _Plane) -> None:
    """Hatch where only stars stated contracting are described."""
    low, high = plane.evolved_from, plane.contracting_to
    if low < high:
        mass = np.geomspace(low, high, _MASSES)
        axis.fill_between(
            mass,
            plane.radius("end", mass),
            plane.top,
            facecolor="none",
            edgecolor="#b5b5b5",
            hatch="//",
            lw=0.0,
            zorder=0.5,
        )


def _limits(axis, plane: _Plane) -> None:
    """Upright lines: the masses covered, the mass from which stars evolve, the last contracting one."""
    for mass in plane.ends:
        axis.plot([mass, mass], [plane.bottom, plane.top], color=INK, lw=0.8, gid="mass limit", zorder=2)
    for mass in (plane.evolved_from, plane.contracting_to):
        start = float(plane.radius("end", np.array(mass)))
        axis.plot([mass, mass], [start, plane.top], color=INK, lw=0.8, gid="mass boundary", zorder=2)


def _names(axis, plane: _Plane) -> None:
    """Write on each region what becomes of stars there."""
    (low, high), light, top = plane.ends, plane.evolved_from, plane.contracting_to

    def write(text, mass, radius, rotation=0.0, **more):
        axis.text(
            mass,
            radius,
            text,
            ha="center",
            va="center",
            color=INK,
            fontsize=_FONT,
            zorder=4,
            rotation=rotation,
            rotation_mode="anchor",
            gid="region",
            **more,
        )

    def between(mass, lower, upper):
        ends = (plane.radius(name, np.array(mass)) if isinstance(name, str) else name for name in (lower, upper))
        return float(np.sqrt(np.prod(list(ends))))

    def along(text, mass, lower, upper):
        """Along the band between two lines."""
        step = 1.02
        here, there = (between(m, lower, upper) for m in (mass, mass * step))
        angle = np.degrees(np.arctan2(there - here, mass * (step - 1.0)))
        write(text, mass, here, angle, transform_rotates_text=True)

    along("main sequence", float(np.sqrt(light * high)), "zero age", "end")
    masses = plane.masses("radius limit")
    room = plane.radius("end", masses) / plane.radius("radius limit", masses)
    if (room > 1.0).any():
        widest = np.log(masses[room > 0.99 * room.max()])
        along("inflated", float(np.exp(0.5 * (widest[0] + widest[-1]))), "radius limit", "end")
    if low < light:
        mass = float(np.sqrt(low * light))
        write("taken as contracting", mass, between(mass, "end", plane.top))
    if light < top:
        mass = float(np.sqrt(light * top))
        write(
            "too large: refused unless\nstated pre-main-sequence",
            mass,
            between(mass, "full convection", plane.top),
            bbox=_OUTLINE,
        )
    mass = float(np.sqrt(max(top, light) * high))
    write("too large: refused", mass, between(mass, "end", plane.top))
    mass = float(np.sqrt(light * high))
    write("too small: refused", mass, between(mass, plane.bottom, "smallest"))
    for mass in (np.sqrt(plane.left * low), np.sqrt(high * plane.right)):
        write("mass outside: refused", float(mass), float(np.sqrt(plane.bottom * plane.top)), 90.0)


def _stars(axis, stars: PlacedStars) -> None:
    marks = np.array(stars.mark)
    for mark, (shape, colour) in _MARKS.items():
        here = marks == mark
        if not here.any():
            continue
        mass, radius = stars.mass[:, here], stars.radius[:, here]
        edge = INK if colour == "#ffffff" else "white"
        axis.errorbar(
            mass[1],
            radius[1],
            xerr=np.abs(mass[[0, 2]] - mass[1]),
            yerr=np.abs(radius[[0, 2]] - radius[1]),
            fmt=shape,
            color=colour,
            ecolor=INK,
            elinewidth=1.0,
            markeredgecolor=edge,
            markersize=_MARK_SIZE,
            gid=mark,
            zorder=5,
        )
        style = {"marker": shape, "color": colour, "markeredgecolor": edge, "markersize": _MARK_SIZE}
        axis.plot([], [], ls="none", label=f"{mark}: {here.sum():,}", **style)  # the legend shows no error bars
