"""One star under every prior: the numbers are those of each prior alone; refusals, limits, order, table and figure."""

import functools
import io
import itertools
import json

import numpy as np
import pytest
from matplotlib.backends.backend_agg import FigureCanvasAgg
from rich.console import Console

from command_line import assert_one_message, stellerg
from stellerg import Stars, available_priors, load_prior, propagate
from stellerg.energetics import OUTPUTS, Conventions
from stellerg.errors import InputError
from stellerg.posterior.content import number
from stellerg.posterior.document import star_document
from stellerg.report.comparison import compare, comparison_text
from stellerg.report.comparison_figure import comparison_figure

GIVEN = {"mass": "1.00 ± 0.01", "radius": "1.00 ± 0.01", "luminosity": "1.00 ± 0.02"}
BOTH = ("binding_energy", "kelvin_helmholtz_time")
SPREAD = ["by-mass", "main-sequence", "uniform-coefficient", "uniform-index", "uniform-log-coefficient", "wide-index"]
# w = 3/(5 - n) of the polytropes n = 0, 3/2 and 3 (Chandrasekhar 1939, An Introduction to the Study of Stellar
# Structure, ch. IV, eq. 90)
LIMITS = {"constant-density": 3 / 5, "polytrope-1.5": 6 / 7, "polytrope-3": 3 / 2}
ROUNDING = 1e-12
OWN = 'summary = "a density of mine"\nsource = "judgement"\n'
NORMAL = '[coefficient]\ndistribution = "normal"\nmean = 1.6\nstandard_deviation = 0.05\n'


def options(given):
    return [word for name, text in given.items() for word in (f"--{name.replace('_', '-')}", text)]


STAR = options(GIVEN)


@functools.lru_cache  # the same words give the same answer
def called(*arguments, columns=140):
    return stellerg("star", *arguments, "--compare-priors", columns=columns)


def documents(*arguments, code=0):
    result = called(*arguments, "--json")
    assert result.code == code, result
    assert result.err == ""
    return {document["prior"]: document for document in result.json}


@functools.lru_cache
def sun_like():
    return compare(Stars.of("star", **GIVEN))


def own_prior(folder, density=NORMAL, name="mine", more=""):
    path = folder / f"{name}.toml"
    path.write_text(OWN + more + density, encoding="utf-8")
    return path


def printed(comparison, width=140):
    console = Console(file=io.StringIO(), width=width, highlight=False)
    console.print(comparison_text(comparison))
    return console.file.getvalue()


# --- which priors, and in which order ---
def test_every_shipped_prior_takes_part_but_that_of_the_sun():
    assert list(documents(*STAR)) == [*SPREAD, *LIMITS]
    assert set(available_priors()) == {*SPREAD, *LIMITS, "present-sun"}  # a new prior needs its place here


def test_the_prior_of_the_sun_takes_part_where_it_is_named():
    names = [answer.name for answer in compare(Stars.of("Sun", **GIVEN), prior="present-sun").answers]
    assert names == sorted([*SPREAD, "present-sun"]) + list(LIMITS)


def test_limits_are_the_priors_of_one_structure():
    answers = sun_like().answers
    assert [answer.name for answer in answers if answer.limit] == list(LIMITS)


def test_a_file_comes_first_and_is_in_use(tmp_path):
    path = own_prior(tmp_path)
    assert list(documents(*STAR, "--prior", path)) == ["mine", *SPREAD, *LIMITS]
    comparison = compare(Stars.of("star", **GIVEN), prior=path)
    assert [answer.name for answer in comparison.answers if answer.in_use] == ["mine"]


def test_a_point_in_a_file_comes_first_too(tmp_path):
    path = own_prior(tmp_path, '[index]\ndistribution = "point"\nvalue = 2\n')
    first = compare(Stars.of("star", **GIVEN), prior=path).answers[0]
    assert (first.name, first.limit, first.in_use) == ("mine", False, True)


def test_a_file_called_like_a_shipped_prior_is_told_from_it(tmp_path):
    comparison = compare(Stars.of("star", **GIVEN), prior=own_prior(tmp_path, name="wide-index"))
    names = [answer.name for answer in comparison.answers]
    assert names == ["wide-index (own)", *SPREAD, *LIMITS]
    medians = {a.name: a.posterior.median("binding_energy")[0] for a in comparison.answers}
    assert medians["wide-index (own)"] != medians["wide-index"]


def test_a_loaded_prior_is_the_shipped_one():
    by_name, loaded = (compare(Stars.of("star", **GIVEN), prior=p) for p in ("wide-index", load_prior("wide-index")))
    assert loaded.documents() == by_name.documents()
    assert [a.in_use for a in loaded.answers] == [a.in_use for a in by_name.answers]
    assert [a.name for a in loaded.answers if a.in_use] == ["wide-index"]


# --- numbers ---
def test_numbers_are_those_of_each_prior_alone():
    """The same bits: JSON keeps all digits."""
    stars = Stars.of("star", **GIVEN)
    for name, document in documents(*STAR).items():
        assert document == star_document(propagate(stars, prior=name)), name


def test_priors_differ_and_time_without_structure_does_not():
    """A control: the same prior throughout would pass no test of numbers here."""
    found = documents(*STAR, "--outputs", "binding_energy,free_fall_time")
    energies = {document["outputs"]["binding_energy"]["median"] for document in found.values()}
    assert len(energies) == len(found) - 1  # above 0.35 solar masses by-mass is wide-index
    falls = [document["outputs"]["free_fall_time"]["median"] for document in found.values()]
    np.testing.assert_allclose(falls, falls[0], rtol=ROUNDING)


def test_limits_in_closed_form():
    """The energy of stars of equal mass and radius goes as the coefficient."""
    exact = dict.fromkeys(GIVEN, "1 exact")
    found = documents(*options(exact))
    energies = {name: found[name]["outputs"]["binding_energy"]["median"] for name in LIMITS}
    for name, coefficient in LIMITS.items():
        ratio = energies[name] / energies["polytrope-3"]
        assert ratio == pytest.approx(coefficient / LIMITS["polytrope-3"], rel=1e-10), name


def test_settings_reach_every_prior():
    arguments = ["--outputs", "kelvin_helmholtz_time,potential_energy", "--energy-unit", "J", "--seed", "3"]
    arguments += ["--engine", "montecarlo", "--time-convention", "potential", "--correlation", "mass,radius=0.4"]
    stars = Stars.of("star", **GIVEN, correlation={("mass", "radius"): 0.4})
    for name, document in documents(*STAR, *arguments).items():
        alone = propagate(
            stars,
            prior=name,
            outputs=("kelvin_helmholtz_time", "potential_energy"),
            engine="montecarlo",
            seed=3,
            conventions=Conventions(time="potential", energy_unit="J"),
        )
        assert document == star_document(alone), name


def test_one_star_is_wanted():
    two = Stars.of(["a", "b"], mass=["1.0 ± 0.1"] * 2, radius=["1.0 ± 0.1"] * 2)
    with pytest.raises(InputError, match="2 stars"):
        compare(two)


# --- priors that do not apply ---
# contracting stars above 5 solar masses are calibrated up to twice the radius of age zero, some 3.4 solar radii here
CONTRACTING = {"mass": "8.0 ± 0.1", "radius": "15 ± 1", "luminosity": "3000 ± 100"}
STATED = ["--evolutionary-state", "pre-main-sequence"]


def test_a_star_stated_contracting():
    """Light: every prior answers, the calibration as a fully convective star. Heavy and large: it refuses."""
    light = {"mass": "0.50 ± 0.02", "radius": "1.5 ± 0.1", "luminosity": "0.6 ± 0.1"}
    found = documents(*options(light), *STATED)
    assert {document["status"] for document in found.values()} == {"ok"}
    assert "taken-as-contracting" not in found["main-sequence"]["flags"]  # it was stated
    heavy = documents(*options(CONTRACTING), *STATED)
    assert [name for name, document in heavy.items() if document["status"] != "ok"] == ["main-sequence"]
    assert heavy["main-sequence"]["status"] == "outside-calibration"
    assert heavy["main-sequence"]["outputs"] == dict.fromkeys(BOTH)


def test_refused_priors_stand_below_with_their_reason():
    result = called(*options(CONTRACTING), *STATED, "--prior", "present-sun")
    assert result.code == 0  # others answer
    table, below = result.out.split("Priors without a result")
    below = " ".join(below.split())
    refused = 0
    for name in ("main-sequence", "present-sun"):
        state = {"evolutionary_state": "pre-main-sequence"}
        alone = propagate(Stars.of("star", **CONTRACTING, **state), prior=name)
        (sentence,) = alone.status_text()
        assert f"{name}: outside-calibration: {sentence}" in below
        assert not any(line.startswith(name) and "to" in line for line in table.splitlines())
        refused += 1
    assert refused == 2
    assert "prior in use: present-sun (no result)" in result.words
    assert "Priors without a result" not in called(*STAR).out


def test_an_engine_may_refuse_a_prior():
    """The first order of a prior that changes within the range of the mass does not exist."""
    star = options({**GIVEN, "mass": "0.35 ± 0.05"})
    found = documents(*star, "--engine", "linear")
    assert found["by-mass"]["status"] == "engine-refused"
    assert found["wide-index"]["status"] == "ok"
    assert "by-mass: engine-refused: " in called(*star, "--engine", "linear").words


def test_an_output_that_one_prior_does_not_give(tmp_path):
    """Where a prior does not apply, what carries no structure is still given."""
    path = own_prior(tmp_path, more="[applies_to]\nmass = [2.0, 3.0]\n")
    result = called(*STAR, "--prior", path, "--outputs", "binding_energy,free_fall_time", columns=200)
    (row,) = (line for line in result.out.splitlines() if line.startswith("mine *"))
    assert row.split()[2:4] == ["not", "given"]
    assert "mine: no binding energy: prior mine applies only to 2 to 3 solar masses" in result.words
    assert "free fall time: the same under each prior" in result.words
    outputs = ("binding_energy", "free_fall_time")
    _, panels = drawn(compare(Stars.of("star", **GIVEN), prior=path, outputs=outputs))
    assert [[text.get_text() for text in axis.texts] for axis in panels.values()] == [["not given"], []]
    bars = [len(axis.containers[0].patches) for axis in panels.values()]
    assert bars == [len(SPREAD) + len(LIMITS), 1 + len(SPREAD) + len(LIMITS)]


def test_an_evolved_star_keeps_what_has_no_structure():
    state = ["--evolutionary-state", "evolved", "--outputs", "binding_energy,free_fall_time"]
    found = documents(*STAR, *state)
    assert {document["status"] for document in found.values()} == {"partial"}


def test_a_doubtful_star_is_called_doubtful_under_every_prior_that_answers():
    large = options({**GIVEN, "radius": "20 ± 1"})
    result = called(*large)
    assert result.code == 0
    assert "every prior: if this star is a giant" in result.words
    assert "main-sequence: evolved-or-contracting: " in result.words


# --- exit codes ---
NONE = {
    "evolved": [*STAR, "--evolutionary-state", "evolved"],
    "underdetermined": ["--mass", "1.0 ± 0.1"],
    "not bound": [*STAR, "--adiabatic-index", "4/3"],
}


@pytest.mark.parametrize("case", NONE)
def test_without_a_result_under_any_prior(case, tmp_path):
    path = tmp_path / "star.png"
    result = called(*NONE[case], "--plot", path)
    assert result.code == 3
    assert not path.exists()
    found = documents(*NONE[case], code=3)
    assert len(found) == len(SPREAD) + len(LIMITS)
    assert {str(document["outputs"]) for document in found.values()} == {str(dict.fromkeys(BOTH))}
    assert "the answer under each prior: none" in result.words
    for document in found.values():
        assert document["status_text"] in result.words
    assert "median" not in result.out


def test_a_prior_without_a_result_is_no_failure_where_others_answer():
    assert called(*options({**GIVEN, "mass": "2.0 ± 0.1"}), "--prior", "present-sun").code == 0


def test_wrong_calls(tmp_path):
    assert_one_message(called(*STAR, "--prior", "nobody"), "'nobody'", "shipped: by-mass")
    assert_one_message(called(*STAR, "--plot", tmp_path / "star.docx"), "star.docx", ".png")
    assert_one_message(called(*STAR, "--outputs", "mass"), "'mass'")
    path = own_prior(tmp_path, '[index]\ndistribution = "point"\nvalue = 7\n')
    assert_one_message(called(*STAR, "--prior", path), "mine")
    with pytest.raises(InputError, match="no result under any prior"):
        comparison_figure(compare(Stars.of("star", mass="1.0 ± 0.1")))


# --- the table ---
def test_the_table_holds_the_numbers_of_each_prior():
    result = called(*STAR)
    lines = result.out.splitlines()
    found = documents(*STAR)
    for name, document in found.items():
        (line,) = (text for text in lines if text.split("  ")[0].removesuffix(" *") == name)
        wanted = []
        for output, power in zip(BOTH, (48, 0), strict=True):
            values = document["outputs"][output]
            wanted += [number(values["median"], power), number(values["interval68"][0], power), "to"]
            wanted += [number(values["interval68"][1], power)]
            wanted += [f"{100.0 * values['budget']['structure']:.1f}", "%"]
        assert line.removeprefix(name).replace("*", "").split() == wanted
    starts = [text.split("  ")[0] for text in lines]
    assert starts.index("wide-index") + 1 == starts.index("limits")
    assert starts.index("limits") + 1 == starts.index("constant-density")
    assert result.out.count("10^48 erg") == 2  # once in the heading, once for the range of medians
    assert "uniform-index *" in starts
    assert "* prior in use: uniform-index." in result.words


def test_range_of_medians_leaves_limits_out():
    found = documents(*STAR)
    medians = [found[name]["outputs"]["binding_energy"]["median"] for name in SPREAD]
    assert f"a factor of {max(medians) / min(medians):.2f} (limits left out)" in called(*STAR).words
    limits = [found[name]["outputs"]["binding_energy"]["median"] for name in LIMITS]
    assert min(limits) < min(medians)  # a control: with them the factor would be another


@pytest.mark.parametrize("outputs", [BOTH, tuple(OUTPUTS)], ids=["two", "all"])
def test_nothing_is_cut_in_a_terminal_of_80_columns(outputs):
    result = called(*STAR, "--outputs", ",".join(outputs), columns=80)
    assert "…" not in result.out
    assert max(map(len, result.out.splitlines())) <= 80
    for name in (*SPREAD, *LIMITS):
        rows = [text for text in result.out.splitlines() if text.split("  ")[0].removesuffix(" *") == name]
        assert len(rows) == len(outputs), name  # below each other, for they do not fit side by side


def test_conventions_and_flags_name_their_priors():
    """Radiation counts under the calibration only, and its coefficient lies outside the narrow priors."""
    words = called(*STAR).words
    assert "Convention (every prior but main-sequence): abs(E) = abs(Omega)/2" in words
    assert "Convention (main-sequence): abs(E) = beta abs(Omega)/2" in words
    flagged = [name for name, d in documents(*STAR).items() if "prior-excludes-calibration" in d["flags"]]
    assert 0 < len(flagged) < len(SPREAD) + len(LIMITS)
    assert f"prior-excludes-calibration ({', '.join(flagged)})" in words


def test_a_share_of_mass_and_structure_together_is_said():
    star = options({**GIVEN, "mass": "0.35 ± 0.05"})
    share = documents(*star)["by-mass"]["outputs"]["binding_energy"]["budget"]["mass_and_structure"]
    assert abs(share) > 0.005
    assert f"Under by-mass mass and structure together have a further share: {100 * share:.1f} %" in called(*star).words
    assert "further share" not in called(*STAR).words


def test_exact_values_under_limits_have_no_width():
    result = called(*options(dict.fromkeys(GIVEN, "1 exact")), "--outputs", "binding_energy")
    rows = {line.split("  ")[0]: line for line in result.out.splitlines()}
    for name in LIMITS:
        assert "no width" in rows[name]
    assert "no width" not in rows["wide-index"]


def test_explain_comes_first():
    plain, explained = called(*STAR), called(*STAR, "--explain")
    assert explained.out.startswith("How the measurements were read")
    assert explained.out.endswith(plain.out)


def test_a_name_is_printed_as_it_is():
    assert printed(compare(Stars.of("K[7] $x$", **GIVEN))).startswith("K[7] $x$: the answer under each prior")


# --- the figure ---
def drawn(comparison):
    """The figure after its layout, and the panels by title."""
    figure = comparison_figure(comparison)
    FigureCanvasAgg(figure).draw()
    return figure, {axis.get_title(loc="left"): axis for axis in figure.axes}


def named_places(axis):
    labels = axis.get_yticklabels()
    return {t.get_text().removesuffix("\n(in use)"): y for t, y in zip(labels, axis.get_yticks(), strict=True)}


def test_bars_are_the_numbers():
    comparison = sun_like()
    _, panels = drawn(comparison)
    assert list(panels) == ["binding energy", "Kelvin-Helmholtz time"]
    places = named_places(panels["binding energy"])
    assert sorted(places, key=places.get) == [*SPREAD, "limits", *LIMITS]
    for (axis, name), power in zip(zip(panels.values(), BOTH, strict=True), (48, 0), strict=True):
        bars = {container.get_label(): container.patches for container in axis.containers}
        (ticks,) = (line for line in axis.lines if line.get_label() == "median")
        for row, answer in enumerate(comparison.answers):
            posterior, place = answer.posterior, places[answer.name]
            for key, share in (("interval68", 0.6826894921370859), ("interval95", 0.9544997361036416)):
                bar = bars[key][row]
                ends = np.array([bar.get_x(), bar.get_x() + bar.get_width()]) * 10.0**power
                np.testing.assert_allclose(ends, posterior.interval(name, share)[0], rtol=ROUNDING)
                assert bar.get_y() + bar.get_height() / 2 == pytest.approx(place)
            assert ticks.get_ydata()[row] == pytest.approx(place)
            at = ticks.get_xdata()[row] * 10.0**power
            assert at == pytest.approx(posterior.median(name)[0], rel=ROUNDING)
        used = next(a for a in comparison.answers if a.in_use)
        (marked,) = (line for line in axis.lines if line.get_linestyle() == ":")
        assert marked.get_xdata()[0] * 10.0**power == pytest.approx(used.posterior.median(name)[0], rel=ROUNDING)
    assert panels["binding energy"].get_xlabel() == "$10^{48}$ erg"
    assert panels["Kelvin-Helmholtz time"].get_xlabel() == "Myr"


def test_hills_are_the_densities():
    """Each to a height of its own: ratios of heights are ratios of densities."""
    comparison = sun_like()
    _, panels = drawn(comparison)
    axis, places = panels["binding energy"], named_places(panels["binding energy"])
    hills = [line for line in axis.lines if len(line.get_xdata()) > 10]
    assert len(hills) == len(comparison.answers)
    for answer, hill in zip(comparison.answers, hills, strict=True):
        values, heights = hill.get_xdata() * 1e48, -hill.get_ydata()
        density = answer.posterior.density(values, "binding_energy")[0]
        foot = heights.min() - density.min() / (density.max() - density.min()) * np.ptp(heights)
        expected = foot + (heights.max() - foot) * density / density.max()
        np.testing.assert_allclose(heights, expected, atol=1e-9)
        assert places[answer.name] - 1 < -heights.max() < -heights.min() < places[answer.name]


def text_boxes(figure):
    """Boxes of everything written, by text."""
    texts = [figure._suptitle, figure._supxlabel, *figure.legends[0].get_texts()]
    for axis in figure.axes:
        low, high = axis.get_xlim()
        texts += [axis._left_title, axis.xaxis.label]
        texts += [t for t in axis.get_xticklabels() if low <= t.get_position()[0] <= high]
        texts += axis.get_yticklabels() if axis.yaxis.get_tick_params()["labelleft"] else []
    return [(t, t.get_window_extent()) for t in texts if t.get_text().strip()]


FIGURES = {
    "Sun-like": ({**GIVEN}, {}),
    "one output": ({**GIVEN}, {"outputs": ("binding_energy",)}),
    "all outputs": ({**GIVEN}, {"outputs": tuple(OUTPUTS)}),
    "stated contracting": ({**CONTRACTING, "evolutionary_state": "pre-main-sequence"}, {"prior": "present-sun"}),
    "exact": (dict.fromkeys(GIVEN, "1 exact"), {"prior": "polytrope-3"}),
}


@pytest.mark.parametrize("case", FIGURES)
def test_what_is_written_can_be_read(case):
    """No letters below 9 points, nothing outside the sheet, no text on another."""
    given, settings = FIGURES[case]
    figure, _ = drawn(compare(Stars.of("star", **given), **settings))
    boxes = text_boxes(figure)
    assert min(text.get_fontsize() for text, _ in boxes) >= 9.0
    for text, box in boxes:
        assert figure.bbox.x0 <= box.x0 < box.x1 <= figure.bbox.x1, text
        assert figure.bbox.y0 <= box.y0 < box.y1 <= figure.bbox.y1, text
    title = figure._suptitle
    for (a, first), (b, second) in itertools.combinations(boxes, 2):
        if title not in (a, b):  # whose empty lines hold the legend
            assert not first.overlaps(second), (a, b)
    line = 1.2 * title.get_fontsize() * figure.dpi / 72.0  # the first one, which is written on
    for text in figure.legends[0].get_texts():
        assert text.get_window_extent().y1 < title.get_window_extent().y1 - line


def test_intervals_and_groups_differ_in_lightness():
    """So that they are told apart without colour: relative luminance (IEC 61966-2-1, its gamma taken as 2.2)."""
    _, panels = drawn(sun_like())
    weights = np.array([0.2126, 0.7152, 0.0722])
    shades = {c.get_label(): [p.get_facecolor()[:3] for p in c.patches] for c in panels["binding energy"].containers}
    light = {key: [weights @ np.array(colour) ** 2.2 for colour in colours] for key, colours in shades.items()}
    for pale, deep in zip(light["interval95"], light["interval68"], strict=True):
        assert (pale + 0.05) / (deep + 0.05) > 2.0


def test_refused_priors_are_named_in_the_figure():
    stars = Stars.of("star", **CONTRACTING, evolutionary_state="pre-main-sequence")
    figure, panels = drawn(compare(stars, prior="present-sun"))
    foot = " ".join(figure._supxlabel.get_text().split())
    assert "no result: main-sequence (outside-calibration), present-sun (outside-calibration)" in foot
    assert "main-sequence" not in named_places(panels["binding energy"])


def test_a_wide_range_is_drawn_on_a_logarithmic_axis(tmp_path):
    density = '[log_coefficient]\ndistribution = "uniform"\nlower = 0.0\nupper = 5.0\n'
    comparison = compare(Stars.of("star", **GIVEN), prior=own_prior(tmp_path, density))
    _, panels = drawn(comparison)
    axis = panels["binding energy"]
    assert axis.get_xscale() == "log"
    low, high = comparison.answers[0].posterior.interval("binding_energy", 0.9544997361036416)[0] / 1e48
    bar = next(c for c in axis.containers if c.get_label() == "interval95").patches[0]
    scale = 10.0 ** comparison.power("binding_energy") / 1e48
    assert bar.get_x() * scale == pytest.approx(low, rel=ROUNDING)
    assert (bar.get_x() + bar.get_width()) * scale == pytest.approx(high, rel=ROUNDING)
    # a coefficient uniform in the logarithm: a plateau per logarithm, where a density per erg would fall as 1/E
    hill = next(line for line in axis.lines if len(line.get_xdata()) > 10)
    at, heights = hill.get_xdata(), -hill.get_ydata()
    low, high = bar.get_x(), bar.get_x() + bar.get_width()
    inner = heights[(at > 1.2 * low) & (at < high / 1.2)]
    assert np.ptp(inner) < 1e-3
    _, plain = drawn(sun_like())
    assert plain["binding energy"].get_xscale() == "linear"


@pytest.mark.parametrize("ending", ["png", "svg", "pdf"])
def test_plot_from_the_command_line(tmp_path, ending):
    path = tmp_path / f"star.{ending}"
    result = called(*STAR, "--plot", path, "--json")
    assert result.code == 0
    assert json.loads(result.out)
    data = path.read_bytes()
    assert data.startswith({"png": b"\x89PNG", "svg": b"<?xml", "pdf": b"%PDF-"}[ending])
    if ending == "svg":
        text = data.decode()
        for word in ("by-mass", "polytrope-3", "limits", "(in use)", "68.27 %", "95.45 %", "binding energy", "Myr"):
            assert f">{word}<" in text
        assert text.count(">Myr<") == 1
