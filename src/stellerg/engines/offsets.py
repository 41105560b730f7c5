"""Quantiles of a normal measured part and a shared density of ln w, from a table over the width of the normal part.

    Q_p(sigma) = mean + sqrt(sd^2 + sigma^2) x_p(ln sigma)

with mean and sd those of ln w. x_p is smooth; it is tabulated for a density and the probabilities asked for, as a cubic
spline in ln sigma whose error in the cumulative is measured half way between its nodes. Where that is not small enough
(a density with gaps) there is no table, and quantiles are found one by one.
"""

from functools import lru_cache

import numpy as np
from scipy.interpolate import CubicSpline

from stellerg.engines import smoothing
from stellerg.engines.parts import GaussianPart
from stellerg.structure.model import Mixture

__all__ = ["TABLE_ERROR", "quantile_by_table"]

TABLE_ERROR = 1e-7  # of the cumulative, at most: else there is no table
_ENDS = np.log([1e-4, 3.0])  # of sigma; narrower and wider normal parts are not looked up
_NODES = (129, 257, 513)


def quantile_by_table(mixture: Mixture, mean: np.ndarray, sigma: np.ndarray, p: np.ndarray) -> np.ndarray:
    """ln Y at cumulative probabilities, (star, m); NaN where no table serves.

    Parameters
    ----------
    mixture : Mixture
        Density of ln w.
    mean, sigma : ndarray, (star,)
        Of the normal part.
    p : ndarray, (m,)
    """
    out = np.full((len(mean), len(p)), np.nan)
    where = np.log(sigma)
    inside = np.flatnonzero((where > _ENDS[0]) & (where < _ENDS[1]))
    table = _table(mixture, tuple(p.tolist())) if inside.size else None
    if table is None:
        return out
    middle, spread = mixture.moments
    width = np.sqrt(spread**2 + sigma[inside] ** 2)
    out[inside] = (mean[inside] + middle)[:, None] + width[:, None] * table(where[inside])
    return out


@lru_cache(maxsize=64)
def _table(mixture: Mixture, p: tuple[float, ...]) -> CubicSpline | None:
    probabilities = np.array(p)
    middle, spread = mixture.moments

    def exact(where):
        sigma = np.exp(where)
        part = GaussianPart(np.zeros(len(sigma)), sigma)
        start = np.repeat(np.array([[middle]]), len(sigma), axis=0) + np.zeros(len(p))
        quantiles = smoothing.quantile([(mixture, part)], probabilities, start)
        return (quantiles - middle) / np.hypot(spread, sigma)[:, None]

    for count in _NODES:
        nodes = np.linspace(*_ENDS, count)
        table = CubicSpline(nodes, exact(nodes))
        between = 0.5 * (nodes[1:] + nodes[:-1])
        sigma = np.exp(between)
        at = middle + np.hypot(spread, sigma)[:, None] * table(between)
        below, _ = smoothing.evaluate([(mixture, GaussianPart(np.zeros(len(sigma)), sigma))], at)
        if np.abs(below - probabilities).max() < TABLE_ERROR:
            return table
    return None
