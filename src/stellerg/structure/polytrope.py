"""Polytropes, P ∝ ρ^(1 + 1/n): radius, concentration, apsidal constant, inertia and energy, for 0 <= n < 5.

Lane-Emden: (1/ξ²) d(ξ² dθ/dξ)/dξ = -θ^n, θ(0) = 1, surface at θ(ξ₁) = 0 [1]_. It is integrated in the angle
φ with θ = cos⁸ φ, from the centre (0) to the surface (π/2). The surface is then the end of the interval (no
root to find, θ never negative) and θ^n dθ is smooth there for fractional n too. The unknowns are logarithms,
so that quantities which vanish as n -> 5 keep their relative accuracy.

When it is wrong: a real star is one polytrope only if it is fully convective or degenerate. The energy of
standard solar models is that of n = 3.14, their moment of inertia that of n = 3.02, their k₂ that of
n = 2.89 (means of published tables): no index gives all three.

References
----------
.. [1] Chandrasekhar 1939, An Introduction to the Study of Stellar Structure, chapter IV.
.. [2] Radau 1885, C. R. Acad. Sci. Paris 100, 972; Kopal 1978, Dynamics of Close Binary Systems, chapter II
   (both from memory).
"""

import math
from dataclasses import dataclass
from functools import lru_cache
from numbers import Integral

import numpy as np
from numpy.typing import ArrayLike
from scipy.integrate import solve_ivp

from stellerg.errors import InputError

__all__ = [
    "LARGEST_INDEX",
    "Polytrope",
    "PolytropeProfile",
    "gravitational_coefficient",
    "index_of_coefficient",
    "polytrope",
    "profile",
]

LARGEST_INDEX = 4.999  # judgement: errors grow as 1/(5 - n), and its w = 3000 is above that of any giant
_TOLERANCE = 1e-13  # relative, and absolute on the logarithms; near the least that double precision allows
_START = 0.01  # ξ of the first point; three terms of the series are good to 2e-14 there
_POINTS = (16, 512)  # of a profile; more would put points inside _START


@dataclass(frozen=True)
class Polytrope:
    """Global constants of one polytrope, all dimensionless.

    Attributes
    ----------
    index : float
        n.
    radius : float
        ξ₁, the radius in units of the Lane-Emden length.
    surface_slope : float
        -dθ/dξ at ξ₁.
    apsidal_constant : float
        k₂ = (3 - η)/(2 (2 + η)) with Radau's η at the surface: half the tidal Love number of degree 2.
    moment_of_inertia_factor : float
        I/(M R²).
    """

    index: float
    radius: float
    surface_slope: float
    apsidal_constant: float
    moment_of_inertia_factor: float

    @property
    def mass_integral(self) -> float:
        """-ξ₁² θ'(ξ₁), the mass in units of 4π ρ_c times the cube of the Lane-Emden length."""
        return self.radius**2 * self.surface_slope

    @property
    def central_to_mean_density(self) -> float:
        """ρ_c over the mean density, ξ₁/(3 |θ'(ξ₁)|)."""
        return self.radius / (3.0 * self.surface_slope)

    @property
    def gravitational_coefficient(self) -> float:
        """w = |Ω| R/(G M²) = 3/(5 - n)."""
        return float(gravitational_coefficient(self.index))


@dataclass(frozen=True)
class PolytropeProfile:
    """A polytrope from centre to surface, both included.

    Attributes
    ----------
    radius, theta, mass : numpy.ndarray, (point,)
        ξ, θ and -ξ² dθ/dξ, dimensionless.
    mass_weight : numpy.ndarray, (point,)
        ``(f * mass_weight).sum()`` is the integral of f over `mass`, to 1e-9 from 128 points if f is smooth.
        It is zero at both ends, so f may be undefined there.

    The last few radii are the surface to rounding.
    """

    radius: np.ndarray
    theta: np.ndarray
    mass: np.ndarray
    mass_weight: np.ndarray


def gravitational_coefficient(index: ArrayLike) -> np.ndarray:
    """w = |Ω| R/(G M²) = 3/(5 - n) of polytropes of `index` n, any shape.

    Chandrasekhar 1939, chapter IV, eq. 90 (from memory).
    Not checked: it is the gravitational coefficient of a polytrope for 0 <= n < 5 only.
    """
    return 3.0 / (5.0 - np.asarray(index, float))


def index_of_coefficient(coefficient: ArrayLike) -> np.ndarray:
    """n = 5 - 3/w of polytropes with gravitational coefficient w, any shape.

    Not checked: it is the index of a polytrope for w >= 0.6 only (uniform density, n = 0).
    """
    return 5.0 - 3.0 / np.asarray(coefficient, float)


def polytrope(index: float) -> Polytrope:
    """Solve the polytrope of one index; repeated indices are remembered.

    Parameters
    ----------
    index : float
        n, from 0 to `LARGEST_INDEX`, whole or not.

    Returns
    -------
    Polytrope
        Relative accuracy 1e-10 (radius, slope and what follows from them), 1e-8 (apsidal constant, inertia).

    Raises
    ------
    InputError
        If the index is not one finite number from 0 to `LARGEST_INDEX`. From n = 5 on a polytrope has no
        surface; just below, ξ₁ ≈ 32 √3/(π (5 - n)) and rounding grows in the same proportion.
    """
    return _solve(_checked_index(index))


def profile(index: float, points: int = 128) -> PolytropeProfile:
    """Tabulate a polytrope from centre to surface, close together near both.

    Parameters
    ----------
    index : float
        n, as in `polytrope`.
    points : int
        16 to 512, equally spaced in φ.

    Returns
    -------
    PolytropeProfile

    Raises
    ------
    InputError
        If the index is not as in `polytrope`, or `points` is not a whole number from 16 to 512.
    """
    index = _checked_index(index)
    if not isinstance(points, Integral) or not _POINTS[0] <= points <= _POINTS[1]:
        raise InputError(f"points: there must be {_POINTS[0]} to {_POINTS[1]}, got {points!r}; 128 serves")
    phase = np.linspace(0.0, math.pi / 2.0, int(points))
    states = _integrate(index, phase[1:])
    radius, mass = (np.append(0.0, np.exp(row)) for row in states[:2])
    # trapezium rule in φ: it converges fast, as d mass/dφ is even about the centre and flat at the surface
    slopes = [0.0, *(_derivatives(p, s, index)[1] for p, s in zip(phase[1:], states.T, strict=True))]
    return PolytropeProfile(radius, np.cos(phase) ** 8, mass, phase[1] * mass * np.array(slopes))


def _checked_index(index) -> float:
    try:
        number = float(index) if np.ndim(index) == 0 else math.nan
    except (TypeError, ValueError):
        number = math.nan
    if 0.0 <= number <= LARGEST_INDEX:
        return number
    if number >= 5.0:
        way_out = "from 5 on a polytrope has no surface, use a smaller index"
    elif number > LARGEST_INDEX:
        way_out = "nearer 5 rounding grows and no answer is tested, use a smaller index"
    elif number < 0.0:
        way_out = "use 0, uniform density, for the least concentrated star"
    else:
        way_out = "give one finite number (several indices are solved one by one)"
    raise InputError(f"polytropic index: must be from 0 to {LARGEST_INDEX}, got {index!r}; {way_out}")


@lru_cache(maxsize=1024)
def _solve(index: float) -> Polytrope:
    radius, mass, lag, inertia = np.exp(_integrate(index)[:, -1]).tolist()
    return Polytrope(index, radius, mass / radius**2, lag / (2.0 * (5.0 - lag)), inertia)


def _integrate(index: float, phases: np.ndarray | None = None) -> np.ndarray:
    """Return the state, (4, phase), at the phases asked for or the solver's own; the last is the surface."""
    start, state = _series(index)
    solution = solve_ivp(
        _derivatives,
        (start, math.pi / 2.0),
        state,
        method="DOP853",
        t_eval=phases,
        args=(index,),
        rtol=_TOLERANCE,
        atol=_TOLERANCE,
    )
    if not solution.success:
        raise RuntimeError(f"polytrope of index {index}: the integration stopped, {solution.message}")
    return solution.y


def _series(n: float) -> tuple[float, list[float]]:
    """Return φ and the state at ξ = _START, by power series about the centre."""
    x = _START**2
    depth = x / 6.0 * (1.0 - n * x / 20.0 + n * (8.0 * n - 5.0) * x**2 / 2520.0)  # 1 - θ
    mass = x * _START / 3.0 * (1.0 - n * x / 10.0 + n * (8.0 * n - 5.0) * x**2 / 840.0)
    phase = math.asin(math.sqrt(-math.expm1(math.log1p(-depth) / 4.0)))  # sin² φ = 1 - θ^(1/4)
    # an error here in the next two decays as ξ^-5
    lag = 3.0 - 2.0 * n * x / 35.0
    inertia = 0.4 * (1.0 - 2.0 * n * x / 105.0)
    return phase, [math.log(_START), math.log(mass), math.log(lag), math.log(inertia)]


def _derivatives(phase: float, state: np.ndarray, n: float) -> list[float]:
    """Differentiate ln ξ, ln m, ln(3 - η), ln(I/(m ξ²)), all of the sphere within, with respect to φ.

    With D = ρ/(mean density within): d ln m/d ln ξ = 3 D and Radau's [2]_
    dη/d ln ξ = 6 + η - η² - 6 D (η + 1), the third unknown ("lag") being 3 - η.
    """
    ln_radius, ln_mass, ln_lag, ln_inertia = state
    cosine = math.cos(phase)
    rate = 8.0 * cosine**7 * math.sin(phase) * math.exp(ln_radius - ln_mass)  # d ln ξ/dφ
    density = cosine ** (8.0 * n) * math.exp(3.0 * ln_radius - ln_mass) / 3.0  # D
    lag = math.exp(ln_lag)
    return [
        rate,
        rate * 3.0 * density,
        rate * (lag - 5.0 + 6.0 * density * (4.0 - lag) / lag),
        rate * (2.0 * density * math.exp(-ln_inertia) - 2.0 - 3.0 * density),
    ]
