"""Radiation pressure in a star, and what its gas is: pressure-weighted β, mean molecular weight, ionisation energy.

A polytrope of index n whose pressure is that of an ideal gas (share β) and of radiation (1 - β) obeys at each point

    (1 - β)/β⁴ = k_n (μ² M/Msun)² θ^(3-n),    k_n = (4π G³ a/3) (m_u/k_B)⁴ Msun²/((n+1)³ ω_n²),

with ω_n = -ξ₁² θ'(ξ₁): T from P_gas = βP and P_radiation = (1-β)P = a T⁴/3, P and ρ from the polytrope [1]_. For
n = 3 the weight θ^(3-n) is one, and this is Eddington's quartic, k₃ = 0.0029902537 [2]_; outwards radiation loses
below 3 and gains above. The energy needs the mean weighted by pressure, <β> = ∫βP dV/∫P dV, P ∝ θ^(n+1).

μ is in atomic mass constants throughout (with the mass of the hydrogen atom as unit k₃ would be 0.00308495), Msun is
the nominal G Msun over G, so that k_n is proportional to G.

When it is wrong: μ is one number throughout the star, the gas is ideal, the total pressure is that of a polytrope.

References
----------
.. [1] Chandrasekhar 1939, An Introduction to the Study of Stellar Structure, chapter VI.
.. [2] Eddington 1926, The Internal Constitution of the Stars, equations 84-4, 94-6.
"""

import math
from functools import lru_cache

import numpy as np
from numpy.polynomial import chebyshev
from numpy.typing import ArrayLike
from scipy.interpolate import CubicSpline
from scipy.optimize import brentq

from stellerg import constants as const
from stellerg.errors import InputError
from stellerg.structure.polytrope import profile

__all__ = [
    "LARGEST_LOG_MASS_MU2",
    "LARGEST_TABULATED_INDEX",
    "gas_pressure_fraction",
    "gas_pressure_fraction_direct",
    "ionisation_energy",
    "mean_molecular_weight",
]

LARGEST_TABULATED_INDEX = 4.9  # judgement: nearer 5 the table loses accuracy, and no star needs it
LARGEST_LOG_MASS_MU2 = math.log(1e4)  # judgement: above any star; radiation is over 95 % of the pressure there

_COEFFICIENT = (  # k_n (n+1)³ ω_n²; G³ Msun² is written G (G Msun)², as G Msun is exact
    (4.0 * math.pi / 3.0 * const.RADIATION_CONSTANT * const.GRAVITATIONAL_CONSTANT * const.NOMINAL_SOLAR_GM**2)
    * (const.ATOMIC_MASS_CONSTANT / const.BOLTZMANN_CONSTANT) ** 4
)

_JOULE_PER_KG = const.ELECTRON_VOLT / const.ATOMIC_MASS_CONSTANT  # of one electron volt per atomic mass constant
_HYDROGEN_ENERGY = _JOULE_PER_KG * const.HYDROGEN_IONISATION_ENERGY / const.HYDROGEN_ATOMIC_MASS
_HELIUM_ENERGY = (
    _JOULE_PER_KG
    * (const.HELIUM_FIRST_IONISATION_ENERGY + const.HELIUM_SECOND_IONISATION_ENERGY)
    / const.HELIUM_ATOMIC_MASS
)

# The table. Let r = <1-β>/<β>, and s = (1 + c (μ²M)²)^(1/4) - 1, which like r goes as (μ²M)² for small masses and as
# (μ²M)^(1/2) for large ones. Then ln(r/s) is smooth and bounded in n and in v = s/(1+s), from v = 0, where it is the
# exact asymptotic law, to the largest mass. No lower end, thus no join. The numbers below were chosen by measurement.
_SCALE = 3.0  # c, well above k_n: for n > 4 radiation rules the outermost layers of very light stars
_LARGEST_PLACE = 1.0 - (1.0 + _SCALE * math.exp(2.0 * LARGEST_LOG_MASS_MU2)) ** -0.25  # v of the largest mass
_SOLVED = 22  # polytropes solved: Chebyshev nodes in -ln(7 - n), to 3e-7 in r; 14 ms each is what the table costs
_STRETCH = 7.0  # the 7 above: nodes are needed densest towards n = 5
_POINTS = 48  # quadrature nodes of each; 1e-12 in r
_CELLS = (120, 120)  # in n and v, of the bicubic spline
_NEWTON_STEPS = 6  # five reach rounding


def gas_pressure_fraction(index: ArrayLike, log_mass_mu2: ArrayLike) -> np.ndarray:
    """Pressure-weighted share <β> of the gas in the pressure of polytropes, from a table made at the first call.

    Parameters
    ----------
    index : array_like
        n. Clipped to the range from 0 to `LARGEST_TABULATED_INDEX`.
    log_mass_mu2 : array_like
        ln(μ² M), M in nominal solar masses, μ in atomic mass constants; broadcasts against `index`. However small
        (1 - <β> goes as (μ² M)²); clipped above `LARGEST_LOG_MASS_MU2`.

    Returns
    -------
    ndarray, broadcast shape
        Dimensionless, in (0, 1]; NaN where an argument is. 1 - <β> is good to 1e-6 relative (or rounding of <β>) for
        n <= 4.5, to 1e-5 above; second derivatives in both arguments are continuous inside the limits.

    See Also
    --------
    gas_pressure_fraction_direct : the slow method behind it.
    """
    return 1.0 / (1.0 + _pressure_ratio(index, log_mass_mu2))


def gas_pressure_fraction_direct(index: float, mass_mu2: float, points: int = 256) -> float:
    """Pressure-weighted share <β> of the gas by direct integration: the quartic solved by bracketing at each point.

    Parameters
    ----------
    index : float
        n, from 0 to `stellerg.structure.polytrope.LARGEST_INDEX`.
    mass_mu2 : float
        μ² M, M in nominal solar masses, μ in atomic mass constants.
    points : int
        Quadrature nodes from centre to surface, as in `stellerg.structure.polytrope.profile`.

    Returns
    -------
    float
        Dimensionless. 1 - <β> is good to 1e-9 relative (limited by the polytrope), or rounding of <β>.

    Raises
    ------
    InputError
        If the index or the number of points is not as in `profile`, or the mass not positive and finite.
    """
    if not (math.isfinite(mass_mu2) and mass_mu2 > 0.0):
        raise InputError(f"mu^2 M: must be positive and finite, got {mass_mu2!r}; give nominal solar masses")
    theta, weight, coefficient = _nodes(float(index), points)
    log_right = math.log(coefficient) + 2.0 * math.log(mass_mu2) + (3.0 - index) * np.log(theta)
    radiation = np.array([_bracketed_radiation_fraction(right) for right in log_right.tolist()])
    return float(1.0 - (radiation * weight).sum())


def mean_molecular_weight(hydrogen: ArrayLike, metal: ArrayLike) -> np.ndarray:
    """Mean molecular weight μ of fully ionised gas, 1/μ = 2X + 3Y/4 + Z/2 with Y = 1 - X - Z (common practice).

    Parameters
    ----------
    hydrogen, metal : array_like
        Mass fractions X and Z; they broadcast. Not checked: 0 <= X, 0 <= Z, X + Z <= 1.

    Returns
    -------
    ndarray, broadcast shape
        Atomic mass constants per free particle. The rule takes hydrogen and helium as 1 and 4 mass units, and metals
        as having half as many electrons as mass units, with the nuclei not counted.
    """
    hydrogen, metal = np.asarray(hydrogen, float), np.asarray(metal, float)
    return 1.0 / (2.0 * hydrogen + 0.75 * (1.0 - hydrogen - metal) + 0.5 * metal)


def ionisation_energy(hydrogen: ArrayLike, metal: ArrayLike) -> np.ndarray:
    """Energy per mass of gas that ionises all its hydrogen and helium, Y = 1 - X - Z.

    The zero is neutral atoms at rest at infinity: molecules would add their dissociation (0.214e9 J per kg of
    hydrogen). Metals are neglected.

    Parameters
    ----------
    hydrogen, metal : array_like
        Mass fractions X and Z; they broadcast. Not checked, as in `mean_molecular_weight`.

    Returns
    -------
    ndarray, broadcast shape
        J kg-1.
    """
    hydrogen, metal = np.asarray(hydrogen, float), np.asarray(metal, float)
    return _HYDROGEN_ENERGY * hydrogen + _HELIUM_ENERGY * (1.0 - hydrogen - metal)


def _pressure_ratio(index: ArrayLike, log_mass_mu2: ArrayLike) -> np.ndarray:
    """Return <1-β>/<β>, which unlike 1 - <β> keeps its relative accuracy for light stars."""
    pieces = _table()
    index = np.clip(np.asarray(index, float), 0.0, LARGEST_TABULATED_INDEX)
    growth = _growth(np.minimum(np.asarray(log_mass_mu2, float), LARGEST_LOG_MASS_MU2))
    cell, place = _cell(index * (_CELLS[0] / LARGEST_TABULATED_INDEX), _CELLS[0])
    column, across = _cell(growth / (1.0 + growth) * (_CELLS[1] / _LARGEST_PLACE), _CELLS[1])
    cell = cell * _CELLS[1] + column
    # elementwise only (gathers, products, sums): a row has the same bits alone and in a batch
    total = 0.0
    for power in pieces:
        row = power[0].take(cell)
        for piece in power[1:]:
            row = row * across + piece.take(cell)
        total = total * place + row
    return growth * np.exp(total)


def _cell(position: np.ndarray, cells: int) -> tuple[np.ndarray, np.ndarray]:
    """Return the cell of the table and the place in it, 0 to 1; NaN falls in cell 0 and stays NaN in the place."""
    cell = np.fmax(np.minimum(position, cells - 1.0), 0.0).astype(np.intp)
    return cell, position - cell


def _growth(log_mass_mu2: np.ndarray) -> np.ndarray:
    """Return s = (1 + c (μ²M)²)^(1/4) - 1."""
    return np.expm1(0.25 * np.log1p(_SCALE * np.exp(2.0 * log_mass_mu2)))


@lru_cache(maxsize=1)
def _table() -> np.ndarray:
    """Return the pieces of the bicubic spline of ln(r/s), (power of n, power of v, cell), highest power first.

    Splines and not polynomials, as a spline costs the same however many cells it has.
    """
    place = np.linspace(0.0, _LARGEST_PLACE, _CELLS[1] + 1)
    growth = place[1:] / (1.0 - place[1:])
    log_mass = 0.5 * (np.log(np.expm1(4.0 * np.log1p(growth))) - math.log(_SCALE))
    low, high = -math.log(_STRETCH), -math.log(_STRETCH - LARGEST_TABULATED_INDEX)
    middle, half = 0.5 * (low + high), 0.5 * (high - low)
    node = chebyshev.chebpts1(_SOLVED)
    columns = np.array([_column(n, log_mass, growth) for n in (_STRETCH - np.exp(-middle - half * node)).tolist()])
    # discrete orthogonality, written as sums: a matrix product may depend on the number of threads
    terms = chebyshev.chebvander(node, _SOLVED - 1).T[:, :, None] * columns
    series = terms.sum(axis=1) * (2.0 / _SOLVED)
    series[0] *= 0.5

    index = np.linspace(0.0, LARGEST_TABULATED_INDEX, _CELLS[0] + 1)
    scaled = (-np.log(_STRETCH - index) - middle) / half
    values = chebyshev.chebval(scaled, series)  # (v, n)
    slopes = chebyshev.chebval(scaled[[0, -1]], chebyshev.chebder(series)) / (half * (_STRETCH - index[[0, -1]]))
    # the slopes at both ends are known; without them the outermost cells are ten times worse
    along = CubicSpline(index, values, axis=1, bc_type=((1, slopes[:, 0]), (1, slopes[:, 1]))).c  # (power, n, v)
    both = CubicSpline(place, along, axis=2).c  # (power of v, v, power of n, n)
    powers = np.arange(3, -1, -1)  # pieces are polynomials in 0 to 1
    both = both * (place[1] ** powers)[:, None, None, None] * (index[1] ** powers)[:, None]
    return np.ascontiguousarray(both.transpose(2, 0, 3, 1)).reshape(4, 4, -1)


def _column(index: float, log_mass_mu2: np.ndarray, growth: np.ndarray) -> np.ndarray:
    """Return ln(r/s) of one index, at zero mass and at the masses given, (mass + 1,)."""
    theta, weight, coefficient = _nodes(index, _POINTS)
    log_local = math.log(coefficient) + (3.0 - index) * np.log(theta)
    # for light stars 1 - β = k_n (μ²M)² θ^(3-n) and s = c (μ²M)²/4
    limit = math.log((np.exp(log_local) * weight).sum() * 4.0 / _SCALE)
    logit = _logit_radiation_fraction(log_local + 2.0 * log_mass_mu2[:, None])
    radiation, gas = ((weight / (1.0 + np.exp(sign * logit))).sum(axis=-1) for sign in (-1.0, 1.0))
    return np.append(limit, np.log(radiation / (gas * growth)))


@lru_cache(maxsize=64)
def _nodes(index: float, points: int) -> tuple[np.ndarray, np.ndarray, float]:
    """Return θ and weights of the mean over ∫P dV, (point,), and k_n; the ends carry no weight and are left out.

    P dV is proportional to θ dm, as P ∝ θ^(n+1) and dm ∝ θ^n dV.
    """
    inside = profile(index, points)
    weight = (inside.theta * inside.mass_weight)[1:-1]
    coefficient = _COEFFICIENT / ((index + 1.0) ** 3 * float(inside.mass[-1]) ** 2)
    return inside.theta[1:-1], weight / weight.sum(), coefficient


# With y = ln((1-β)/β) the quartic ln((1-β)/β⁴) = q reads y + 3 ln(1 + e^y) = q: increasing, convex, and its root lies
# between b - 3 ln 2 and b = min(q, q/4).


def _logit_radiation_fraction(log_right: np.ndarray) -> np.ndarray:
    """Return y by Newton's method, which from b comes down to the root without overshooting."""
    y = np.minimum(log_right, 0.25 * log_right)
    for _ in range(_NEWTON_STEPS):
        small = np.exp(-np.abs(y))
        excess = y + 3.0 * (np.maximum(y, 0.0) + np.log1p(small)) - log_right
        y = y - excess / (1.0 + 3.0 * np.where(y > 0.0, 1.0, small) / (1.0 + small))
    return y


def _bracketed_radiation_fraction(log_right: float) -> float:
    """Return 1 - β by Brent's method."""

    def excess(y: float) -> float:
        return y + 3.0 * (max(y, 0.0) + math.log1p(math.exp(-abs(y)))) - log_right

    upper = min(log_right, 0.25 * log_right)
    # a little room, as both ends hold with equality in the limits
    y = brentq(excess, upper - 3.0 * math.log(2.0) - 1e-9, upper + 1e-9, xtol=1e-14)
    return 1.0 / (1.0 + math.exp(-y))
