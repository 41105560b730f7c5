"""What is accepted as input: texts, tuples, Quantities, ufloats and their correlations; what is refused."""

import math

import numpy as np
import pytest
from astropy import units
from uncertainties import ufloat

from reference_star import (
    LN10,
    ROUNDING,
    point,
    variance,
)
from stellerg.errors import InputError
from stellerg.inputs import Exact, measured_from
from stellerg.observables import OBSERVABLES
from stellerg.propagation import propagate
from stellerg.stars import Stars
from stellerg.status import Status

# --- what is accepted as input ---


@pytest.mark.parametrize(
    "given",
    [
        (1.02, 0.03),
        "1.02 ± 0.03",
        ["1.02(3)"],
        ufloat(1.02, 0.03),
        [ufloat(1.02, 0.03)],
        ([1.02], [0.03], [0.03]),
    ],
    ids=["tuple", "text", "texts", "ufloat", "ufloats", "arrays"],
)
def test_the_same_measurement_in_every_form(given):
    measured = measured_from(OBSERVABLES["mass"], given)
    assert (measured.value[0], measured.upper[0], measured.lower[0]) == pytest.approx((1.02, 0.03, 0.03), rel=1e-14)
    assert measured.fault.tolist() == [Status.OK]
    assert measured_from(OBSERVABLES["mass"], measured) is measured


def test_exact_values_in_every_form():
    for given in (Exact(2.0), Exact([2.0]), Exact(2.0 * units.M_sun), "2.0 exact"):
        measured = measured_from(OBSERVABLES["mass"], given)
        assert measured.exact.tolist() == [True]
        assert measured.value[0] == pytest.approx(2.0, rel=ROUNDING)


def test_bare_numbers_lack_an_error_and_empty_cells_are_empty():
    masked = np.ma.array([1.0, 2.0], mask=[False, True])
    for given in ([1.0, math.nan], masked, ["1.0", ""], ["1.0", None]):
        assert measured_from(OBSERVABLES["mass"], given).fault.tolist() == [Status.ERROR_MISSING, Status.OK]


def test_texts_with_units():
    measured = measured_from(OBSERVABLES["radius"], ["1.0 ± 0.1", "(695700 ± 69570) km", "1.0 ± 0.1 kg", "<2"])
    assert measured.fault.tolist() == [Status.OK, Status.OK, Status.UNIT_MISSING, Status.LIMIT_ONLY]
    assert measured.value[:2] == pytest.approx([1.0, 1.0], rel=ROUNDING)
    assert measured.upper[:2] == pytest.approx([0.1, 0.1], rel=ROUNDING)


@pytest.mark.parametrize(
    ("given", "message"),
    [
        ({"size": (1.0, 0.1)}, "'size' is not an observable; choose from mass, radius"),
        ({}, "no measurement was given; give at least one observable"),
        ({"mass": ([1.0, 2.0], 0.1), "radius": (1.0, 0.1)}, "columns have different lengths: .*'mass': 2"),
        ({"mass": ([1.0, 2.0], [0.1, 0.1, 0.1])}, "mass: value and errors have different lengths"),
        ({"mass": object()}, "cannot read .* as measured values; give texts, numbers with errors"),
        ({"mass": (1.0, 0.1), "evolutionary_state": "old"}, "evolutionary_state: 'old' is unknown"),
        ({"mass": (1.0, 0.1), "shape": "gamma"}, "shape: 'gamma' cannot be the shape of all errors"),
        ({"mass": (1.0, 0.1), "correlation": {("mass", "mass"): 0.5}}, "must name two different observables"),
        ({"mass": (1.0, 0.1), "correlation": {("mass", "radius"): 0.5}}, "'radius' was not given"),
    ],
)
def test_mistakes_are_refused(given, message):
    with pytest.raises(InputError, match=message):
        Stars.of(**given)


def test_identifiers():
    assert Stars.of(mass=([1.0, 2.0], [0.1, 0.1])).identifier.tolist() == ["1", "2"]
    stars = Stars.of(["K-7", "K-8"], mass=([1.0, 2.0], [0.1, 0.1]))
    assert propagate(stars, outputs=["binding_energy"]).star.tolist() == ["K-7", "K-8"]
    assert stars.take(np.array([1])).identifier.tolist() == ["K-8"]
    assert stars.take(np.array([1])).key[0] == stars.key[1]


# --- correlations ---


def test_a_correlation_enters_the_variance():
    given = {"mass": (1.0, 0.03), "radius": (1.0, 0.02), "luminosity": (1.0, 0.05)}
    stars = Stars.of(**given, shape="lognormal", correlation={("radius", "mass"): 0.6})
    expected = 4.0 * 0.03**2 + 0.02**2 - 4.0 * 0.6 * 0.03 * 0.02
    assert variance(point(stars)) == pytest.approx(expected, rel=1e-8)


def test_ufloats_carry_their_correlation():
    mass = ufloat(1.0, 0.03)
    radius = 0.5 * mass + ufloat(0.5, 0.02)
    rho = 0.5 * 0.03 / math.hypot(0.5 * 0.03, 0.02)
    stars = Stars.of(mass=mass, radius=radius, luminosity=ufloat(1.0, 0.05), shape="lognormal")
    spread = radius.std_dev / radius.nominal_value
    expected = 4.0 * 0.03**2 + spread**2 - 4.0 * rho * 0.03 * spread
    assert variance(point(stars)) == pytest.approx(expected, rel=1e-8)


def test_sequences_of_ufloats_carry_their_correlations():
    mass = [ufloat(1.0, 0.03), ufloat(2.0, 0.03)]
    radius = [m + ufloat(0.0, 0.02) for m in mass]
    one = Stars.of(mass=mass[0], radius=radius[0], shape="lognormal")
    two = Stars.of(mass=mass, radius=radius, shape="lognormal")
    found = point(two, outputs=["binding_energy"]).log10_sd("binding_energy")
    assert found[0] == pytest.approx(point(one, outputs=["binding_energy"]).log10_sd("binding_energy")[0], rel=1e-12)


def test_a_correlation_with_a_magnitude_changes_sign():
    """A larger magnitude is a smaller luminosity: t goes as R^-1 L^-1, so radius and magnitude oppose."""
    given = {"radius": (1.0, 0.02), "absolute_bolometric_magnitude": (4.74, 0.05)}
    stars = Stars.of(
        mass=Exact(1.0),
        **given,
        shape="lognormal",
        correlation={("radius", "absolute_bolometric_magnitude"): 0.6},
    )
    s = 0.4 * LN10 * 0.05
    found = variance(point(stars), "kelvin_helmholtz_time")
    assert found == pytest.approx(0.02**2 + s**2 - 2.0 * 0.6 * 0.02 * s, rel=1e-8)


def test_a_correlation_given_twice_makes_a_matrix_that_is_not_symmetric():
    given = {"mass": ([1.0, 1.0], [0.03, 0.03]), "radius": ([1.0, 1.0], [0.02, 0.02])}
    both = {("mass", "radius"): [0.6, 0.6], ("radius", "mass"): [0.6, -0.6]}
    posterior = point(Stars.of(**given, shape="lognormal", correlation=both), outputs=["binding_energy"])
    assert posterior.status.tolist() == [Status.OK, Status.CORRELATION_INVALID]
