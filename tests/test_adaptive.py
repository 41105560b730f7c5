"""The adaptive procedure of JCGM 101:2008, clause 7.9: its rules one by one; clause 9 stands in tests/published."""

import math
from decimal import ROUND_HALF_EVEN, Decimal

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.special import ndtri

from stellerg.engines.adaptive import (
    central_interval,
    numerical_tolerance,
    run_blocks,
    shortest_interval,
    standard_block_size,
)
from stellerg.errors import EngineError

SEED = 79  # of every draw here


def normals(scales, size=10_000, seed=SEED):
    """Blocks of normal draws about 3, one output a column of `scales` (row, output), keyed by block and row."""
    scales = np.atleast_2d(np.asarray(scales, float))

    def draw(number, rows):
        z = [np.random.default_rng([seed, number, row]).standard_normal((scales.shape[1], size)) for row in rows]
        return 3.0 + scales[rows][:, :, None] * np.stack(z)

    return draw


# --- numerical tolerance ---


@pytest.mark.parametrize(
    ("uncertainty", "digits", "tolerance"),
    [
        # 0.00035 written with two digits is 35e-5, with one 4e-4; the last two carry: 10e-2 and 1e1
        (0.00035, 2, 5e-6),
        (0.00035, 1, 5e-5),
        (2.0, 2, 0.05),
        (50.0, 2, 0.5),
        (1000.0, 1, 500.0),
        (0.0996, 2, 5e-3),
        (9.6, 1, 5.0),
    ],
)
def test_tolerance_of_written_uncertainties(uncertainty, digits, tolerance):
    assert numerical_tolerance(uncertainty, digits) == tolerance


written = st.tuples(st.integers(1, 10**6), st.integers(-250, 250))


@given(written, st.integers(1, 6))
def test_tolerance_is_that_of_the_written_number(number, digits):
    """Against decimal arithmetic on the text: round to the digits, halve one unit of the last."""
    text = f"{number[0]}e{number[1]}"
    exact = Decimal(text)
    exponent = exact.adjusted() - digits + 1
    exact = exact.quantize(Decimal(1).scaleb(exponent), ROUND_HALF_EVEN)
    wanted = Decimal(5).scaleb(exact.adjusted() - digits)
    assert numerical_tolerance(float(text), digits) == float(wanted)


@given(written, st.integers(-20, 20), st.integers(1, 3))
def test_tolerance_scales_with_the_unit(number, power, digits):
    mantissa, exponent = number
    here = numerical_tolerance(float(f"{mantissa}e{exponent}"), digits)
    there = numerical_tolerance(float(f"{mantissa}e{exponent + power}"), digits)
    assert there == pytest.approx(float(here) * 10.0**power, rel=1e-12)


@given(st.integers(1, 6), st.integers(-100, 100), st.floats(0.01, 0.49))
def test_a_carry_moves_the_last_place(digits, power, part):
    """A little above 99...95 is written 100...0, a little below 99...9: a factor of ten between tolerances."""
    edge = (Decimal(10) ** digits - Decimal("0.5")).scaleb(power)
    part = Decimal(part).scaleb(power)
    below, above = numerical_tolerance([float(edge - part), float(edge + part)], digits)
    assert below == float(Decimal(5).scaleb(power - 1))
    assert above == float(Decimal(5).scaleb(power))


def test_tolerance_of_many_and_of_what_is_no_number():
    found = numerical_tolerance([[2.0, 0.0], [math.nan, math.inf], [-1.0, 1e-320]], 2)
    assert np.array_equal(found, [[0.05, 0.0], [math.nan, math.nan], [math.nan, 0.0]], equal_nan=True)


@pytest.mark.parametrize("digits", [0, 16, 1.5, "2"])
def test_digits_that_are_refused(digits):
    with pytest.raises(EngineError, match="whole number from 1 to 15"):
        numerical_tolerance(1.0, digits)


# --- intervals ---


@pytest.mark.parametrize("probability", [0.5, 0.95, 0.99])
def test_intervals_of_an_even_spread_hold_their_probability(probability):
    """A million evenly spaced values of (0, 1), so that probability is length, to a place."""
    values = (np.arange(10**6) + 0.5) / 10**6
    low, high = central_interval(values[::-1], probability)
    assert low == pytest.approx(0.5 - 0.5 * probability, abs=1e-6)
    assert high == pytest.approx(0.5 + 0.5 * probability, abs=1e-6)
    assert np.diff(shortest_interval(values, probability)) == pytest.approx(probability, abs=2e-6)


def test_intervals_of_an_exponential():
    """Central: -ln 0.975 and -ln 0.025; shortest: 0 and -ln 0.05. Values at evenly spaced probabilities."""
    values = -np.log1p(-(np.arange(10**6) + 0.5) / 10**6)
    assert central_interval(values, 0.95) == pytest.approx([-math.log(0.975), -math.log(0.025)], abs=1e-4)
    assert shortest_interval(values, 0.95) == pytest.approx([0.0, -math.log(0.05)], abs=1e-4)


@given(st.integers(2000, 3000), st.sampled_from([0.0, 0.6827, 0.95]), st.floats(0.1, 10.0), st.integers(0, 99))
def test_shortest_is_no_longer_than_central_and_both_scale(count, probability, scale, seed):
    values = np.random.default_rng([SEED, seed]).standard_normal((2, count))
    central, shortest = (f(values, probability) for f in (central_interval, shortest_interval))
    # the two differ by half a place at most in what they span
    gap = np.diff(np.sort(values, axis=-1), axis=-1).max(axis=-1)
    assert np.all(np.diff(shortest)[:, 0] <= np.diff(central)[:, 0] + gap)
    assert central_interval(1.0 + scale * values, probability) == pytest.approx(1.0 + scale * central, rel=1e-9)
    assert shortest_interval(1.0 + scale * values, probability) == pytest.approx(1.0 + scale * shortest, rel=1e-9)


@pytest.mark.parametrize("interval", [central_interval, shortest_interval])
def test_several_probabilities_at_once(interval):
    values = np.random.default_rng(SEED).standard_normal((3, 2, 2500))
    found = interval(values, (0.5, 0.95))
    assert found.shape == (3, 2, 2, 2)
    assert interval(values, 0.95).shape == (3, 2, 2)
    assert np.array_equal(found[:, :, 1], interval(values, 0.95))
    assert np.array_equal(found[1, 1, 0], interval(values[1, 1], 0.5))


def test_probability_nought_is_the_median():
    values = np.random.default_rng(SEED).standard_normal(2501)
    assert central_interval(values, 0.0) == pytest.approx([np.median(values)] * 2, rel=1e-12)


# --- the rule ---


def literal(draw, digits, most):
    """Clause 7.9.4 by the letter for one row and output: all draws kept, everything computed from them anew."""
    blocks = [draw(0, np.array([0]))[0, 0]]
    while len(blocks) < most:
        blocks.append(draw(len(blocks), np.array([0]))[0, 0])
        each = np.array([[b.mean(), b.std(ddof=1), *central_interval(b, 0.95)] for b in blocks])
        scatter = each.std(axis=0, ddof=1) / math.sqrt(len(blocks))
        everything = np.concatenate(blocks)
        tolerance = numerical_tolerance(everything.std(ddof=1), digits)
        if np.all(2.0 * scatter <= tolerance):
            break
    return len(blocks), everything.mean(), everything.std(ddof=1), each[:, 2:].mean(axis=0), 2.0 * scatter.max()


@pytest.mark.parametrize(("scale", "digits"), [(2.0, 2), (0.31, 2), (70.0, 1), (4e-7, 2)])
def test_the_rule_is_that_of_the_clause(scale, digits):
    draw = normals([[scale]])
    found = run_blocks(draw, 1, digits=digits, most_blocks=1000)
    blocks, mean, deviation, ends, achieved = literal(draw, digits, 1000)
    assert found.converged.all()
    assert found.blocks.tolist() == [blocks]
    assert found.draws.tolist() == [10_000 * blocks]
    assert found.mean[0, 0] == pytest.approx(mean, rel=1e-12)
    assert found.standard_deviation[0, 0] == pytest.approx(deviation, rel=1e-9)
    assert found.interval[0, 0] == pytest.approx(ends, rel=1e-12)
    assert found.achieved[0, 0] == pytest.approx(achieved, rel=1e-6)
    assert found.tolerance[0, 0] == numerical_tolerance(deviation, digits)


def test_all_outputs_must_stand():
    """An output of standard deviation 2.0 needs more blocks than one of 9.0 (both to 0.5 x 10^-1 with two digits)."""
    alone = [run_blocks(normals([[s]]), 1, digits=2, most_blocks=1000).blocks[0] for s in (2.0, 9.0)]
    both = run_blocks(normals([[2.0, 9.0]]), 1, digits=2, most_blocks=1000)
    assert both.converged.all()
    assert np.all(both.achieved <= both.tolerance)
    assert alone[0] < alone[1]
    assert both.blocks[0] > 2 * alone[0]


def test_a_row_alone_gives_the_same_bits():
    scales = [[2.0, 0.5], [9.0, 1e5], [0.02, 3.0], [4.4, 4.4]]
    draw = normals(scales)
    together = run_blocks(draw, 4, digits=2, probability=(0.6827, 0.95), most_blocks=60)
    assert len(set(together.blocks.tolist())) > 1  # so that rows do leave the batch at different times
    for row in range(4):
        alone = run_blocks(
            lambda n, rows, row=row: draw(n, rows + row), 1, digits=2, probability=(0.6827, 0.95), most_blocks=60
        )
        for name in vars(alone):
            assert np.array_equal(getattr(alone, name)[0], getattr(together, name)[row]), name


def test_rows_that_stand_are_no_longer_drawn():
    asked = []

    def draw(number, rows):
        asked.append(rows.tolist())
        return normals([[2.0], [9.0]])(number, rows)

    found = run_blocks(draw, 2, digits=2, most_blocks=1000)
    assert [sum(row in rows for rows in asked) for row in (0, 1)] == found.blocks.tolist()
    assert asked[0] == [0, 1]
    assert asked[-1] == [1]


def test_a_run_too_short_is_not_converged_and_keeps_its_numbers():
    found = run_blocks(normals([[2.0]]), 1, digits=4, most_blocks=3)
    assert found.blocks.tolist() == [3]
    assert not found.converged.any()
    assert found.achieved[0, 0] > found.tolerance[0, 0] == 5e-4
    assert found.mean[0, 0] == pytest.approx(3.0, abs=5.0 * 2.0 / math.sqrt(30_000))
    assert run_blocks(normals([[2.0]]), 1, digits=1, most_blocks=3).converged.all()


def test_more_blocks_may_be_asked_for():
    found = run_blocks(normals([[2.0]]), 1, digits=1, most_blocks=50, fewest_blocks=17)
    assert found.blocks.tolist() == [17]
    assert found.converged.all()


def test_early_stops_are_rarer_with_more_blocks():
    """A standard deviation over two blocks is often small by chance: what `fewest_blocks` is for.

    Of 200 rows, those whose lower end is off by more than the tolerance.
    """
    misses = {}
    exact = 3.0 + 2.0 * ndtri(0.025)
    for fewest in (2, 20):
        found = run_blocks(normals([[2.0]] * 200), 200, digits=2, most_blocks=100, fewest_blocks=fewest)
        misses[fewest] = np.mean(np.abs(found.interval[:, 0, 0] - exact) > found.tolerance[:, 0])
    assert misses[20] < misses[2], misses
    assert misses[20] < 0.05, misses  # the share that two standard deviations leave out


def test_shortest_intervals_are_too_short_in_small_blocks():
    """What the module says of itself; the exact interval of normal draws is twice 1.96 standard deviations."""
    exact = -4.0 * ndtri(0.025)
    short = {}
    for size, blocks in ((2_000, 1000), (100_000, 100)):
        found = run_blocks(
            normals([[2.0]], size),
            1,
            digits=1,
            most_blocks=blocks,
            fewest_blocks=blocks,
            interval=shortest_interval,
        )
        short[size] = 1.0 - np.diff(found.interval[0, 0])[0] / exact
    assert 0.0 < short[100_000] < short[2_000] < 0.05, short


@pytest.mark.parametrize("value", [0.1, -7.0, 0.0])
def test_no_spread_is_converged_at_once(value):
    found = run_blocks(lambda n, rows: np.full((len(rows), 1, 2000), value), 1, digits=2, most_blocks=9)
    assert found.converged.all()
    assert found.blocks.tolist() == [2]
    assert found.mean[0, 0] == pytest.approx(value, rel=1e-15)
    assert found.interval[0, 0].tolist() == [value, value]
    assert found.standard_deviation[0, 0] <= 1e-15


@pytest.mark.parametrize("bad", [math.nan, math.inf, -math.inf])
def test_a_row_that_is_not_finite_is_given_up_and_harms_no_other(bad):
    good = normals([[2.0], [2.0]])

    def draw(number, rows):
        values = good(number, rows)
        values[rows == 1, 0, 7] = bad
        return values

    found = run_blocks(draw, 2, digits=2, most_blocks=1000)
    assert found.converged.tolist() == [True, False]
    assert found.blocks[1] == 1
    assert found.mean[0] == run_blocks(good, 1, digits=2, most_blocks=1000).mean[0]


# --- mistakes ---


def test_standard_size_of_blocks():
    """Clause 7.9.4 b): the larger of 10^4 and the smallest integer not below 100/(1 - p)."""
    assert [standard_block_size(p) for p in (0.95, 0.99, 0.999, (0.5, 0.9999))] == [10**4, 10**4, 10**5, 10**6]


@pytest.mark.parametrize(
    ("draw", "options", "message"),
    [
        (normals([[1.0]], 1999), {}, "1999 are too few .* at least 2000"),
        (normals([[1.0]]), {"probability": 1.0}, r"\[0, 1\)"),
        (normals([[1.0]]), {"most_blocks": 1}, "at least 2"),
        (normals([[1.0]]), {"fewest_blocks": 1}, "at least 2"),
        (normals([[1.0]]), {"fewest_blocks": 11}, "in order"),
        (normals([[1.0]]), {"digits": 0}, "whole number"),
        (lambda n, rows: np.zeros((len(rows), 2000)), {}, "shape must be"),
        (lambda n, rows: np.zeros((len(rows) + 1, 1, 2000)), {}, "shape must be"),
        (lambda n, rows: np.arange(2000.0 + n)[None, None], {}, "output, 2000"),
    ],
)
def test_calls_that_are_refused(draw, options, message):
    with pytest.raises(EngineError, match=message):
        run_blocks(draw, 1, **{"digits": 2, "most_blocks": 10, **options})


def test_no_rows_are_refused():
    with pytest.raises(EngineError, match="at least one"):
        run_blocks(normals([[1.0]]), 0, digits=2, most_blocks=10)
