"""Structure models: families against scipy.stats, components in ln w, mixtures, shipped files."""

import itertools
import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate, stats

from stellerg import Stars, propagate
from stellerg.report.domain_figure import domain_figure
from stellerg.report.prior_document import prior_document
from stellerg.report.prior_domain import MARKS, place_stars
from stellerg.status import Flag, Status
from stellerg.structure.calibration import Calibration
from stellerg.structure.distributions import Beta, Normal, Point, Tabulated, Uniform
from stellerg.structure.files import available_priors, load_prior, parse_prior
from stellerg.structure.model import Component, Coordinate, Mixture, StructureModel
from test_calibration import table

# Tolerances: rounding; scipy's own special functions; the tail of 1e-12 that the moments leave out.
ROUNDING, SCIPY, TAIL = 1e-13, 1e-10, 1e-8
P = np.concatenate([[1e-9, 1e-4], np.linspace(0.01, 0.99, 25), [1.0 - 1e-4, 1.0 - 1e-9]])
LAWS = settings(derandomize=True, deadline=None)

FAMILIES = {
    "uniform": (Uniform(1.5, 3.0), stats.uniform(1.5, 1.5)),
    "normal": (Normal(3.14, 0.03, 0.0, 5.0), stats.truncnorm(-3.14 / 0.03, 1.86 / 0.03, 3.14, 0.03)),
    "normal cut below": (Normal(0.2, 0.5, 0.0, 5.0), stats.truncnorm(-0.4, 9.6, 0.2, 0.5)),
    "normal cut above": (Normal(4.8, 0.4, 0.0, 5.0), stats.truncnorm(-12.0, 0.5, 4.8, 0.4)),
    "normal cut on both sides": (Normal(2.0, 5.0, 0.0, 5.0), stats.truncnorm(-0.4, 0.6, 2.0, 5.0)),
    "beta": (Beta(2.0, 5.0, 1.5, 3.5), stats.beta(2.0, 5.0, 1.5, 2.0)),
    "beta with a bounded end": (Beta(1.0, 3.0, 1.5, 3.5), stats.beta(1.0, 3.0, 1.5, 2.0)),
    "tabulated trapezoid": (
        Tabulated((1.0, 1.5, 2.5, 3.0), (0.0, 7.0, 7.0, 0.0)),
        stats.trapezoid(0.25, 0.75, 1.0, 2.0),
    ),
    "tabulated triangle": (Tabulated((1.0, 1.4, 3.0), (0.0, 3.0, 0.0)), stats.triang(0.2, 1.0, 2.0)),
}
COMPONENTS = {
    **{f"{name} on the index": Component(Coordinate.INDEX, family) for name, (family, _) in FAMILIES.items()},
    "uniform on w": Component(Coordinate.COEFFICIENT, Uniform(6.0 / 7.0, 1.5)),
    "normal on w": Component(Coordinate.COEFFICIENT, Normal(1.6, 0.1, 0.6, 2.5)),
    "uniform on ln w": Component(Coordinate.LOG_COEFFICIENT, Uniform(-0.15, 0.4)),
    "normal on ln w": Component(Coordinate.LOG_COEFFICIENT, Normal(0.4, 0.05, math.log(0.6), 0.85)),
    "tabulated with a gap": Component(Coordinate.INDEX, Tabulated((1.0, 1.5, 2.0, 2.5, 3.0), (0, 1, 0, 0, 3))),
}


def integral(function, panels):
    """Sum of quad over panels."""
    return sum(
        integrate.quad(function, a, b, epsabs=1e-13, epsrel=1e-12, limit=200)[0] for a, b in itertools.pairwise(panels)
    )


# --- families ---


@pytest.mark.parametrize("name", FAMILIES)
def test_family_against_scipy(name):
    family, reference = FAMILIES[name]
    x = reference.ppf(P)
    assert family.quantile(P) == pytest.approx(x, abs=1e-8)
    assert family.cumulative(x) == pytest.approx(reference.cdf(x), abs=SCIPY)
    assert np.exp(family.log_density(x)) == pytest.approx(reference.pdf(x), rel=1e-6, abs=1e-9)
    assert family.mean == pytest.approx(reference.mean(), rel=SCIPY)
    assert family.standard_deviation == pytest.approx(reference.std(), rel=1e-9)
    assert family.support == pytest.approx(reference.support(), rel=ROUNDING)


@pytest.mark.parametrize("name", FAMILIES)
def test_family_outside_its_support(name):
    family, _ = FAMILIES[name]
    low, high = family.support
    outside = np.array([low - 0.1, high + 0.1])
    assert family.cumulative(outside).tolist() == [0.0, 1.0]
    assert family.log_density(outside).tolist() == [-np.inf, -np.inf]
    # where a density vanishes at its end, rounding of the probability enters x by its square root
    tolerance = 2e-8 if isinstance(family, Tabulated) else 1e-12
    assert family.quantile(np.array([0.0, 1.0])) == pytest.approx([low, high], abs=tolerance)


def test_point():
    point = Point(1.5)
    assert point.quantile(P).tolist() == [1.5] * len(P)
    assert point.cumulative(np.array([1.4, 1.5, 1.6])).tolist() == [0.0, 1.0, 1.0]
    assert (point.mean, point.standard_deviation, point.support) == (1.5, 0.0, (1.5, 1.5))


@LAWS
@given(
    st.lists(st.floats(0.01, 1.0), min_size=2, max_size=8),
    st.lists(st.floats(0.0, 5.0), min_size=9, max_size=9),
    st.floats(0.001, 0.999),
)
def test_tabulated_quantile_is_the_inverse_of_the_cumulative(steps, heights, p):
    heights = [*heights[: len(steps)], 1.0]
    points = tuple(np.cumsum([0.5, *steps]))
    family = Tabulated(points, tuple(heights))
    assert family.cumulative(family.quantile(np.array([p])))[0] == pytest.approx(p, abs=1e-9)


# --- densities seen in ln w ---


@pytest.mark.parametrize("name", COMPONENTS)
def test_component_is_normalised_and_has_the_moments_of_quad(name):
    component = COMPONENTS[name]
    assert np.all(np.diff(component.panels) > 0.0)
    moments = [
        integral(lambda q, k=k: q**k * math.exp(component.log_density(np.array(q))), component.panels) for k in range(3)
    ]
    assert moments[0] == pytest.approx(1.0, abs=1e-10)
    mean, sd = Mixture((1.0,), (component,)).moments
    assert mean == pytest.approx(moments[1], abs=TAIL)
    assert sd == pytest.approx(math.sqrt(moments[2] - moments[1] ** 2), abs=TAIL)


@pytest.mark.parametrize("name", COMPONENTS)
def test_component_quantile_cumulative_and_density_agree(name):
    component = COMPONENTS[name]
    q = component.quantile(P)
    assert component.cumulative(q) == pytest.approx(P, abs=1e-9)
    assert np.all(np.diff(q) > 0.0)
    inner = q[2:-2]
    step = 1e-5 * (q[-3] - q[2])
    slope = (component.cumulative(inner + step) - component.cumulative(inner - step)) / (2.0 * step)
    # second order in the step inside a smooth piece, first order across a kink of a table
    assert slope == pytest.approx(np.exp(component.log_density(inner)), rel=1e-3)


@pytest.mark.parametrize("coordinate", Coordinate)
def test_coordinates(coordinate):
    """w = 3/(5 - n), and the derivative of the coordinate by ln w."""
    n = np.array([0.0, 1.5, 3.0, 4.5])
    log_w = np.log([0.6, 6.0 / 7.0, 1.5, 6.0])
    value = {Coordinate.INDEX: n, Coordinate.COEFFICIENT: np.exp(log_w), Coordinate.LOG_COEFFICIENT: log_w}[coordinate]
    assert coordinate.to_log_coefficient(value) == pytest.approx(log_w, abs=1e-15)
    assert coordinate.from_log_coefficient(log_w) == pytest.approx(value, abs=1e-14)
    step = 1e-6
    ends = [coordinate.from_log_coefficient(log_w + sign * step) for sign in (1.0, -1.0)]
    assert np.exp(coordinate.log_slope(log_w)) == pytest.approx((ends[0] - ends[1]) / (2.0 * step), rel=1e-8)


def test_moments_of_a_uniform_index_in_closed_form():
    """With v = 5 - n uniform on [2, 7/2], ln w = ln 3 - ln v."""
    mean, sd = load_prior("uniform-index").intervals[0].mixture.moments
    a, b = 2.0, 3.5
    first = (b * math.log(b) - b - a * math.log(a) + a) / (b - a)
    primitive = [v * (math.log(v) ** 2 - 2.0 * math.log(v) + 2.0) for v in (a, b)]
    second = (primitive[1] - primitive[0]) / (b - a)
    assert mean == pytest.approx(math.log(3.0) - first, abs=ROUNDING)
    assert sd == pytest.approx(math.sqrt(second - first**2), rel=1e-11)


# --- mixtures ---

ON_THE_INDEX = Component(Coordinate.INDEX, Normal(1.5, 0.05, 0.0, 5.0))
WIDE = Component(Coordinate.INDEX, Uniform(1.5, 4.0))
ATOM = Component(Coordinate.INDEX, Point(3.0))
MIXTURES = {
    "two densities": Mixture((0.3, 0.7), (ON_THE_INDEX, WIDE)),
    "an atom within": Mixture((0.25, 0.75), (ATOM, WIDE)),
    "two atoms": Mixture((0.4, 0.6), (Component(Coordinate.INDEX, Point(1.5)), ATOM)),
}


def test_mixture_of_densities():
    mixture = MIXTURES["two densities"]
    q = mixture.quantile(P)
    assert mixture.cumulative(q) == pytest.approx(P, abs=1e-12)
    assert mixture.cumulative(q) == pytest.approx(
        0.3 * ON_THE_INDEX.cumulative(q) + 0.7 * WIDE.cumulative(q), abs=1e-15
    )


def test_mixture_with_an_atom():
    """A quarter of the probability is at n = 3, above 0.75 x 0.6 of the rest."""
    mixture, at = MIXTURES["an atom within"], math.log(1.5)
    assert mixture.cumulative(np.array([at - 1e-9, at + 1e-9])) == pytest.approx([0.45, 0.70], abs=1e-8)
    assert mixture.quantile(np.array([0.451, 0.5, 0.699])) == pytest.approx([at] * 3, abs=1e-14)
    low, high = mixture.quantile(np.array([0.44, 0.71]))
    assert low == pytest.approx(math.log(3.0 / (5.0 - (1.5 + 2.5 * 0.44 / 0.75))), abs=1e-12)
    assert high == pytest.approx(math.log(3.0 / (5.0 - (1.5 + 2.5 * 0.46 / 0.75))), abs=1e-12)


def test_moments_of_two_atoms():
    a, b = math.log(6.0 / 7.0), math.log(1.5)
    mean, sd = MIXTURES["two atoms"].moments
    assert mean == pytest.approx(0.4 * a + 0.6 * b, abs=1e-15)
    assert sd == pytest.approx(math.sqrt(0.24) * (b - a), rel=1e-14)


@pytest.mark.parametrize("name", MIXTURES)
def test_moments_of_a_mixture_are_those_of_its_quantiles(name):
    """Mean over 2^16 equidistant u: the midpoint rule is good to 1e-5 across the atoms' jumps."""
    u = (np.arange(2**16) + 0.5) / 2**16
    q = MIXTURES[name].quantile(u)
    mean, sd = MIXTURES[name].moments
    assert q.mean() == pytest.approx(mean, abs=2e-5)
    assert q.std() == pytest.approx(sd, abs=2e-5)


def test_a_point_has_no_spread():
    assert load_prior("polytrope-3").intervals[0].mixture.moments == (pytest.approx(math.log(1.5)), 0.0)


# --- shipped models ---

SHIPPED = {
    "uniform-index": (np.array([1.5, 2.25, 3.0]), Coordinate.INDEX),
    "wide-index": (np.array([1.5, 2.75, 4.0]), Coordinate.INDEX),
    "uniform-coefficient": (np.array([6 / 7, (6 / 7 + 1.5) / 2, 1.5]), Coordinate.COEFFICIENT),
    "uniform-log-coefficient": (np.log([6 / 7, math.sqrt(6 / 7 * 1.5), 1.5]), Coordinate.LOG_COEFFICIENT),
    "constant-density": (np.zeros(3), Coordinate.INDEX),
    "polytrope-1.5": (np.full(3, 1.5), Coordinate.INDEX),
    "polytrope-3": (np.full(3, 3.0), Coordinate.INDEX),
    "present-sun": (3.14 + 0.03 * stats.norm.ppf([1e-12, 0.5, 1 - 1e-12]), Coordinate.INDEX),
}


def test_every_shipped_model_is_checked_as_a_density_or_as_a_calibration():
    kinds = {name: type(load_prior(name)) for name in available_priors()}
    assert [name for name, kind in kinds.items() if kind is Calibration] == ["main-sequence"]
    assert {kind for name, kind in kinds.items() if name != "main-sequence"} == {StructureModel}
    assert {*SHIPPED, "by-mass", "main-sequence"} == set(kinds)


def test_the_shipped_calibration_is_documented_and_proper():
    model, again = load_prior("main-sequence"), parse_prior(load_prior("main-sequence").text, "main-sequence")
    assert (again.name, again.summary, again.source) == (model.name, model.summary, model.source)
    assert "\n" not in model.summary
    assert prior_document(again) == prior_document(model)
    assert model.needs == ("mass", "radius")
    mass, ratio, stated = (
        x.ravel() for x in np.meshgrid([0.2, 0.69, 0.8, 1.2, 3.0, 30.0], [0.85, 1.1, 1.34], [False, True])
    )
    log_mass, log_radius = np.log(mass), np.log(ratio) + model.relation_at(np.log(mass))[:, 0]
    relation = model.relation(log_mass, log_radius, stated)
    q = relation.quantile(np.tile(P, (len(mass), 1)), log_mass[:, None], log_radius[:, None])
    centre = relation.centre(log_mass[:, None], log_radius[:, None])
    assert relation.cumulative(q, centre) == pytest.approx(np.tile(P, (len(mass), 1)), abs=1e-9)
    assert np.all(np.diff(q, axis=1) > 0.0)
    assert np.all(q >= math.log(0.6))
    assert np.any(relation.convective > 0.0)  # all three kinds of law are among them
    assert np.any(relation.widening > 0.0)
    assert np.any(relation.follows < 1.0)


@pytest.mark.parametrize("name", [name for name in available_priors() if name != "main-sequence"])
def test_shipped_model_loads_and_is_documented(name):
    model = load_prior(name)
    assert model.name == name
    assert "\n" not in model.summary
    assert model.source
    assert parse_prior(model.text, name) == model
    for piece in model.intervals:
        q = piece.mixture.quantile(P)
        if piece.mixture.bracket[0] < piece.mixture.bracket[1]:
            assert piece.mixture.cumulative(q) == pytest.approx(P, abs=1e-9)
        assert np.all(q >= math.log(0.6) - 1e-15)


@pytest.mark.parametrize("name", SHIPPED)
def test_shipped_model_is_what_it_says(name):
    expected, coordinate = SHIPPED[name]
    p = np.array([1e-12, 0.5, 1.0 - 1e-12])
    assert load_prior(name).quantile(p) == pytest.approx(coordinate.to_log_coefficient(expected), abs=1e-6)


def test_present_sun_is_for_the_sun():
    model = load_prior("present-sun")
    assert model.applies_to.mass == (0.98, 1.02)
    assert model.applies_to.evolutionary_state == ("main-sequence",)
    assert model.needs == ("mass",)
    w = np.exp(model.quantile(stats.norm.cdf([-1.0, 0.0, 1.0])))
    assert w[1] == pytest.approx(1.613, abs=0.0005)  # as its summary says, to the digits printed
    assert (w[2] - w[0]) / 2.0 == pytest.approx(0.026, abs=0.0005)


def test_by_mass_switches_at_its_boundary():
    model, edge = load_prior("by-mass"), math.log(0.35)
    assert model.needs == ("mass",)
    assert model.edges == pytest.approx([edge], abs=1e-15)
    masses = np.array([-np.inf, math.log(0.08), np.nextafter(edge, -np.inf), edge, np.nextafter(edge, np.inf), 3.0])
    n = 5.0 - 3.0 * np.exp(-model.quantile(np.full(6, 0.9), masses))
    convective, other = 1.5 + 0.05 * stats.norm.ppf(0.9), 1.5 + 2.5 * 0.9
    assert n == pytest.approx([convective] * 3 + [other] * 3, abs=1e-12)


def test_by_mass_takes_masses_for_draws():
    model = load_prior("by-mass")
    u = np.array([[0.1, 0.5], [0.1, 0.5]])
    found = model.quantile(u, np.log([[0.2], [1.0]]))
    for row, interval in enumerate(model.intervals):
        assert found[row].tolist() == interval.mixture.quantile(u[row]).tolist()


def test_index_models_do_not_look_at_the_mass():
    model = load_prior("uniform-index")
    assert model.needs == ()
    assert model.quantile(P).tolist() == model.quantile(P, np.full(len(P), 5.0), np.zeros(len(P))).tolist()


# --- the calibration as data, and stars in it ---

NODES, BOUNDARIES = table("structure_nodes.csv"), table("structure_branches.csv")
STATES = ("unknown", "main-sequence", "pre-main-sequence", "evolved")


def test_the_document_of_the_calibration_holds_the_published_tables():
    document = prior_document(load_prior("main-sequence"))["calibration"]
    for own, column in (("mass", "mass"), ("radius_zams", "radius_zams"), ("coefficient_zams", "alpha_zams")):
        assert document["nodes"][own] == [float(node[column]) for node in NODES]
    for own, column in (("end", "x_end"), ("convective_above", "hayashi_above"), ("radius_limit", "radius_limit")):
        assert document["boundaries"][own] == [float(row[column]) if row[column] else None for row in BOUNDARIES]
    log_mass = np.log([float(row["mass"]) for row in BOUNDARIES])
    for row in document["by_mass"]:
        (node,) = (node for node in NODES if float(node["mass"]) == row["mass"])
        assert row["radius_zams"] == pytest.approx(float(node["radius_zams"]), rel=ROUNDING)
        assert row["n_effective"] == pytest.approx(5.0 - 3.0 / float(node["alpha_zams"]), rel=ROUNDING)
        assert row["gamma"] == pytest.approx(float(node["gamma"]), abs=ROUNDING)
        end = np.interp(math.log(row["mass"]), log_mass, [float(row["x_end"]) for row in BOUNDARIES])
        assert row["radius_at_end"] == pytest.approx(row["radius_zams"] * end, rel=ROUNDING)
    assert [row["mass"] for row in document["by_mass"] if row["radius_limit"]] == [0.5]  # 0.2: the end is the limit


def test_a_calibration_of_few_masses_shows_its_nodes_and_is_drawn():
    text = load_prior("main-sequence").text
    head, rows, tail = text.partition("nodes = [\n")[0], *text.partition("nodes = [\n")[2].split("\n]\n", 1)
    kept = [row for row in rows.splitlines() if row.startswith(("    [2.5,", "    [3.0,", "    [4.0,"))]
    few = parse_prior("\n".join([head + "nodes = [", *kept, "]", tail]), "few")
    assert few.nodes.mass.tolist() == [2.5, 3.0, 4.0]
    assert [row["mass"] for row in prior_document(few)["calibration"]["by_mass"]] == [2.5, 3.0, 4.0]
    lines = {line.get_gid(): len(line.get_xdata()) for line in domain_figure(few).axes[0].lines}
    assert lines["radius limit"] == 0  # it ends at 1 solar mass
    assert min(lines[name] for name in ("zero age", "end", "full convection", "smallest")) > 300


def test_the_marks_are_what_the_engines_make_of_the_stars():
    """A table over the plane, in every state: refusals and flags of `propagate` against the marks."""
    calibration = load_prior("main-sequence")
    mass, ratio, state = (
        x.ravel() for x in np.meshgrid([0.08, 0.3, 0.6, 0.8, 1.2, 8.0, 50.0], [0.7, 1.1, 1.32, 3], STATES)
    )
    radius = ratio.astype(float) * np.exp(calibration.relation_at(np.log(mass.astype(float)))[:, 0])
    stars = Stars.of(mass=(mass, 1e-4 * mass), radius=(radius, 1e-4 * radius), evolutionary_state=state.tolist())
    placed = place_stars(stars, calibration, "grid")
    marks = np.array(placed.mark)
    posterior = propagate(stars, outputs="potential_energy", prior="main-sequence")
    assert ((marks == "refused") == (posterior.status != Status.OK)).all()
    for mark, flag in (("inflated", Flag.RADIUS_INFLATED), ("taken as contracting", Flag.TAKEN_AS_CONTRACTING)):
        assert ((marks == mark) == ((posterior.flags & flag) != 0)).all()
    assert set(marks) == set(MARKS)
    assert [c.lines[0].get_gid() for c in domain_figure(calibration, placed).axes[0].containers] == list(MARKS)
