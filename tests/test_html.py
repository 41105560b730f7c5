"""The HTML form of an answer: what stands in it, that all is escaped, that it is whole and needs nothing else."""

import html
import re
from html.parser import HTMLParser

import numpy as np
import pytest
from rich.console import Console

from stellerg import Stars, propagate
from stellerg.energetics import OUTPUTS
from stellerg.errors import InputError
from stellerg.posterior import html as form
from stellerg.posterior.content import number
from stellerg.posterior.html import posterior_html, star_html
from stellerg.posterior.text import star_text

GIVEN = {"mass": "1.02 ± 0.03", "radius": "1.05(2)", "luminosity": "1.10 +0.12 -0.10"}
HOSTILE = '<b>&"x'
VOID = {"br", "hr", "img", "input", "link", "meta"}
ENERGY, TIME = "binding_energy", "kelvin_helmholtz_time"


class Page(HTMLParser):
    """Reads a fragment: refuses what is not closed in order, keeps tags, attributes, tables and visible text."""

    def __init__(self, fragment):
        super().__init__(convert_charrefs=True)
        self.open, self.tags, self.attributes, self.tables, self.words = [], [], [], [], []
        self.feed(fragment)
        self.close()
        assert self.open == [], f"never closed: {self.open}"
        self.text = re.sub(r"\s+", " ", "".join(self.words))

    def handle_starttag(self, tag, attrs):
        self.tags.append(tag)
        self.attributes += attrs
        if tag not in VOID:
            self.open.append(tag)
        if tag == "table":
            self.tables.append([])
        elif tag == "tr":
            self.tables[-1].append([])
        elif tag in ("td", "th"):
            self.tables[-1][-1].append("")

    def handle_endtag(self, tag):
        assert self.open, f"</{tag}> closes nothing"
        assert self.open.pop() == tag, f"</{tag}> closes another tag"
        if tag in ("td", "th", "p", "caption"):
            self.words.append(" ")

    def handle_data(self, data):
        if "style" in self.open:
            return
        self.words.append(data)
        if "td" in self.open or "th" in self.open:
            self.tables[-1][-1][-1] += data


def one(outputs=(ENERGY, TIME), name="Tern 9", **given):
    options = {key: given.pop(key) for key in ("prior", "use") if key in given}
    of = {key: given.pop(key) for key in ("correlation", "shape", "evolutionary_state") if key in given}
    return propagate(Stars.of(name, **{**GIVEN, **given}, **of), outputs=outputs, **options)


def coves(count, **of):
    mass = np.linspace(0.9, 1.1, count)
    columns = {name: (mass, 0.02 * mass) for name in ("mass", "radius", "luminosity")}
    return Stars.of([f"Cove {k}" for k in range(count)], **columns, **of)


def many(count, **of):
    return propagate(coves(count, **of))


def terminal(posterior, row=0):
    console = Console(width=400, highlight=False)
    with console.capture() as capture:
        console.print(star_text(posterior, row))
    return capture.get()


# --- the reader of this test sees faults ---
@pytest.mark.parametrize("fragment", ["<p><b>x</p></b>", "<p>x", "x</p>", "<div><p>x</div>"])
def test_the_parser_refuses_what_is_not_whole(fragment):
    with pytest.raises(AssertionError, match="clos"):
        Page(fragment)


# --- one star ---
def test_values_intervals_and_units_of_one_star():
    posterior = one()
    page = Page(star_html(posterior))
    values = page.tables[0]
    assert values[0] == ["", "median", "68.27 % interval", "95.45 % interval", "unit"]
    for row, name, power, unit in ((values[1], ENERGY, 48, "1048 erg"), (values[2], TIME, 0, "Myr")):
        lower, upper = posterior.interval(name)[0]
        low, high = posterior.interval(name, 0.9544997361036416)[0]
        assert row[1] == number(posterior.median(name)[0], power)
        assert row[2] == f"{number(lower, power)} to {number(upper, power)}"
        assert row[3] == f"{number(low, power)} to {number(high, power)}"
        assert row[4] == unit
    assert [row[0] for row in values[3:]] == ["structure coefficient", "effective index n"]
    assert "10<sup>48</sup> erg" in star_html(posterior)
    assert "10^" not in star_html(posterior)


CASES = {
    "plain": {},
    "left aside": {"effective_temperature": "5800 ± 60"},
    "over-determined": {"effective_temperature": "6800 ± 60", "use": (*GIVEN, "effective_temperature")},
    "not named": {"effective_temperature": "5800 ± 60", "use": tuple(GIVEN)},
    "correlated": {"correlation": {("mass", "radius"): 0.9}, "shape": "lognormal", "luminosity": "1.10 ± 0.10"},
    "no derivative": {"prior": "by-mass", "mass": "0.35 ± 0.03"},
    "partial": {"luminosity": "1.1 exact", "mass": "1.02 exact", "radius": None, "outputs": ("nuclear_time", ENERGY)},
    "all outputs": {"outputs": tuple(OUTPUTS)},
    "not done": {"radius": "1.05"},
    "evolved": {"evolutionary_state": "evolved"},
}


@pytest.mark.parametrize("name", CASES)
def test_it_says_what_the_terminal_says(name):
    """Word for word, but for how measurements are named as independent, raised powers, bars and minus signs."""
    posterior = one(**CASES[name])
    printed = terminal(posterior).replace("--use names", "the argument use of propagate names")
    expected = re.sub(r"\b10\^", "10", printed).replace("█", "")
    seen = Page(star_html(posterior)).text.replace(form._NEGATIVE, "").replace("\N{MINUS SIGN}", "-")
    assert seen.split() == expected.split()


def test_the_cases_above_are_what_they_are_called():
    seen = {name: Page(star_html(one(**case))).text for name, case in CASES.items()}
    assert "Left aside as redundant: luminosity (the argument use of propagate" in seen["left aside"]
    assert "Consistency of the redundant measurements: chi-squared" in seen["over-determined"]
    assert "with 1 degree of freedom" in seen["over-determined"]
    assert "inconsistent-observables: The redundant measurements disagree" in seen["over-determined"]
    assert "Engine: montecarlo (quadrature refuses" in seen["over-determined"]
    assert "Not named in use, and so not used: effective temperature." in seen["not named"]
    assert "no derivative of this structure model" in seen["no derivative"]
    assert seen["partial"].strip().startswith("Tern 9: partial no binding energy: radius is not determined")
    assert seen["not done"].strip().startswith("Tern 9: error-missing radius = 1.05: a value without an error")
    assert "the star is stated evolved" in seen["evolved"]
    for text in (
        "Convention: abs(E) = abs(Omega)/2",
        "Structure: prior uniform-index.",
        "First-order propagation would",
    ):
        assert text in seen["plain"]
        assert text not in seen["not done"]


def bars(fragment):
    """(classes, width in per cent) of each bar."""
    found = re.findall(r'<span class="(stellerg-bar[^"]*)" style="width: ([\d.]+)%">', fragment)
    return [(kind.replace("stellerg-", "").split()[1:], float(width)) for kind, width in found]


def test_bars_have_the_widths_of_the_shares():
    posterior = one()
    shares = [posterior.budget(output) for output in posterior.outputs]
    expected = [share[q][0] for q in ("mass", "radius", "luminosity", "structure") for share in shares]
    drawn = bars(star_html(posterior))
    np.testing.assert_allclose([width for _, width in drawn], 100.0 * np.array(expected), atol=0.051, rtol=0.0)
    assert [kind for kind, _ in drawn] == [[]] * 6 + [["structure"]] * 2


def test_a_negative_share_is_a_hollow_bar_and_no_bar_leaves_its_track():
    posterior = one(**CASES["correlated"], prior="present-sun")
    share = {name: values[0] for name, values in posterior.budget(ENERGY).items()}
    assert share["correlations"] < 0.0
    assert share["mass"] > 1.0
    fragment = star_html(posterior)
    drawn = bars(fragment)
    largest = max(abs(values[0]) for output in posterior.outputs for values in posterior.budget(output).values())
    assert max(width for _, width in drawn) == 100.0
    hollow = [width for kind, width in drawn if kind == ["negative"]]
    assert hollow[0] == pytest.approx(100.0 * abs(share["correlations"]) / largest, abs=0.051)
    assert f"\N{MINUS SIGN}{abs(100.0 * share['correlations']):.1f} %" in fragment
    assert form._NEGATIVE in fragment
    assert form._NEGATIVE not in star_html(one())


def test_many_outputs_turn_the_budget_round():
    page = Page(star_html(one(tuple(OUTPUTS))))
    budget = page.tables[1]
    assert budget[0] == ["", "mass", "radius", "luminosity", "structure"]
    assert [row[0] for row in budget[1:]] == [row[0] for row in page.tables[0][1:9]]
    assert bars(star_html(one(tuple(OUTPUTS)))) == []


# --- escaping, and nothing from outside ---
def test_names_are_shown_as_text():
    for fragment in (
        star_html(one(name=HOSTILE)),
        posterior_html(propagate(Stars.of([HOSTILE, "Cove 2"], mass=["1(1)", "1"], radius=["1(1)", "1(1)"]))),
    ):
        assert HOSTILE not in fragment
        assert html.escape(HOSTILE) in fragment
        page = Page(fragment)
        assert HOSTILE in page.text
        assert "b" not in page.tags


def test_what_stands_in_a_bad_cell_is_shown_as_text():
    posterior = propagate(Stars.of("Cove 1", mass="<script>1</script>", radius="1(1)"))
    for fragment in (
        star_html(posterior),
        posterior_html(propagate(Stars.of(mass=["<i>", "1"], radius=["1(1)", "2"]))),
    ):
        page = Page(fragment)
        assert {"script", "i"}.isdisjoint(page.tags)
        assert "<script>1</script>" in page.text or "<i>" in page.text


def test_a_name_that_looks_like_a_power_is_not_raised():
    assert "<strong>10^5</strong>" in star_html(one(name="10^5"))
    assert '<th class="stellerg-name" scope="row">10^5</th>' in posterior_html(
        propagate(Stars.of(["10^5", "10^6"], mass=["1(1)", "1(1)"], radius=["1(1)", "1(1)"]))
    )


def test_the_fragment_is_one_element_that_needs_nothing():
    for fragment in (star_html(one()), posterior_html(many(3))):
        page = Page(fragment)
        assert page.tags[:2] == ["div", "style"]
        assert set(page.tags).isdisjoint({"script", "link", "img", "iframe", "html", "body", "head"})
        assert not any(name in ("src", "href") or name.startswith("on") for name, _ in page.attributes)
        assert not re.search(r"url\(|@import|https?:", fragment)
        (style,) = re.findall(r"<style>(.*?)</style>", fragment, flags=re.DOTALL)
        selectors = [part for rule in re.findall(r"([^{}]+)\{", style) for part in rule.split(",")]
        assert len(selectors) > 10
        assert all(selector.strip().startswith(".stellerg-answer") for selector in selectors)
        used = {word for name, value in page.attributes if name == "class" for word in value.split()}
        assert all(word.startswith("stellerg-") for word in used)
        assert set(re.findall(r"\.(stellerg-[a-z]+)", style)) >= {"stellerg-answer", "stellerg-table", "stellerg-bar"}


def contrast(colour, other):
    """Contrast ratio of two colours (W3C, Web Content Accessibility Guidelines 2.1, from memory)."""

    def luminance(text):
        parts = np.array([int(text[k : k + 2], 16) for k in (1, 3, 5)]) / 255.0
        linear = np.where(parts <= 0.04045, parts / 12.92, ((parts + 0.055) / 1.055) ** 2.4)
        return float(linear @ [0.2126, 0.7152, 0.0722]) + 0.05

    pair = sorted((luminance(colour), luminance(other)))
    return pair[1] / pair[0]


def test_colours_are_seen_on_white_and_on_dark():
    colours = set(re.findall(r"#[0-9a-f]{6}", form._STYLE))
    assert len(colours) == 5
    for colour in colours:
        for ground in ("#ffffff", "#111111"):
            assert contrast(colour, ground) > 3.0, (colour, ground)
    assert contrast("#ffff00", "#ffffff") < 3.0


# --- many stars ---
def test_few_stars_stand_in_one_table():
    posterior = many(3)
    (table,) = Page(posterior_html(posterior)).tables
    assert table[0] == ["star", "status", "binding energy (1048 erg)", "Kelvin-Helmholtz time (Myr)", "flags"]
    assert table[1] == ["", "", *["median", "68.27 % interval", "structure"] * 2, ""]
    assert [row[0] for row in table[2:]] == ["Cove 0", "Cove 1", "Cove 2"]
    for k, row in enumerate(table[2:]):
        lower, upper = posterior.interval(ENERGY)[k]
        share = posterior.budget(TIME)["structure"][k]
        assert row[2] == number(posterior.median(ENERGY)[k], 48)
        assert row[3] == f"{number(lower, 48)} to {number(upper, 48)}"
        assert row[7] == f"{100.0 * share:.1f} %"
    assert "not shown" not in posterior_html(posterior)


@pytest.mark.parametrize(("count", "words"), [(20, None), (21, "1 more star not"), (45, "25 more stars not")])
def test_at_most_twenty_rows(count, words):
    page = Page(posterior_html(many(count)))
    assert len(page.tables[0]) - 2 == 20
    assert f"{count} stars: {count} ok" in page.text
    assert ("not shown here" in page.text) == (words is not None)
    assert (words or "") in page.text


def test_statuses_are_counted_and_explained_once():
    stars = Stars.of(
        ["Cove 1", "Cove 2", "Cove 3", "Cove 4"],
        mass=["1(1)", "1.0", "1.0", "1.0(1)"],
        radius=["1.0(1)", "1.0(1)", "1.0(1)", "1.0(1)"],
        luminosity=["1.0(1)", "1.0(1)", "1.0(1)", ""],
    )
    posterior = propagate(stars, prior="wide-index")
    page = Page(posterior_html(posterior))
    assert "4 stars: 1 ok, 1 partial, 2 error-missing" in page.text
    rows = page.tables[0][2:]
    assert [row[1] for row in rows] == ["ok", "error-missing", "error-missing", "partial"]
    dashes = ["\N{EN DASH}", "\N{EN DASH}", ""]
    assert rows[1][2:8] == dashes * 2
    assert rows[3][5:8] == dashes
    assert rows[3][2] == number(posterior.median(ENERGY)[3], 48)
    assert "Cove 2, Cove 3: mass = 1.0: a value without an error" in page.text
    assert "Cove 4: no Kelvin-Helmholtz time" in page.text
    assert rows[0][8] == "positivity-restricted"
    assert "positivity-restricted (1 star): More than 0.1 %" in page.text
    assert "prior-excludes-calibration" not in page.text
    default = Page(posterior_html(propagate(stars)))  # under which the calibrated coefficient lies far out
    two, one = "positivity-restrictedprior-excludes-calibration", "prior-excludes-calibration"  # one word a line
    assert [row[8] for row in default.tables[0][2:]] == [two, "", "", one]
    assert "prior-excludes-calibration (2 stars): The coefficient calibrated for" in default.text
    assert "positivity-restricted (1 star): More than 0.1 %" in default.text


def test_values_far_apart_carry_their_own_powers():
    stars = Stars.of(mass=["0.1(1)", "100(1)"], radius=["1.0(1)", "1.0(1)"], luminosity=["1.0(1)", "1.0(1)"])
    posterior = propagate(stars)
    rows = Page(posterior_html(posterior)).tables[0]
    assert rows[0][2] == "binding energy (erg)"
    assert rows[3][2] == f"{number(posterior.median(ENERGY)[1], 52)} 1052"


def test_no_star_and_only_rows_without_results():
    assert Page(posterior_html(propagate(coves(3).take(np.arange(0))))).text.strip().startswith("0 stars Convention")
    page = Page(posterior_html(many(2, evolutionary_state=["evolved"] * 2)))
    assert "2 stars: 2 evolved-or-contracting" in page.text
    assert "Cove 0, Cove 1: the star is stated evolved" in page.text


def test_only_the_stars_that_are_shown_are_computed():
    posterior = many(30)
    page = Page(posterior_html(posterior))
    assert len(page.tables) == 1
    assert "10 more stars not shown here" in page.text
    assert not posterior._cache


def test_one_star_of_many_is_the_star_alone():
    assert star_html(many(3), 1) == star_html(propagate(coves(3).take(np.array([1]))))


@pytest.mark.parametrize("row", [-1, 3])
def test_a_row_that_does_not_exist(row):
    with pytest.raises(InputError, match=f"row: {row} is not one of the 3 rows, which are counted from 0"):
        star_html(many(3), row)


@pytest.mark.parametrize(
    ("value", "text"),
    [(9.9994, "9.999"), (9.9996, "10.00"), (0.099999, "0.1000"), (-2.5, "-2.500"), (0.0, "0"), (123456.7, "123457")],
)
def test_numbers_have_four_digits_after_rounding(value, text):
    assert number(value) == text
