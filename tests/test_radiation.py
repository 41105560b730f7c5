"""Gas and radiation: against published and closed forms, an integration in radius; the table against the integral."""

import csv
import math
import re
from pathlib import Path

import numpy as np
import pytest
from scipy.integrate import quad, solve_ivp
from scipy.special import beta as euler_beta

from stellerg import constants as const
from stellerg.errors import InputError
from stellerg.structure import radiation as module
from stellerg.structure.polytrope import polytrope, profile
from stellerg.structure.radiation import (
    LARGEST_LOG_MASS_MU2,
    LARGEST_TABULATED_INDEX,
    gas_pressure_fraction,
    gas_pressure_fraction_direct,
    ionisation_energy,
    mean_molecular_weight,
)

PUBLISHED = Path(__file__).parent / "published"
FAST = 1e-6  # relative in 1 - β for n <= 4.5 and μ²M from 1e-3 to 1e3: what is required of the table
FAST_CONCENTRATED = 1e-5  # for n from 4.5 to the largest, and up to the largest mass: what its docstring states
DIRECT = 1e-9  # relative in 1 - β: what is required of the direct integral
ROUNDING = 2e-16  # absolute in β, of a number just below 1


def lines(name):
    return (PUBLISHED / name).read_text(encoding="utf-8").splitlines()


def rows(name):
    return list(csv.DictReader(line for line in lines(name) if not line.startswith("#")))


def half_unit(text):
    """Half a unit of the last digit printed."""
    mantissa, _, exponent = text.partition("e")
    return 0.5 * 10.0 ** (int(exponent or 0) - len(mantissa.partition(".")[2]))


def weighted_table():
    """Rows (n, μ²M, 1 - β as printed) of the comment on gas-and-radiation polytropes."""
    (line,) = [line for line in lines("eddington_quartic.csv") if line.startswith("# Gas-and-radiation")]
    masses = re.search(r"M mu\^2 = ([^(]*)\(", line)[1].split(";")
    return [
        (float(index), float(mass), value.strip())
        for index, values in re.findall(r"n = ([\d.]+): ([^|]*)", line.rstrip("."))
        for mass, value in zip(masses, values.split(";"), strict=True)
    ]


WEIGHTED = weighted_table()
QUARTIC = [(float(row["M_mu2"]), row["one_minus_beta"]) for row in rows("eddington_quartic.csv")]
IONISATION = {row["quantity"]: row["value"] for row in rows("ionisation.csv")}


def coefficient(index, mass_integral):
    """k_n as it is defined, with Msun in kg."""
    numerator = 4.0 * math.pi * const.GRAVITATIONAL_CONSTANT**3 * const.RADIATION_CONSTANT / 3.0 * const.SOLAR_MASS**2
    molecular = (const.ATOMIC_MASS_CONSTANT / const.BOLTZMANN_CONSTANT) ** 4
    return numerator * molecular / ((index + 1.0) ** 3 * mass_integral**2)


def radiation_fraction(right):
    """1 - β of (1 - β)/β⁴ = right, from the eigenvalues of the companion matrix."""
    roots = np.roots([right, 0.0, 0.0, 1.0, -1.0])
    (root,) = roots.real[(np.abs(roots.imag) < 1e-9) & (roots.real > 0.0)]
    return right * root**4  # without cancellation


def fast(index, mass_mu2):
    return 1.0 - float(gas_pressure_fraction(index, math.log(mass_mu2)))


def direct(index, mass_mu2):
    return 1.0 - gas_pressure_fraction_direct(index, mass_mu2)


# --- published and closed forms ---


def test_the_tables_are_whole():
    assert sorted({row[:2] for row in WEIGHTED}) == [(n, m) for n in (1.5, 3.0, 3.5) for m in (0.36, 3.6, 14.4)]
    assert [mass for mass, _ in QUARTIC] == [0.36, 1.0, 2.0, 5.0, 10.0, 20.0, 50.0, 100.0, 1000.0]


@pytest.mark.parametrize(("index", "mass", "printed"), WEIGHTED)
def test_pressure_weighted_table(index, mass, printed):
    value = float(printed)
    assert abs(direct(index, mass) - value) <= half_unit(printed)  # all the digits printed
    assert abs(fast(index, mass) - value) <= half_unit(printed) + FAST * value


@pytest.mark.parametrize(("mass", "printed"), QUARTIC)
def test_eddington_quartic(mass, printed):
    value = float(printed)
    assert abs(direct(3.0, mass) - value) <= half_unit(printed)
    assert abs(fast(3.0, mass) - value) <= half_unit(printed) + FAST * value


def test_coefficient_in_both_conventions_of_molecular_weight():
    text = "\n".join(lines("eddington_quartic.csv"))
    unit, atom = re.search(r"= (0\.0029\d+) with", text)[1], re.search(r"(0\.0030\d+) with", text)[1]
    found = coefficient(3.0, polytrope(3.0).mass_integral)
    assert abs(found - float(unit)) <= half_unit(unit)
    assert abs(found * const.HYDROGEN_ATOMIC_MASS**4 - float(atom)) <= half_unit(atom)
    assert module._nodes(3.0, 128)[2] == pytest.approx(found, rel=1e-12)


CLOSED = {  # n: θ(ξ), ξ₁, ω_n
    0.0: (lambda xi: 1.0 - xi**2 / 6.0, math.sqrt(6.0), 2.0 * math.sqrt(6.0)),
    1.0: (lambda xi: math.sin(xi) / xi if xi else 1.0, math.pi, math.pi),
}


@pytest.mark.parametrize("index", CLOSED)
@pytest.mark.parametrize("mass", [0.5, 3.6, 30.0, 800.0])
def test_polytropes_in_closed_form(index, mass):
    theta, radius, omega = CLOSED[index]
    scale = coefficient(index, omega) * mass**2

    def integral(f):
        weighted = quad(
            lambda xi: f(max(theta(xi), 0.0)) * max(theta(xi), 0.0) ** (index + 1.0) * xi**2, 0, radius, epsrel=1e-12
        )
        return weighted[0]

    truth = integral(lambda t: radiation_fraction(scale * t ** (3.0 - index)) if t > 0.0 else 0.0) / integral(
        lambda t: 1.0
    )
    assert direct(index, mass) == pytest.approx(truth, rel=DIRECT)
    assert fast(index, mass) == pytest.approx(truth, rel=FAST)


def integrated(index, mass):
    """1 - β from Lane-Emden in ξ, the two integrals being unknowns of a second pass."""

    def slopes(xi, state, scale):
        theta, moment = max(state[0], 1e-30), state[1]
        pressure = theta ** (index + 1.0) * xi**2
        share = radiation_fraction(scale * theta ** (3.0 - index)) if scale and theta > 1e-6 else 1.0
        return [-moment / xi**2, theta**index * xi**2, pressure, pressure * share]

    def surface(xi, state, scale):
        return state[0]

    surface.terminal = True
    start = 1e-3
    first = [1.0 - start**2 / 6.0, start**3 / 3.0, 0.0, 0.0]
    scale = 0.0
    for _ in range(2):
        found = solve_ivp(
            slopes, (start, 100.0), first, "RK45", events=surface, args=(scale,), rtol=1e-10, atol=1e-13, max_step=0.5
        )
        _, omega, total, radiation = found.y_events[0][0]
        scale = coefficient(index, omega) * mass**2
    return radiation / total


@pytest.mark.parametrize(("index", "mass"), [(1.5, 14.4), (4.5, 14.4)])
def test_integration_in_radius(index, mass):
    assert direct(index, mass) == pytest.approx(integrated(index, mass), rel=1e-7)  # what its start and steps allow


def test_direct_integral_has_converged():
    for index in (0.0, 0.7, 1.5, 3.0, 4.2, 4.9):
        for mass in (0.1, 10.0, 1000.0):
            coarse = 1.0 - gas_pressure_fraction_direct(index, mass, points=128)
            assert direct(index, mass) == pytest.approx(coarse, rel=1e-10)


# --- which weight ---


def averaged(index, mass, power):
    """1 - β of a polytrope with weight θ^power over mass: 1 is by pressure, 0 by mass."""
    inside = profile(index)
    theta, weight = inside.theta[1:-1], (inside.mass_weight * inside.theta**power)[1:-1]
    scale = coefficient(index, inside.mass[-1]) * mass**2
    share = np.array([radiation_fraction(scale * t ** (3.0 - index)) for t in theta])
    return (share * weight).sum() / weight.sum()


@pytest.mark.parametrize("mass", [0.36, 3.6, 14.4])
def test_weight_is_pressure(mass):
    """A control: the weight by mass, one power of θ less, is far outside the tolerance of the table."""
    (printed,) = [printed for index, m, printed in WEIGHTED if (index, m) == (1.5, mass)]
    value = float(printed)
    assert abs(averaged(1.5, mass, power=1) - value) <= half_unit(printed)  # 1.3e-6 of the value at 3.6
    assert abs(averaged(1.5, mass, power=0) / value - 1.0) > 0.01


@pytest.mark.parametrize("mass", [0.36, 14.4, 1000.0])
def test_no_weight_matters_at_index_three(mass):
    assert averaged(3.0, mass, power=0) == pytest.approx(averaged(3.0, mass, power=1), rel=1e-12)
    share = direct(3.0, mass)
    right = coefficient(3.0, polytrope(3.0).mass_integral) * mass**2
    assert share / (1.0 - share) ** 4 == pytest.approx(right, rel=1e-9)


# --- the table against the integral ---


def test_table_against_direct_integral():
    """Random indices and masses, with both ends of each range."""
    random = np.random.default_rng(20240611)
    indices = np.concatenate([[0.0, 0.01, 1.5, 3.0, 4.5], random.uniform(0.0, 4.5, 25)])
    ends = np.log([1e-3, 1e3])
    for index in indices:
        logs = np.concatenate([ends, random.uniform(*ends, 25)])
        truth = np.array([direct(index, mass) for mass in np.exp(logs)])
        error = np.abs(1.0 - gas_pressure_fraction(index, logs) - truth)
        assert (error <= FAST * truth + ROUNDING).all(), (index, (error / truth).max())


def test_table_beyond_the_required_range():
    random = np.random.default_rng(20240612)
    for index in np.concatenate([[4.9], random.uniform(4.5, 4.9, 8), random.uniform(0.0, 4.9, 8)]):
        logs = random.uniform(math.log(1e-2), LARGEST_LOG_MASS_MU2, 20)
        truth = np.array([direct(index, mass) for mass in np.exp(logs)])
        error = np.abs(1.0 - gas_pressure_fraction(index, logs) - truth)
        assert (error <= FAST_CONCENTRATED * truth + ROUNDING).all(), (index, (error / truth).max())


def test_tolerance_sees_a_wrong_index():
    """A control: an index wrong by 1e-5 is outside the tolerance of the table."""
    assert abs(fast(1.5 + 1e-5, 3.6) / direct(1.5, 3.6) - 1.0) > FAST


def test_clipping():
    logs = np.linspace(-3.0, 9.0, 7)
    assert (gas_pressure_fraction(4.95, logs) == gas_pressure_fraction(LARGEST_TABULATED_INDEX, logs)).all()
    assert (gas_pressure_fraction(-1e-15, logs) == gas_pressure_fraction(0.0, logs)).all()
    indices = np.linspace(0.0, 4.9, 7)
    assert (gas_pressure_fraction(indices, 20.0) == gas_pressure_fraction(indices, LARGEST_LOG_MASS_MU2)).all()


def test_a_missing_number_stays_missing():
    found = gas_pressure_fraction(np.array([np.nan, 1.5, 1.5]), np.array([0.0, np.nan, 0.0]))
    assert np.isnan(found).tolist() == [True, True, False]


# --- light stars ---


@pytest.mark.parametrize("index", [0.0, 0.7, 1.5, 3.0, 3.8, 4.5])
def test_light_stars_follow_the_square_law(index):
    """1 - β ∝ (μ²M)², to the next term, which is below 1e-6 at 1e-4."""
    logs = np.log([1e-4, 1e-6, 1e-10, 1e-30])
    constant = module._pressure_ratio(index, logs) * np.exp(-2.0 * logs)
    assert constant == pytest.approx(np.full(4, constant[-1]), rel=1e-6)
    assert fast(index, 2e-3) / fast(index, 1e-3) == pytest.approx(4.0, rel=1e-5)
    assert float(gas_pressure_fraction(index, -100.0)) == 1.0
    assert float(gas_pressure_fraction(index, -np.inf)) == 1.0


def test_constant_of_the_square_law():
    """n = 0: <θ³> is a ratio of Euler's beta functions; n = 3: the coefficient itself."""
    mean = euler_beta(1.5, 5.0) / euler_beta(1.5, 2.0)
    found = module._pressure_ratio(0.0, math.log(1e-6)) * 1e12
    assert found == pytest.approx(coefficient(0.0, 2.0 * math.sqrt(6.0)) * mean, rel=FAST)
    found = module._pressure_ratio(3.0, math.log(1e-6)) * 1e12
    assert found == pytest.approx(coefficient(3.0, polytrope(3.0).mass_integral), rel=FAST)


def largest_jump_of_curvature(function):
    """Largest change of d² ln r/d(ln μ²M)² between neighbours 0.02 apart, from 1e-5 to 3e-3."""
    step = 0.02
    logs = np.arange(math.log(1e-5), math.log(3e-3), step)
    return np.abs(np.diff(np.log(function(logs)), 3)).max() / step**2


@pytest.mark.parametrize("index", [0.0, 1.5, 3.0, 4.0, 4.5])
def test_no_kink_at_the_light_end(index):
    assert largest_jump_of_curvature(lambda logs: module._pressure_ratio(index, logs)) < 1e-6


def test_a_kink_would_be_seen():
    """A control: the bare square law below 1e-3, joined in value only."""
    join = math.log(1e-3)

    def joined(logs):
        return module._pressure_ratio(4.5, np.maximum(logs, join)) * np.exp(2.0 * np.minimum(logs - join, 0.0))

    assert largest_jump_of_curvature(joined) > 1e-6


def test_second_derivatives_are_continuous_between_cells():
    """Value and two derivatives at the end of each cell are those at the start of the next, in n and in v."""
    pieces = module._table().reshape(4, 4, *module._CELLS)
    powers = np.arange(3, -1, -1)
    for axis in (0, 1):
        across = np.moveaxis(pieces, (axis, 2 + axis), (0, 1))  # (power, cell, ...)
        for order in range(3):
            factor = np.array([math.perm(power, order) for power in powers])[:, None, None, None]
            end = (factor * across).sum(axis=0)[:-1]
            start = math.factorial(order) * across[3 - order, 1:]
            assert np.abs(end - start).max() < 1e-12


# --- rows and batches ---


def test_a_row_alone_has_the_same_bits_as_in_a_batch():
    random = np.random.default_rng(7)
    index, logs = random.uniform(0.0, 4.9, 1003), random.uniform(-9.0, 9.3, 1003)
    batch = gas_pressure_fraction(index, logs)
    assert batch.shape == index.shape
    alone = [float(gas_pressure_fraction(n, x)) for n, x in zip(index, logs, strict=True)]
    assert batch.tolist() == alone
    assert (gas_pressure_fraction(index[::3], logs[::3]) == batch[::3]).all()
    square = gas_pressure_fraction(index[:50, None], logs[:40])
    assert square.shape == (50, 40)
    assert (np.diag(square) == batch[:40]).all()


# --- bad calls ---


@pytest.mark.parametrize("mass", [0.0, -1.0, math.nan, math.inf])
def test_direct_refuses_a_mass_that_is_none(mass):
    with pytest.raises(InputError, match=r"mu\^2 M: must be positive"):
        gas_pressure_fraction_direct(1.5, mass)


def test_direct_refuses_an_index_without_surface():
    with pytest.raises(InputError, match="polytropic index"):
        gas_pressure_fraction_direct(5.0, 1.0)


# --- composition ---


@pytest.mark.parametrize(("hydrogen", "metal", "inverse"), [(1, 0, 2), (0, 0, 0.75), (0, 1, 0.5), (0.7, 0.02, 1.62)])
def test_mean_molecular_weight(hydrogen, metal, inverse):
    assert mean_molecular_weight(hydrogen, metal) == pytest.approx(1.0 / inverse, rel=1e-14)


def test_composition_broadcasts():
    hydrogen, metal = np.array([[0.7], [0.6]]), np.array([0.0, 0.02, 0.04])
    assert mean_molecular_weight(hydrogen, metal).shape == (2, 3)
    assert ionisation_energy(hydrogen, metal).shape == (2, 3)
    assert ionisation_energy(hydrogen, metal)[1, 2] == ionisation_energy(0.6, 0.04)


@pytest.mark.parametrize(
    ("quantity", "hydrogen", "metal"),
    [
        ("specific_energy_hydrogen", 1.0, 0.0),
        ("specific_energy_helium_both_electrons", 0.0, 0.0),
        ("mixture_X0.70_Y0.28_no_H2", 0.7, 0.02),
    ],
)
def test_ionisation_energy(quantity, hydrogen, metal):
    printed = IONISATION[quantity]
    assert abs(float(ionisation_energy(hydrogen, metal)) - float(printed)) <= half_unit(printed)


def test_ionisation_energies_are_the_published_ones():
    assert float(IONISATION["H_I"]) == const.HYDROGEN_IONISATION_ENERGY
    assert float(IONISATION["He_I"]) == const.HELIUM_FIRST_IONISATION_ENERGY
    assert float(IONISATION["He_II"]) == const.HELIUM_SECOND_IONISATION_ENERGY


def test_ionisation_of_the_sun():
    (alpha,) = [float(row["value"]) for row in rows("sun.csv") if row["quantity"] == "alpha_twelve_tables_mean"]
    bound = 0.5 * alpha * const.NOMINAL_SOLAR_GM / const.NOMINAL_SOLAR_RADIUS
    printed = IONISATION["sun_over_half_alpha_GM2_over_R"]
    assert abs(float(ionisation_energy(0.7, 0.02)) / bound - float(printed)) <= half_unit(printed)
