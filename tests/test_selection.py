"""Which measurements are used and left aside; what is missing is named; exact values are constraints."""

import math

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

from reference_star import (
    BOTH,
    ENERGY,
    GM,
    LN10,
    QUANTILE,
    RADIUS,
    TIME,
    L,
    M,
    R,
    point,
    quoted,
    star_of,
    variance,
)
from stellerg.errors import InputError
from stellerg.inputs import Exact
from stellerg.observables import LATENTS, OBSERVABLES
from stellerg.selection import Need, determined, select
from stellerg.stars import Stars
from stellerg.status import Flag, Status

# --- redundancy ---

FOUR = ("mass", "radius", "effective_temperature", "luminosity")


def aside(posterior, row=0):
    return posterior.aside_sets[posterior.aside[row]]


def test_redundant_columns_are_left_aside_by_name():
    four, three = point(star_of(*FOUR)), point(star_of(*FOUR[:3]))
    assert aside(four) == ("luminosity",)
    assert aside(three) == ()
    for output in BOTH:
        assert four.quantile([0.2, 0.8], output).tolist() == three.quantile([0.2, 0.8], output).tolist()
    assert np.isnan(four.chi2[0])


@pytest.mark.parametrize(
    ("names", "chosen", "left"),
    [
        (("luminosity", "radius", "mass"), ("mass", "radius", "luminosity"), ()),
        (("mass", "log_mass", "radius", "log_radius"), ("mass", "radius"), ("log_mass", "log_radius")),
        # gravity adds the radius; the density then adds nothing
        (("mass", "log_surface_gravity", "mean_density"), ("mass", "log_surface_gravity"), ("mean_density",)),
        (("parallax", "distance", "angular_diameter"), ("parallax", "angular_diameter"), ("distance",)),
        (
            ("log_luminosity", "radius", "effective_temperature"),
            ("radius", "effective_temperature"),
            ("log_luminosity",),
        ),
        # nothing else says what a star is made of
        (
            ("mean_molecular_weight", "mass", "log_mass", "radius"),
            ("mass", "radius", "mean_molecular_weight"),
            ("log_mass",),
        ),
    ],
)
def test_order_of_selection(names, chosen, left):
    need = Need("anything", ((2.0, -1.0, -1.0, 0.0, 0.0),))
    for order in (names, names[::-1]):
        selection = select(order, {}, [need], None)
        assert (selection.chosen, selection.aside) == (chosen, left)


def test_determined():
    unit = np.eye(len(LATENTS))
    assert determined(unit[1], ["luminosity", "effective_temperature"])
    assert not determined(unit[1], ["luminosity", "parallax"])
    assert not determined(unit[0], [])
    assert determined(np.zeros(len(LATENTS)), [])
    assert determined(unit[4], ["mass", "mean_molecular_weight"])
    others = [name for name in OBSERVABLES if name != "mean_molecular_weight"]
    assert not determined(unit[4], others)
    assert all(determined(unit[k], others) for k in range(4))


def test_use_names_what_is_independent():
    stars = star_of(*FOUR)
    for use in (("mass", "radius", "luminosity"), ("luminosity", "mass", "radius")):
        posterior = point(stars, use=use)
        assert aside(posterior) == ("effective_temperature",)
        assert posterior.median("kelvin_helmholtz_time")[0] == pytest.approx(TIME, rel=QUANTILE)
        assert np.isnan(posterior.chi2[0])


def test_use_of_more_than_is_needed_is_a_least_squares_fit():
    """Two equal independent masses halve the variance; one sigma and a half apart, chi-squared is 1.5^2/2."""
    shift = 1.5 * 0.01
    stars = Stars.of(mass=(1.0, 0.01), log_mass=(shift / LN10, 0.01 / LN10), radius=Exact(1.0), shape="lognormal")
    posterior = point(stars, outputs=["binding_energy"], use=["mass", "log_mass", "radius"])
    assert aside(posterior) == ()
    assert posterior.degrees_of_freedom.tolist() == [1]
    assert posterior.chi2[0] == pytest.approx(1.5**2 / 2.0, rel=1e-8)
    assert posterior.probability[0] == pytest.approx(math.erfc(1.5 / 2.0), rel=1e-8)
    assert variance(posterior) == pytest.approx(4.0 * 0.01**2 / 2.0, rel=1e-8)


@pytest.mark.parametrize(
    ("use", "message"),
    [
        (["size"], "observable in use: 'size' is unknown; choose from mass"),
        (["mass", "parallax"], "use: parallax was not given"),
        (["mass", "mass"], "names one twice"),
        ([], "observable in use: none was named"),
    ],
)
def test_use_of_what_is_not_there(use, message):
    with pytest.raises(InputError, match=message):
        point(star_of("mass", "radius", "luminosity"), use=use)


# --- underdetermined, partial, left aside ---


@pytest.mark.parametrize(
    ("names", "outputs", "sentences"),
    [
        (("radius", "luminosity"), BOTH, ["mass is not determined; give mass, or log_surface_gravity"]),
        (
            ("mass", "luminosity"),
            BOTH,
            [
                "radius is not determined; give radius, or luminosity with effective_temperature, or "
                "angular_diameter with parallax or distance"
            ],
        ),
        (
            ("mass",),
            BOTH[1:],
            ["radius is not determined", "luminosity is not determined; give luminosity, or"],
        ),
        (("mass", "angular_diameter"), BOTH[:1], ["radius is not determined"]),
        (("parallax",), BOTH, ["mass is not determined", "radius is not determined", "luminosity is not"]),
    ],
)
def test_what_is_missing_is_named(names, outputs, sentences):
    posterior = point(star_of(*names), outputs=outputs)
    assert posterior.status.tolist() == [Status.UNDERDETERMINED]
    (text,) = posterior.status_text()
    for sentence in sentences:
        assert sentence in text
    assert text.count("is not determined") == len(sentences)
    assert np.isnan(posterior.median(outputs[0])[0])


def test_an_output_that_does_not_need_what_is_missing_is_given():
    posterior = point(star_of("mass", "radius"))
    assert posterior.status.tolist() == [Status.PARTIAL]
    assert posterior.median("binding_energy")[0] == pytest.approx(ENERGY, rel=QUANTILE)
    assert np.isnan(posterior.median("kelvin_helmholtz_time")[0])
    assert posterior.status_text()[0].startswith("no Kelvin-Helmholtz time: luminosity is not determined")


def test_the_mean_density_determines_what_it_can():
    """The mean density alone gives the free-fall time, and no energy."""
    posterior = point(star_of("mean_density"), outputs=["free_fall_time", "binding_energy"])
    assert posterior.status.tolist() == [Status.PARTIAL]
    expected = math.pi * math.sqrt((RADIUS**3 / (8.0 * GM)).to_value("h2"))
    assert posterior.median("free_fall_time")[0] == pytest.approx(expected, rel=QUANTILE)


def test_an_unusable_cell_is_left_aside_where_others_determine_the_result():
    stars = Stars.of(
        mass=(1.0, 0.01),
        radius=1.0,
        luminosity=(1.0, 0.01),
        effective_temperature=(5772.0, 20.0),
        shape="lognormal",
    )
    posterior = point(stars)
    assert posterior.status.tolist() == [Status.OK]
    assert posterior.flags[0] & Flag.MEASUREMENT_UNUSABLE


def test_exact_values_are_constraints():
    """All exact: a point prior leaves no width; the mass alone uncertain: twice its width."""
    sharp = point(Stars.of(mass=Exact(M), radius=Exact(R), luminosity=Exact(L)))
    for output, value in zip(BOTH, (ENERGY, TIME), strict=True):
        assert sharp.quantile([0.02, 0.5, 0.98], output)[0] == pytest.approx([value] * 3, rel=1e-10)
    loose = point(Stars.of(mass=quoted("mass"), radius=Exact(R), luminosity=Exact(L), shape="lognormal"))
    assert variance(loose) == pytest.approx(0.02**2, rel=1e-8)


def test_a_fit_that_would_start_beyond_a_hard_end():
    """Mass 1 +0.02 -0.01 ends at 0.98, the other says 0.979: chi-squared is its least value, not infinite."""
    stars = Stars.of(
        mass=(1.0, 0.02, 0.01), mean_density=(0.979, 0.003), radius=Exact(1.0), unit={"mean_density": "solar"}
    )
    posterior = point(stars, outputs=["binding_energy"], use=["mass", "mean_density", "radius"])
    g, c = math.log(2.0), 0.02 * math.log(2.0)  # c = a g/(e^g - 1)

    def chi2(mass):
        return (math.log1p(g * (mass - 1.0) / c) / g) ** 2 + ((mass - 0.979) / 0.003) ** 2

    least = minimize_scalar(chi2, bounds=(0.98 + 1e-9, 1.0), method="bounded", options={"xatol": 1e-10}).fun
    assert posterior.chi2[0] == pytest.approx(least, rel=1e-6)
    assert posterior.status.tolist() == [Status.OK]
