"""Quantiles read off a table against those found one by one."""

import numpy as np
import pytest

from stellerg import load_prior
from stellerg.engines import smoothing
from stellerg.engines.offsets import TABLE_ERROR, quantile_by_table
from stellerg.engines.parts import GaussianPart
from stellerg.structure.files import parse_prior

SEED = 20261211
P = np.array([0.001, 0.02275, 0.158655, 0.5, 0.841345, 0.97725, 0.999])
GAP = """
summary = "two narrow densities far apart"
source = "judgement"
[index]
distribution = "mixture"
[[index.component]]
weight = 0.5
distribution = "normal"
mean = 1.0
standard_deviation = 0.001
[[index.component]]
weight = 0.5
distribution = "normal"
mean = 4.0
standard_deviation = 0.001
"""


@pytest.mark.parametrize("prior", ["uniform-index", "wide-index", "uniform-coefficient", "present-sun"])
def test_the_table_gives_the_probability_asked_for(prior):
    rng = np.random.default_rng(SEED)
    mixture = load_prior(prior).intervals[0].mixture
    sigma = np.exp(rng.uniform(np.log(1.1e-4), np.log(2.9), 2_000))
    mean = rng.normal(0.0, 5.0, len(sigma))
    found = quantile_by_table(mixture, mean, sigma, P)
    assert np.isfinite(found).all()
    below, _ = smoothing.evaluate([(mixture, GaussianPart(mean, sigma))], found)
    assert np.abs(below - P).max() < 2.0 * TABLE_ERROR


@pytest.mark.parametrize("share", [0.5, 0.4, 0.158655])
def test_a_density_with_a_gap_gets_no_wrong_table(share):
    """What counts is the probability below: in the gap the quantile itself is free."""
    text = GAP.replace("weight = 0.5", f"weight = {share}", 1).replace("weight = 0.5", f"weight = {1.0 - share}", 1)
    mixture = parse_prior(text).intervals[0].mixture
    mean, sigma = np.zeros(40), np.geomspace(2e-4, 2.0, 40)
    found = quantile_by_table(mixture, mean, sigma, P)
    given = np.isfinite(found[:, 0])
    below, _ = smoothing.evaluate([(mixture, GaussianPart(mean[given], sigma[given]))], found[given])
    assert np.abs(below - P).max(initial=0.0) < 2.0 * TABLE_ERROR


def test_widths_outside_the_table_are_left():
    mixture = load_prior("uniform-index").intervals[0].mixture
    found = quantile_by_table(mixture, np.zeros(4), np.array([1e-5, 1e-3, 1.0, 4.0]), P)
    assert np.isfinite(found).all(axis=1).tolist() == [False, True, True, False]


def test_a_row_alone_gives_the_same_bits():
    mixture = load_prior("uniform-index").intervals[0].mixture
    mean, sigma = np.linspace(-1.0, 1.0, 50), np.geomspace(1e-3, 1.0, 50)
    together = quantile_by_table(mixture, mean, sigma, P)
    for row in range(50):
        np.testing.assert_array_equal(quantile_by_table(mixture, mean[[row]], sigma[[row]], P)[0], together[row])
