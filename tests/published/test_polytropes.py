"""Polytropes against published and closed-form constants, a Taylor-series solution, and a solar model."""

import csv
import itertools
import math
from pathlib import Path

import mpmath
import numpy as np
import pytest
from scipy.integrate import quad
from scipy.interpolate import PchipInterpolator

from stellerg.errors import InputError
from stellerg.structure import polytrope as module
from stellerg.structure.polytrope import (
    LARGEST_INDEX,
    gravitational_coefficient,
    index_of_coefficient,
    polytrope,
    profile,
)

HERE = Path(__file__).parent
TIGHT = 1e-10  # relative: radius, slope, mass, density ratio
LOOSE = 1e-8  # relative: apsidal constant, moment of inertia


def rows(name):
    """Read a table of numbers with its comment lines left out."""
    with (HERE / name).open(encoding="utf-8") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


TABLE = [{key: float(cell) for key, cell in row.items()} for row in rows("polytropes.csv")]


def relative(value, truth):
    return abs(value / truth - 1.0)


@pytest.mark.parametrize("row", TABLE, ids=lambda row: f"n={row['n']}")
@pytest.mark.parametrize(
    ("attribute", "column", "tolerance"),
    [
        ("radius", "xi_1", TIGHT),
        ("surface_slope", "minus_dtheta_dxi_1", TIGHT),
        ("mass_integral", "minus_xi2_dtheta_dxi_1", TIGHT),
        ("central_to_mean_density", "central_to_mean_density", TIGHT),
        ("apsidal_constant", "k2", LOOSE),
        ("moment_of_inertia_factor", "moment_of_inertia_factor", LOOSE),
        ("gravitational_coefficient", "gravitational_coefficient", 1e-14),
    ],
)
def test_reference_table(row, attribute, column, tolerance):
    value = getattr(polytrope(row["n"]), attribute)
    assert relative(value, row[column]) < tolerance, (value, row[column])


def test_table_is_the_whole_of_it():
    assert [row["n"] for row in TABLE] == [0, 0.5, 1, 1.5, 2, 2.5, 3, 3.25, 3.5, 4, 4.5]


@pytest.mark.parametrize(
    ("index", "radius", "slope", "k2", "inertia"),
    [
        (0, math.sqrt(6.0), math.sqrt(6.0) / 3.0, 0.75, 0.4),
        (
            1,
            math.pi,
            1.0 / math.pi,
            (15.0 - math.pi**2) / (2.0 * math.pi**2),
            2.0 / 3.0 * (1.0 - 6.0 / math.pi**2),
        ),
    ],
)
def test_closed_forms(index, radius, slope, k2, inertia):
    found = polytrope(index)
    assert relative(found.radius, radius) < TIGHT
    assert relative(found.surface_slope, slope) < TIGHT
    assert relative(found.apsidal_constant, k2) < LOOSE
    assert relative(found.moment_of_inertia_factor, inertia) < LOOSE


def test_comparison_is_sharp_enough_to_see_a_wrong_index():
    """Negative control: an index wrong by 1e-8 is outside the tolerance of the table."""
    row = next(row for row in TABLE if row["n"] == 3)
    assert relative(polytrope(3.0 + 1e-8).radius, row["xi_1"]) > TIGHT
    assert relative(polytrope(3.0 + 1e-6).apsidal_constant, row["k2"]) > LOOSE
    assert relative(polytrope(3.0 + 1e-6).moment_of_inertia_factor, row["moment_of_inertia_factor"]) > LOOSE


# --- an independent solution: 30-digit Taylor series in ξ, continued step by step ---


def power_series(a, exponent, p):
    """Append the next Taylor coefficient of (sum a_k t^k)^exponent (Miller's recurrence)."""
    k = len(p)
    if k == 0:
        return p.append(a[0] ** exponent)
    p.append(sum((exponent * j - (k - j)) * a[j] * p[k - j] for j in range(1, k + 1)) / (k * a[0]))


def next_coefficient(a, source, xi, c):
    """Append the next Taylor coefficient about ξ of ξ y'' + c y' + ξ s = 0."""
    k = len(source) - 1
    if xi == 0:  # y' = 0 at the centre; the order t^(k+1) of the equation
        return a.append(-source[k] / ((k + 2) * (k + 1 + c)))
    before = source[k - 1] if k else mpmath.mpf(0)
    a.append(-((k + 1) * (k + c) * a[k + 1] + xi * source[k] + before) / (xi * (k + 1) * (k + 2)))


def horner(coefficients, t):
    """Return the polynomial and its derivative."""
    value, slope = mpmath.mpf(0), mpmath.mpf(0)
    for coefficient in reversed(coefficients):
        slope = slope * t + value
        value = value * t + coefficient
    return value, slope


def taylor_polytrope(index, order=36):
    """Return ξ1, -θ', k2, I/(M R²); k2 from the perturbed potential H = ξ² g (no Radau equation).

    H'' + 2 H'/ξ + (n θ^(n-1) - 6/ξ²) H = 0, that is ξ g'' + 6 g' + ξ n θ^(n-1) g = 0; outside, H is a sum of
    ξ² and ξ^-3, hence 2 k2 = -y/(5 + y) with y = ξ g'/g at the surface.
    """
    n = mpmath.mpf(index)
    xi, inertia = mpmath.mpf(0), mpmath.mpf(0)
    theta, theta_1, g, g_1 = (mpmath.mpf(x) for x in (1, 0, 1, 0))
    while theta > 1e-9:
        a, b, p, q, s = [theta, theta_1], [g, g_1], [], [], []
        for _ in range(order):
            power_series(a, n, p)
            power_series(a, n - 1, q)
            s.append(n * sum(x * y for x, y in zip(q, reversed(b[: len(q)]), strict=True)))
            next_coefficient(a, p, xi, 2)
            next_coefficient(b, s, xi, 6)
        # a quarter of the distance to the surface, and of that to the singularity near ±i √3
        step = mpmath.sqrt(xi**2 + 3) / 4
        if theta_1 < 0:
            step = min(step, -theta / theta_1 / 4)
        inertia += mpmath.quad(lambda t, p=p, xi=xi: (xi + t) ** 4 * horner(p, t)[0], [0, step])
        theta, theta_1 = horner(a, step)
        g, g_1 = horner(b, step)
        xi += step
    # the rest is as good as empty (errors θ^n): θ = mass/ξ - constant, g' falls as ξ^-6. For n > 2
    mass = -(xi**2) * theta_1
    surface = mass / (mass / xi - theta)
    y = surface * (g_1 * (xi / surface) ** 6) / (g + g_1 * (surface - xi))
    k2 = -y / (5 + y) / 2
    return [float(x) for x in (surface, mass / surface**2, k2, 2 * inertia / (3 * mass * surface**2))]


@pytest.mark.parametrize("index", [2.71828, LARGEST_INDEX])
def test_off_the_table_against_taylor_series(index):
    with mpmath.workdps(30):
        radius, slope, k2, inertia = taylor_polytrope(index)
    found = polytrope(index)
    assert relative(found.radius, radius) < TIGHT
    assert relative(found.surface_slope, slope) < TIGHT
    assert relative(found.apsidal_constant, k2) < LOOSE
    assert relative(found.moment_of_inertia_factor, inertia) < LOOSE


def test_towards_index_five_the_radius_follows_its_asymptote():
    """ξ1 (5 - n) -> 32 √3/π, with a relative error that falls in proportion to 5 - n."""
    gap = np.array([0.02, 0.01, 0.005])
    error = np.array([polytrope(5.0 - g).radius * g for g in gap]) / (32.0 * math.sqrt(3.0) / math.pi) - 1.0
    assert np.all(np.abs(error) < 2.0 * gap)
    assert error[:-1] / error[1:] == pytest.approx(2.0, rel=0.1)


# --- profiles ---


@pytest.mark.parametrize("index", [0.0, 0.3, 1.5, 3.0, 4.5])
def test_profile_integrates_to_the_coefficients(index):
    """Energy from the profile is 3/(5 - n), inertia that of the solver: two ways to each."""
    star, table = polytrope(index), profile(index, 128)
    radius, mass, weight = table.radius[1:], table.mass[1:], table.mass_weight[1:]
    energy = (weight * mass / radius).sum() * star.radius / star.mass_integral**2
    inertia = 2.0 / 3.0 * (weight * radius**2).sum() / (star.mass_integral * star.radius**2)
    assert relative(weight.sum(), star.mass_integral) < 1e-9
    assert relative(energy, 3.0 / (5.0 - index)) < 1e-9
    assert relative(inertia, star.moment_of_inertia_factor) < LOOSE


def test_profile_of_index_one_is_sinc():
    table = profile(1.0, 200)
    assert table.radius.shape == table.theta.shape == table.mass.shape == table.mass_weight.shape == (200,)
    assert (table.radius[0], table.theta[0], table.mass[0]) == (0.0, 1.0, 0.0)
    assert table.theta == pytest.approx(np.sinc(table.radius / np.pi), abs=TIGHT)
    exact = np.sin(table.radius) - table.radius * np.cos(table.radius)
    assert table.mass == pytest.approx(exact, abs=TIGHT)
    # next to the surface neighbours differ by less than the solver's tolerance: they may not go back by more
    assert np.all(np.diff(table.radius) > -1e-12)
    assert np.all(np.diff(table.radius[table.theta > 1e-6]) > 0.0)


def test_largest_profile_starts_outside_the_series():
    radius = profile(4.0, 512).radius
    assert radius[1] > 0.01
    assert radius[-1] == pytest.approx(polytrope(4.0).radius, rel=TIGHT)


# --- the coefficient, and a real star ---


def test_coefficient_and_its_inverse():
    index = np.array([[0.0, 1.5], [3.0, 4.5]])
    exact = np.array([[0.6, 6.0 / 7.0], [1.5, 6.0]])
    assert gravitational_coefficient(index) == pytest.approx(exact, rel=1e-15)
    assert index_of_coefficient(gravitational_coefficient(index)) == pytest.approx(index, abs=1e-14)


def test_solar_model_gives_its_published_coefficient():
    """|Ω| R/(G M²) = ∫ (m/r) dm = 1/2 + 1/2 ∫ (m/r)² dr, m and r in units of M and R.

    The second form (by parts) needs no derivative of the table; m(r) is a monotone cubic through the 18
    zones. Other smooth interpolants move the answer by a few parts in a thousand.
    """
    zones = rows("solar_model_1988.csv")
    radius, mass = (np.array([float(zone[key]) for zone in zones]) for key in ("r_Rsun", "m_Msun"))
    assert len(radius) == 18
    enclosed = PchipInterpolator(radius, mass)
    integral = sum(
        quad(lambda r: (enclosed(r) / r) ** 2, low, high, epsrel=1e-10)[0] for low, high in itertools.pairwise(radius)
    )
    coefficient = 0.5 + 0.5 * integral
    assert coefficient == pytest.approx(1.61, rel=0.01)
    sun = {row["quantity"]: row for row in rows("sun.csv")}["index_from_alpha"]
    index, tolerance = float(sun["value"]), float(sun["tolerance"])
    assert index_of_coefficient(coefficient) == pytest.approx(index, abs=tolerance)


# --- mistakes ---


@pytest.mark.parametrize(
    ("index", "message"),
    [
        (-0.1, "got -0.1; use 0, uniform density"),
        (math.nan, "got nan; give one finite number"),
        (-math.inf, "got -inf"),
        (math.inf, "no surface"),
        (5.0, "no surface"),
        (7, "no surface"),
        (4.9995, "rounding grows"),
        ([1.5, 3.0], "one by one"),
        ("three", "got 'three'"),
        (None, "got None"),
    ],
)
@pytest.mark.parametrize("function", [polytrope, profile])
def test_indices_that_are_refused(function, index, message):
    with pytest.raises(InputError, match=message):
        function(index)


@pytest.mark.parametrize("points", [15, 513, 64.5, "64"])
def test_numbers_of_points_that_are_refused(points):
    with pytest.raises(InputError, match="16 to 512"):
        profile(1.5, points)


@pytest.mark.parametrize("index", [0, 1e-6, LARGEST_INDEX])
def test_ends_of_the_range_are_solved(index):
    found = polytrope(index)
    assert math.isfinite(found.radius)
    assert 0.0 < found.apsidal_constant <= 0.75 * (1.0 + LOOSE)
    assert 0.0 < found.moment_of_inertia_factor <= 0.4 * (1.0 + LOOSE)


def test_repeated_indices_are_remembered():
    assert polytrope(2.25) is polytrope(np.float64(2.25))


def test_a_stopped_integration_is_not_taken_for_an_answer(monkeypatch):
    class Stopped:
        success, message = False, "step too small"

    monkeypatch.setattr(module, "solve_ivp", lambda *args, **kwargs: Stopped())
    with pytest.raises(RuntimeError, match="step too small"):
        profile(1.5)
