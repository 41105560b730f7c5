"""Quantiles of distributions that are evaluated: Newton's method kept inside a bracket, all stars together."""

from typing import Protocol

import numpy as np
from scipy.special import ndtri

__all__ = ["NEAR", "Evaluated", "first_guess", "invert"]

_STEPS = 100  # bisection alone needs 50
_TOLERANCE = 1e-12  # in probability
NEAR = 3e-5  # an error in probability from which one Newton step leaves 1e-8: it needs no evaluation to confirm it


class Evaluated(Protocol):
    """A distribution of stars that can be evaluated."""

    def take(self, rows: np.ndarray) -> "Evaluated":
        """Return some of the stars."""
        ...

    def evaluate(self, t: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Cumulative and density at t, (star, m) each."""
        ...


def first_guess(p: np.ndarray, moments: tuple[np.ndarray, np.ndarray], skewness: np.ndarray) -> np.ndarray:
    """Values at probabilities (m,) by Cornish and Fisher's first correction to a normal, (star, m)."""
    mean, sd = moments
    score = ndtri(p)
    return mean[:, None] + sd[:, None] * (score + skewness[:, None] / 6.0 * (score**2 - 1.0))


def invert(
    found: Evaluated, p: np.ndarray, low: np.ndarray, high: np.ndarray, start: np.ndarray, near: float = NEAR
) -> np.ndarray:
    """Values at cumulative probabilities; each is found as if no other were asked for.

    Parameters
    ----------
    found : Evaluated
    p : ndarray, (m,)
    low, high : ndarray, (star,)
        Ends between which all probability lies but for rounding.
    start : ndarray, (star, m)
        First guess.
    near : float
        Error in probability from which one more step is the last; 0: every value is confirmed.

    Returns
    -------
    ndarray, (star, m)
    """
    low, high = (np.repeat(end[:, None], len(p), axis=1) for end in (low, high))
    t = np.clip(start, low, high)
    active = np.arange(len(t))
    miss, settled = np.full(t.shape, np.inf), np.zeros(t.shape, bool)  # a probability's value waits for no other's
    for _ in range(_STEPS):
        here = found if len(active) == len(t) else found.take(active)
        cumulative, density = here.evaluate(t[active])
        error = cumulative - p
        low[active] = np.where(error < 0.0, t[active], low[active])
        high[active] = np.where(error >= 0.0, t[active], high[active])
        with np.errstate(divide="ignore", invalid="ignore"):
            newton = t[active] - error / density
        good = (newton > low[active]) & (newton < high[active]) & (np.abs(error) < 0.5 * miss[active])
        following = np.where(good, newton, 0.5 * (low[active] + high[active]))
        narrow = high[active] - low[active] <= 1e-13 * (1.0 + np.abs(t[active]))
        done = (np.abs(error) <= _TOLERANCE) | narrow
        last = good & (np.abs(error) <= near)
        miss[active] = np.abs(error)
        t[active] = np.where(settled[active] | done, t[active], following)
        settled[active] |= done | last
        active = active[~settled[active].all(axis=1)]
        if not active.size:
            break
    return t
