"""The loader of structure models: every refusal names the key and the value; a user's file works by path."""

import math

import numpy as np
import pytest

from stellerg.errors import PriorError
from stellerg.structure.files import available_priors, load_prior, parse_prior
from stellerg.structure.model import Coordinate

HEAD = 'summary = "one line"\nsource = "judgement"\n'
INDEX = HEAD + "[index]\n"
UNIFORM = 'distribution = "uniform"\nlower = 1.5\nupper = 3.0\n'
GOOD = INDEX + UNIFORM


def component(weight, rest=UNIFORM):
    return f"[[index.component]]\nweight = {weight}\n{rest}"


def interval(lower, upper, density="[interval.index]\n" + UNIFORM):
    return f"[[interval]]\nmass = [{lower}, {upper}]\n{density}"


KEYS = '["00000000000000ff", "8000000000000001"]'


def training(keys=KEYS, stars="2", observables='["log_k2"]'):
    return GOOD + f"[training]\nstars = {stars}\nkeys = {keys}\nobservables = {observables}\n"


MIXTURE = INDEX + 'distribution = "mixture"\n'

REFUSED = {
    # text: what the message must hold (the key, the value got)
    "not toml": ("summary = ", ["not a TOML file"]),
    "empty": ("", ["'summary'", "missing"]),
    "no summary": ('source = "judgement"\n[index]\n' + UNIFORM, ["'summary'", "missing"]),
    "blank summary": (GOOD.replace("one line", "  "), ["'summary'"]),
    "summary no text": (GOOD.replace('"one line"', "3"), ["'summary'"]),
    "no source": ('summary = "x"\n[index]\n' + UNIFORM, ["'source'", "missing", "judgement"]),
    "no density": (HEAD, ["exactly one of index, coefficient, log_coefficient", "none"]),
    "two densities": (GOOD + "[coefficient]\n" + UNIFORM, ["exactly one of", "index, coefficient"]),
    "density no table": (HEAD + "index = 3\n", ["[index]", "table", "3"]),
    # unknown keys, level by level
    "unknown key on top": ('colour = "red"\n' + GOOD, ["'colour'", "summary, source"]),
    "unknown key in a density": (GOOD + "width = 2\n", ["[index]", "'width'", "lower, upper"]),
    "key of another density": (GOOD + "mean = 2\n", ["[index]", "'mean'"]),
    "unknown key in a mixture": (MIXTURE + "n = 2\n" + component(1.0), ["[index]", "'n'", "component"]),
    "unknown key in a component": (MIXTURE + component(1.0) + "n = 2\n", ["component 1", "'n'"]),
    "unknown key in an interval": (
        HEAD + interval("0.0", "inf", "n = 2\n[interval.index]\n" + UNIFORM),
        ["interval 1", "'n'"],
    ),
    "unknown key in applies_to": (GOOD + "[applies_to]\nage = [1, 2]\n", ["[applies_to]", "'age'"]),
    "unknown key in common": (
        GOOD + '[common]\nfraction = 0.5\nwithin = "all"\nn = 2\n',
        ["[common]", "'n'"],
    ),
    # densities
    "no distribution": (INDEX + "value = 3\n", ["'distribution'", "missing"]),
    "unknown distribution": (
        INDEX + 'distribution = "cauchy"\n',
        ["'distribution'", "'cauchy'", "point, uniform"],
    ),
    "missing number": (INDEX + 'distribution = "uniform"\nlower = 1.5\n', ["[index]", "'upper'", "missing"]),
    "text for a number": (GOOD.replace("3.0", '"3"'), ["'upper'", "'3'"]),
    "boolean for a number": (GOOD.replace("3.0", "true"), ["'upper'", "True"]),
    "nan": (GOOD.replace("3.0", "nan"), ["'upper'", "nan"]),
    "inf": (GOOD.replace("3.0", "inf"), ["'upper'", "inf"]),
    "ends exchanged": (GOOD.replace("3.0", "1.0"), ["'lower'", "'upper'", "1.5", "1.0"]),
    "no width": (GOOD.replace("3.0", "1.5"), ["'lower'", "'upper'", "1.5 and 1.5"]),
    "n = 5": (GOOD.replace("3.0", "5.0"), ["0 <= n < 5", "5.0"]),
    "n below 0": (GOOD.replace("1.5", "-0.1"), ["0 <= n < 5", "-0.1"]),
    "point n = 5": (INDEX + 'distribution = "point"\nvalue = 5\n', ["0 <= n < 5", "5.0"]),
    "w below 3/5": (HEAD + "[coefficient]\n" + UNIFORM.replace("1.5", "0.59"), ["w >= 3/5", "0.59"]),
    "ln w below ln 3/5": (
        HEAD + "[log_coefficient]\n" + UNIFORM.replace("1.5", "-0.52"),
        ["w >= 3/5", "-0.52"],
    ),
    "no spread": (
        INDEX + 'distribution = "normal"\nmean = 2\nstandard_deviation = 0\n',
        ["'standard_deviation'", "0.0", "'point'"],
    ),
    "negative spread": (
        INDEX + 'distribution = "normal"\nmean = 2\nstandard_deviation = -1\n',
        ["'standard_deviation'", "-1.0"],
    ),
    "normal out of range": (
        INDEX + 'distribution = "normal"\nmean = 9\nstandard_deviation = 0.1\n',
        ["allowed range", "9.0"],
    ),
    "unbounded beta": (
        INDEX + 'distribution = "beta"\nalpha = 0.5\nbeta = 2\nlower = 1\nupper = 2\n',
        ["'alpha'", "'beta'", "0.5"],
    ),
    # tables
    "points no list": (
        INDEX + 'distribution = "tabulated"\npoints = 3\ndensity = [1, 1]\n',
        ["'points'", "3"],
    ),
    "one point": (
        INDEX + 'distribution = "tabulated"\npoints = [1]\ndensity = [1]\n',
        ["'points'", "1 and 1"],
    ),
    "lengths differ": (
        INDEX + 'distribution = "tabulated"\npoints = [1, 2, 3]\ndensity = [1, 1]\n',
        ["3 and 2"],
    ),
    "points fall": (
        INDEX + 'distribution = "tabulated"\npoints = [2, 1]\ndensity = [1, 1]\n',
        ["'points'", "increase"],
    ),
    "negative density": (
        INDEX + 'distribution = "tabulated"\npoints = [1, 2]\ndensity = [1, -1]\n',
        ["'density'", "negative"],
    ),
    "no probability": (
        INDEX + 'distribution = "tabulated"\npoints = [1, 2]\ndensity = [0, 0]\n',
        ["'density'", "zero"],
    ),
    "boolean in a list": (
        INDEX + 'distribution = "tabulated"\npoints = [1, 2]\ndensity = [1, true]\n',
        ["'density'", "True"],
    ),
    "table beyond n = 5": (
        INDEX + 'distribution = "tabulated"\npoints = [1, 5]\ndensity = [1, 1]\n',
        ["0 <= n < 5", "5.0"],
    ),
    # mixtures
    "no components": (MIXTURE, ["[[component]]"]),
    "component no table": (MIXTURE + "component = [3]\n", ["component 1", "3"]),
    "no weight": (MIXTURE + "[[index.component]]\n" + UNIFORM, ["component 1", "'weight'", "missing"]),
    "zero weight": (MIXTURE + component(0.0) + component(1.0), ["component 1", "'weight'", "0.0"]),
    "negative weight": (MIXTURE + component(1.5) + component(-0.5), ["component 2", "'weight'", "-0.5"]),
    "boolean weight": (MIXTURE + component("true"), ["component 1", "'weight'", "True"]),
    "weights not 1": (MIXTURE + component(0.5) + component(0.4), ["weights", "sum to 1", "0.9"]),
    "mixture in a mixture": (
        MIXTURE + component(1.0, 'distribution = "mixture"\n'),
        ["component 1", "'mixture'"],
    ),
    # intervals
    "interval no tables": ("interval = 3\n" + HEAD, ["[[interval]]"]),
    "no intervals": ("interval = []\n" + HEAD, ["[[interval]]"]),
    "interval and density": (GOOD + interval("0.0", "inf"), ["not two of them"]),
    "no mass": (HEAD + "[[interval]]\n[interval.index]\n" + UNIFORM, ["interval 1", "'mass'", "missing"]),
    "one mass": (
        HEAD + "[[interval]]\nmass = [1]\n[interval.index]\n" + UNIFORM,
        ["interval 1", "'mass'", "[1]"],
    ),
    "text mass": (HEAD + interval('"0"', "inf"), ["interval 1", "'mass'", "'0'"]),
    "boolean mass": (HEAD + interval("false", "inf"), ["interval 1", "'mass'", "False"]),
    "start above 0": (HEAD + interval("0.1", "inf"), ["interval 1", "without gaps", "0.1"]),
    "a gap": (HEAD + interval("0.0", "0.3") + interval("0.4", "inf"), ["interval 2", "without gaps", "0.4"]),
    "an overlap": (
        HEAD + interval("0.0", "0.3") + interval("0.2", "inf"),
        ["interval 2", "without gaps", "0.2"],
    ),
    "an empty interval": (
        HEAD + interval("0.0", "0.0") + interval("0.0", "inf"),
        ["interval 1", "[0.0, 0.0]"],
    ),
    "end below inf": (HEAD + interval("0.0", "9.0"), ["last interval", "inf", "9.0"]),
    "interval without density": (HEAD + interval("0.0", "inf", ""), ["interval 1", "exactly one of"]),
    # applies_to and common
    "applies_to no table": ("applies_to = 3\n" + GOOD, ["[applies_to]", "3"]),
    "limits exchanged": (GOOD + "[applies_to]\nmass = [2, 1]\n", ["[applies_to]", "'mass'", "[2.0, 1.0]"]),
    "limits below 0": (GOOD + "[applies_to]\nmass = [-1, 1]\n", ["[applies_to]", "'mass'", "-1.0"]),
    "one limit": (GOOD + "[applies_to]\nmass = [1]\n", ["[applies_to]", "'mass'", "[1.0]"]),
    "unknown state": (
        GOOD + '[applies_to]\nevolutionary_state = ["old"]\n',
        ["'evolutionary_state'", "['old']"],
    ),
    "state no list": (
        GOOD + '[applies_to]\nevolutionary_state = "evolved"\n',
        ["'evolutionary_state'", "'evolved'"],
    ),
    "common no table": ("common = 3\n" + GOOD, ["[common]", "3"]),
    "no fraction": (GOOD + '[common]\nwithin = "all"\n', ["[common]", "'fraction'", "'standard_deviation'"]),
    "fraction above 1": (GOOD + '[common]\nfraction = 1.1\nwithin = "all"\n', ["'fraction'", "1.1"]),
    "no within": (GOOD + "[common]\nfraction = 0.5\n", ["[common]", "'within'", "missing"]),
    "within no text": (GOOD + "[common]\nfraction = 0.5\nwithin = 3\n", ["'within'", "3"]),
    # training
    "training no table": ("training = 3\n" + GOOD, ["[training]", "3"]),
    "unknown key in training": (training() + "n = 2\n", ["[training]", "'n'", "stars, keys, observables"]),
    "no keys": (GOOD + "[training]\nstars = 2\n", ["[training]", "'keys'", "missing"]),
    "keys no list": (training('"00000000000000ff"'), ["'keys'", "list", "00000000000000ff"]),
    "an empty list of keys": (training("[]", "0"), ["'keys'", "[]"]),
    "a number for a key": (training("[255]", "1"), ["'keys'", "16 hexadecimal digits", "255"]),
    "a short key": (training('["ff"]', "1"), ["'keys'", "16 hexadecimal digits", "'ff'"]),
    "a key that is no number": (training('["00000000000000fg"]', "1"), ["'keys'", "0-9, a-f", "00fg"]),
    "a key in capitals": (training('["00000000000000FF"]', "1"), ["'keys'", "0-9, a-f", "00FF"]),
    "a key twice": (training('["00000000000000ff", "00000000000000ff"]'), ["'keys'", "00ff", "twice"]),
    "no number of stars": (training().replace("stars = 2\n", ""), ["[training]", "'stars'", "missing"]),
    "another number of stars": (training(stars="3"), ["'stars'", "number of keys, 2", "3"]),
    "a boolean number of stars": (training('["00000000000000ff"]', "true"), ["'stars'", "True"]),
    "no observables": (training().replace('observables = ["log_k2"]\n', ""), ["'observables'", "missing", "log_k2"]),
    "no observable": (training(observables="[]"), ["'observables'", "[]"]),
    "an unknown observable": (training(observables='["mass"]'), ["'observables'", "['mass']", "log_k2"]),
    "observables no list": (training(observables='"log_k2"'), ["'observables'", "'log_k2'"]),
}


def test_the_text_that_is_spoilt_below_is_good():
    model = parse_prior(GOOD, "mine")
    assert (model.name, model.summary, model.source, model.text) == ("mine", "one line", "judgement", GOOD)
    assert model.quantile(np.array([0.5])) == pytest.approx([math.log(3.0 / 2.75)], abs=1e-14)


@pytest.mark.parametrize("case", REFUSED)
def test_refusal_names_the_key_and_the_value(case):
    text, wanted = REFUSED[case]
    with pytest.raises(PriorError) as caught:
        parse_prior(text, "mine")
    message = str(caught.value)
    assert message.startswith("prior mine")
    assert "\n" not in message
    for part in wanted:
        assert part in message


def test_a_density_up_to_but_not_including_five_is_read():
    model = parse_prior(GOOD.replace("3.0", "4.999"))
    assert np.isfinite(model.quantile(np.array([1e-9, 1.0 - 1e-9]))).all()


def test_every_kind_of_density_is_read():
    densities = (
        'distribution = "point"\nvalue = 3\n',
        'distribution = "normal"\nmean = 3\nstandard_deviation = 0.1\n',
        'distribution = "beta"\nalpha = 2\nbeta = 2\nlower = 1\nupper = 3\n',
        'distribution = "tabulated"\npoints = [1, 2, 3]\ndensity = [0, 1, 0]\n',
    )
    for density in densities:
        for coordinate in ("index", "coefficient", "log_coefficient"):
            model = parse_prior(HEAD + f"[{coordinate}]\n" + density)
            (part,) = model.intervals[0].mixture.components
            assert part.coordinate is Coordinate(coordinate)
            assert part.cumulative(part.quantile(np.array([0.5]))) == pytest.approx(1.0 if part.is_point else 0.5)


def test_weights_that_sum_to_one_but_for_rounding_are_normalised():
    model = parse_prior(MIXTURE + component(0.3333333) + component(0.3333333) + component(0.3333334))
    assert sum(model.intervals[0].mixture.weights) == pytest.approx(1.0, abs=1e-15)


def test_optional_tables_are_kept():
    limits = '[applies_to]\nmass = [0.5, 2]\nevolutionary_state = ["evolved"]\n'
    model = parse_prior(GOOD + limits + '[common]\nfraction = 0.5\nwithin = "mass"\n')
    assert model.applies_to.mass == (0.5, 2.0)
    assert model.applies_to.evolutionary_state == ("evolved",)
    assert (model.common.fraction, model.common.within) == (0.5, "mass")
    assert parse_prior(GOOD).common is None


def test_the_stars_a_model_was_learned_from_are_kept():
    model = parse_prior(training())
    assert model.training == (0xFF, 0x8000000000000001)
    assert parse_prior(GOOD).training == ()
    with pytest.raises(PriorError, match=r"line 8, \[training\]: 'stars' must be the number of keys"):
        parse_prior(training(stars="3"))


def test_a_wrong_key_is_named_with_its_own_line():
    text = training('[\n"00000000000000ff",\n"0x000000000000ff"]')
    with pytest.raises(PriorError, match=r"line 11, \[training\]: 'keys' must be .* got '0x000000000000ff'"):
        parse_prior(text)


# --- files ---


def test_a_users_file_by_path(tmp_path):
    path = tmp_path / "my stars.toml"
    path.write_text(GOOD, encoding="utf-8")
    for given in (path, str(path)):
        model = load_prior(given)
        assert model.name == "my stars"
        assert model.intervals == load_prior("uniform-index").intervals
        assert model.text == GOOD


def test_a_mistake_in_a_users_file_names_the_file(tmp_path):
    path = tmp_path / "mine.toml"
    path.write_text(GOOD + "width = 2\n", encoding="utf-8")
    with pytest.raises(PriorError, match=r"^prior .*mine.toml, line 7, \[index\]: unknown key 'width'"):
        load_prior(path)


def test_an_unknown_name_lists_the_shipped_models():
    with pytest.raises(PriorError) as caught:
        load_prior("uniform")
    assert "'uniform' is neither a shipped model nor a .toml file" in str(caught.value)
    assert all(name in str(caught.value) for name in available_priors())


def test_files_that_cannot_be_read(tmp_path):
    folder = tmp_path / "folder.toml"
    folder.mkdir()
    other = tmp_path / "prior.json"
    other.write_text("{}", encoding="utf-8")
    for path in (folder, other, tmp_path / "missing.toml"):
        with pytest.raises(PriorError) as caught:
            load_prior(path)
        assert str(path) in str(caught.value)
    latin = tmp_path / "latin.toml"
    latin.write_bytes(GOOD.replace("one line", "caf\xe9").encode("latin-1"))
    with pytest.raises(PriorError, match="cannot be read"):
        load_prior(latin)
