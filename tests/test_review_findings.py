"""Cases that a review found: each was wrong once."""

import numpy as np
import pytest

from stellerg import Exact, Stars, propagate
from stellerg.engines.montecarlo import MonteCarlo
from stellerg.status import Flag, Status

STAR = {"mass": (1.0, 0.1), "radius": (1.0, 0.1), "luminosity": (1.0, 0.1)}


@pytest.mark.parametrize(
    ("upper", "lower", "engine"), [(0.3, 0.1, "montecarlo"), (0.1, 0.3, "montecarlo"), (0.2, 0.1, "quadrature")]
)
def test_steep_three_quantile_errors_are_left_to_montecarlo(upper, lower, engine):
    stars = Stars.of(mass=(1.2, 0.06), radius=(1.3, 0.039), absolute_bolometric_magnitude=(4.0, upper, lower))
    posterior = propagate(stars)
    assert posterior.engines[posterior.engine[0]] == engine
    reference = propagate(stars, engine=MonteCarlo(draws=2**18, seed=3))
    edges = posterior.quantile((0.1, 0.5, 0.9), "kelvin_helmholtz_time")
    share = reference.cumulative(edges[0], "kelvin_helmholtz_time")[0]
    np.testing.assert_allclose(share, (0.1, 0.5, 0.9), atol=4e-3)


def test_nothing_lies_at_or_below_zero_and_nan_stays_nan():
    posterior = propagate(Stars.of(**STAR))
    values = np.array([-1.0, 0.0, np.nan, 1e60])
    # (one, but for the rounding of the three terms of the closed form)
    np.testing.assert_allclose(posterior.cumulative(values, "binding_energy")[0], [0.0, 0.0, np.nan, 1.0], atol=1e-14)
    np.testing.assert_array_equal(posterior.density(values, "binding_energy")[0], [0.0, 0.0, np.nan, 0.0])


def test_a_row_taken_twice_is_there_twice():
    posterior = propagate(Stars.of(["a", "b", "bad"], mass=["1 ± 0.1", "2 ± 0.1", "x"], radius=["1 ± 0.1"] * 3))
    taken = posterior.take([2, 1, 1, 0])
    medians = posterior.median("binding_energy")
    np.testing.assert_array_equal(taken.median("binding_energy"), medians[[2, 1, 1, 0]])
    assert taken.status_text()[0] == posterior.status_text()[2] != ""
    assert taken.star.tolist() == ["bad", "b", "b", "a"]


def test_a_neighbour_with_a_correlation_leaves_no_trace():
    given = {n: ([v[0]] * 2, [v[1]] * 2) for n, v in STAR.items()}
    both = Stars.of(["a", "b"], shape="lognormal", correlation={("mass", "radius"): [0.0, 0.5]}, **given)
    assert propagate(both).budget("binding_energy")["correlations"][0] == 0.0


def test_measured_parts_that_cancel_leave_structure_alone():
    """ln M^2/R does not move: the error of the radius is twice that of the mass, in step with it."""
    stars = Stars.of(mass=(1.0, 0.1), radius=(1.0, 0.2), shape="lognormal", correlation={("mass", "radius"): 1.0})
    posterior = propagate(stars, outputs=("binding_energy",))
    quantiles = posterior.quantile((0.1, 0.5, 0.9), "binding_energy")[0]
    np.testing.assert_allclose(
        quantiles / quantiles[1], (3 / (5 - np.array([1.65, 2.25, 2.85]))) / (3 / 2.75), rtol=1e-9
    )


def test_the_stated_error_grows_with_a_narrow_index_prior(tmp_path):
    errors = []
    for half in (0.5, 1e-3):
        path = tmp_path / f"half-{half}.toml"
        path.write_text(
            f"summary='x'\nsource='test'\n[index]\ndistribution='uniform'\nlower={3 - half}\nupper={3 + half}\n"
        )
        errors.append(propagate(Stars.of(**STAR), prior=path).numerical_error("binding_energy")[0])
    assert errors[1] > 100 * errors[0]


def test_an_idle_measurement_that_is_correlated_is_refused():
    stars = Stars.of(
        mass=Exact(1.0), log_mass=(0.02, 0.01), radius=(1.0, 0.1), correlation={("log_mass", "radius"): 0.9}
    )
    posterior = propagate(stars, outputs=("binding_energy",), use=("mass", "log_mass", "radius"))
    assert posterior.status[0] == Status.CORRELATION_INVALID


def test_values_that_no_star_has_are_no_numbers():
    posterior = propagate(Stars.of(mass=(1e200, 1e199), radius=(1.0, 0.1), luminosity=(1.0, 0.1)))
    assert posterior.status[0] == Status.NOT_A_NUMBER


def test_a_parallax_that_moves_no_output_raises_no_flag():
    stars = Stars.of(parallax=(1.0, 0.5), **STAR)
    assert propagate(stars, prior="wide-index").flags[0] == 0
    # under the default prior there is one flag, and it is not about the parallax
    assert propagate(stars).flags[0] == propagate(Stars.of(**STAR)).flags[0] == Flag.PRIOR_EXCLUDES_CALIBRATION
