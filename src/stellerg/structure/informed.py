"""Densities of ln w star by star: a prior weighted with the likelihood of structure observables, on a grid.

A density is piecewise linear over cells between knots, which gather where it is; each component of a prior keeps its
own grid, so that a sharp end stays sharp.
"""

from dataclasses import dataclass

import numpy as np

from stellerg.structure.model import Mixture
from stellerg.structure.observed import Observed

__all__ = ["COMPANIONS", "Cells", "cells_of", "equally_probable"]

_CELLS = 512
_SEARCH = 65  # points of a round of the search for the window
_ROUNDS = 4
_DROP = 20.0  # a density lower by this in the logarithm is left out: 2e-9
_POINT = 1e-9  # half width in ln w that stands for a point
COMPANIONS = 48  # equally probable structures of a companion


@dataclass(frozen=True)
class Cells:
    """Piecewise linear densities, one after the other on the last axis.

    Attributes
    ----------
    low, high : ndarray, (star, cell)
        Ends of the cells in ln w.
    at_low, at_high : ndarray, (star, cell)
        Density at the ends, all cells together of total 1.
    log_evidence : ndarray, (star,)
        Logarithm of the mean likelihood under the prior.
    """

    low: np.ndarray
    high: np.ndarray
    at_low: np.ndarray
    at_high: np.ndarray
    log_evidence: np.ndarray

    def take(self, which: np.ndarray) -> "Cells":
        """Return some of the stars."""
        return Cells(*(getattr(self, name)[which] for name in self.__dataclass_fields__))

    def halved(self) -> "Cells":
        """Half as many cells, each of two neighbours: to see what the number of cells does."""
        if self.low.shape[1] < 4 or self.low.shape[1] % 2:
            return self
        low, high, left, right = self.low[:, ::2], self.high[:, 1::2], self.at_low[:, ::2], self.at_high[:, 1::2]
        return Cells(low, high, left, right, self.log_evidence)

    @property
    def mass(self) -> np.ndarray:
        """Probability of each cell, (star, cell)."""
        return 0.5 * (self.high - self.low) * (self.at_low + self.at_high)

    @property
    def moments(self) -> tuple[np.ndarray, np.ndarray]:
        """Mean and standard deviation of ln w, (star,) each."""
        width, middle = self.high - self.low, 0.5 * (self.high + self.low)
        tilt = (self.at_high - self.at_low) * width**2 / 12.0
        first = (self.mass * middle + tilt).sum(axis=-1)
        off = middle - first[:, None]
        second = (self.mass * (off**2 + width**2 / 12.0) + 2.0 * off * tilt).sum(axis=-1)
        return first, np.sqrt(np.maximum(second, 0.0))

    def quantile(self, u: np.ndarray) -> np.ndarray:
        """ln w at cumulative probability u, (star, m)."""
        mass = self.mass
        above = np.cumsum(mass, axis=1)
        above = above / above[:, -1:]
        # cells are searched by halving, row by row, so that a row alone gives the same bits
        first, last = np.zeros(u.shape, np.intp), np.full(u.shape, mass.shape[1] - 1, np.intp)
        while (first < last).any():
            middle = (first + last) // 2
            short = np.take_along_axis(above, middle, axis=1) < u
            first, last = np.where(short, middle + 1, first), np.where(short, last, middle)
        before = np.where(first > 0, np.take_along_axis(above, np.maximum(first - 1, 0), axis=1), 0.0)
        low, high, a, b = (
            np.take_along_axis(x, first, axis=1) for x in (self.low, self.high, self.at_low, self.at_high)
        )
        share = np.clip((u - before) / np.take_along_axis(mass / above[:, -1:], first, axis=1), 0.0, 1.0)
        # the root of a x + (b - a) x^2/2 = share (a + b)/2
        wanted = share * (a + b)
        root = np.sqrt(np.maximum(a * a + (b - a) * wanted, 0.0))
        with np.errstate(invalid="ignore", divide="ignore"):
            place = np.where(a + root > 0.0, wanted / (a + root), share)
        return low + np.clip(place, 0.0, 1.0) * (high - low)


def equally_probable(mixture: Mixture, count: int) -> np.ndarray:
    """Equally probable values of ln w for the companions of stars, (star, k)."""
    middles = (np.arange(COMPANIONS) + 0.5) / COMPANIONS
    return np.broadcast_to(mixture.quantile(middles), (count, COMPANIONS))


def cells_of(mixture: Mixture, observed: Observed | None, count: int, cells: int = _CELLS) -> Cells:
    """Density of ln w of stars under one mixture and their structure observables.

    Parameters
    ----------
    mixture : Mixture
    observed : Observed or None
        Of the stars.
    count : int
        Number of stars.
    cells : int
        For each component.
    """
    companions = None
    if observed is not None and observed.has_companion.any():
        companions = equally_probable(mixture, count)
    parts = []
    for weight, component in zip(mixture.weights, mixture.components, strict=True):
        if component.is_point:
            at = np.full((count, 1), component.panels[0])
            likelihood = np.zeros((count, 1)) if observed is None else observed.marginal(at, companions)
            edges = np.concatenate([at - _POINT, at + _POINT], axis=1)
            logs = np.repeat(likelihood - np.log(2.0 * _POINT), 2, axis=1)
        else:
            edges, logs = _on_grid(component, observed, companions, count, cells)
        parts.append((edges, logs + np.log(weight)))
    top = np.max([logs.max(axis=1) for _, logs in parts], axis=0)
    top = np.where(np.isfinite(top), top, 0.0)
    low, high, left, right = (
        np.concatenate(x, axis=1)
        for x in zip(
            *(
                (e[:, :-1], e[:, 1:], np.exp(g[:, :-1] - top[:, None]), np.exp(g[:, 1:] - top[:, None]))
                for e, g in parts
            ),
            strict=True,
        )
    )
    order = np.argsort(low, axis=1, kind="stable")
    low, high, left, right = (
        np.ascontiguousarray(np.take_along_axis(x, order, axis=1)) for x in (low, high, left, right)
    )
    total = (0.5 * (high - low) * (left + right)).sum(axis=1)
    with np.errstate(divide="ignore"):
        evidence = top + np.log(total)
    safe = np.where(total > 0.0, total, 1.0)[:, None]
    return Cells(low, high, left / safe, right / safe, evidence)


def _on_grid(component, observed, companions, count, cells):
    """Edges of the cells of one component, and the logarithm of prior times likelihood there, (star, cell + 1)."""
    panels = component.panels

    def log_density(q):
        # at the very ends of the support rounding must not fall outside
        inside = np.clip(q, panels[0], panels[-1])
        value = component.log_density(inside)
        return value if observed is None else value + observed.marginal(inside, companions)

    low, high = np.full(count, panels[0]), np.full(count, panels[-1])
    for _ in range(_ROUNDS if observed is not None else 1):
        step = (high - low) / (_SEARCH - 1)
        points = low[:, None] + step[:, None] * np.arange(_SEARCH)
        value = log_density(points)
        counts = value >= value.max(axis=1, keepdims=True) - _DROP
        first, last = np.argmax(counts, axis=1), _SEARCH - 1 - np.argmax(counts[:, ::-1], axis=1)
        low, high = low + step * np.maximum(first - 1, 0), low + step * np.minimum(last + 1, _SEARCH - 1)
    edges = low[:, None] + (high - low)[:, None] * (np.arange(cells + 1) / cells)
    return edges, log_density(edges)
