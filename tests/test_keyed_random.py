"""Randomness that belongs to a star: uniform, independent, and the same in any company."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from stellerg.keyed_random import hash_identifiers, low_discrepancy_set, random_order, shifted, uniform, words


def test_an_identifier_has_one_key_whatever_stands_beside_it():
    names = ["a", "a much longer identifier than the others", "7", "Ü-1", "x" * 64, "x" * 65, "x" * 300]
    together = hash_identifiers(names)
    alone = np.array([hash_identifiers([name])[0] for name in names])
    np.testing.assert_array_equal(together, alone)
    assert len(set(together.tolist())) == len(names)
    assert hash_identifiers([7])[0] == hash_identifiers(["7"])[0]
    assert len(hash_identifiers([])) == 0


@given(st.lists(st.text(st.characters(exclude_characters="\0", exclude_categories=["Cs"]), max_size=90), unique=True))
def test_different_identifiers_have_different_keys(names):
    keys = hash_identifiers(names)
    assert len(set(keys.tolist())) == len(names)


def test_keys_of_many_similar_identifiers_are_uniform_and_distinct():
    keys = hash_identifiers(np.arange(200_000))
    assert len(np.unique(keys)) == 200_000
    for bits in (keys >> np.uint64(56), keys & np.uint64(255)):
        counts = np.bincount(bits.astype(int), minlength=256)
        assert stats.chisquare(counts).pvalue > 1e-4


def test_uniforms_are_uniform_and_inside_the_open_interval():
    draws = uniform(1, hash_identifiers(["a", "b"]), 0, 200_000)
    assert draws.min() > 0.0
    assert draws.max() < 1.0
    for row in draws:
        assert stats.kstest(row, "uniform").pvalue > 1e-4
        assert abs(np.corrcoef(row[:-1], row[1:])[0, 1]) < 5 / np.sqrt(len(row))


def test_stars_dimensions_and_seeds_are_independent():
    keys = hash_identifiers(["a", "b"])
    draws = [uniform(1, keys, 0, 100_000)[0], uniform(1, keys, 0, 100_000)[1]]
    draws += [uniform(1, keys, 1, 100_000)[0], uniform(2, keys, 0, 100_000)[0]]
    correlation = np.corrcoef(draws) - np.eye(4)
    assert np.abs(correlation).max() < 5 / np.sqrt(100_000)


def test_a_star_draws_the_same_alone_and_in_company():
    keys = hash_identifiers(["a", "b", "c"])
    np.testing.assert_array_equal(uniform(5, keys, 2, 64)[1], uniform(5, keys[1:2], 2, 64)[0])
    np.testing.assert_array_equal(words(5, keys, 2, 64)[2, :8], words(5, keys[2:], 2, 8)[0])


def test_low_discrepancy_points_fill_every_cell_also_when_shifted():
    points = low_discrepancy_set(0, 3, 8)
    shift = words(0, hash_identifiers(["a", "b"]), 0, 4)
    moved = shifted(points[1], shift)
    assert moved.shape == (2, 4, 256)
    counts = np.apply_along_axis(lambda u: np.bincount((u * 256).astype(int), minlength=256), -1, moved)
    assert (counts == 1).all()  # a net: one point in each of 256 cells, whatever the shift


def test_the_order_of_draws_is_a_permutation_of_each_star():
    order = random_order(0, hash_identifiers(["a", "b"]), 3, 128)
    np.testing.assert_array_equal(np.sort(order, axis=1), np.tile(np.arange(128), (2, 1)))
    assert (order[0] != order[1]).any()


def test_a_negative_or_huge_seed_is_a_seed_like_any_other():
    keys = hash_identifiers(["a"])
    rows = [tuple(uniform(seed, keys, 0, 4)[0]) for seed in (0, -1, 2**64 - 2, 123)]
    assert len(set(rows)) == len(rows)
    with pytest.raises(TypeError):
        uniform("seed", keys, 0, 4)
