"""Every status has a row that raises it, with a sentence; a bad row does not disturb its neighbours."""

import csv
import math
from pathlib import Path

import numpy as np
import pytest

from stellerg.energetics import Conventions
from stellerg.inputs import Exact
from stellerg.keyed_random import hash_identifiers
from stellerg.posterior.content import star_content
from stellerg.propagation import propagate
from stellerg.stars import Stars
from stellerg.status import FLAG_TEXT, STATUS_TEXT, Flag, Status, carries_results, flag_words, status_word
from stellerg.structure.files import parse_prior

NAN = math.nan
GOOD = {"mass": "1.10 ± 0.03", "radius": "1.20 +0.04 -0.03", "luminosity": "1.7 ± 0.1"}
OUTPUTS = ("binding_energy", "kelvin_helmholtz_time")
PRESENT_SUN = {"prior": "present-sun"}

# name: (status, cells of the bad row, options of propagate, options of Stars.of, words of the sentence)
BAD = {
    "underdetermined": (
        {"mass": "", "radius": ""},
        {},
        {},
        ["mass is not determined", "radius is not determined"],
    ),
    "partial": (
        {"luminosity": ""},
        {},
        {},
        ["no Kelvin-Helmholtz time", "luminosity is not determined"],
    ),
    "error-missing": ({"mass": "1.1"}, {}, {}, ["mass = 1.1: a value without an error", "exact"]),
    "error-zero": ({"mass": "1.1 ± 0.0"}, {}, {}, ["mass = 1.1 ± 0.0: an error of zero"]),
    "not-positive": ({"radius": "-1.2 ± 0.1"}, {}, {}, ["radius = -1.2", "must be positive"]),
    "not-a-number": ({"mass": "heavy"}, {}, {}, ["mass = heavy: this cannot be read"]),
    "limit-only": ({"radius": "<1.2"}, {}, {}, ["radius = <1.2: a limit is not a measurement"]),
    "unit-missing": ({"mass": "1.1 ± 0.1 km"}, {}, {}, ["mass = 1.1", "state one that mass can have"]),
    "shape-invalid": (
        {"mass": "1.1 +0.1 -0.2"},
        {},
        {"shape": {"mass": ["", "normal", ""]}},
        ["mass = 1.1", "the first two need equal"],
    ),
    "correlation-invalid": (
        {},
        {},
        {"correlation": {("mass", "radius"): [0.0, 1.5, 0.0]}},
        ["[-1, 1]", "positive semidefinite"],
    ),
    "outside-calibration": (
        {"mass": "2.0 ± 0.1"},
        PRESENT_SUN,
        {},
        ["prior present-sun applies only to 0.98 to 1.02 solar masses", "choose another prior"],
    ),
    "engine-refused": (
        {},
        {"engine": "quadrature"},
        {"correlation": {("mass", "radius"): [0.0, 0.5, 0.0]}},
        ["quadrature refuses", "use montecarlo"],
    ),
}


def catalogue(bad, good=GOOD, **options):
    """Three rows, the bad one between two good ones."""
    middle = {**good, **bad}
    return Stars.of(["before", "bad", "after"], **{n: [good[n], middle[n], good[n]] for n in good}, **options)


def good_for(word):
    return {**GOOD, "mass": "1.00 ± 0.01"} if word == "outside-calibration" else GOOD


@pytest.mark.parametrize("word", BAD)
def test_status_and_its_sentence(word):
    cells, options, more, wanted = BAD[word]
    posterior = propagate(catalogue(cells, good_for(word), **more), **options)
    assert [status_word(s) for s in posterior.status] == ["ok", word, "ok"]
    before, text, after = posterior.status_text()
    assert before == after == ""
    for part in wanted:
        assert part in text
    assert "{" not in text
    given = posterior.has_results
    assert given.tolist() == [True, word == "partial", True]
    assert np.isfinite(posterior.median("binding_energy")).tolist() == given.tolist()


@pytest.mark.parametrize("word", BAD)
def test_a_bad_row_does_not_disturb_its_neighbours(word):
    """The same bits as the good star alone, under its own name."""
    cells, options, more, _ = BAD[word]
    posterior = propagate(catalogue(cells, good_for(word), **more), **options)
    alone = propagate(Stars.of("before", **good_for(word)), **options)
    for output in OUTPUTS:
        quantiles = posterior.quantile([0.05, 0.5, 0.95], output)
        expected = alone.quantile([0.05, 0.5, 0.95], output)[0].tolist()
        assert quantiles[0].tolist() == quantiles[2].tolist() == expected
        assert posterior.log10_sd(output)[0] == alone.log10_sd(output)[0]


def test_many_bad_rows_in_one_catalogue_keep_their_own_status():
    words = [w for w in BAD if not BAD[w][1] and not BAD[w][2]]
    cells = [{**GOOD, **BAD[word][0]} for word in words]
    mixed = [row for cell in cells for row in (cell, GOOD)]
    posterior = propagate(Stars.of(**{name: [row[name] for row in mixed] for name in GOOD}))
    assert [status_word(s) for s in posterior.status] == [w for word in words for w in (word, "ok")]
    good = posterior.median("kelvin_helmholtz_time")[1::2]
    assert len(set(good.tolist())) == 1


def test_a_parallax_that_is_not_positive_is_a_status_of_its_own():
    stars = Stars.of(
        mass=([1.0] * 4, [0.02] * 4),
        radius=([1.0] * 4, [0.02] * 4),
        bolometric_flux=([3.2e-11] * 4, [1e-12] * 4),
        parallax=([10.0, -1.0, 0.0, 10.0], [0.1] * 4),
        unit={"bolometric_flux": "W / m2"},
    )
    posterior = propagate(stars, outputs=["kelvin_helmholtz_time"])
    assert [status_word(s) for s in posterior.status] == [
        "ok",
        "parallax-not-usable",
        "parallax-not-usable",
        "ok",
    ]
    assert "parallax = -1: a parallax of zero or less" in posterior.status_text()[1]
    assert "give a distance instead" in posterior.status_text()[1]
    assert "parallax = 0:" in posterior.status_text()[2]


def test_a_bare_density_lacks_its_unit():
    given = {"mass": (1.0, 0.1), "mean_density": (1.4, 0.1)}
    assert propagate(Stars.of(**given), outputs=["binding_energy"]).status.tolist() == [Status.UNIT_MISSING]
    stated = Stars.of(**given, unit={"mean_density": "g / cm3"})
    assert propagate(stated, outputs=["binding_energy"]).status.tolist() == [Status.OK]


@pytest.mark.parametrize("rho", [1.5, -1.01, NAN, math.inf])
def test_correlations_beyond_one(rho):
    posterior = propagate(Stars.of(**GOOD, correlation={("mass", "luminosity"): rho}))
    assert posterior.status.tolist() == [Status.CORRELATION_INVALID]


def test_correlations_that_are_not_positive_semidefinite():
    """With r12 = r13 = 0.9 the third must be at least 2 x 0.81 - 1 = 0.62."""
    given = {
        "mass": ([1.0] * 3, [0.1] * 3),
        "radius": ([1.0] * 3, [0.1] * 3),
        "luminosity": ([1.0] * 3, [0.1] * 3),
    }
    correlation = {
        ("mass", "radius"): 0.9,
        ("mass", "luminosity"): 0.9,
        ("radius", "luminosity"): [0.6, 0.62, 0.64],
    }
    posterior = propagate(Stars.of(**given, shape="lognormal", correlation=correlation))
    assert [status_word(s) for s in posterior.status] == ["correlation-invalid", "ok", "ok"]


def test_exact_values_that_contradict_each_other():
    stars = Stars.of(mass=Exact([1.0, 1.0]), log_mass=Exact([0.0, 0.1]), radius=([1.0, 1.0], [0.1, 0.1]))
    posterior = propagate(stars, outputs=["binding_energy"], use=["mass", "log_mass", "radius"])
    assert [status_word(s) for s in posterior.status] == ["ok", "exact-values-conflict"]
    assert "contradict each other" in posterior.status_text()[1]
    left_aside = propagate(stars, outputs=["binding_energy"])
    assert left_aside.status.tolist() == [Status.OK, Status.OK]


@pytest.mark.parametrize("g", [1.3, 4.0 / 3.0])
def test_a_star_that_is_not_bound(g):
    posterior = propagate(Stars.of(**GOOD), conventions=Conventions(adiabatic_index=g))
    assert posterior.status.tolist() == [Status.NOT_BOUND]
    assert "4/3 or less" in posterior.status_text()[0]
    outputs = ("binding_energy", "potential_energy", "internal_energy")
    other = propagate(Stars.of(**GOOD), outputs=outputs, conventions=Conventions(adiabatic_index=g))
    assert other.status.tolist() == [Status.PARTIAL]
    assert other.status_text()[0].startswith("no binding energy")
    ratio = other.median("internal_energy") / other.median("potential_energy")
    assert ratio == pytest.approx(1.0 / (3.0 * (g - 1.0)), rel=1e-6)


def test_without_a_bound_star_a_missing_quantity_is_named_too():
    """What lacks a measurement and what is not bound are two reasons: neither hides the other."""
    stars = Stars.of(mass=GOOD["mass"], radius=GOOD["radius"])
    outputs = ("binding_energy", "potential_energy", "nuclear_time")
    posterior = propagate(stars, outputs=outputs, conventions=Conventions(adiabatic_index=1.3))
    (text,) = posterior.status_text()
    assert posterior.status.tolist() == [Status.PARTIAL]
    assert "binding energy" in text
    assert "nuclear time" in text
    assert "luminosity is not determined" in text


def test_a_prior_applies_between_its_limits_of_mass():
    masses = [0.97, 0.99, 1.01, 1.03]
    stars = Stars.of(mass=(masses, [0.001] * 4), radius=([1.0] * 4, [0.01] * 4))
    posterior = propagate(stars, outputs=["binding_energy"], **PRESENT_SUN)
    inside, outside = "ok", "outside-calibration"
    assert [status_word(s) for s in posterior.status] == [outside, inside, inside, outside]


def test_a_prior_that_does_not_apply_leaves_what_carries_no_structure():
    outputs = ("binding_energy", "free_fall_time")
    posterior = propagate(Stars.of(**{**GOOD, "mass": "2.0 ± 0.1"}), outputs=outputs, **PRESENT_SUN)
    assert posterior.status.tolist() == [Status.PARTIAL]
    assert "no binding energy: prior present-sun" in posterior.status_text()[0]
    assert np.isfinite(posterior.median("free_fall_time")[0])
    assert np.isnan(posterior.median("binding_energy")[0])


def test_a_prior_that_does_not_apply_does_not_hide_what_is_missing():
    outputs = ("binding_energy", "free_fall_time", "nuclear_time")
    stars = Stars.of(mass="2.0 ± 0.1", radius=GOOD["radius"])
    (text,) = propagate(stars, outputs=outputs, **PRESENT_SUN).status_text()
    assert "no binding energy: prior present-sun" in text
    assert "nuclear time" in text


@pytest.mark.parametrize(
    ("state", "word"),
    [
        ("main-sequence", "ok"),
        ("unknown", "ok"),
        ("evolved", "evolved-or-contracting"),
        ("pre-main-sequence", "outside-calibration"),
    ],
)
def test_a_stated_evolutionary_state_is_respected(state, word):
    stars = Stars.of(**{**GOOD, "mass": "1.00 ± 0.01"}, evolutionary_state=state)
    assert [status_word(s) for s in propagate(stars, **PRESENT_SUN).status] == [word]


def test_measurements_that_disagree_are_flagged_not_refused():
    """Two log-normal masses apart by 2 and by 10 standard deviations of their difference."""
    apart = np.array([2.0, 10.0]) * 0.01 * math.sqrt(2.0) / math.log(10.0)
    stars = Stars.of(
        mass=([1.0, 1.0], [0.01, 0.01]),
        log_mass=(apart, [0.01 / math.log(10.0)] * 2),
        radius=Exact([1.0, 1.0]),
        shape="lognormal",
    )
    use = ["mass", "log_mass", "radius"]
    posterior = propagate(stars, outputs=["binding_energy"], use=use, prior="wide-index")
    assert posterior.status.tolist() == [Status.OK, Status.OK]
    assert posterior.chi2 == pytest.approx([4.0, 100.0], rel=1e-8)
    assert [flag_words(f) for f in posterior.flags] == [(), ("inconsistent-observables",)]


def test_the_first_fault_that_matters_is_reported():
    """A bad luminosity does not matter to the energy; a bad radius does."""
    stars = Stars.of(mass="1.0 ± 0.1", radius="1.0", luminosity="<2")
    assert [status_word(s) for s in propagate(stars, outputs=["binding_energy"]).status] == ["error-missing"]
    fine = Stars.of(mass="1.0 ± 0.1", radius="1.0 ± 0.1", luminosity="<2")
    assert [status_word(s) for s in propagate(fine, outputs=["binding_energy"]).status] == ["ok"]
    partial = propagate(fine)
    assert [status_word(s) for s in partial.status] == ["partial"]
    assert "no Kelvin-Helmholtz time: luminosity = <2: a limit" in partial.status_text()[0]


def test_every_status_has_a_word_and_a_sentence():
    assert set(STATUS_TEXT) == set(Status)
    words = [text.word for text in STATUS_TEXT.values()]
    assert words == [status.name.lower().replace("_", "-") for status in Status]
    assert all(text.sentence for text in STATUS_TEXT.values())
    with_results = [word for word, has in zip(words, carries_results(np.array(list(Status))), strict=True) if has]
    assert with_results == ["ok", "partial", "doubtful"]


# --- flags about structure: a row that raises each, and one just inside its limit that does not ---


def reference(name, mass):
    """The row of a published table at a mass that stands in it."""
    text = (Path(__file__).parent / "published" / name).read_text(encoding="utf-8").splitlines()
    rows = csv.DictReader(line for line in text if not line.startswith("#"))
    return next({key: float(cell) for key, cell in row.items() if cell} for row in rows if float(row["mass"]) == mass)


def exactly(mass, radius, **more):
    return Stars.of("star", mass=Exact(mass), radius=Exact(radius), **more)


def uniform_coefficient(share_below, value):
    """A prior of which a share lies below a value of the coefficient."""
    lower = value - 0.5 * share_below
    return parse_prior(
        f"summary='x'\nsource='test'\n[coefficient]\ndistribution='uniform'\nlower={lower}\nupper={lower + 0.5}\n"
    )


SUN = reference("structure_nodes.csv", 1.0)  # at age zero
CALIBRATED = {"prior": "main-sequence"}


def excluded(share_below):
    return exactly(1.0, SUN["radius_zams"]), {"prior": uniform_coefficient(share_below, SUN["alpha_zams"])}


def inflated(factor):
    """0.9 Msun, at a factor times the radius that a single star of this mass reaches at the age of the Universe."""
    star, limits = (reference(f"structure_{name}.csv", 0.9) for name in ("nodes", "branches"))
    return exactly(0.9, factor * limits["radius_limit"] * star["radius_zams"]), CALIBRATED


def near_the_end(sigmas):
    """1.2 Msun, so many standard deviations below the radius at the end of the main sequence."""
    star, limits = (reference(f"structure_{name}.csv", 1.2) for name in ("nodes", "branches"))
    radius = limits["x_end"] * star["radius_zams"] * math.exp(-0.01 * sigmas)
    return Stars.of("star", mass=Exact(1.2), radius=(radius, 0.01 * radius), shape="lognormal"), CALIBRATED


def with_radiation(share):
    """Mass at which radiation carries a share of the pressure of the standard model: (1-b)/b^4 = k (mu^2 M)^2."""
    mass = math.sqrt(share / (1.0 - share) ** 4 / 0.0029902537)  # k as in published/eddington_quartic.csv
    return exactly(mass, 2.0, mean_molecular_weight=Exact(1.0)), {"prior": "polytrope-3"}


def contradicting(sigmas):
    """A measured coefficient off the one value, 3/2, that the prior allows."""
    return exactly(1.0, 1.0, structure_coefficient=(1.5 + 0.01 * sigmas, 0.01)), {"prior": "polytrope-3"}


# word: rows that do not raise it, rows that do
FLAGGED = {
    # outside the central 95.45 %: a share of 0.02275 below or above
    "prior-excludes-calibration": ([excluded(0.024), excluded(0.976)], [excluded(0.022), excluded(0.978)]),
    "radius-inflated": ([inflated(0.99)], [inflated(1.01)]),
    # a probability of 0.05 is 1.6449 standard deviations
    "near-boundary": ([near_the_end(1.67)], [near_the_end(1.62)]),
    "radiation-neglected": ([with_radiation(0.0297)], [with_radiation(0.0303)]),
    # a two-sided probability of 0.01 is 2.5758 standard deviations
    "prior-data-conflict": ([contradicting(2.55), contradicting(-2.55)], [contradicting(2.6), contradicting(-2.6)]),
}


@pytest.mark.parametrize("word", FLAGGED)
def test_flag_and_its_limit(word):
    """Rows on both sides of the limit differ by this flag alone."""
    sides = []
    for rows in FLAGGED[word]:
        answers = [propagate(stars, outputs=["binding_energy"], **options) for stars, options in rows]
        assert all(answer.status.tolist() == [Status.OK] for answer in answers)
        assert all(np.isfinite(answer.median("binding_energy")[0]) for answer in answers)
        sides.append({frozenset(flag_words(answer.flags[0])) for answer in answers})
    (without,), (raised,) = sides  # rows of one side raise the same flags
    assert raised - without == {word}
    assert without - raised == set()
    sentence = next(text.sentence for text in FLAG_TEXT.values() if text.word == word)
    assert star_content(answers[0]).flags[word] == sentence


def test_radiation_that_is_counted_is_not_neglected():
    stars, options = with_radiation(0.3)
    flags = [
        propagate(stars, conventions=Conventions(pressure=p), **options).flags[0] for p in ("gas", "gas+radiation")
    ]
    assert flags[0] - flags[1] == Flag.RADIATION_NEGLECTED


TRAINED = """summary = "learned from two stars"
source = "test"
[index]
distribution = "normal"
mean = 3.0
standard_deviation = 0.3
[training]
stars = 2
keys = {keys}
observables = ["log_k2"]
"""


def test_a_star_that_the_prior_was_learned_from_is_flagged(tmp_path):
    """By its name, wherever it stands and whatever was measured of it; another star of the same numbers is not."""
    path = tmp_path / "learned.toml"
    keys = [f"{int(key):016x}" for key in hash_identifiers(["Alder", "Birch"])]
    path.write_text(TRAINED.format(keys=keys).replace("'", '"'), encoding="utf-8")
    names = ["Cedar", "Birch", "alder", "Alder"]
    stars = Stars.of(names, mass=([1.0] * 4, [0.1] * 4), radius=([1.0] * 4, [0.1] * 4))
    posterior = propagate(stars, outputs=["binding_energy"], prior=path)
    assert [flag_words(f) for f in posterior.flags] == [(), ("used-in-training",), (), ("used-in-training",)]
    medians = posterior.median("binding_energy")
    assert len(set(medians.tolist())) == 1  # a flag moves no number
    untrained = parse_prior(TRAINED.partition("[training]")[0])
    assert propagate(stars, outputs=["binding_energy"], prior=untrained).flags.tolist() == [0] * 4


def test_every_flag_has_a_word_and_a_sentence():
    assert set(FLAG_TEXT) == set(Flag) - {Flag.NONE}
    assert all(text.word == flag.name.lower().replace("_", "-") for flag, text in FLAG_TEXT.items())
    assert all(text.sentence.endswith(".") for text in FLAG_TEXT.values())
    assert flag_words(sum(Flag)) == tuple(text.word for text in FLAG_TEXT.values())
