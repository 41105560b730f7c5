"""What was measured of the inside: limits, published values, the common misfit, conflicts, radiation and ionisation."""

import csv
from pathlib import Path

import numpy as np
import pytest

from stellerg import Conventions, InputError, Stars, propagate
from stellerg.binding import ionisation_share
from stellerg.status import Flag, Status
from stellerg.structure.observed import Observed
from stellerg.structure.polytrope import polytrope

PUBLISHED = Path(__file__).parent / "published"
SUN = {"mass": "1 exact", "radius": "1 exact", "luminosity": "1 exact"}
COEFFICIENT = "structure_coefficient"
ENGINES = ("quadrature", "montecarlo")


def published(name):
    lines = (PUBLISHED / name).read_text(encoding="utf-8").splitlines()
    return {row["quantity"]: float(row["value"]) for row in csv.DictReader(x for x in lines if not x.startswith("#"))}


def answer(prior="wide-index", engine="quadrature", discrepancy=0.25, **inside):
    return propagate(Stars.of("s", **SUN, **inside), prior=prior, engine=engine, discrepancy=discrepancy)


# --- limits ---


@pytest.mark.parametrize("engine", ENGINES)
@pytest.mark.parametrize("index", [1.7, 2.5, 3.3])
def test_a_sharp_k2_without_misfit_gives_its_polytrope(engine, index):
    value = np.log10(polytrope(index).apsidal_constant)
    posterior = answer(engine=engine, discrepancy=0.0, log_k2=(value, 1e-4))
    low, middle, high = posterior.quantile((0.0228, 0.5, 0.9772), "n_effective")[0]
    assert middle == pytest.approx(index, abs=1e-4)
    assert high - low < 2e-3


@pytest.mark.parametrize("engine", ENGINES)
@pytest.mark.parametrize("prior", ["uniform-index", "present-sun"])
def test_a_blunt_k2_gives_the_prior_back(engine, prior):
    p = (0.0228, 0.1587, 0.5, 0.8413, 0.9772)
    informed = answer(prior, engine, log_k2=(-1.8, 50.0)).quantile(p, COEFFICIENT)[0]
    alone = answer(prior, engine).quantile(p, COEFFICIENT)[0]
    np.testing.assert_allclose(informed, alone, rtol=3e-4)


def test_a_coefficient_given_directly_narrows_to_it():
    posterior = answer(structure_coefficient=(1.62, 0.001))
    assert posterior.median(COEFFICIENT)[0] == pytest.approx(1.62, rel=1e-4)
    assert posterior.log10_sd(COEFFICIENT)[0] == pytest.approx(0.001 / 1.62 / np.log(10.0), rel=0.01)


def test_a_point_prior_stays_a_point():
    posterior = answer("polytrope-3", log_k2=(-1.2, 0.01))
    np.testing.assert_allclose(posterior.quantile((0.05, 0.5, 0.95), COEFFICIENT)[0], 1.5, rtol=1e-6)
    assert posterior.flags[0] & Flag.PRIOR_DATA_CONFLICT  # k2 of n = 3 is 10^-1.84, and the misfit 0.17 dex


# --- the Sun ---


def test_the_suns_k2_under_the_wide_prior_contains_its_coefficient():
    sun = published("sun.csv")
    posterior = answer("wide-index", log_k2=(sun["log10_k2"], 0.015))
    low, high = posterior.interval(COEFFICIENT, 0.9545)[0]
    assert low < sun["alpha_twelve_tables_mean"] < high


def test_the_suns_k2_under_the_default_is_no_conflict():
    """Two-sided predictive probability: by the closed integral over n and the misfit (0.22 in the design)."""
    from scipy.integrate import quad
    from scipy.special import ndtr

    index, mean = 2.89, published("sun.csv")["index_from_k2"]
    assert mean == index
    value = np.log10(polytrope(index).apsidal_constant)
    above = quad(lambda n: ndtr((n - index) / 0.25) / 1.5, 1.5, 3.0)[0]
    posterior = answer("uniform-index", log_k2=(value, 1e-4))
    probability = posterior.predictive_probabilities()["log_k2"][0]
    assert probability == pytest.approx(2.0 * above, abs=2e-3)
    assert probability == pytest.approx(0.22, abs=0.005)
    assert not posterior.flags[0] & Flag.PRIOR_DATA_CONFLICT


def test_a_measurement_outside_the_prior_is_a_conflict():
    posterior = answer("uniform-index", log_k2=(-3.5, 0.02))
    assert posterior.flags[0] & Flag.PRIOR_DATA_CONFLICT
    assert posterior.predictive_probabilities()["log_k2"][0] < 1e-4
    assert 1.4 < posterior.median(COEFFICIENT)[0] <= 1.5  # the end of the prior, and a result


# --- one misfit ---


def test_two_observables_are_not_narrower_than_their_common_misfit_allows():
    """Sharp k2 and moment of inertia fix n_k2 and n_I: n = n_k2 + delta and n = n_I + 0.55 delta fix delta and n.

    Both of one polytrope: delta = 0 and n its index, sharp. With errors, the width of n is that of linear algebra.
    """
    index, sd_k2, sd_inertia = 3.0, 0.03, 0.02  # errors in n
    step = 1e-3
    k2 = [np.log10(polytrope(n).apsidal_constant) for n in (index - step, index, index + step)]
    inertia = [polytrope(n).moment_of_inertia_factor for n in (index - step, index, index + step)]
    slope_k2, slope_inertia = (k2[2] - k2[0]) / (2 * step), (inertia[2] - inertia[0]) / (2 * step)
    errors = {"log_k2": abs(slope_k2) * sd_k2, "moment_of_inertia_factor": abs(slope_inertia) * sd_inertia}
    given = {
        "log_k2": (k2[1], errors["log_k2"]),
        "moment_of_inertia_factor": (inertia[1], errors["moment_of_inertia_factor"]),
    }
    # (n, delta): rows n - delta, n - 0.55 delta, delta/0.25
    design = np.array([[1.0 / sd_k2, -1.0 / sd_k2], [1.0 / sd_inertia, -0.55 / sd_inertia], [0.0, 1.0 / 0.25]])
    expected = np.sqrt(np.linalg.inv(design.T @ design)[0, 0])
    low, high = answer(**given).interval("n_effective")[0]
    assert 0.5 * (high - low) == pytest.approx(expected, rel=0.05)
    independent = 1.0 / np.sqrt(1.0 / (sd_k2**2 + 0.25**2) + 1.0 / (sd_inertia**2 + (0.55 * 0.25) ** 2))
    assert abs(expected / independent - 1.0) > 0.2  # two misfits of their own would give another width
    assert abs(0.5 * (high - low) / independent - 1.0) > 0.15


def test_fully_convective_stars_have_no_misfit():
    value = np.log10(polytrope(1.6).apsidal_constant)
    light = Stars.of("a", mass="0.3 exact", radius="0.29 exact", log_k2=(value, 1e-4))
    heavy = Stars.of("b", mass="1.0 exact", radius="1.00 exact", log_k2=(value, 1e-4))
    widths = [propagate(s, outputs="potential_energy").log10_sd(COEFFICIENT)[0] for s in (light, heavy)]
    assert widths[0] < 1e-3 < 0.01 < widths[1]


def test_direct_relations_hold_under_the_calibration():
    """At 4 Msun: ln alpha = -1.0272 - 0.3237 ln k2 with 2.8 %, against a prior of 3 %: by the sum of precisions."""
    from stellerg.structure.files import main_sequence

    mass, radius = 4.0, 2.8
    prior = main_sequence().relation(np.log([mass]), np.log([radius]), np.zeros(1, bool))
    centre = prior.centre(np.log([[mass]]), np.log([[radius]]))[0, 0]
    value = -2.35
    direct = -1.0272 - 0.3237 * value * np.log(10.0)
    sds = np.array([0.03, np.hypot(0.028, 0.3237 * np.log(10.0) * 0.01)])
    weights = 1.0 / sds**2
    expected = (weights * [centre, direct]).sum() / weights.sum()
    stars = Stars.of("a", mass=f"{mass} exact", radius=f"{radius} exact", log_k2=(value, 0.01))
    for engine in ("montecarlo", "linear"):
        posterior = propagate(stars, outputs="potential_energy", prior="main-sequence", engine=engine)
        assert np.log(posterior.median(COEFFICIENT)[0]) == pytest.approx(expected, abs=1e-3)
        sd = posterior.log10_sd(COEFFICIENT)[0] * np.log(10.0)
        assert sd == pytest.approx(weights.sum() ** -0.5, rel=0.02)


def test_structure_observables_weigh_mass_and_radius_under_the_calibration():
    """A large coefficient asks for a star further from age zero: of the same radius, a smaller mass."""
    plain = {"mass": (1.0, 0.1), "radius": (1.0, 0.02)}
    stars = [Stars.of("a", **plain), Stars.of("a", **plain, structure_coefficient=(1.9, 0.02))]
    masses = [
        np.average(d.latents["mass"][0], weights=np.exp(d.log_weight[0]))
        for d in (propagate(s, outputs="potential_energy", prior="main-sequence").draws(4096) for s in stars)
    ]
    assert masses[1] < masses[0] - 0.03


def test_a_mean_of_two_components():
    """A weight of 1 is the star's own k2; a small weight says little of it."""
    value = (np.log10(polytrope(2.2).apsidal_constant), 0.02)
    own = answer(log_k2=value)
    whole = answer(mean_log_k2=value, mean_log_k2_weight=1.0)
    np.testing.assert_allclose(own.quantile((0.1, 0.5, 0.9), COEFFICIENT), whole.quantile((0.1, 0.5, 0.9), COEFFICIENT))
    part = answer(mean_log_k2=value, mean_log_k2_weight=0.05)
    assert part.log10_sd(COEFFICIENT)[0] > 1.5 * own.log10_sd(COEFFICIENT)[0]


# --- bad input ---


def test_a_mean_without_its_weight_is_refused():
    with pytest.raises(InputError, match="mean_log_k2_weight"):
        Stars.of(**SUN, mean_log_k2=(-1.8, 0.1))
    with pytest.raises(InputError, match=r"\(0, 1\]"):
        Stars.of(**SUN, mean_log_k2=(-1.8, 0.1), mean_log_k2_weight=1.5)


def test_an_observable_that_cannot_be_used_is_left_aside():
    posterior = propagate(Stars.of("a", **SUN, log_k2="<-1.8"))
    assert posterior.status[0] == Status.OK
    assert posterior.flags[0] & Flag.MEASUREMENT_UNUSABLE
    np.testing.assert_allclose(posterior.median(COEFFICIENT), propagate(Stars.of("a", **SUN)).median(COEFFICIENT))


@pytest.mark.parametrize("discrepancy", [-0.1, np.nan, np.inf])
def test_a_discrepancy_must_be_a_number_not_negative(discrepancy):
    with pytest.raises(InputError, match="discrepancy"):
        answer(discrepancy=discrepancy, log_k2=(-1.8, 0.1))


def test_observables_without_a_mass_constrain_structure_all_the_same():
    """The specific energy needs M/R alone; with nothing known of the mass the misfit has its full size."""
    stars = Stars.of("a", mean_density=("1.0 ± 0.01 solar"), radius="1 exact", log_k2=(-1.9, 0.02))
    assert propagate(stars, outputs="specific_binding_energy").status[0] == Status.OK


def test_stars_of_one_catalogue_with_and_without_observables():
    stars = Stars.of(
        ["a", "b", "c"], mass=["1 exact"] * 3, radius=["1 exact"] * 3, log_k2=["-1.8 ± 0.02", "", "-2.0 ± 0.02"]
    )
    together = propagate(stars, outputs="potential_energy")
    for row, name in enumerate("abc"):
        alone = propagate(stars.take(np.array([row])), outputs="potential_energy")
        assert alone.star[0] == name
        quantiles = (p.quantile((0.1, 0.5, 0.9), "potential_energy") for p in (together.take([row]), alone))
        np.testing.assert_array_equal(*quantiles)


def test_taken_posteriors_keep_their_judgements():
    stars = Stars.of(["a", "b"], mass=["1 exact"] * 2, radius=["1 exact"] * 2, log_k2=["-1.8 ± 0.02", ""])
    posterior = propagate(stars, outputs="binding_energy")
    swapped = posterior.take([1, 0])
    np.testing.assert_array_equal(swapped.radiation_share(), posterior.radiation_share()[::-1])
    np.testing.assert_array_equal(
        swapped.predictive_probabilities()["log_k2"], posterior.predictive_probabilities()["log_k2"][::-1]
    )
    assert np.isnan(swapped.predictive_probabilities()["log_k2"][0])


# --- the prediction ---


@pytest.mark.parametrize("index", [0.5, 1.5, 2.9, 3.5])
def test_predictions_are_those_of_polytropes(index):
    none = np.zeros(1)
    observed = Observed({}, np.ones(1), none, none, none)
    q = np.array([[np.log(3.0 / (5.0 - index))]])
    star = polytrope(index)
    assert np.exp(observed.predicted("log_k2", q, np.zeros((1, 1))))[0, 0] == pytest.approx(
        star.apsidal_constant, rel=1e-6
    )
    inertia = np.exp(observed.predicted("moment_of_inertia_factor", q, np.zeros((1, 1))))[0, 0]
    assert inertia == pytest.approx(star.moment_of_inertia_factor, rel=1e-6)


# --- radiation and ionisation through the answers ---

TABLE = {  # pressure-weighted 1 - beta at M mu^2 of gas-and-radiation polytropes: computed for the design
    1.5: (4.610127e-4, 0.0383967, 0.2307953),
    3.0: (3.869374e-4, 0.0337771, 0.2243907),
    3.5: (3.936922e-4, 0.0341618, 0.2246855),
}


@pytest.mark.parametrize("index", TABLE)
@pytest.mark.parametrize("engine", ["quadrature", "montecarlo", "mcmc", "linear"])
def test_radiation_lowers_the_binding_energy_as_tabulated(index, engine, tmp_path):
    prior = tmp_path / "point.toml"
    prior.write_text(f'summary = "a point"\nsource = "judgement"\n[index]\ndistribution = "point"\nvalue = {index}\n')
    gas = Conventions(pressure="gas+radiation")
    for mass_mu2, share in zip((0.36, 3.6, 14.4), TABLE[index], strict=True):
        stars = Stars.of("a", mass=f"{mass_mu2 / 0.36:.6f} exact", radius="2 exact", mean_molecular_weight="0.6 exact")
        energies = propagate(
            stars, outputs=("potential_energy", "binding_energy"), prior=prior, engine=engine, conventions=gas
        )
        ratio = 2.0 * energies.median("binding_energy")[0] / energies.median("potential_energy")[0]
        assert 1.0 - ratio == pytest.approx(share, rel=1e-4, abs=2e-7)


@pytest.mark.parametrize(("mass", "flagged"), [(5.0, False), (10.0, True), (40.0, True)])
def test_neglected_radiation_is_flagged_above_three_per_cent(mass, flagged):
    """10 Msun: 3.6 %, 40 Msun: 23 % (design; n = 3 and mu = 0.61 give 3.57 % and 22.9 %)."""
    stars = Stars.of("a", mass=f"{mass} exact", radius=f"{1.2 * mass**0.6} exact")
    posterior = propagate(stars, outputs="binding_energy", prior="polytrope-3")
    assert bool(posterior.flags[0] & Flag.RADIATION_NEGLECTED) == flagged
    counted = propagate(
        stars, outputs="binding_energy", prior="polytrope-3", conventions=Conventions(pressure="gas+radiation")
    )
    assert not counted.flags[0] & Flag.RADIATION_NEGLECTED
    assert counted.radiation_share()[0] == posterior.radiation_share()[0]


def test_ionisation_of_the_sun_is_about_one_per_cent():
    lines = (PUBLISHED / "ionisation.csv").read_text(encoding="utf-8").splitlines()
    table = {r["quantity"]: float(r["value"]) for r in csv.DictReader(x for x in lines if not x.startswith("#"))}
    share = ionisation_share(table["mixture_X0.70_Y0.28_no_H2"], np.log(1.613), 0.0, 0.0)
    assert 2.0 * share == pytest.approx(table["sun_over_half_alpha_GM2_over_R"], rel=0.01)
    counted = Conventions(ionisation=True)
    stars = Stars.of("Sun", **SUN, structure_coefficient="1.613 ± 0.0001")
    with_, without = (propagate(stars, prior="wide-index", conventions=c) for c in (counted, Conventions()))
    ratio = with_.median("binding_energy")[0] / without.median("binding_energy")[0]
    assert 1.0 - ratio == pytest.approx(table["sun_over_half_alpha_GM2_over_R"], rel=0.01)
    assert without.ionisation_share()[0] == pytest.approx(1.0 - ratio, rel=1e-3)


def test_ionisation_may_unbind_a_star():
    """A contracting 0.1 Msun star of 8 Rsun: e M exceeds abs(Omega)/2."""
    stars = Stars.of(
        "a", mass="0.1 exact", radius="8 exact", luminosity="1 exact", evolutionary_state="pre-main-sequence"
    )
    posterior = propagate(
        stars,
        outputs=("binding_energy", "potential_energy"),
        prior="polytrope-1.5",
        conventions=Conventions(ionisation=True),
    )
    assert posterior.status[0] == Status.PARTIAL
    assert "not negative" in posterior.status_text()[0]
    assert posterior.median("potential_energy")[0] > 0.0
    assert np.isnan(posterior.median("binding_energy")[0])


def test_composition_gives_the_mean_molecular_weight():
    """1/mu = 2X + 3Y/4 + Z/2; its error to first order."""
    stars = Stars.of("a", **SUN, hydrogen_mass_fraction=(0.70, 0.02), metal_mass_fraction=(0.02, 0.005))
    measured = stars.measured["mean_molecular_weight"]
    weight = 1.0 / (2.0 * 0.70 + 0.75 * 0.28 + 0.5 * 0.02)
    assert measured.value[0] == pytest.approx(weight, rel=1e-12)
    assert measured.upper[0] == pytest.approx(weight**2 * np.hypot(1.25 * 0.02, 0.25 * 0.005), rel=1e-6)
    own = Stars.of("a", **SUN, hydrogen_mass_fraction=(0.70, 0.02), mean_molecular_weight=(0.6, 0.01))
    assert own.measured["mean_molecular_weight"].value[0] == 0.6


# --- findings of a review ---


def test_an_exact_observable_of_the_inside_is_refused_in_a_call_and_left_aside_in_a_table(tmp_path):
    with pytest.raises(InputError, match="needs an error"):
        Stars.of(**SUN, log_k2="-1.8 exact")
    from stellerg import read_stars

    path = tmp_path / "stars.csv"
    path.write_text("star,mass,radius,log_k2\na,1 exact,1 exact,-1.8 exact\nb,1 exact,1 exact,\n")
    posterior = propagate(read_stars(path), outputs="potential_energy")
    assert posterior.flags[0] & Flag.MEASUREMENT_UNUSABLE
    assert posterior.median("potential_energy")[0] == posterior.median("potential_energy")[1]


@pytest.mark.parametrize("value", [-2.2, -1.9, -1.5, -1.4])
def test_the_predictive_probability_of_a_point_is_that_of_the_misfit(value):
    """For n = 3 sharp k2 is predicted below a value where the misfit lies on one side: closed form in its score."""
    from scipy.optimize import brentq
    from scipy.special import ndtr

    index = brentq(lambda n: np.log10(polytrope(n).apsidal_constant) - value, 1.0, 4.5)
    tail = ndtr(-abs(3.0 - index) / 0.25)
    probability = answer("polytrope-3", log_k2=(value, 1e-4)).predictive_probabilities()["log_k2"][0]
    assert probability == pytest.approx(2.0 * tail, abs=0.004)


def test_the_companion_of_a_convective_star_counts():
    """Weight 0.5: what is measured is a mean, and says half of what the star's own k2 would."""
    stars = {
        weight: Stars.of(
            "a",
            mass=(0.5, 0.005),
            radius=(1.2, 0.005),
            mean_log_k2=(-0.86, 0.003),
            mean_log_k2_weight=weight,
            evolutionary_state="pre-main-sequence",
        )
        for weight in (1.0, 0.5)
    }
    widths = {}
    for weight, star in stars.items():
        by_engine = [
            propagate(star, outputs="potential_energy", prior="main-sequence", engine=engine).log10_sd(COEFFICIENT)[0]
            for engine in ENGINES
        ]
        assert by_engine[0] == pytest.approx(by_engine[1], rel=0.03)
        widths[weight] = by_engine[0]
    assert widths[0.5] > 1.3 * widths[1.0]


@pytest.mark.parametrize("prior", ["main-sequence", "wide-index"])
def test_company_with_other_observables_changes_no_bit(prior):
    given = {"mass": ["2.0 ± 0.1"] * 4, "radius": ["2.0 ± 0.1"] * 4}
    given |= {
        "structure_coefficient": ["1.5 ± 0.03", "", "", "1.6 ± 0.1"],
        "log_k2": ["", "-2.2 ± 0.05", "", "-2 ± 0.1"],
    }
    given |= {"mean_log_k2": ["", "", "-2.2 ± 0.05", ""], "mean_log_k2_weight": [1.0, 1.0, 0.6, 1.0]}
    stars = Stars.of(list("abcd"), **given)
    for engine in ENGINES:
        together = propagate(stars, outputs="potential_energy", prior=prior, engine=engine)
        quantiles = together.quantile((0.1, 0.5, 0.9), "potential_energy")
        for row in range(4):
            alone = propagate(stars.take(np.array([row])), outputs="potential_energy", prior=prior, engine=engine)
            np.testing.assert_array_equal(alone.quantile((0.1, 0.5, 0.9), "potential_energy")[0], quantiles[row])


def test_a_sharper_k2_than_the_misfit_changes_nothing_more():
    medians = []
    for error in (1e-3, 1e-5, 1e-7):
        stars = Stars.of("a", mass=(5.0, 0.5), radius=(3.0, 0.2), log_k2=(-2.2, error))
        for engine in ENGINES:
            posterior = propagate(stars, outputs="potential_energy", prior="main-sequence", engine=engine)
            assert posterior.status[0] == Status.OK
            medians.append(posterior.median(COEFFICIENT)[0])
    np.testing.assert_allclose(medians, medians[0], rtol=2e-3)
