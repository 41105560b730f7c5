"""The published checks, recomputed: one table of numbers, each with its source, reference and tolerance.

References stand in `published.toml`, where the tests read them too. A group of checks is a function that takes
that file's tables and returns its checks; nothing is computed before `Check.run`.
"""

import functools
import math
import tomllib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from importlib import resources

import numpy as np
from scipy.special import ndtri

from stellerg import energetics
from stellerg.energetics import Conventions
from stellerg.engines import adaptive
from stellerg.errors import InputError
from stellerg.inputs import Exact
from stellerg.keyed_random import low_discrepancy_set, shifted, words
from stellerg.propagation import propagate
from stellerg.stars import Stars
from stellerg.structure import polytrope as polytropes
from stellerg.structure.files import parse_prior
from stellerg.wording import label

__all__ = ["GROUPS", "Check", "Outcome", "clause_nine_block", "published", "verify"]


@dataclass(frozen=True)
class Outcome:
    """What a check gave.

    Attributes
    ----------
    group, name, source : str
    value, reference, difference, tolerance : float
        In the unit of the name; the difference is value - reference, and may be as large as the tolerance. NaN
        where no value was found.
    passed : bool
    """

    group: str
    name: str
    source: str
    value: float
    reference: float
    difference: float
    tolerance: float
    passed: bool


@dataclass(frozen=True)
class Check:
    """A number to recompute; attributes as in `Outcome`, and `compute`, which returns the value."""

    group: str
    name: str
    source: str
    compute: Callable[[], float]
    reference: float
    tolerance: float

    def run(self) -> Outcome:
        """Recompute it."""
        value = float(self.compute())
        difference = value - self.reference
        passed = abs(difference) <= self.tolerance
        return Outcome(self.group, self.name, self.source, value, self.reference, difference, self.tolerance, passed)


@functools.cache
def published() -> Mapping:
    """Return the tables of `published.toml`."""
    return tomllib.loads(resources.files("stellerg").joinpath("published.toml").read_text(encoding="utf-8"))


# --- polytropes ---

# column of the table: attribute of `Polytrope`
_POLYTROPE = {
    "xi_1": "radius",
    "minus_dtheta_dxi_1": "surface_slope",
    "minus_xi2_dtheta_dxi_1": "mass_integral",
    "central_to_mean_density": "central_to_mean_density",
    "k2": "apsidal_constant",
    "moment_of_inertia_factor": "moment_of_inertia_factor",
    "gravitational_coefficient": "gravitational_coefficient",
}


def _polytropes(tables: Mapping) -> list[Check]:
    """Global constants of polytropes, through the solver."""
    table = tables["polytropes"]

    def check(row: Mapping, column: str) -> Check:
        def compute() -> float:
            return getattr(polytropes.polytrope(row["n"]), _POLYTROPE[column])

        tolerance = table["relative_tolerance"][column] * row[column]
        name = f"{label(_POLYTROPE[column])}, n = {row['n']:g}"
        return Check("polytropes", name, table["source"], compute, row[column], tolerance)

    return [check(row, column) for row in table["index"] for column in _POLYTROPE]


# --- the Sun, by the way that every star takes ---


def _nominal_sun(output: str, coefficient: float | None = None, prior: str = "uniform-index", **conventions) -> float:
    """Median of an output for exact nominal solar values, under a prior that is a point."""
    sun = Stars.of("Sun", mass=Exact(1.0), radius=Exact(1.0), luminosity=Exact(1.0))
    model: object = prior
    if coefficient is not None:
        point = f'[coefficient]\ndistribution = "point"\nvalue = {coefficient!r}'
        model = parse_prior(f'summary = "one value"\nsource = "published"\n{point}', name="published")
    answer = propagate(sun, outputs=(output,), prior=model, conventions=Conventions(**conventions))
    return float(answer.median(output)[0])


def _unit_energy() -> float:
    """G M^2/R in J: the potential energy at a structure coefficient of one."""
    return _nominal_sun("potential_energy", coefficient=1.0, energy_unit="J")


def _share(prior: str) -> float:
    """|E| over G M^2/R; one in erg and the other in J, so that the units are part of the check."""
    return _nominal_sun("binding_energy", prior=prior, energy_unit="erg") * 1e-7 / _unit_energy()


def _years(**how) -> float:
    """Kelvin-Helmholtz time of the nominal Sun in Julian years."""
    return 1e6 * _nominal_sun("kelvin_helmholtz_time", **how)


def _sun(tables: Mapping) -> list[Check]:
    """Energies and times of the Sun, through `propagate`."""
    table = tables["sun"]
    ways: dict[str, tuple[str, Callable[[], float]]] = {
        "GM2_over_R_J": ("G M^2/R in J", _unit_energy),
        "GM2_over_RL_yr": ("G M^2/(R L) in years", lambda: _years(time="GM2/RL")),
        "total_energy_over_GM2_over_R_n3": ("abs(E) over G M^2/R, n = 3", lambda: _share("polytrope-3")),
        "total_energy_over_GM2_over_R_n1p5": ("abs(E) over G M^2/R, n = 3/2", lambda: _share("polytrope-1.5")),
        "total_energy_over_GM2_over_R_n0": ("abs(E) over G M^2/R, n = 0", lambda: _share("constant-density")),
        "index_from_alpha": (
            "index n of the published coefficient",
            lambda: polytropes.index_of_coefficient(table["alpha_twelve_tables_mean"]["value"]),
        ),
    }
    return [
        Check("sun", name, table[row]["source"], compute, table[row]["value"], table[row]["tolerance"])
        for row, (name, compute) in ways.items()
    ]


def _kelvin_helmholtz(tables: Mapping) -> list[Check]:
    """Prefactors by conversion from G M^2/(R L), and the Sun's times by `propagate`."""
    checks = []
    for row in tables["kelvin_helmholtz_prefactors"]:

        def factor(row=row) -> float:
            w = _coefficient(tables, row.get("structure"))
            return energetics.convert_kelvin_helmholtz_time(1.0, "GM2/RL", row["convention"], coefficient=w)

        def years(row=row) -> float:
            return _years(coefficient=_coefficient(tables, row.get("structure")), time=row["convention"])

        for column, what, compute in (("f", "prefactor", factor), ("sun_yr", "years of the Sun", years)):
            name, tolerance = f"{what}, {row['meaning']}", row[f"{column}_tolerance"]
            checks.append(Check("kelvin-helmholtz", name, row["source"], compute, row[column], tolerance))
    return checks


def _coefficient(tables: Mapping, structure: float | str | None) -> float | None:
    """Coefficient w that a row means: of an index, a published one by name, or none."""
    if isinstance(structure, str):
        return tables["sun"][structure]["value"]
    return None if structure is None else float(polytropes.gravitational_coefficient(structure))


# --- clause 9 of JCGM 101, by the adaptive procedure ---

_SEED = 101
_LOG2_DRAWS = 16  # of a block: above the 10^4 of clause 7.9.4, and shortest intervals want many
_MOST_BLOCKS = 200  # judgement
# Interval, digits and fewest blocks (judgement). One digit more than the tolerances have; the ends of a shortest
# interval settle with the cube root of the draws of a block, and are asked for the same digits, from more blocks.
_RUNS = {"central": (adaptive.central_interval, 3, 10), "shortest": (adaptive.shortest_interval, 2, 40)}
_SQRT3 = math.sqrt(3.0)


def _comparison_loss(x1: float) -> Callable[[np.ndarray], np.ndarray]:
    return lambda u: 1e6 * (np.square(x1 + 0.005 * ndtri(u[0])) + np.square(0.005 * ndtri(u[1])))


# name of the example: inputs, and the value from their uniform variates (input, draw)
_EXAMPLES: dict[str, tuple[int, Callable[[np.ndarray], np.ndarray]]] = {
    "9.2.2 additive normal": (4, lambda u: ndtri(u).sum(axis=0)),
    "9.2.3 additive rectangular": (4, lambda u: (_SQRT3 * (2.0 * u - 1.0)).sum(axis=0)),
    "9.2.4 different widths": (4, lambda u: _SQRT3 * ((2.0 * u - 1.0)[:3].sum(axis=0) + 10.0 * (2.0 * u[3] - 1.0))),
    "9.4 comparison loss x1=0 (1e-6)": (2, _comparison_loss(0.0)),
    "9.4 comparison loss x1=0.010 (1e-6)": (2, _comparison_loss(0.010)),
    "9.4 comparison loss x1=0.050 (1e-6)": (2, _comparison_loss(0.050)),
    "logarithm": (1, lambda u: np.log(0.1 + u[0])),
}


def clause_nine_block(example: str) -> Callable[[int, np.ndarray], np.ndarray]:
    """Return the function that draws blocks of an example: low-discrepancy points, shifted anew for every block.

    Parameters
    ----------
    example : str
        Name in `published.toml`.

    Returns
    -------
    callable
        For `stellerg.engines.adaptive.run_blocks`, with one row and one output.
    """
    inputs, model = _EXAMPLES[example]
    points = low_discrepancy_set(_SEED, inputs, _LOG2_DRAWS)

    def draw(number: int, rows: np.ndarray) -> np.ndarray:
        key = np.array([number], np.uint64)
        u = [shifted(points[j], words(_SEED, key, j, 1))[0, 0] for j in range(inputs)]
        return np.broadcast_to(model(np.stack(u)), (len(rows), 1, 2**_LOG2_DRAWS))

    return draw


def _clause_nine(tables: Mapping) -> list[Check]:
    """Examples of clause 9: mean, standard deviation and interval of each, from one run."""
    table = tables["gum_supplement_1"]

    def example(row: Mapping) -> list[Check]:
        @functools.cache
        def results() -> list[float]:
            interval, digits, fewest = _RUNS[row["kind"]]
            run = adaptive.run_blocks(
                clause_nine_block(row["name"]),
                1,
                digits=digits,
                probability=table["probability"],
                most_blocks=_MOST_BLOCKS,
                fewest_blocks=fewest,
                interval=interval,
            )
            found = [run.mean[0, 0], run.standard_deviation[0, 0], *run.interval[0, 0]]
            return found if run.converged[0] else [math.nan] * 4

        names = ("mean", "standard deviation", f"{row['kind']} interval, lower", f"{row['kind']} interval, upper")
        references = (row["mean"], row["standard_deviation"], *row["interval"])
        return [
            Check(
                "jcgm-101",
                f"{row['name']}: {name}",
                table["source"],
                lambda place=place: results()[place],
                reference,
                row["tolerance"],
            )
            for place, (name, reference) in enumerate(zip(names, references, strict=True))
        ]

    return [check for row in table["example"] for check in example(row)]


GROUPS: dict[str, Callable[[Mapping], list[Check]]] = {
    "polytropes": _polytropes,
    "sun": _sun,
    "kelvin-helmholtz": _kelvin_helmholtz,
    "jcgm-101": _clause_nine,
}


def verify(groups: Sequence[str] = ()) -> list[Outcome]:
    """Recompute the published numbers.

    Parameters
    ----------
    groups : sequence of str
        Of `GROUPS`; all where none is named.

    Returns
    -------
    list of Outcome

    Raises
    ------
    InputError
        If a group is unknown.
    """
    for name in groups:
        if name not in GROUPS:
            raise InputError(f"group of checks: {name!r} is unknown; choose from {', '.join(GROUPS)}")
    return [check.run() for name in groups or GROUPS for check in GROUPS[name](published())]
