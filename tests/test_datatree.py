"""What arviz gets: one interface for chains and for draws."""

import arviz_stats
import numpy as np
import pytest

from stellerg import InputError, Stars, propagate
from stellerg.engines.mcmc import MarkovChain

STARS = Stars.of(
    ["Alder 1", "Birch"],
    mass=([1.0, 2.0], [0.1, 0.1]),
    radius=([1.0, 2.0], [0.1, 0.1]),
    luminosity=([1.0, 8.0], [0.1, 0.5]),
)
SHORT = MarkovChain(walkers=24, block=200, times=20.0)


@pytest.mark.parametrize("engine", [SHORT, "quadrature", "montecarlo"], ids=["mcmc", "quadrature", "montecarlo"])
def test_a_tree_holds_quantities_statistics_and_inputs(engine):
    posterior = propagate(STARS, engine=engine)
    tree = posterior.to_arviz(count=2048)
    expected = {"u", "index", "mass", "radius", "luminosity", "structure_coefficient", *posterior.outputs}
    assert set(tree.posterior.data_vars) == expected
    assert tree.posterior.sizes["star"] == 2
    assert list(tree.posterior["star"].values) == ["Alder 1", "Birch"]
    assert tree.posterior.sizes["chain"] == (96 if engine is SHORT else 1)
    assert set(tree.constant_data.data_vars) >= {"mass", "mass_error_upper", "mass_error_lower"}
    assert tree.constant_data["radius"].values.tolist() == [1.0, 2.0]
    assert len(tree.sample_stats.data_vars) == 1
    assert tree.attrs["energy_convention"] == posterior.energy_convention
    assert tree.attrs["unit_of_kelvin_helmholtz_time"] == "Myr"
    np.testing.assert_allclose(tree.posterior["index"], 5 - 3 / tree.posterior["structure_coefficient"])
    np.testing.assert_allclose(tree.posterior["index"], 1.5 + 1.5 * tree.posterior["u"], rtol=1e-9)


@pytest.mark.parametrize("engine", [SHORT, "quadrature"], ids=["mcmc", "quadrature"])
def test_arviz_summarises_it_to_the_same_numbers(engine):
    posterior = propagate(STARS, engine=engine)
    tree = posterior.to_arviz(count=4096)
    summary = arviz_stats.summary(
        tree, var_names=["kelvin_helmholtz_time"], kind="stats", ci_kind="eti", ci_prob=0.6827, round_to="none"
    )
    ends = posterior.interval("kelvin_helmholtz_time")
    width = np.diff(ends, axis=1)[:, 0]
    columns = [name for name in summary.columns if name.startswith("eti")]
    assert np.abs(summary[columns[0]].to_numpy(float) - ends[:, 0]).max() < 0.1 * width.max()
    assert np.abs(summary[columns[1]].to_numpy(float) - ends[:, 1]).max() < 0.1 * width.max()


def test_weighted_draws_become_equal_ones():
    stars = Stars.of("a", mass=(1.1, 0.2), log_mass=(0.0, 0.05), radius=(1.0, 0.1), luminosity=(1.0, 0.1))
    posterior = propagate(stars, use=("mass", "log_mass", "radius", "luminosity"))
    assert posterior.engines[posterior.engine[0]] == "montecarlo"
    values = posterior.to_arviz(count=8192).posterior["binding_energy"].values.ravel()
    share = (values[:, None] <= posterior.quantile((0.1, 0.5, 0.9), "binding_energy")).mean(axis=0)
    np.testing.assert_allclose(share, (0.1, 0.5, 0.9), atol=0.02)


def test_stars_with_different_quantities_stand_side_by_side():
    stars = Stars.of(
        ["a", "b"], mass=([1.0, 2.0], [0.1, 0.1]), radius=([1.0, 2.0], [0.1, 0.1]), luminosity=["1 ± 0.1", ""]
    )
    tree = propagate(stars).to_arviz(count=64)
    assert np.isfinite(tree.posterior["luminosity"].sel(star="a")).all()
    assert np.isnan(tree.posterior["luminosity"].sel(star="b")).all()
    assert np.isnan(tree.posterior["kelvin_helmholtz_time"].sel(star="b")).all()


def test_nothing_to_give_is_said():
    with pytest.raises(InputError, match="no star has a result"):
        propagate(Stars.of(mass="1.0", radius="1.0")).to_arviz()
    with pytest.raises(InputError, match="power of two"):
        propagate(STARS).to_arviz(count=1000)
