"""Laws that hold for any star: scaling, units, order, and nothing in, nothing out."""

import numpy as np
import pytest
from astropy import units
from hypothesis import given, settings
from hypothesis import strategies as st

from stellerg import OUTPUTS, Stars, propagate

ALL = tuple(OUTPUTS)
sizes = st.floats(0.05, 50.0)
errors = st.floats(1e-4, 0.3)
shapes = st.sampled_from(["normal", "lognormal"])
few = settings(max_examples=25, deadline=None)


def star(mass, radius, luminosity, error, shape, factor=(1.0, 1.0, 1.0)):
    values = {"mass": mass * factor[0], "radius": radius * factor[1], "luminosity": luminosity * factor[2]}
    return Stars.of(shape=shape, **{name: (value, error * value) for name, value in values.items()})


@few
@given(sizes, sizes, sizes, errors, shapes, st.sampled_from(range(3)))
def test_doubling_a_quantity_scales_every_output_by_its_exponent(mass, radius, luminosity, error, shape, which):
    factor = [1.0, 1.0, 1.0]
    factor[which] = 2.0
    before = propagate(star(mass, radius, luminosity, error, shape), outputs=ALL)
    after = propagate(star(mass, radius, luminosity, error, shape, factor), outputs=ALL)
    for name in ALL:
        ratio = after.quantile((0.1, 0.5, 0.9), name) / before.quantile((0.1, 0.5, 0.9), name)
        np.testing.assert_allclose(ratio, 2.0 ** OUTPUTS[name].exponents[which], rtol=1e-6)


@few
@given(sizes, sizes, errors)
def test_units_change_nothing(mass, radius, error):
    plain = propagate(Stars.of(mass=(mass, error * mass), radius=(radius, error * radius)), outputs=("binding_energy",))
    heavy = (mass * units.solMass).to(units.kg)
    wide = (radius * units.solRad).to(units.km)
    other = propagate(
        Stars.of(mass=(heavy, error * heavy), radius=(wide, error * wide.to(units.m))),
        outputs=("binding_energy",),
    )
    np.testing.assert_allclose(other.interval("binding_energy"), plain.interval("binding_energy"), rtol=1e-9)


@few
@given(st.permutations(range(12)), st.integers(1, 12), st.sampled_from(["quadrature", "montecarlo", "auto"]))
def test_order_and_company_change_no_bit(order, batch, engine):
    rng = np.random.default_rng(0)
    values = {n: np.exp(rng.normal(0.0, 0.5, 12)) for n in ("mass", "radius", "luminosity")}
    upper = {n: v * rng.uniform(1e-3, 0.2, 12) for n, v in values.items()}
    lower = {n: np.where(np.arange(12) % 3 == 0, e, 0.8 * e) for n, e in upper.items()}
    names = np.array([f"star {k}" for k in range(12)])
    stars = Stars.of(names, **{n: (values[n], upper[n], lower[n]) for n in values})
    whole = propagate(stars, engine=engine).quantile((0.2, 0.5, 0.8), "kelvin_helmholtz_time")
    order = np.array(order)
    mixed = np.empty_like(whole)
    for start in range(0, 12, batch):
        some = order[start : start + batch]
        mixed[some] = propagate(stars.take(some), engine=engine).quantile((0.2, 0.5, 0.8), "kelvin_helmholtz_time")
    np.testing.assert_array_equal(mixed, whole)


@few
@given(sizes, sizes, sizes)
def test_no_error_in_no_width_out(mass, radius, luminosity):
    given_values = {"mass": mass, "radius": radius, "luminosity": luminosity}
    stars = Stars.of(**{name: f"{value:.17g} exact" for name, value in given_values.items()})
    posterior = propagate(stars, outputs=ALL, prior="polytrope-1.5")
    for name in ALL:
        quantiles = posterior.quantile((0.01, 0.5, 0.99), name)[0]
        assert quantiles[0] == quantiles[1] == quantiles[2]
        assert posterior.log10_sd(name)[0] == 0.0


@few
@given(sizes, errors, shapes, st.sampled_from(["uniform-index", "wide-index", "uniform-coefficient", "by-mass"]))
def test_quantiles_rise_and_shares_sum_to_one(mass, error, shape, prior):
    posterior = propagate(star(mass, mass, mass**3, error, shape), prior=prior)
    for name in posterior.outputs:
        assert (np.diff(posterior.quantile(np.linspace(0.01, 0.99, 25), name)[0]) > 0.0).all()
        assert sum(share[0] for share in posterior.budget(name).values()) == pytest.approx(1.0, abs=1e-9)


@few
@given(sizes, sizes, errors)
def test_temperature_and_luminosity_are_two_ways_to_say_the_same(mass, radius, error):
    """With R exact, T known to e is L known to 4 e (in the logarithm)."""
    by_temperature = Stars.of(
        mass=(mass, error * mass),
        radius=f"{radius:.17g} exact",
        effective_temperature=(5772.0, 5772.0 * error / 4),
        shape="lognormal",
    )
    luminosity = radius**2
    by_luminosity = Stars.of(
        mass=(mass, error * mass),
        radius=f"{radius:.17g} exact",
        luminosity=(luminosity, luminosity * error),
        shape="lognormal",
    )
    first, second = (propagate(s).interval("kelvin_helmholtz_time") for s in (by_temperature, by_luminosity))
    np.testing.assert_allclose(first, second, rtol=1e-9)
