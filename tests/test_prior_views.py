"""Structure seen in n, w and ln w: each density integrates to 1, moments and ranges against closed forms."""

import itertools
import math
from pathlib import Path

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from scipy import integrate, stats

from stellerg import Stars, propagate, read_stars
from stellerg.report.domain_figure import domain_figure
from stellerg.report.prior_document import LANDMARKS, density_words, prior_document
from stellerg.report.prior_domain import place_stars
from stellerg.report.prior_figure import prior_figure
from stellerg.report.prior_view import View
from stellerg.structure.calibration import Calibration, Place
from stellerg.structure.files import available_priors, load_prior, parse_prior
from stellerg.structure.model import Coordinate
from test_calibration import table
from test_prior_files import HEAD, UNIFORM, component

INDEX, COEFFICIENT, LOG = Coordinate
ROUNDING, QUADRATURE, TAIL = 1e-12, 1e-8, 1e-6
DRAWN = 2e-3  # a curve of some 800 points, cut where 1e-4 of the probability lies beyond

DENSITIES = {
    "normal": 'distribution = "normal"\nmean = 2\nstandard_deviation = 0.2\n',
    "normal cut": 'distribution = "normal"\nmean = 0.7\nstandard_deviation = 0.3\n',
    "beta": 'distribution = "beta"\nalpha = 2\nbeta = 3\nlower = 1\nupper = 3\n',
    "table": 'distribution = "tabulated"\npoints = [1, 1.5, 2, 2.5, 3]\ndensity = [0, 1, 0, 0, 1]\n',
    "uniform": UNIFORM,
}
SHIPPED = {name: load_prior(name) for name in available_priors()}
CALIBRATION = SHIPPED["main-sequence"]
MODELS = {name: model for name, model in SHIPPED.items() if not isinstance(model, Calibration)}
MODELS |= {
    f"{name} on {c.value}": parse_prior(f"{HEAD}[{c.value}]\n{text}")
    for name, text in DENSITIES.items()
    for c in Coordinate
}
MODELS["reaches five"] = parse_prior(HEAD + '[index]\ndistribution = "normal"\nmean = 4.5\nstandard_deviation = 0.5\n')
MIXTURE = parse_prior(
    HEAD
    + '[index]\ndistribution = "mixture"\n'
    + component(0.25, 'distribution = "point"\nvalue = 1.5\n')
    + component(0.5, 'distribution = "uniform"\nlower = 2\nupper = 3\n')
    + component(0.25, 'distribution = "uniform"\nlower = 2.5\nupper = 4\n')
)
MODELS["mixture with a point"] = MIXTURE


def test_all_shipped_models_but_the_calibration_have_views():
    assert set(SHIPPED) - set(MODELS) == {"main-sequence"}
    assert isinstance(CALIBRATION, Calibration)
    assert "intervals" not in prior_document(CALIBRATION)
    assert all("calibration" not in prior_document(model) for model in MODELS.values())


def views(coordinate):
    return [(name, View(piece.mixture, coordinate)) for name, model in MODELS.items() for piece in model.intervals]


def area(view, function):
    """Integral over the ranges of a view, split where components end and where they peak."""
    cuts = {view.quantile(p) for p in (1e-6, 1e-3, 0.02, 0.2, 0.5, 0.8, 0.98, 1 - 1e-3, 1 - 1e-6)}
    cuts |= {float(view.coordinate.from_log_coefficient(q)) for c in view.mixture.components for q in c.panels}
    cuts = sorted(cuts)
    pieces = itertools.pairwise(x for x in cuts if math.isfinite(x))
    return sum(integrate.quad(function, a, b, limit=200, epsabs=1e-11)[0] for a, b in pieces if b > a)


@pytest.mark.parametrize("coordinate", Coordinate)
def test_every_density_integrates_to_one_less_its_points(coordinate):
    for name, view in views(coordinate):
        points = sum(weight for _, weight in view.atoms)
        total = area(view, lambda x, view=view: float(view.density(x))) if points < 1.0 else 0.0
        assert total + points == pytest.approx(1.0, abs=TAIL), name


def test_without_the_slope_it_would_not():
    """A control: the density over ln w, taken as one over w or over n, is none."""
    view = View(MODELS["uniform-index"].intervals[0].mixture, COEFFICIENT)
    (part,) = view.mixture.components
    assert abs(area(view, lambda w: float(np.exp(part.log_density(np.log(w))))) - 1.0) > 0.05


def test_densities_of_a_uniform_index_in_closed_form():
    mixture = MODELS["uniform-index"].intervals[0].mixture
    w = np.array([0.9, 1.0, 1.4])
    assert View(mixture, INDEX).density(np.array([1.4, 1.6, 2.9, 3.1])) == pytest.approx([0, 2 / 3, 2 / 3, 0])
    assert View(mixture, COEFFICIENT).density(w) == pytest.approx(2.0 / w**2, abs=ROUNDING)
    assert View(mixture, LOG).density(np.log(w)) == pytest.approx(2.0 / w, abs=ROUNDING)
    beyond = np.array([-1.0, 0.0, 0.5, 7.0])
    assert not View(mixture, COEFFICIENT).density(beyond).any()
    assert not View(mixture, INDEX).density(beyond).any()


def test_moments_in_closed_form():
    index, coefficient = (MODELS[f"uniform-{name}"].intervals[0].mixture for name in ("index", "coefficient"))
    assert View(index, INDEX).mean == pytest.approx(2.25, abs=ROUNDING)
    assert View(index, INDEX).standard_deviation == pytest.approx(1.5 / math.sqrt(12), abs=ROUNDING)
    mean = 2.0 * math.log(1.75)
    assert View(index, COEFFICIENT).mean == pytest.approx(mean, abs=ROUNDING)
    second = 9.0 / 1.5 * (1 / 2 - 1 / 3.5)  # of w = 3/(5 - n)
    assert View(index, COEFFICIENT).standard_deviation == pytest.approx(math.sqrt(second - mean**2), abs=ROUNDING)
    log_mean = math.log(3) - (3.5 * math.log(3.5) - 3.5 - 2 * math.log(2) + 2) / 1.5
    assert View(index, LOG).mean == pytest.approx(log_mean, abs=ROUNDING)
    assert View(coefficient, INDEX).mean == pytest.approx(5 - 3 * math.log(1.75) / (1.5 - 6 / 7), abs=ROUNDING)
    assert View(MIXTURE.intervals[0].mixture, INDEX).mean == pytest.approx(0.375 + 1.25 + 0.8125, abs=ROUNDING)


def test_a_wide_normal_in_ln_w_keeps_the_tail_that_its_mean_of_w_needs():
    text = '[log_coefficient]\ndistribution = "normal"\nmean = 2\nstandard_deviation = 2\n'
    view = View(parse_prior(HEAD + text).intervals[0].mixture, COEFFICIENT)
    low, high = (math.log(0.6) - 2) / 2, 9.0
    kept = stats.norm.cdf(high) - stats.norm.cdf(low)
    wanted = math.exp(4.0) * (stats.norm.cdf(high - 2) - stats.norm.cdf(low - 2)) / kept
    assert view.mean == pytest.approx(wanted, rel=QUADRATURE)


def test_moments_agree_with_those_the_engines_use():
    for name, view in views(LOG):
        assert (view.mean, view.standard_deviation) == pytest.approx(view.mixture.moments, abs=TAIL), name


def test_a_mean_that_does_not_exist_is_said_to_be_infinite():
    answer = prior_document(MODELS["reaches five"])["intervals"][0]
    assert answer["coefficient"]["mean"] is None
    assert answer["coefficient"]["ranges"][0][1] is None
    assert math.isfinite(answer["log_coefficient"]["mean"])
    assert math.isfinite(answer["coefficient"]["interval95"][1])


@pytest.mark.parametrize("coordinate", Coordinate)
def test_quantiles_cut_off_the_probability_they_name(coordinate):
    for name, view in views(coordinate):
        if view.atoms:
            continue
        for p in (0.02275, 0.5, 0.97725):
            q = coordinate.to_log_coefficient(view.quantile(p))
            assert view.mixture.cumulative(q) == pytest.approx(p, abs=QUADRATURE), name


def test_ranges_and_what_they_exclude():
    (interval,) = prior_document(MIXTURE)["intervals"]
    assert interval["index"]["ranges"] == [[1.5, 1.5], [2.0, 4.0]]
    assert interval["excluded"]["index"] == [[0.0, 1.5], [1.5, 2.0], [4.0, 5.0]]
    assert interval["excluded"]["coefficient"][-1] == [pytest.approx(3.0), None]
    table = prior_document(MODELS["table on index"])["intervals"][0]
    assert table["index"]["ranges"] == [[1.0, 2.0], [2.5, 3.0]]
    sun = prior_document(MODELS["present-sun"])["intervals"][0]["index"]["ranges"][0]
    assert sun == pytest.approx(stats.norm(3.14, 0.03).ppf([5e-10, 1 - 5e-10]), abs=1e-6)


def places(name):
    return [
        {mark["name"]: mark["place"] for mark in interval["landmarks"]}
        for interval in prior_document(MODELS[name])["intervals"]
    ]


def test_where_known_stars_lie():
    assert LANDMARKS["present Sun"] == pytest.approx(3.14, abs=1e-3)
    (uniform,), (wide,), (sun,) = places("uniform-index"), places("wide-index"), places("present-sun")
    assert uniform["uniform density"] == uniform["present Sun"] == "excluded"
    assert uniform["convective star"] == "at the lower end of its range, outside the central 95.45 %"
    assert uniform["radiative star"] == "at the upper end of its range, outside the central 95.45 %"
    assert wide["present Sun"] == wide["radiative star"] == "inside the central 68.27 %"
    assert sun["radiative star"] == "in the lower tail, outside the central 95.45 %"
    assert sun["convective star"] == "excluded"
    assert places("uniform-log-coefficient") == places("uniform-coefficient") == places("uniform-index")
    assert places("polytrope-3")[0]["radiative star"] == "all the probability"
    assert places("mixture with a point")[0]["convective star"] == "the value of 25 % of the probability"
    assert [p["convective star"] for p in places("by-mass")] == [
        "inside the central 68.27 %",
        "at the lower end of its range, outside the central 95.45 %",
    ]


def test_every_family_has_its_words():
    found = {name: density_words(model.intervals[0].mixture) for name, model in MODELS.items()}
    assert found["uniform-index"] == "uniform in n from 1.5 to 3"
    assert found["polytrope-3"] == "the single value n = 3"
    assert found["normal on log_coefficient"] == "normal in ln w, 2 ± 0.2"
    assert found["normal cut on coefficient"].startswith("normal in w, 0.7 ± 0.3, restricted")
    assert found["beta on index"] == "beta (alpha 2, beta 3) in n from 1 to 3"
    assert found["table on index"] == "tabulated in n from 1 to 3, 5 points"
    assert found["mixture with a point"].startswith("25 % the single value n = 1.5; 50 % uniform in n from 2 to 3; ")


# --- the figure ---


def drawn(axis, kind):
    return [line for line in axis.lines if line.get_gid() == kind]


@pytest.mark.parametrize("name", MODELS)
def test_the_curves_of_the_figure_are_the_densities(name):
    model = MODELS[name]
    axes = prior_figure(model).axes
    assert len(axes) == 3
    for axis, coordinate in zip(axes, Coordinate, strict=True):
        mixtures = [piece.mixture for piece in model.intervals]
        smooth = [View(m, coordinate) for m in mixtures if not all(c.is_point for c in m.components)]
        curves = drawn(axis, "density")
        assert len(curves) == len(smooth)
        for line, view in zip(curves, smooth, strict=True):
            x, y = line.get_data()
            last = coordinate.to_log_coefficient(x[-1]) if coordinate is not INDEX else np.inf
            beyond = 1.0 - float(view.mixture.cumulative(last))  # a long tail is not drawn to its end
            points = sum(weight for _, weight in view.atoms)
            assert np.trapezoid(y, x) == pytest.approx(1.0 - points - beyond, abs=DRAWN)
        marks = [line.get_xdata()[0] for line in axis.lines if line.get_label().startswith(("convective", "radiative"))]
        assert marks == pytest.approx([float(coordinate.from_log_coefficient(np.log(3 / (5 - n)))) for n in (1.5, 3)])
        left, right = axis.get_xlim()
        assert all(left < mark < right for mark in marks)


def test_points_are_upright_lines_as_high_as_their_probability():
    (line,) = drawn(prior_figure(MIXTURE).axes[1], "point")
    (alone,) = drawn(prior_figure(MODELS["polytrope-1.5"]).axes[1], "point")
    assert list(line.get_xdata()) == pytest.approx([6 / 7, 6 / 7])
    assert line.get_ydata()[1] == pytest.approx(0.25 * alone.get_ydata()[1])


@pytest.mark.parametrize("name", ["by-mass", "uniform-index", "constant-density", "mixture with a point"])
def test_no_text_is_cut_or_overlaps(name):
    figure = prior_figure(MODELS[name])
    titles = [t for axis in figure.axes for t in (axis.title, axis._left_title)]
    assert_whole_and_apart(figure, titles, least=15)


def assert_whole_and_apart(figure, more, least):
    """No text is cut or overlaps another: titles, ticks, axes, legend and `more`."""
    canvas = FigureCanvasAgg(figure)
    canvas.draw()
    renderer = canvas.get_renderer()
    texts = [*more, *(line.label for axis in figure.axes for line in (axis.xaxis, axis.yaxis))]
    for axis in figure.axes:
        for line, (low, high) in ((axis.xaxis, axis.get_xlim()), (axis.yaxis, axis.get_ylim())):
            texts += [tick.label1 for tick in line.get_major_ticks() if low <= tick.get_loc() <= high]
            texts += [tick.label2 for tick in line.get_major_ticks() if low <= tick.get_loc() <= high]
    texts += [*figure.legends[0].get_texts(), figure._suptitle]
    texts = [t for t in texts if t.get_text() and t.get_visible()]
    boxes = [t.get_window_extent(renderer) for t in texts]
    width, height = canvas.get_width_height()
    assert len(boxes) > least
    for box in boxes:
        assert box.x0 >= 0
        assert box.y0 >= 0
        assert box.x1 <= width
        assert box.y1 <= height
    for one, other in itertools.combinations(boxes, 2):
        assert not one.overlaps(other)
    return texts


def test_mass_intervals_are_labelled_curves():
    legend = [text.get_text() for text in prior_figure(MODELS["by-mass"]).legends[0].get_texts()]
    assert legend[:2] == ["below 0.35 solar masses", "from 0.35 solar masses up"]


# --- the calibration: its tables, its plane of mass and radius, and stars in it ---

NODES, BOUNDARIES = table("structure_nodes.csv"), table("structure_branches.csv")
STATES = ("unknown", "main-sequence", "pre-main-sequence", "evolved")


def published(rows, column):
    return np.array([float(row[column] or "nan") for row in rows])


def boundary(column, mass):
    """Linear in ln M between the given values, constant beyond them."""
    at, values = published(BOUNDARIES, "mass"), published(BOUNDARIES, column)
    given = np.isfinite(values)
    return np.interp(np.log(mass), np.log(at[given]), values[given])


def line_of(figure, name):
    (line,) = drawn(figure.axes[0], name)
    return line.get_data()


@pytest.mark.parametrize(
    ("name", "column", "last"),
    [
        ("zero age", None, 40.0),
        ("end", "x_end", 40.0),
        ("radius limit", "radius_limit", 1.0),
        ("full convection", "hayashi_above", 5.0),
        ("smallest", 0.8, 40.0),
    ],
)
def test_the_lines_of_the_figure_are_the_boundaries(name, column, last):
    mass, radius = line_of(domain_figure(CALIBRATION), name)
    assert (mass[0], mass[-1]) == (0.1, last)
    at = published(NODES, "mass")
    here = np.isin(mass, at)
    assert here.sum() == (at <= last).sum()  # every node that it passes is on the line
    ratio = boundary(column, mass[here]) if isinstance(column, str) else column or 1.0
    wanted = ratio * published(NODES, "radius_zams")[at <= last]
    assert radius[here] == pytest.approx(wanted, rel=1e-9)
    assert radius[here] != pytest.approx(1.001 * wanted, rel=1e-9)  # a control: the comparison sees a thousandth


def test_the_colours_are_the_median_coefficients_of_the_stars_there():
    axis = domain_figure(CALIBRATION).axes[0]
    meshes = [mesh for mesh in axis.collections if mesh.__class__.__name__ == "QuadMesh"]
    places = set()
    for mesh in meshes:
        corners = np.log(mesh.get_coordinates())
        middle = 0.25 * (corners[1:, 1:] + corners[1:, :-1] + corners[:-1, 1:] + corners[:-1, :-1])
        log_mass, log_radius = middle[::40, ::15].reshape(-1, 2).T
        places |= set(CALIBRATION.place(log_mass, log_radius, np.zeros(len(log_mass), bool)).tolist())
        stars = Stars.of(
            **{
                name: [f"{value!r} exact" for value in np.exp(values).tolist()]
                for name, values in (("mass", log_mass), ("radius", log_radius))
            }
        )
        found = propagate(stars, outputs="potential_energy", prior="main-sequence").median("structure_coefficient")
        assert np.asarray(mesh.get_array())[::40, ::15].ravel() == pytest.approx(found, rel=1e-6)
    assert places == {Place.MAIN_SEQUENCE, Place.INFLATED, Place.CONTRACTING}  # nothing that is refused


REGIONS = {
    "main sequence": (Place.MAIN_SEQUENCE, Place.STATED_CONTRACTING),
    "inflated": (Place.INFLATED, Place.STATED_CONTRACTING),
    "taken as contracting": (Place.CONTRACTING, Place.STATED_CONTRACTING),
    "too large: refused unless\nstated pre-main-sequence": (Place.BEYOND, Place.STATED_CONTRACTING),
    "too large: refused": (Place.BEYOND, Place.CONTRACTING_OUTSIDE),
    "too small: refused": (Place.TOO_SMALL, Place.TOO_SMALL),
    "mass outside: refused": (Place.MASS_OUTSIDE, Place.MASS_OUTSIDE),
}


def test_the_name_of_a_region_stands_in_it():
    """All four corners of each name, turned as it is drawn."""
    figure = domain_figure(CALIBRATION)
    (axis, _), canvas = figure.axes, FigureCanvasAgg(figure)
    canvas.draw()
    names = [text for text in axis.texts if text.get_gid() == "region"]
    assert sorted(text.get_text() for text in names) == sorted([*REGIONS, "mass outside: refused"])
    for text in names:
        lines = text.get_text().split("\n")
        sizes = [
            canvas.get_renderer().get_text_width_height_descent(t, text.get_fontproperties(), False) for t in lines
        ]
        half = 0.5 * np.array([max(width for width, *_ in sizes), sum(height for _, height, _ in sizes)])
        angle = np.radians(text.get_rotation())
        turn = np.array([[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]])
        centre = axis.transData.transform(text.get_position())
        corners = [centre + turn @ (half * sign) for sign in itertools.product((-1, 1), repeat=2)]
        log_mass, log_radius = np.log(axis.transData.inverted().transform([centre, *corners])).T
        for stated, wanted in zip((False, True), REGIONS[text.get_text()], strict=True):
            assert set(CALIBRATION.place(log_mass, log_radius, np.full(5, stated)).tolist()) == {wanted}, text


@pytest.mark.parametrize("file", [None, "survey.csv"])
def test_the_texts_of_the_plane_can_be_read(file, examples):
    stars = None if file is None else place_stars(read_stars(examples / file), CALIBRATION, file)
    figure = domain_figure(CALIBRATION, stars)
    assert figure.get_facecolor() == (1.0, 1.0, 1.0, 1.0)
    texts = assert_whole_and_apart(figure, figure.axes[0].texts, least=25)
    assert min(text.get_fontsize() for text in texts) >= 9.0


@pytest.fixture
def examples():
    return Path(__file__).resolve().parents[1] / "examples"


def test_stars_are_drawn_at_their_medians_with_their_intervals():
    table = {
        "mass": ["1.0 ± 0.05", "0.5 exact", "", "3.0 ± 0.1"],
        "radius": ["1.1 +0.2 -0.1", "0.45 exact", "1(1)", "9"],
    }
    placed = place_stars(Stars.of(**table), CALIBRATION, "mine")
    assert (placed.without, placed.place) == (2, ("main sequence", "main sequence"))
    container = domain_figure(CALIBRATION, placed).axes[0].containers[0]
    line, _, (across, up) = container.lines
    assert line.get_gid() == "covered"
    mass, radius = line.get_data()
    assert mass == pytest.approx([1.0, 0.5], rel=1e-9)
    assert radius == pytest.approx([1.1, 0.45], rel=1e-9)
    assert across.get_segments()[0][:, 0] == pytest.approx([0.95, 1.05], rel=1e-9)
    assert up.get_segments()[0][:, 1] == pytest.approx([1.0, 1.3], rel=1e-9)
    assert up.get_segments()[1][:, 1] == pytest.approx([0.45, 0.45], rel=1e-9)
