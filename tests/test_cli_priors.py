"""`stellerg priors`: the list, one model in words, JSON and as a figure, and the fault of a file with its line."""

import math
import re
from pathlib import Path

import matplotlib.image
import numpy as np
import pytest
from scipy import stats

from command_line import assert_one_message, stellerg
from stellerg.errors import PriorError
from stellerg.structure.calibration import Place
from stellerg.structure.files import available_priors, load_prior, parse_prior
from test_calibration import table
from test_prior_files import GOOD, HEAD, MIXTURE, REFUSED, UNIFORM, component

SHIPPED = list(available_priors())
CALIBRATION = "main-sequence"
DENSITIES = [name for name in SHIPPED if name != CALIBRATION]

# The line at which each fault of REFUSED stands, compared with its text one by one: that of the key, or of the
# header of the table that lacks one (line 1 for the whole file).
LINES = {
    "not toml": 1,
    "empty": 1,
    "no summary": 1,
    "blank summary": 1,
    "summary no text": 1,
    "no source": 1,
    "no density": 1,
    "two densities": 7,
    "density no table": 3,
    "unknown key on top": 1,
    "unknown key in a density": 7,
    "key of another density": 7,
    "unknown key in a mixture": 5,
    "unknown key in a component": 10,
    "unknown key in an interval": 5,
    "unknown key in applies_to": 8,
    "unknown key in common": 10,
    "no distribution": 3,
    "unknown distribution": 4,
    "missing number": 3,
    "text for a number": 6,
    "boolean for a number": 6,
    "nan": 6,
    "inf": 6,
    "ends exchanged": 6,
    "no width": 6,
    "n = 5": 6,
    "n below 0": 5,
    "point n = 5": 5,
    "w below 3/5": 5,
    "ln w below ln 3/5": 5,
    "no spread": 6,
    "negative spread": 6,
    "normal out of range": 5,
    "unbounded beta": 5,
    "points no list": 5,
    "one point": 5,
    "lengths differ": 6,
    "points fall": 5,
    "negative density": 6,
    "no probability": 6,
    "boolean in a list": 6,
    "table beyond n = 5": 5,
    "no components": 3,
    "component no table": 5,
    "no weight": 5,
    "zero weight": 6,
    "negative weight": 11,
    "boolean weight": 6,
    "weights not 1": 5,
    "mixture in a mixture": 7,
    "interval no tables": 1,
    "no intervals": 1,
    "interval and density": 7,
    "no mass": 3,
    "one mass": 4,
    "text mass": 4,
    "boolean mass": 4,
    "start above 0": 4,
    "a gap": 10,
    "an overlap": 10,
    "an empty interval": 4,
    "end below inf": 4,
    "interval without density": 3,
    "applies_to no table": 1,
    "limits exchanged": 8,
    "limits below 0": 8,
    "one limit": 8,
    "unknown state": 8,
    "state no list": 8,
    "common no table": 1,
    "no fraction": 7,
    "fraction above 1": 8,
    "no within": 7,
    "within no text": 9,
    "training no table": 1,
    "unknown key in training": 11,
    "no keys": 7,
    "keys no list": 9,
    "an empty list of keys": 9,
    "a number for a key": 9,
    "a short key": 9,
    "a key that is no number": 9,
    "a key in capitals": 9,
    "a key twice": 9,
    "no number of stars": 7,
    "another number of stars": 8,
    "a boolean number of stars": 8,
    "no observables": 7,
    "no observable": 10,
    "an unknown observable": 10,
    "observables no list": 10,
}
OF_THE_WHOLE_FILE = ("empty", "no summary", "no source", "no density")

ABOUT = {"name", "summary", "source", "applies_to", "common"}
INTERVAL = {
    "mass",
    "mass_in_words",
    "density",
    "index",
    "coefficient",
    "log_coefficient",
    "excluded",
    "landmarks",
}
NUMBERS = {"mean", "standard_deviation", "median", "interval68", "interval95", "ranges"}


def written(folder, text, name="my.toml"):
    path = folder / name
    path.write_text(text, encoding="utf-8")
    return path


# --- list ---


def test_the_list_has_every_shipped_model_with_its_summary():
    result = stellerg("priors", "list")
    assert (result.code, result.err) == (0, "")
    for name in SHIPPED:
        model = load_prior(name)
        assert re.search(rf"^{re.escape(name)}$", result.out, re.MULTILINE)
        assert model.summary in result.words
    for words in ("uniform in n from 1.5 to 3", "below 0.35 solar masses: normal in n, 1.5 ± 0.05", "n = 0"):
        assert words in result.words
    assert result.words.count("any star not stated evolved") == len(SHIPPED) - 2
    assert "stars of 0.98 to 1.02 solar masses, whose evolutionary state, if stated, is main-sequence" in result.words
    assert (
        "stars of 0.1 to 40 solar masses, whose evolutionary state, if stated, is main-sequence or pre" in result.words
    )
    low, high = min(column("alpha_zams")), max(column("alpha_zams"))
    assert f"w from mass and radius: {low:g} to {high:g} at age zero" in result.words


def test_the_list_as_json_is_what_show_gives():
    documents = stellerg("priors", "list", "--json").json
    assert [document["name"] for document in documents] == SHIPPED
    for document in documents:
        assert document == stellerg("priors", "show", document["name"], "--json").json


# --- show ---


@pytest.mark.parametrize("name", DENSITIES)
def test_show(name):
    model = load_prior(name)
    result = stellerg("priors", "show", name)
    assert (result.code, result.err) == (0, "")
    for words in (model.summary, model.source, "applies to", "common part", "68.27 %", "95.45 %"):
        assert words in result.words
    assert result.words.count("structure coefficient w") == len(model.intervals)
    assert result.words.count("Excluded") == len(model.intervals)
    for star in ("uniform density", "convective star", "radiative star", "present Sun"):
        assert result.words.count(star) >= len(model.intervals)


def test_the_numbers_shown_of_a_uniform_index():
    """Closed forms: n is 1.5 + 1.5 p; the mean of w is 2 ln 1.75; ends of w are 3/(5 - n)."""
    p = 0.5 - 0.5 * math.erf(2 / math.sqrt(2))
    ends = 1.5 + 1.5 * p, 3.0 - 1.5 * p
    words = stellerg("priors", "show", "uniform-index").words
    assert f"{ends[0]:.3f} to {ends[1]:.3f}" in words
    assert f"{2 * math.log(1.75):.3f} {3 / 2.75:.3f}" in words
    low, high = (3 / (5 - n) for n in ends)
    assert f"{low:.4f} to {high:.3f}" in words
    assert f"by a factor of {high / low:.2f} between the ends of the 95.45 % interval" in words
    assert "n below 1.5 and n above 3 (w below 0.8571 and w above 1.5)" in words


def test_show_of_a_point_says_that_it_has_no_width():
    words = stellerg("priors", "show", "constant-density").words
    assert words.count("no width") == 6
    assert "Excluded: everything but n = 0 (w = 0.6)." in words
    assert "adds nothing" in words


@pytest.mark.parametrize("name", DENSITIES)
def test_json_keys(name):
    document = stellerg("priors", "show", name, "--json").json
    assert set(document) == {*ABOUT, "intervals"}
    assert set(document["applies_to"]) == {"mass", "evolutionary_state"}
    assert len(document["intervals"]) == len(load_prior(name).intervals)
    for interval in document["intervals"]:
        assert set(interval) == INTERVAL
        for coordinate in ("index", "coefficient", "log_coefficient"):
            assert set(interval[coordinate]) == NUMBERS
            low, high = interval[coordinate]["interval68"]
            assert low <= interval[coordinate]["median"] <= high
        assert set(interval["excluded"]) == {"index", "coefficient"}
        assert len(interval["landmarks"]) == 4


def column(name, file="structure_nodes.csv"):
    return [float(row[name]) for row in table(file) if row[name]]


def test_show_of_the_calibration():
    """The numbers of the text are those of the nodes and boundaries, and every region is named."""
    result = stellerg("priors", "show", CALIBRATION)
    model, bounds = load_prior(CALIBRATION), "structure_branches.csv"
    assert (result.code, result.err) == (0, "")
    for words in (model.summary, model.source, "applies to", "0.1 to 40 solar masses", "Covered", "Refused"):
        assert words in result.words
    assert "common part 1.5 % of w (standard deviation of ln w), shared by stars of like mass" in result.words
    shown = [line.split() for line in result.out.splitlines() if re.match(r" *[\d.]+( +[\d.]+){4} ", line)]
    assert [float(line[0]) for line in shown] == [0.2, 0.5, 1.0, 2.0, 5.0, 10.0, 30.0]
    for mass, *cells in shown:
        (node,) = (row for row in table("structure_nodes.csv") if float(row["mass"]) == float(mass))
        radius, w, gamma, scatter = (float(node[x]) for x in ("radius_zams", "alpha_zams", "gamma", "scatter"))
        end = radius * np.interp(math.log(float(mass)), np.log(column("mass", bounds)), column("x_end", bounds))
        numbers = [radius, w, 5.0 - 3.0 / w, gamma, 100.0 * scatter, end]
        written = [float(cell) for cell in cells if cell != "%"]
        assert [*written[:5], written[-1]] == pytest.approx(numbers, rel=5e-4)  # four digits are written
    for name in ("x_end", "radius_limit", "hayashi_above"):
        values = column(name, bounds)
        assert f"{min(values):g} to {max(values):g} R_zams" in result.words
    for place in stellerg("priors", "show", CALIBRATION, "--json").json["calibration"]["places"]:
        assert f"{place['name']} {place['words']}" in result.words


def test_json_of_the_calibration():
    document = stellerg("priors", "show", CALIBRATION, "--json").json
    assert set(document) == {*ABOUT, "calibration"}
    assert document["common"] == {"fraction": None, "within": "mass", "standard_deviation": 0.015, "scale": 0.5}
    assert document["calibration"]["nodes"]["gamma"] == column("gamma")
    assert document["calibration"]["boundaries"]["radius_limit"][-1] is None
    places = {place["name"]: place["covered"] for place in document["calibration"]["places"]}
    assert len(places) == len(Place) + 1  # every place there is, and stars stated evolved
    assert sum(places.values()) == sum(place.covered for place in Place)


def test_check_shows_what_the_file_says(tmp_path):
    good, text = load_prior(CALIBRATION).text, "    [2.0, 1.63, 1.966, 0.5, 0.03],"
    assert text in good
    mine = written(tmp_path, good.replace(text, text.replace("1.63", "1.7").replace("0.03", "0.0125")))
    assert re.search(r"\n +2 +1\.700 +1\.966 .* 1\.2 % ", stellerg("priors", "check", mine).out)
    wrong = written(tmp_path, good.replace(text, text.replace("1.63", "-1.63")))
    assert_one_message(stellerg("priors", "check", wrong), "[calibration]: 'radius_zams' must be positive", "-1.63")


def test_masses_are_as_written():
    intervals = stellerg("priors", "show", "by-mass", "--json").json["intervals"]
    assert [interval["mass"] for interval in intervals] == [[0.0, 0.35], [0.35, None]]


def test_a_file_with_everything_in_it(tmp_path):
    text = (
        HEAD.replace("one line", "n [bold]between[/bold] limits")
        + '[applies_to]\nmass = [1, 2]\n[common]\nfraction = 0.5\nwithin = "cluster"\n'
        + UNIFORM.join(["[index]\n", ""])
    )
    result = stellerg("priors", "show", written(tmp_path, text), columns=200)
    assert "n [bold]between[/bold] limits" in result.out
    assert "stars of 1 to 2 solar masses not stated evolved" in result.words
    assert "50 %, shared by stars of one 'cluster'" in result.words


def test_a_density_that_reaches_five_has_no_mean_of_w(tmp_path):
    text = HEAD + '[index]\ndistribution = "normal"\nmean = 4.5\nstandard_deviation = 0.5\n'
    path = written(tmp_path, text)
    median = 3.0 / (5.0 - stats.truncnorm(-9.0, 1.0, 4.5, 0.5).median())
    assert f"structure coefficient w infinite {median:.3f}" in stellerg("priors", "show", path).words
    assert stellerg("priors", "show", path, "--json").json["intervals"][0]["coefficient"]["mean"] is None


def test_values_too_large_for_a_number_are_shown(tmp_path):
    text = HEAD + '[log_coefficient]\ndistribution = "uniform"\nlower = 0\nupper = 2000\n'
    result = stellerg("priors", "show", written(tmp_path, text), "--plot", tmp_path / "prior.png")
    assert (result.code, result.err) == (0, "")
    assert "infinite" in result.words
    assert "by a factor beyond any number" in result.words


# --- the figure ---


@pytest.mark.parametrize("name", ["by-mass", "present-sun", "polytrope-3"])
def test_plot(name, tmp_path):
    path = tmp_path / "prior.png"
    result = stellerg("priors", "show", name, "--plot", path)
    assert (result.code, result.err) == (0, "")
    image = matplotlib.image.imread(path)
    assert image.shape[0] > 400
    assert image.shape[1] > 1200
    shades = {tuple(colour) for colour in np.unique((255 * image[..., :3]).astype(int).reshape(-1, 3), axis=0)}
    curve, mark = (0x35, 0x56, 0x6B), (0xB5, 0x48, 0x2F)
    assert {curve, mark} <= shades
    for third in np.array_split(image, 3, axis=1):  # a curve in each of the three panels
        assert (np.abs(255 * third[..., :3] - curve).max(axis=-1) < 1.0).sum() > 100


def test_plot_of_a_file_with_any_name(tmp_path):
    text = MIXTURE + component(0.5) + component(0.5, 'distribution = "point"\nvalue = 4\n')
    path = written(tmp_path, text, name="my $\\x$ [stars].toml")
    figure = tmp_path / "prior.svg"
    assert stellerg("priors", "show", path, "--plot", figure).code == 0
    drawn = figure.read_text(encoding="utf-8")
    for words in ("polytropic index n", "structure coefficient w", "ln w", "n = 3/2", "n = 3", "50 %", "my $"):
        assert words in drawn


SURVEY = Path(__file__).resolve().parents[1] / "examples" / "survey.csv"


def test_stars_in_the_plane_of_the_calibration(tmp_path):
    """Drawn and counted by place: of the survey's 24 stars, 14 have both a mass and a radius with errors."""
    figure = tmp_path / "plane.svg"
    arguments = ("priors", "show", CALIBRATION, "--plot", figure, "--stars", SURVEY)
    result = stellerg(*arguments)
    assert (result.code, result.err) == (0, "")
    count = "24 stars: 11 covered; 1 inflated; 1 stated pre-main-sequence; 1 refused (stated evolved); 10 not drawn"
    assert count in result.words
    image = figure.read_text(encoding="utf-8")
    for words in (
        "main sequence",
        "inflated",
        "taken as contracting",
        "too small: refused",
        "covered: 11",
        "refused: 1",
    ):
        assert words in image
    stars = stellerg(*arguments, "--json").json["stars"]
    assert stars.pop("table") == str(SURVEY)
    assert stars["places"] == {"main sequence": 11, "inflated": 1, "stated pre-main-sequence": 1, "stated evolved": 1}
    assert (stars["stars"], stars["without_mass_and_radius"]) == (24, 10)
    assert "stars" not in stellerg("priors", "show", CALIBRATION, "--json").json


@pytest.mark.parametrize(
    ("arguments", "wanted"),
    [
        ([CALIBRATION, "--stars", SURVEY], ("--stars", "add --plot FILE")),
        (["wide-index", "--stars", SURVEY, "--plot", "x.png"], ("--stars", "'wide-index'", "show main-sequence")),
        ([CALIBRATION, "--stars", "none.csv", "--plot", "x.png"], ("none.csv", "no such file")),
        ([CALIBRATION, "--stars", "masses.csv", "--plot", "x.png"], ("masses.csv", "'radius' or 'log_radius'")),
        ([CALIBRATION, "--stars", SURVEY, "--plot", "x.gif"], ("plot", "use .png, .pdf or .svg")),
    ],
)
def test_stars_that_cannot_be_drawn(arguments, wanted, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    written(tmp_path, "star,mass,mass_error\na,1,0.1\n", "masses.csv")
    assert_one_message(stellerg("priors", "show", *arguments), *wanted)
    assert not list(tmp_path.glob("x.*"))


@pytest.mark.parametrize("name", ["prior.docx", "nowhere/prior.png"])
def test_a_figure_that_cannot_be_written(name, tmp_path):
    result = stellerg("priors", "show", "wide-index", "--plot", tmp_path / name)
    assert result.code == 2
    assert result.err.startswith("stellerg: plot: ")
    assert len(result.err.splitlines()) == 1


# --- check ---


@pytest.mark.parametrize("name", SHIPPED)
def test_a_good_file_is_said_to_be_fine_in_the_words_of_show(name, tmp_path):
    path = written(tmp_path, load_prior(name).text, name=f"{name}.toml")
    result = stellerg("priors", "check", path)
    assert (result.code, result.err) == (0, "")
    first, rest = result.out.split("\n\n", 1)
    assert first == f"{path}: no fault found."
    assert rest == stellerg("priors", "show", path).out == stellerg("priors", "show", name).out
    assert stellerg("priors", "check", path, "--json").json == stellerg("priors", "show", name, "--json").json


def test_the_lines_are_of_all_faults():
    assert list(LINES) == list(REFUSED)


@pytest.mark.parametrize("case", REFUSED)
def test_each_fault_is_named_with_its_line(case, tmp_path):
    text, wanted = REFUSED[case]
    path = written(tmp_path, text)
    for command in (("priors", "check"), ("priors", "check", "--json"), ("priors", "show")):
        assert_one_message(stellerg(*command, path), f"my.toml, line {LINES[case]}", *wanted)


@pytest.mark.parametrize("case", REFUSED)
def test_blank_lines_and_comments_move_the_line(case):
    text = REFUSED[case][0]
    with pytest.raises(PriorError) as caught:
        parse_prior("# a comment [index]\n\n" + text)
    assert caught.value.line == (1 if case in OF_THE_WHOLE_FILE else LINES[case] + 2)
    assert f"line {caught.value.line}" in str(caught.value)


def test_each_kind_of_fault_has_its_own_message():
    messages = {}
    for case, (text, _) in REFUSED.items():
        with pytest.raises(PriorError) as caught:
            parse_prior(text)
        messages.setdefault(re.sub(r", line \d+", "", str(caught.value)), []).append(case)
    shared = [cases for cases in messages.values() if len(cases) > 1]
    assert shared == [["empty", "no summary"]]  # one fault: both lack it


def test_elements_of_long_lists_have_their_own_line(tmp_path):
    text = HEAD + '[index]\ndistribution = "tabulated"\npoints = [1, 2, 3]\ndensity = [\n  1,\n  2,\n  -3,\n]\n'
    assert_one_message(stellerg("priors", "check", written(tmp_path, text)), "line 9", "negative")
    text = text.replace("-3", "nan")
    assert_one_message(stellerg("priors", "check", written(tmp_path, text)), "line 9", "'density'", "nan")


def test_components_in_a_list_have_their_own_line(tmp_path):
    parts = '\n  { weight = 0.5, distribution = "point", value = 1 },\n  { weight = 0.5, distribution = "point" },\n'
    text = MIXTURE + f"component = [{parts}]\n"
    assert_one_message(stellerg("priors", "check", written(tmp_path, text)), "line 7", "component 2", "'value'")


@pytest.mark.parametrize(
    ("number", "wanted"), [("1" + "0" * 400, "finite number"), ("1" + "0" * 5000, "not a TOML file")]
)
def test_a_number_too_large(number, wanted, tmp_path):
    result = stellerg("priors", "check", written(tmp_path, GOOD.replace("3.0", number)))
    assert_one_message(result, "my.toml, line 6", wanted)
    assert len(result.err) < 400


def test_a_file_that_is_no_text_has_a_line(tmp_path):
    path = tmp_path / "latin.toml"
    path.write_bytes(GOOD.replace("judgement", "caf\xe9").encode("latin-1"))
    assert_one_message(stellerg("priors", "check", path), "latin.toml, line 2", "UTF-8", "0xe9")


def test_line_ends_of_other_systems(tmp_path):
    path = tmp_path / "my.toml"
    path.write_bytes((GOOD + "width = 2\n").replace("\n", "\r\n").encode())
    assert_one_message(stellerg("priors", "check", path), "line 7", "'width'")


def test_brackets_nested_too_deeply(tmp_path):
    text = GOOD + "width = " + "[" * 5000 + "]" * 5000 + "\n"
    assert_one_message(stellerg("priors", "check", written(tmp_path, text)), "my.toml", "not a TOML file")


@pytest.mark.parametrize("command", ["show", "check"])
def test_a_model_that_does_not_exist(command, tmp_path):
    assert_one_message(stellerg("priors", command, "uniform"), "'uniform'", *SHIPPED)
    assert_one_message(stellerg("priors", command, tmp_path / "none.toml"), "none.toml")


def test_the_prior_of_a_star_shows_the_line_as_well(tmp_path):
    path = written(tmp_path, GOOD + "width = 2\n")
    result = stellerg("star", "--mass", "1(1)", "--radius", "1(1)", "--prior", path)
    assert_one_message(result, "my.toml, line 7, [index]: unknown key 'width'")


@pytest.mark.parametrize("arguments", [["priors", "show", "--colour"], ["priors", "mend"]])
def test_wrong_words(arguments):
    assert_one_message(stellerg(*arguments))
