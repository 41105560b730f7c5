"""Where the main sequence lies in the plane of mass and radius, and which stars are too large for it.

M, R and temperature cannot tell a contracting star from a giant (both lie on the Hayashi line); the user must. An
index prior describes a giant as badly as any: its core holds the energy.
"""

import csv
from enum import IntEnum
from functools import lru_cache
from importlib import resources

import numpy as np
from scipy.interpolate import CubicSpline

__all__ = ["Place", "end_of_main_sequence", "place", "radius_zams"]

# Below this mass no single star has left the main sequence within the age of the Universe (common practice).
_NONE_EVOLVED_BELOW = 0.7


class Place(IntEnum):
    """Where a star lies."""

    UNKNOWN = 0  # outside the masses of the table
    MAIN_SEQUENCE = 1
    CONTRACTING = 2  # too large, and too light to have evolved
    BEYOND = 3  # too large: a giant, or a contracting star


@lru_cache(maxsize=1)
def _table() -> tuple[np.ndarray, CubicSpline, np.ndarray, np.ndarray]:
    """ln M of the nodes, spline of ln R at age zero, and ln M and radius ratio of the end of the main sequence."""
    text = (resources.files("stellerg.structure") / "main_sequence.csv").read_text(encoding="utf-8")
    rows = list(csv.DictReader(line for line in text.splitlines() if not line.startswith("#")))
    log_mass = np.log([float(row["mass"]) for row in rows])
    # natural in ln M: monotone interpolants leave kinks
    spline = CubicSpline(log_mass, np.log([float(row["radius_zams"]) for row in rows]), bc_type="natural")
    ends = [(np.log(float(row["mass"])), float(row["radius_end"])) for row in rows if row["radius_end"]]
    return log_mass, spline, *np.array(ends).T


def radius_zams(mass: np.ndarray) -> np.ndarray:
    """Radius at age zero, nominal solar; NaN outside the masses of the table.

    Parameters
    ----------
    mass : ndarray
        Nominal solar masses.
    """
    log_mass, spline, _, _ = _table()
    where = np.log(mass)
    inside = (where >= log_mass[0] - 1e-12) & (where <= log_mass[-1] + 1e-12)
    return np.where(inside, np.exp(spline(where)), np.nan)


def end_of_main_sequence(mass: np.ndarray) -> np.ndarray:
    """Radius at the end of the main sequence over that at age zero; linear in ln M, constant below 0.35."""
    _, _, log_mass, ratio = _table()
    return np.interp(np.log(mass), log_mass, ratio)


def place(mass: np.ndarray, radius: np.ndarray) -> np.ndarray:
    """`Place` of stars.

    Parameters
    ----------
    mass, radius : ndarray, (star,)
        Nominal solar units.

    Returns
    -------
    ndarray of uint8, (star,)
    """
    ratio = radius / radius_zams(mass)
    with np.errstate(invalid="ignore"):
        beyond = ratio > end_of_main_sequence(mass)
    kind = np.where(mass < _NONE_EVOLVED_BELOW, Place.CONTRACTING, Place.BEYOND)
    return np.where(np.isnan(ratio), Place.UNKNOWN, np.where(beyond, kind, Place.MAIN_SEQUENCE)).astype(np.uint8)
