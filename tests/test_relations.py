"""k2 and I/(M R^2) as functions of the index: against solved polytropes, published constants and closed forms."""

import csv
import math
from pathlib import Path

import numpy as np
import pytest

from stellerg.structure.polytrope import polytrope
from stellerg.structure.relations import (
    LARGEST_TABULATED_INDEX,
    index_of_log10_apsidal_constant,
    index_of_log10_moment_of_inertia_factor,
    log10_apsidal_constant,
    log10_moment_of_inertia_factor,
)

CLOSE = 1e-7  # dex
RELATIONS = [
    (log10_apsidal_constant, index_of_log10_apsidal_constant, "apsidal_constant", "k2"),
    (
        log10_moment_of_inertia_factor,
        index_of_log10_moment_of_inertia_factor,
        "moment_of_inertia_factor",
        "moment_of_inertia_factor",
    ),
]
each = pytest.mark.parametrize(("forwards", "backwards", "attribute", "column"), RELATIONS, ids=["k2", "inertia"])

with (Path(__file__).parent / "published" / "polytropes.csv").open(encoding="utf-8") as _file:
    TABLE = list(csv.DictReader(line for line in _file if not line.startswith("#")))


@each
def test_published_constants(forwards, backwards, attribute, column):
    index = np.array([float(row["n"]) for row in TABLE])
    truth = np.log10([float(row[column]) for row in TABLE])
    assert len(index) == 11
    np.testing.assert_allclose(forwards(index), truth, rtol=0.0, atol=CLOSE)
    # the smallest slope of both, near n = 0, is 0.16 dex in n
    np.testing.assert_allclose(backwards(truth), index, rtol=0.0, atol=CLOSE / 0.15)


@each
def test_solved_polytropes_between_the_knots(forwards, backwards, attribute, column):
    # random indices hit no knot and no solved node; the ends, where interpolants are worst, are added
    random = np.random.default_rng(20240611)
    index = np.concatenate([[0.0, 1e-3, 0.02, 4.93, 4.949, LARGEST_TABULATED_INDEX], random.uniform(0.0, 4.95, 60)])
    truth = np.log10([getattr(polytrope(n), attribute) for n in index.tolist()])
    np.testing.assert_allclose(forwards(index), truth, rtol=0.0, atol=CLOSE)


def test_closed_forms_at_one():
    assert abs(float(log10_apsidal_constant(1.0)) - math.log10((15 - math.pi**2) / (2 * math.pi**2))) < CLOSE
    inertia = 2 / 3 * (1 - 6 / math.pi**2)
    assert abs(float(log10_moment_of_inertia_factor(1.0)) - math.log10(inertia)) < CLOSE


@each
def test_falls_smoothly(forwards, backwards, attribute, column):
    index = np.linspace(0.0, LARGEST_TABULATED_INDEX, 20001)
    value = forwards(index)
    slope = np.diff(value) / np.diff(index)
    assert slope.max() < -0.1
    # no ripple: the slope of both falls or rises with at most two turning points over the whole range
    bend = np.diff(slope)[np.abs(np.diff(slope)) > 1e-9]
    assert np.count_nonzero(np.diff(np.sign(bend))) <= 2


@each
def test_there_and_back(forwards, backwards, attribute, column):
    index = np.linspace(0.0, LARGEST_TABULATED_INDEX, 4001)
    np.testing.assert_allclose(backwards(forwards(index)), index, rtol=0.0, atol=1e-12)


@each
def test_ends_are_clipped(forwards, backwards, attribute, column):
    outside = np.array([-math.inf, -0.3, LARGEST_TABULATED_INDEX + 0.02, 7.0, math.inf])
    ends = forwards(np.array([0.0, 0.0, *3 * [LARGEST_TABULATED_INDEX]]))
    np.testing.assert_array_equal(forwards(outside), ends)
    beyond = np.array([math.inf, ends[0] + 0.01, ends[-1] - 0.01, -math.inf])
    np.testing.assert_array_equal(backwards(beyond), [0.0, 0.0, *2 * [LARGEST_TABULATED_INDEX]])
    assert np.isnan(forwards(np.nan))
    assert np.isnan(backwards(np.nan))


@each
def test_a_row_alone_has_the_same_bits(forwards, backwards, attribute, column):
    index = np.random.default_rng(20240612).uniform(-0.2, 5.2, (257, 3))
    value = forwards(index)
    assert value.shape == index.shape
    np.testing.assert_array_equal(np.concatenate([forwards(index[i : i + 1]) for i in range(len(index))]), value)
    np.testing.assert_array_equal(
        np.concatenate([backwards(value[i : i + 1]) for i in range(len(index))]), backwards(value)
    )
