"""The calibrated coefficient: its table against its reference, its boundaries, refusals, and no step at any of them."""

import csv
from pathlib import Path

import numpy as np
import pytest

from stellerg import Conventions, Stars, propagate
from stellerg.engines import ENGINES
from stellerg.status import Flag, Status
from stellerg.structure.calibration import Place
from stellerg.structure.files import load_prior, main_sequence

PUBLISHED = Path(__file__).parent / "published"
OUTPUT = "potential_energy"
SEED = 20261206


def table(name):
    lines = (PUBLISHED / name).read_text(encoding="utf-8").splitlines()
    return list(csv.DictReader(line for line in lines if not line.startswith("#")))


def star_at(mass, ratio, state="unknown", relative=0.01, **more):
    """Stars of masses, with radii at ratios to that of age zero."""
    mass, ratio = np.broadcast_arrays(np.asarray(mass, float), np.asarray(ratio, float))
    radius = ratio * main_sequence().radius_zams(mass)
    names = [f"s{k}" for k in range(mass.size)]
    pairs = {"mass": (mass, relative * mass), "radius": (radius, relative * radius)}
    return Stars.of(names, evolutionary_state=state, **pairs, **more)


# --- the table ---


def test_the_file_holds_the_reference_values():
    calibration = main_sequence()
    nodes, boundaries = table("structure_nodes.csv"), table("structure_branches.csv")
    for name, column in (
        ("mass", "mass"),
        ("radius_zams", "radius_zams"),
        ("coefficient_zams", "alpha_zams"),
        ("gamma", "gamma"),
        ("scatter", "scatter"),
    ):
        assert getattr(calibration.nodes, name).tolist() == [float(row[column]) for row in nodes]
    for name, column in (
        ("mass", "mass"),
        ("widen", "x_widen"),
        ("end", "x_end"),
        ("convective_above", "hayashi_above"),
        ("radius_limit", "radius_limit"),
    ):
        own = getattr(calibration.boundaries, name)
        np.testing.assert_array_equal(own, [float(row[column] or "nan") for row in boundaries])


def test_the_relation_goes_through_its_nodes():
    nodes = main_sequence().nodes
    found = main_sequence().relation_at(np.log(nodes.mass))
    np.testing.assert_allclose(np.exp(found[:, 0]), nodes.radius_zams, rtol=1e-12)
    np.testing.assert_allclose(np.exp(found[:, 1]), nodes.coefficient_zams, rtol=1e-12)
    np.testing.assert_allclose(found[:, 2], nodes.gamma, atol=1e-12)


@pytest.mark.parametrize("row", table("structure_checks.csv"), ids=lambda row: f"{row['mass']} {row['what']}")
def test_integrated_models_lie_on_the_relation_within_two_per_cent(row):
    """Those at age zero are not independent of the nodes; the Sun is."""
    mass, radius = (np.array([[float(row[name])]]) for name in ("mass", "radius"))
    relation = main_sequence().relation(np.log(mass[0]), np.log(radius[0]), np.zeros(1, bool))
    coefficient = np.exp(relation.centre(np.log(mass), np.log(radius)))[0, 0]
    assert coefficient == pytest.approx(float(row["alpha"]), rel=0.02)


def test_the_suns_potential_energy():
    """Within 1.5 % of the mean of twelve published solar models, which the 68 % interval covers."""
    sun = {row["quantity"]: float(row["value"]) for row in table("sun.csv")}
    published = sun["alpha_twelve_tables_mean"] * sun["GM2_over_R_J"] * 1e7
    posterior = propagate(Stars.of("Sun", mass="1 exact", radius="1 exact"), outputs=OUTPUT, prior="main-sequence")
    low, high = posterior.interval(OUTPUT)[0]
    assert posterior.median(OUTPUT)[0] == pytest.approx(published, rel=0.015)
    assert low < published < high


def test_gas_and_radiation_always():
    assert "beta abs(Omega)/2" in propagate(star_at(1.0, 1.1), prior="main-sequence").energy_convention
    massive = star_at(30.0, 1.2)
    energies = propagate(massive, outputs=("potential_energy", "binding_energy"), prior="main-sequence")
    ratio = energies.median("binding_energy") / energies.median("potential_energy")
    from stellerg.structure.radiation import gas_pressure_fraction

    index = 5.0 - 3.0 / energies.median("structure_coefficient")
    beta = gas_pressure_fraction(index, np.log(30.0 * 0.61**2))
    np.testing.assert_allclose(ratio, beta / 2.0, rtol=1e-3)
    assert 0.35 < ratio[0] < 0.45


# --- places ---


def place_of(mass, ratio, contracting=False):
    calibration = main_sequence()
    log_mass = np.log(np.atleast_1d(np.asarray(mass, float)))
    log_radius = np.log(ratio) + calibration.relation_at(log_mass)[:, 0]
    return calibration.place(log_mass, log_radius, np.full(log_mass.shape, contracting))


@pytest.mark.parametrize("mass", [0.2, 0.5, 0.69, 0.7, 0.71, 1.0, 3.0, 20.0])
def test_every_boundary_has_a_neighbour_on_either_side(mass):
    end = main_sequence().boundaries.at("end", np.log([mass]))
    limit = main_sequence().boundaries.at("radius_limit", np.log([mass]))
    inside = Place.INFLATED if mass < 1.0 and limit < end else Place.MAIN_SEQUENCE
    assert place_of(mass, end * 0.999) == inside
    assert place_of(mass, end * 1.001) == (Place.CONTRACTING if mass < 0.7 else Place.BEYOND)
    assert place_of(mass, 0.799) == Place.TOO_SMALL
    assert place_of(mass, 0.801) == Place.MAIN_SEQUENCE


def test_the_other_boundaries():
    assert place_of(0.0999, 1.0) == Place.MASS_OUTSIDE
    assert place_of(0.1, 1.0) == Place.MAIN_SEQUENCE
    assert place_of(40.0, 1.0) == Place.MAIN_SEQUENCE
    assert place_of(40.01, 1.0) == Place.MASS_OUTSIDE
    assert place_of(4.99, 6.0, True) == Place.STATED_CONTRACTING
    assert place_of(5.01, 6.0, True) == Place.CONTRACTING_OUTSIDE
    assert place_of(5.01, 1.9, True) == Place.STATED_CONTRACTING
    assert place_of(0.8, 1.12) == Place.MAIN_SEQUENCE
    assert place_of(0.8, 1.14) == Place.INFLATED


@pytest.mark.parametrize(
    ("mass", "ratio", "state", "status", "words"),
    [
        (0.09, 1.0, "unknown", Status.OUTSIDE_CALIBRATION, None),
        (50.0, 1.0, "unknown", Status.OUTSIDE_CALIBRATION, "0.1 to 40"),
        (1.0, 0.5, "unknown", Status.OUTSIDE_CALIBRATION, "below 0.8 of that of age zero"),
        (1.0, 2.0, "unknown", Status.EVOLVED_OR_CONTRACTING, "state evolutionary_state pre-main-sequence"),
        (1.0, 2.0, "main-sequence", Status.EVOLVED_OR_CONTRACTING, "either a giant"),
        (1.0, 1.1, "evolved", Status.EVOLVED_OR_CONTRACTING, "stated evolved"),
        (1.0, 2.0, "pre-main-sequence", Status.OK, ""),
        (6.0, 4.0, "pre-main-sequence", Status.OUTSIDE_CALIBRATION, "above 5 solar masses"),
        (1.0, 1.1, "main-sequence", Status.OK, ""),
    ],
)
def test_refusals_say_why_and_what_to_do(mass, ratio, state, status, words):
    if mass in (0.09, 50.0):
        stars = Stars.of(mass=(mass, 0.01 * mass), radius=(mass**0.6, 0.01), evolutionary_state=state)
    else:
        stars = star_at([mass], [ratio], state)
    posterior = propagate(stars, outputs="binding_energy", prior="main-sequence")
    assert posterior.status[0] == status
    assert words is None or words in posterior.status_text()[0]
    assert np.isfinite(posterior.median("binding_energy")[0]) == (status == Status.OK)


def test_times_without_structure_stay_available_to_refused_stars():
    stars = Stars.of(mass=(1.0, 0.1), radius=(8.8, 0.5), luminosity=(35.0, 3.0))
    posterior = propagate(stars, outputs=("binding_energy", "free_fall_time"), prior="main-sequence")
    assert posterior.status[0] == Status.PARTIAL
    assert "either a giant" in posterior.status_text()[0]
    assert posterior.median("free_fall_time")[0] > 0.0
    assert np.isnan(posterior.median("binding_energy")[0])


def test_a_star_without_radius_is_told_what_is_missing():
    posterior = propagate(
        Stars.of(mass=(1.0, 0.1), luminosity=(1.0, 0.1)), outputs="binding_energy", prior="main-sequence"
    )
    assert posterior.status[0] == Status.UNDERDETERMINED
    assert "radius is not determined" in posterior.status_text()[0]


@pytest.mark.parametrize(
    ("mass", "ratio", "relative", "near"),
    [(1.0, 1.2, 0.01, False), (1.0, 1.46, 0.01, True), (0.101, 1.0, 0.01, True), (1.0, 0.81, 0.01, True)],
)
def test_probability_beyond_a_boundary_is_flagged(mass, ratio, relative, near):
    posterior = propagate(star_at([mass], [ratio], relative=relative), outputs=OUTPUT, prior="main-sequence")
    assert bool(posterior.flags[0] & Flag.NEAR_BOUNDARY) == near


def test_an_inflated_star_holds_its_coefficient():
    """Above 1.05 radius_limit ln alpha keeps the value at the limit, and its scatter is 0.10 (the definition)."""
    calibration, mass = main_sequence(), np.array([0.8])
    limit = calibration.boundaries.at("radius_limit", np.log(mass))[0]
    of_mass = calibration.relation_at(np.log(mass))[0]
    posterior = propagate(star_at(mass, [1.15 * limit / 1.0 * 1.0]), outputs=OUTPUT, prior="main-sequence")
    assert posterior.flags[0] & Flag.RADIUS_INFLATED
    held = np.exp(of_mass[1] + of_mass[2] * np.log(limit))
    relation = calibration.relation(np.log(mass), np.log(1.1 * limit) + of_mass[[0]], np.zeros(1, bool))
    assert relation.follows[0] == 0.0
    assert relation.scatter[0] == pytest.approx(0.10)
    centre = relation.centre(np.log(mass)[:, None], np.log(1.1 * limit) + of_mass[[0]][:, None])
    assert np.exp(centre)[0, 0] == pytest.approx(held, rel=1e-12)


# --- nothing steps ---


PROBABILITIES = (0.5, 0.158655, 0.841345, 0.02275, 0.97725)


def quantiles(stars):
    """Natural logarithms of the five reported quantiles, (star, 5); NaN without a result."""
    posterior = propagate(stars, outputs=OUTPUT, prior="main-sequence", engine="quadrature")
    return np.log(posterior.quantile(PROBABILITIES, OUTPUT))


def distribution(stars):
    """Cumulative of the coefficient on a fixed grid, (star, point): what a mixture of two branches moves smoothly."""
    posterior = propagate(stars, outputs=OUTPUT, prior="main-sequence", engine="quadrature")
    return posterior.cumulative(np.exp(np.linspace(-0.5, 1.5, 60)), "structure_coefficient")


def assert_no_step(values_of, log_places, largest):
    """Where values change by more than `largest` between places, they change less at 16 times the resolution.

    A step does not shrink; the upper quantile of a mixture falls steeply through the space between its parts (0.69
    Msun). `values_of` takes places and gives (place, value).
    """
    change = np.abs(np.diff(values_of(np.exp(log_places)), axis=0))
    change = np.where(np.isnan(change), 0.0, change).max(axis=1)
    for k in np.argsort(change)[::-1][:3]:
        if change[k] < largest:
            return
        finer = np.linspace(log_places[k], log_places[k + 1], 17)
        closer = np.abs(np.diff(values_of(np.exp(finer)), axis=0))
        assert np.nanmax(closer) < change[k] / 3.0, f"{change[k]:.4f}, and {np.nanmax(closer):.4f} in a 16th of it"


@pytest.mark.parametrize("ratio", [1.0, 1.07, 1.12, 1.3, 1.38])
def test_a_sweep_in_mass_through_the_nodes_has_no_step(ratio):
    log_mass = np.linspace(np.log(0.1001), np.log(39.9), 4_001)
    assert_no_step(lambda mass: quantiles(star_at(mass, ratio)), log_mass, 0.004)


SWEPT = [0.12, 0.34, 0.36, 0.45, 0.55, 0.69, 0.72, 0.85, 0.95, 1.1, 1.45, 1.8, 3.0, 4.9, 25.0]


@pytest.mark.parametrize("mass", SWEPT)
def test_a_sweep_in_radius_through_every_boundary_has_no_step(mass):
    log_ratio = np.linspace(np.log(0.81), np.log(4.0), 1_801)
    assert_no_step(lambda ratio: quantiles(star_at(mass, ratio)), log_ratio, 0.004)


@pytest.mark.parametrize("mass", SWEPT)
def test_a_sweep_of_contracting_stars_has_no_step(mass):
    """Their branches lie apart: a quantile crosses the empty space between at once, the distribution does not."""
    log_ratio = np.linspace(np.log(0.81), np.log(6.0), 1_801)
    assert_no_step(lambda ratio: distribution(star_at(mass, ratio, "pre-main-sequence")), log_ratio, 0.05)


def test_a_step_would_be_seen():
    """The negative control: the same sweep with all stars above 1 Msun moved by 1 %."""

    def stepping(mass):
        return quantiles(star_at(mass, 1.1)) + 0.01 * (mass > 1.0)[:, None]

    with pytest.raises(AssertionError):
        assert_no_step(stepping, np.linspace(np.log(0.9), np.log(1.11), 400), 0.004)


# --- M and R act through the coefficient ---


@pytest.mark.parametrize("engine", ["quadrature", "montecarlo"])
@pytest.mark.parametrize(("mass", "slope"), [(3.0, -0.5), (1.0, 0.27)])
def test_energy_follows_the_radius_through_the_coefficient(engine, mass, slope):
    """d ln|Omega|/d ln R = gamma - 1, by differences of medians; common random numbers in montecarlo (one key)."""
    radius = 1.2 * main_sequence().radius_zams(np.array(mass))
    step, medians = 0.02, []
    for sign in (1.0, -1.0):
        moved = radius * np.exp(sign * step)
        stars = Stars.of("one star", mass=(mass, 0.01 * mass), radius=(moved, 0.01 * moved))
        medians.append(
            np.log(propagate(stars, outputs=OUTPUT, prior="main-sequence", engine=engine, seed=SEED).median(OUTPUT))
        )
    assert (medians[0] - medians[1])[0] / (2.0 * step) == pytest.approx(slope, abs=0.02)


def test_the_budget_counts_the_net_effect_of_mass_and_radius():
    """At 3 Msun |E| goes as M^(2 + d ln alpha/d ln M) R^(gamma - 1) and beta: by differences of medians."""
    posterior = propagate(star_at([3.0], [1.2]), outputs="binding_energy", prior="main-sequence")
    shares = {name: values[0] for name, values in posterior.budget("binding_energy").items()}
    radius = 1.2 * main_sequence().radius_zams(np.array(3.0))
    slopes = {}
    for name in ("mass", "radius"):
        ends = []
        for sign in (1.0, -1.0):
            at = {"mass": 3.0, "radius": radius}
            at[name] *= np.exp(sign * 0.01)
            stars = Stars.of(**{key: f"{float(v)!r} exact" for key, v in at.items()})
            ends.append(
                np.log(propagate(stars, outputs="binding_energy", prior="main-sequence").median("binding_energy")[0])
            )
        slopes[name] = (ends[0] - ends[1]) / 0.02
    whole = sum((0.01 * slope) ** 2 for slope in slopes.values()) + 0.03**2
    for name, slope in slopes.items():
        assert shares[name] == pytest.approx((0.01 * slope) ** 2 / whole, rel=0.01)
    assert sum(shares.values()) == pytest.approx(1.0)


# --- stars stated contracting ---


def test_a_contracting_star_is_accepted_only_when_stated():
    given = {"mass": (0.9, 0.01), "radius": (1.6 * 0.796, 0.01)}
    for state, status in (("unknown", Status.EVOLVED_OR_CONTRACTING), ("pre-main-sequence", Status.OK)):
        posterior = propagate(Stars.of(**given, evolutionary_state=state), outputs=OUTPUT, prior="main-sequence")
        assert posterior.status[0] == status
    assert posterior.median("structure_coefficient")[0] == pytest.approx(0.86, rel=1e-3)


def test_between_the_branches_it_is_a_mixture_of_both():
    calibration = main_sequence()
    ratio = 1.2
    c = np.log(ratio) / np.log(1.4)
    posterior = propagate(star_at([1.0], [ratio], "pre-main-sequence"), outputs=OUTPUT, prior="main-sequence")
    below = posterior.cumulative(np.array([1.15]), "structure_coefficient")[0, 0]
    assert below == pytest.approx(c, abs=1e-3)  # the branches lie apart: 0.86 and 1.74
    assert posterior.linear_value(OUTPUT)[0] != posterior.linear_value(OUTPUT)[0]  # no derivative: null
    from stellerg.posterior.document import star_document

    convective, other = star_document(posterior)["structure"]["components"]
    assert (convective["coefficient"], convective["weight"]) == (pytest.approx(0.86), pytest.approx(c))
    at_age_zero = calibration.relation_at(np.log([1.0]))[0]
    expected = np.exp(at_age_zero[1] + at_age_zero[2] * np.log(ratio))
    assert (other["coefficient"], other["weight"]) == (pytest.approx(expected), pytest.approx(1.0 - c))


def test_a_light_star_of_large_radius_is_taken_as_contracting():
    stars = Stars.of(mass=(0.12, 0.002), radius=(0.43, 0.005))
    posterior = propagate(stars, outputs=OUTPUT, prior="main-sequence")
    assert posterior.status[0] == Status.OK
    assert posterior.flags[0] & Flag.TAKEN_AS_CONTRACTING
    assert posterior.median("structure_coefficient")[0] == pytest.approx(0.8375, abs=0.003)  # between 0.834 and 0.842


# --- every prior ---


@pytest.mark.parametrize(
    ("prior", "mass", "ratio", "excluded"),
    [
        ("uniform-index", 1.0, 1.12, True),
        ("wide-index", 1.0, 1.12, False),
        ("uniform-index", 0.6, 1.0, False),
        ("by-mass", 0.2, 1.0, False),
        ("polytrope-3", 2.0, 1.3, True),
        ("constant-density", 0.3, 1.0, True),
    ],
)
def test_a_prior_that_excludes_the_calibrated_value_is_flagged(prior, mass, ratio, excluded):
    posterior = propagate(star_at([mass], [ratio]), outputs=OUTPUT, prior=prior)
    assert bool(posterior.flags[0] & Flag.PRIOR_EXCLUDES_CALIBRATION) == excluded
    calibrated = posterior.calibrated(OUTPUT)[0]
    if excluded:
        under = propagate(star_at([mass], [ratio]), outputs=OUTPUT, prior="main-sequence")
        assert calibrated == pytest.approx(under.median(OUTPUT)[0], rel=1e-12)
    else:
        assert np.isnan(calibrated)


def test_engines_share_the_relation():
    """The linear engine is close at 1 %; its engine refuses nothing here."""
    stars = star_at([0.3, 1.0, 3.0, 20.0], [1.0, 1.1, 1.2, 1.1])
    exact = propagate(stars, outputs="binding_energy", prior="main-sequence", engine="quadrature")
    first = propagate(stars, outputs="binding_energy", prior="main-sequence", engine="linear")
    np.testing.assert_allclose(first.median("binding_energy"), exact.median("binding_energy"), rtol=2e-3)
    np.testing.assert_allclose(first.log10_sd("binding_energy"), exact.log10_sd("binding_energy"), rtol=0.02)


def test_the_calibration_leaves_mass_and_radius_untouched():
    """A structure model is normalised at every mass and radius: outputs without structure do not move."""
    stars = Stars.of("a", mass=(1.0, 0.1), radius=(1.0, 0.1), luminosity=(1.0, 0.1))
    outputs = ("free_fall_time", "nuclear_time", "binding_energy")
    for engine in ENGINES:
        two = [
            propagate(stars, outputs=outputs, prior=p, engine=engine, conventions=Conventions())
            for p in ("main-sequence", "uniform-index")
        ]
        for output in outputs[:2]:
            tolerance = 0.02 if engine == "mcmc" else 1e-6
            a, b = (p.quantile((0.16, 0.5, 0.84), output) for p in two)
            np.testing.assert_allclose(a, b, rtol=tolerance)


def test_a_wrong_table_is_refused_with_its_line():
    from stellerg.errors import PriorError
    from stellerg.structure.files import parse_prior

    text = main_sequence().text
    for old, new, words in (
        ("[0.15, 0.174,", "[0.05, 0.174,", "increase"),
        ("0.842, 0.0, 0.02]", "0.842, 0.0]", "must hold 5 numbers"),
        ("0.842, 0.0, 0.02]", "0.842, nan, 0.02]", "finite number"),
        ("smallest = 0.8 ", "smallest = -0.8 ", "must be positive"),
        ("inflated_over = 1.05", "inflated_over = 0.9", "must exceed 1"),
        ("at_end = 0.12 ", "at_start = 0.12 ", "unknown key"),
        ("standard_deviation = 0.015", "standard_deviation = 0.015\nfraction = 0.1", "either"),
    ):
        assert old in text
        with pytest.raises(PriorError, match=words) as caught:
            parse_prior(text.replace(old, new, 1))
        assert caught.value.line > 1
    assert load_prior("main-sequence").needs == ("mass", "radius")


GIANTS = [(1.0, 8.8, 4700.0), (1.0, 33.0, 4100.0), (3.0, 20.0, 4800.0), (5.0, 60.0, 4300.0)]


@pytest.mark.parametrize(("mass", "radius", "temperature"), GIANTS)
@pytest.mark.parametrize("prior", ["uniform-index", "wide-index", "polytrope-3", "by-mass"])
def test_giants_are_doubtful_with_and_without_temperature(mass, radius, temperature, prior):
    given = {"mass": (mass, 0.1 * mass), "radius": (radius, 0.05 * radius)}
    for more in ({}, {"effective_temperature": (temperature, 100.0)}):
        posterior = propagate(Stars.of(**given, **more), prior=prior)
        assert posterior.status[0] == Status.DOUBTFUL
        assert "if this star is a giant, the numbers are wrong by 10 to 300 times" in posterior.status_text()[0]
        assert posterior.median("binding_energy")[0] > 0.0


def test_what_is_stated_decides():
    given = {"mass": (0.9, 0.05), "radius": (1.6 * 0.796, 0.05), "luminosity": (0.8, 0.1)}
    status = {
        state: propagate(Stars.of(**given, evolutionary_state=state)).status[0]
        for state in ("unknown", "main-sequence", "pre-main-sequence", "evolved")
    }
    assert status == {
        "unknown": Status.DOUBTFUL,
        "main-sequence": Status.DOUBTFUL,
        "pre-main-sequence": Status.OK,
        "evolved": Status.EVOLVED_OR_CONTRACTING,
    }


def test_a_light_star_is_taken_as_contracting_with_a_flag():
    posterior = propagate(Stars.of(mass=(0.12, 0.01), radius=(0.43, 0.02), luminosity=(0.02, 0.002)))
    assert posterior.status[0] == Status.OK
    assert posterior.flags[0] & Flag.TAKEN_AS_CONTRACTING


def test_times_without_structure_are_not_doubtful():
    stars = Stars.of(mass=(1.0, 0.1), radius=(8.8, 0.5), luminosity=(35.0, 3.0))
    outputs = ("free_fall_time", "nuclear_time")
    assert propagate(stars, outputs=outputs).status[0] == Status.OK
    evolved = Stars.of(mass=(1.0, 0.1), radius=(8.8, 0.5), luminosity=(35.0, 3.0), evolutionary_state="evolved")
    assert propagate(evolved, outputs=outputs).status[0] == Status.OK


def test_a_missing_luminosity_and_a_doubtful_size_are_both_said():
    (text,) = propagate(Stars.of(mass=(1.0, 0.1), radius=(8.8, 0.5))).status_text()
    assert "no Kelvin-Helmholtz time" in text
    assert "if this star is a giant" in text


@pytest.mark.parametrize(("mass", "radius", "temperature"), GIANTS)
def test_giants_are_refused_under_the_calibration_with_and_without_temperature(mass, radius, temperature):
    given = {"mass": (mass, 0.02 * mass), "radius": (radius, 0.02 * radius)}
    for more in ({}, {"effective_temperature": (temperature, 100.0)}):
        posterior = propagate(Stars.of(**given, **more), outputs="binding_energy", prior="main-sequence")
        assert posterior.status[0] == Status.EVOLVED_OR_CONTRACTING
