"""Draw until the numbers stand: the adaptive procedure of JCGM 101:2008, clause 7.9, block by block.

All of it takes a function that draws a block, so that the examples of clause 9 of the standard go through the
code that stars use. Statistics of blocks are kept, draws are not: memory does not grow with the number of blocks.

When it is wrong: the rule estimates a standard error from as few as two blocks and stops too early now and then: of
1,000 rows of normal draws (two digits, blocks of 10,000) 14 % had an interval end beyond the tolerance, with
`fewest_blocks` of 10 0.3 %. Interval ends are averages over blocks, where clause 7.9.4 l) sorts all draws once more.
For central intervals the two differ by a part of the order of 1/(draws of a block). A shortest interval chooses among
noisy widths and comes out too short, by a part of the order of (draws of a block)^(-2/3): for normal draws 0.6 % in
blocks of 2,000 and 0.05 % in blocks of 100,000 (a test shows the trend); take large blocks.

References
----------
.. [1] JCGM 101:2008, Evaluation of measurement data - Supplement 1 to the "Guide to the expression of uncertainty
   in measurement" - Propagation of distributions using a Monte Carlo method, clauses 7.5 to 7.9.
.. [2] Hyndman & Fan 1996, The American Statistician 50, 361, doi:10.1080/00031305.1996.10473566.
"""

import math
from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import ArrayLike

from stellerg.errors import EngineError

__all__ = [
    "AdaptiveResult",
    "central_interval",
    "numerical_tolerance",
    "run_blocks",
    "shortest_interval",
    "standard_block_size",
]

_MOST_DIGITS = 15  # of a double
_POWERS = range(-300, 300)  # of ten; standard uncertainties beyond count as 0 or as not finite
_TEN = np.array([float(f"1e{power}") for power in _POWERS])  # as written: powers computed are off in the last bit
_HALF = np.array([float(f"5e{power - 1}") for power in _POWERS])
_FEWEST_DRAWS = 10_000  # clause 7.9.4 b)


def numerical_tolerance(standard_uncertainty: ArrayLike, digits: int) -> np.ndarray:
    """Numerical tolerance of a standard uncertainty (clause 7.9.2).

    The uncertainty is written as c x 10^l with c an integer of `digits` digits, rounded first (0.0996 with two
    digits is 10 x 10^-2); half of 10^l is the tolerance.

    Parameters
    ----------
    standard_uncertainty : array_like
        Any shape and unit.
    digits : int
        Significant digits regarded as meaningful, 1 to 15; the standard has 1 or 2.

    Returns
    -------
    ndarray
        As `standard_uncertainty`, in its unit: 0 for 0 (nothing may vary), NaN for what is negative or not finite.

    Raises
    ------
    EngineError
        If the number of digits is out of range.
    """
    if not (isinstance(digits, int | np.integer) and 1 <= digits <= _MOST_DIGITS):
        raise EngineError(f"digits: must be a whole number from 1 to {_MOST_DIGITS}, got {digits!r}; 1 or 2 is usual")
    u = np.asarray(standard_uncertainty, float)
    known = (u > _TEN[_MOST_DIGITS + 1]) & (u < _TEN[-_MOST_DIGITS])
    safe = np.where(known, u, 1.0)
    place = np.floor(np.log10(safe)).astype(int) - digits + 1 - _POWERS.start
    # the carry; where a logarithm was rounded up to a whole number, so is the number itself
    place = place + (np.rint(safe / _TEN[place]) >= 10.0**digits)
    return np.where(known, _HALF[place], np.where((u >= 0.0) & (u < 1.0), 0.0, np.nan))


def standard_block_size(probability: ArrayLike) -> int:
    """Draws of a block by clause 7.9.4 b): 10^4, or 100/(1 - p) where that is more."""
    return max(_least_draws(probability), _FEWEST_DRAWS)


def _least_draws(probability: ArrayLike) -> int:
    largest = float(np.max(_checked(probability)))
    return math.ceil(100.0 / (1.0 - largest) * (1.0 - 1e-12))  # 1 - 0.95 is not a twentieth


def _checked(probability: ArrayLike) -> np.ndarray:
    p = np.asarray(probability, float)
    if p.size == 0 or not np.all((p >= 0.0) & (p < 1.0)):
        raise EngineError(f"probability of an interval: must lie in [0, 1), got {probability!r}; 0.95 is usual")
    return p


def central_interval(values: np.ndarray, probability: ArrayLike) -> np.ndarray:
    """Interval that leaves as much probability below as above (clause 7.7.2).

    Ends are interpolated at the nearly median-unbiased places p (m + 1/3) + 1/3 (definition 8 of [2]_).

    Parameters
    ----------
    values : ndarray, (..., draw)
    probability : float or array_like, (probability,)
        In [0, 1); 0 gives the median twice.

    Returns
    -------
    ndarray, (..., 2) or (..., probability, 2)
        Lower and upper end, in the unit of the values.

    Raises
    ------
    EngineError
        If a probability is out of range.
    """
    p = _checked(probability)
    ordered = np.sort(values, axis=-1)
    tails = np.stack([0.5 - 0.5 * p, 0.5 + 0.5 * p], axis=-1)
    count = values.shape[-1]
    return _at(ordered, np.clip(tails * (count + 1.0 / 3.0) - 2.0 / 3.0, 0.0, count - 1.0))


def _at(ordered: np.ndarray, place: np.ndarray) -> np.ndarray:
    """Ordered values at fractional places, counted from 0."""
    low = np.minimum(place.astype(int), ordered.shape[-1] - 2)
    return ordered[..., low] + (place - low) * (ordered[..., low + 1] - ordered[..., low])


def shortest_interval(values: np.ndarray, probability: ArrayLike) -> np.ndarray:
    """Shortest interval of a probability (clauses 5.3.4 and 7.7.3).

    The span between ends is p (m + 1) places: any one interval then holds the probability p on average.

    Parameters
    ----------
    values : ndarray, (..., draw)
    probability : float or array_like, (probability,)
        In [0, 1).

    Returns
    -------
    ndarray, (..., 2) or (..., probability, 2)
        Lower and upper end, in the unit of the values; the lowest of several equally short.

    Raises
    ------
    EngineError
        If a probability is out of range.
    """
    p = _checked(probability)
    ordered = np.sort(values, axis=-1)
    found = [_shortest(ordered, float(each)) for each in p.ravel()]
    return np.stack(found, axis=-2).reshape(values.shape[:-1] + p.shape + (2,))


def _shortest(ordered: np.ndarray, p: float) -> np.ndarray:
    count = ordered.shape[-1]
    span = min(p * (count + 1), count - 1.0)
    whole = min(int(span), count - 2)
    starts = count - 1 - whole
    low, above = ordered[..., :starts], ordered[..., whole : whole + starts]
    upper = above + (span - whole) * (ordered[..., whole + 1 : whole + 1 + starts] - above)
    best = np.argmin(upper - low, axis=-1)[..., None]
    return np.concatenate([np.take_along_axis(ends, best, axis=-1) for ends in (low, upper)], axis=-1)


@dataclass(frozen=True)
class AdaptiveResult:
    """What blocks of draws gave, in the unit of the values.

    Attributes
    ----------
    blocks, draws : ndarray of int, (row,)
        How many a row took.
    converged : ndarray of bool, (row,)
        Whether all statistics of all outputs stand; False at the cap, and where a draw is not finite.
    mean, standard_deviation : ndarray, (row, output)
        Of all draws; the latter with one degree of freedom less than draws (clause 7.6).
    interval : ndarray, (row, output, 2) or (row, output, probability, 2)
        Lower and upper end, averages over blocks.
    achieved : ndarray, (row, output)
        The largest of twice the standard deviations of the averages over blocks of mean, standard deviation and ends.
    tolerance : ndarray, (row, output)
        What `achieved` must not exceed: `numerical_tolerance` of the standard deviation of all draws.
    """

    blocks: np.ndarray
    draws: np.ndarray
    converged: np.ndarray
    mean: np.ndarray
    standard_deviation: np.ndarray
    interval: np.ndarray
    achieved: np.ndarray
    tolerance: np.ndarray


@dataclass(frozen=True)
class _Running:
    """Averages over the blocks so far of some rows; a number a row and statistic, element by element."""

    blocks: int
    size: int
    average: np.ndarray  # (row, output, statistic): mean, standard deviation, ends
    squares: np.ndarray  # sums of squared deviations from it
    variance: np.ndarray  # (row, output): average of the variance within a block

    def take(self, rows: np.ndarray) -> "_Running":
        """Return the rows asked for."""
        return replace(self, average=self.average[rows], squares=self.squares[rows], variance=self.variance[rows])

    def add(self, statistics: np.ndarray) -> "_Running":
        """Return the averages with one more block (Welford 1962, doi:10.1080/00401706.1962.10490022)."""
        blocks = self.blocks + 1
        step = statistics - self.average
        average = self.average + step / blocks
        variance = self.variance + (np.square(statistics[..., 1]) - self.variance) / blocks
        return _Running(blocks, self.size, average, self.squares + step * (statistics - average), variance)

    @property
    def achieved(self) -> np.ndarray:
        """Twice the standard deviation of the averages, the largest, (row, output); infinite after one block."""
        if self.blocks < 2:
            return np.full(self.variance.shape, np.inf)
        worst = self.squares.max(axis=-1)
        return 2.0 * np.sqrt(worst / (self.blocks * (self.blocks - 1)))

    @property
    def standard_deviation(self) -> np.ndarray:
        """Of all draws, from what is within and between blocks, (row, output)."""
        within = self.blocks * (self.size - 1) * self.variance
        return np.sqrt((within + self.size * self.squares[..., 0]) / (self.blocks * self.size - 1))


def run_blocks(
    draw_block: Callable[[int, np.ndarray], np.ndarray],
    row_count: int,
    *,
    digits: int,
    probability: ArrayLike = 0.95,
    most_blocks: int,
    fewest_blocks: int = 2,
    interval: Callable[[np.ndarray, ArrayLike], np.ndarray] = central_interval,
) -> AdaptiveResult:
    """Draw blocks until mean, standard deviation and interval ends are good to `digits` digits (clause 7.9.4).

    A row's numbers do not depend on the rows beside it, if its draws do not.

    Parameters
    ----------
    draw_block : callable
        ``draw_block(number, rows)`` returns the values (row, output, draw) of block `number` (from 0) for `rows`
        (ndarray of int: those not yet done). Blocks must be independent, all of one size, of at least
        100/(1 - p) draws; `standard_block_size` is what the standard wants.
    row_count : int
    digits : int
        Significant digits of the standard deviation that are meaningful: see `numerical_tolerance`.
    probability : float or array_like, (probability,)
        Of the intervals.
    most_blocks : int
        The cap: rows that are not done by then are not converged.
    fewest_blocks : int
        Blocks before the rule is asked; 2 in the standard.
    interval : callable
        `central_interval`, `shortest_interval`, or another function of (values, probability).

    Returns
    -------
    AdaptiveResult

    Raises
    ------
    EngineError
        If digits, a probability or a number of blocks is out of range, or a block has the wrong shape or size.
    """
    numerical_tolerance(1.0, digits)  # its check comes before any draw
    if not 2 <= fewest_blocks <= most_blocks:
        raise EngineError(
            f"blocks: fewest {fewest_blocks} and most {most_blocks} must be at least 2 and in order; "
            "a standard deviation over blocks needs two"
        )
    p = _checked(probability)
    if row_count < 1:
        raise EngineError(f"rows: {row_count} to draw for; give at least one")
    rows = np.arange(row_count)
    running, done = None, []
    for number in range(most_blocks):
        values = _block(draw_block(number, rows), rows, None if running is None else running.size, p)
        with np.errstate(invalid="ignore", over="ignore"):  # rows that are not finite are given up below
            statistics = _statistics(values, p, interval)
            if running is None:
                zero = np.zeros_like(statistics)
                running = _Running(0, values.shape[-1], zero, zero, zero[..., 0])
            running = running.add(statistics)
            standing = np.all(running.achieved <= numerical_tolerance(running.standard_deviation, digits), axis=1)
        finite = np.isfinite(running.average).all(axis=(1, 2))
        standing &= finite & (running.blocks >= fewest_blocks)
        ended = standing | ~finite | (running.blocks == most_blocks)
        if ended.any():
            done.append((rows[ended], standing[ended], running.take(ended)))
            rows, running = rows[~ended], running.take(~ended)
        if not rows.size:
            break
    return _gather(done, row_count, p, digits)


def _block(values: np.ndarray, rows: np.ndarray, size: int | None, p: np.ndarray) -> np.ndarray:
    """Values of a block, checked, their draws side by side in memory."""
    values = np.ascontiguousarray(values, dtype=float)
    if values.ndim != 3 or len(values) != len(rows) or (size is not None and values.shape[-1] != size):
        wanted = f"({len(rows)}, output, {size or 'draw'})"
        raise EngineError(f"block of draws: its shape must be {wanted}, got {values.shape}")
    if values.shape[-1] < _least_draws(p):
        raise EngineError(
            f"block of draws: {values.shape[-1]} are too few for an interval of probability {float(p.max())}; "
            f"at least {_least_draws(p)} are needed (JCGM 101, 7.9.4), {standard_block_size(p)} are usual"
        )
    return values


def _statistics(values: np.ndarray, p: np.ndarray, interval: Callable) -> np.ndarray:
    """Mean, standard deviation and interval ends of one block, (row, output, statistic)."""
    ends = interval(values, p).reshape(*values.shape[:2], -1)
    mean = values.mean(axis=-1, keepdims=True)
    deviation = np.square(values - mean).sum(axis=-1, keepdims=True)
    return np.concatenate([mean, np.sqrt(deviation / (values.shape[-1] - 1)), ends], axis=-1)


def _gather(done: list, row_count: int, p: np.ndarray, digits: int) -> AdaptiveResult:
    """Put the rows back in order."""
    order = np.argsort(np.concatenate([rows for rows, _, _ in done]))

    def joined(parts) -> np.ndarray:
        return np.concatenate(list(parts))[order]

    parts = [running for _, _, running in done]
    blocks = joined(np.full(len(rows), running.blocks) for rows, _, running in done)
    deviation = joined(part.standard_deviation for part in parts)
    average = joined(part.average for part in parts)
    with np.errstate(invalid="ignore"):
        achieved = joined(part.achieved for part in parts)
    return AdaptiveResult(
        blocks=blocks,
        draws=blocks * parts[0].size,
        converged=joined(standing for _, standing, _ in done),
        mean=average[..., 0],
        standard_deviation=deviation,
        interval=average[..., 2:].reshape(row_count, average.shape[1], *p.shape, 2),
        achieved=achieved,
        tolerance=numerical_tolerance(deviation, digits),
    )
