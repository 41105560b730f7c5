"""Structure models in TOML files: found, read, and refused unless they describe proper densities.

A file holds `summary`, `source` ("judgement" or a reference), optionally `[applies_to]` and `[common]`, and
either one density (`[index]`, `[coefficient]` or `[log_coefficient]`) or several `[[interval]]`, each with
`mass = [lower, upper]` in nominal solar masses and a density. Plain data: nothing in a file is executed.
"""

import itertools
import math
import tomllib
from importlib import resources
from pathlib import Path

from stellerg.errors import PriorError
from stellerg.structure.distributions import Beta, Family, Normal, Point, Tabulated, Uniform
from stellerg.structure.model import (
    AppliesTo,
    Common,
    Component,
    Coordinate,
    MassInterval,
    Mixture,
    StructureModel,
)

__all__ = ["available_priors", "load_prior", "parse_prior"]

# Where each coordinate may lie: n in [0, 5); w at least 3/5, the uniform sphere, the least bound star whose
# density does not increase outwards.
_RANGE = {
    Coordinate.INDEX: (0.0, 5.0),
    Coordinate.COEFFICIENT: (0.6, math.inf),
    Coordinate.LOG_COEFFICIENT: (math.log(0.6), math.inf),
}
_COORDINATES = {c.value: c for c in Coordinate}
_STATES = ("main-sequence", "pre-main-sequence", "evolved")
_KEYS = {
    "point": ("value",),
    "uniform": ("lower", "upper"),
    "normal": ("mean", "standard_deviation"),
    "beta": ("alpha", "beta", "lower", "upper"),
    "tabulated": ("points", "density"),
    "mixture": ("component",),
}


def _folders() -> list[Path]:
    """Where shipped files may lie: in the installed package, or beside the source in a checkout."""
    installed = Path(str(resources.files("stellerg"))) / "priors"
    checkout = Path(__file__).resolve().parents[3] / "priors"
    return [folder for folder in (installed, checkout) if folder.is_dir()]


def available_priors() -> dict[str, Path]:
    """Return the shipped models: name to file, sorted by name."""
    found: dict[str, Path] = {}
    for folder in _folders():
        for path in sorted(folder.glob("*.toml")):
            found.setdefault(path.stem, path)
    return dict(sorted(found.items()))


def load_prior(name_or_path: str | Path) -> StructureModel:
    """Load a structure model.

    Parameters
    ----------
    name_or_path : str or Path
        Name of a shipped model, or the path of a file that ends in .toml.

    Raises
    ------
    PriorError
        If there is no such model, or the file does not describe a proper density.
    """
    shipped = available_priors()
    if str(name_or_path) in shipped:
        path = shipped[str(name_or_path)]
    else:
        path = Path(name_or_path)
        if path.suffix != ".toml" or not path.is_file():
            raise PriorError(
                f"prior: {str(name_or_path)!r} is neither a shipped model nor a .toml file; "
                f"shipped: {', '.join(shipped)}"
            )
    try:
        text = path.read_text(encoding="utf-8")
    except (OSError, UnicodeDecodeError) as problem:
        raise PriorError(f"prior {path}: cannot be read: {problem}") from None
    return parse_prior(text, name=path.stem)


def parse_prior(text: str, name: str = "prior") -> StructureModel:
    """Read a structure model from the text of its file.

    Raises
    ------
    PriorError
        If a key is unknown or missing, or the density is improper; the message names the key.
    """
    try:
        table = tomllib.loads(text)
    except tomllib.TOMLDecodeError as problem:
        raise PriorError(f"prior {name}: not a TOML file: {problem}") from None
    where = f"prior {name}"
    _only(table, ("summary", "source", "applies_to", "common", "interval", *_COORDINATES), where)
    for key in ("summary", "source"):
        if not isinstance(table.get(key), str) or not table[key].strip():
            raise PriorError(f"{where}: {key!r} is missing; write one line of text (a source may be 'judgement')")
    if "interval" in table:
        if any(key in table for key in _COORDINATES):
            raise PriorError(f"{where}: give either one density or [[interval]] tables, not both")
        intervals = _intervals(table["interval"], where)
    else:
        intervals = (MassInterval(-math.inf, math.inf, _mixture(table, where)),)
    return StructureModel(
        name=name,
        summary=table["summary"].strip(),
        source=table["source"].strip(),
        intervals=intervals,
        applies_to=_applies_to(table.get("applies_to", {}), where),
        common=_common(table["common"], where) if "common" in table else None,
        text=text,
    )


def _only(table: object, allowed: tuple[str, ...], where: str) -> None:
    if not isinstance(table, dict):
        raise PriorError(f"{where}: a table is wanted here, got {table!r}")
    for key in table:
        if key not in allowed:
            raise PriorError(f"{where}: unknown key {key!r}; allowed here: {', '.join(allowed)}")


def _number(table: dict, key: str, where: str) -> float:
    value = table.get(key)
    if isinstance(value, bool) or not isinstance(value, (int, float)) or not math.isfinite(value):
        raise PriorError(f"{where}: {key!r} must be a finite number, got {value!r}")
    return float(value)


def _numbers(table: dict, key: str, where: str) -> tuple[float, ...]:
    values = table.get(key)
    if not isinstance(values, list):
        raise PriorError(f"{where}: {key!r} must be a list of numbers, got {values!r}")
    return tuple(_number({key: value}, key, where) for value in values)


def _mixture(table: dict, where: str) -> Mixture:
    """One density on one coordinate, as a mixture."""
    given = [key for key in _COORDINATES if key in table]
    if len(given) != 1:
        raise PriorError(
            f"{where}: exactly one of {', '.join(_COORDINATES)} is wanted, got {', '.join(given) or 'none'}"
        )
    coordinate, density = _COORDINATES[given[0]], table[given[0]]
    where = f"{where}, [{given[0]}]"
    if isinstance(density, dict) and density.get("distribution") == "mixture":
        _only(density, ("distribution", "component"), where)
        parts = density.get("component")
        if not isinstance(parts, list) or not parts:
            raise PriorError(f"{where}: a mixture needs [[component]] tables")
        weights, components = [], []
        for number, part in enumerate(parts, 1):
            inside = f"{where}, component {number}"
            if not isinstance(part, dict):
                raise PriorError(f"{inside}: a table is wanted here, got {part!r}")
            weight = _number(part, "weight", inside)
            if weight <= 0.0:
                raise PriorError(f"{inside}: 'weight' must be positive, got {weight}")
            weights.append(weight)
            rest = {key: value for key, value in part.items() if key != "weight"}
            components.append(Component(coordinate, _family(rest, coordinate, inside)))
        total = sum(weights)
        if abs(total - 1.0) > 1e-6:
            raise PriorError(f"{where}: the weights of a mixture must sum to 1, got {total:g}")
        return Mixture(tuple(weight / total for weight in weights), tuple(components))
    return Mixture((1.0,), (Component(coordinate, _family(density, coordinate, where)),))


def _family(table: object, coordinate: Coordinate, where: str) -> Family:
    if not isinstance(table, dict):
        raise PriorError(f"{where}: a table is wanted here, got {table!r}")
    kind = table.get("distribution")
    choice = [key for key in _KEYS if key != "mixture"]
    if kind not in choice:
        raise PriorError(f"{where}: 'distribution' must be one of {', '.join(choice)}, got {kind!r}")
    _only(table, ("distribution", *_KEYS[kind]), where)
    least, most = _RANGE[coordinate]
    if kind == "normal":
        return _normal(table, least, most, where)
    if kind == "tabulated":
        family: Family = _tabulated(table, where)
    else:
        numbers = [_number(table, key, where) for key in _KEYS[kind]]
        if kind == "beta" and min(numbers[:2]) < 1.0:
            raise PriorError(f"{where}: 'alpha' and 'beta' must be at least 1 (a bounded density), got {numbers[:2]}")
        family = {"point": Point, "uniform": Uniform, "beta": Beta}[kind](*numbers)
    lower, upper = family.support
    if kind != "point" and not lower < upper:
        raise PriorError(f"{where}: 'lower' must be below 'upper', got {lower} and {upper}")
    if lower < least or upper >= most:
        rule = "0 <= n < 5" if coordinate is Coordinate.INDEX else "w >= 3/5, the uniform sphere"
        raise PriorError(f"{where}: the density must lie within {rule}, got {lower} to {upper}")
    return family


def _normal(table: dict, least: float, most: float, where: str) -> Normal:
    mean, sd = _number(table, "mean", where), _number(table, "standard_deviation", where)
    if sd <= 0.0:
        raise PriorError(f"{where}: 'standard_deviation' must be positive, got {sd}; use 'point' for no spread")
    # an unbounded coordinate ends where a normal has no probability left
    family = Normal(mean, sd, least, most if math.isfinite(most) else max(mean, least) + 9.0 * sd)
    if family.kept < 1e-3:
        raise PriorError(f"{where}: the normal has almost no probability in the allowed range, got mean {mean}")
    return family


def _tabulated(table: dict, where: str) -> Tabulated:
    points, heights = _numbers(table, "points", where), _numbers(table, "density", where)
    if len(points) != len(heights) or len(points) < 2:
        raise PriorError(
            f"{where}: 'points' and 'density' must have the same length, at least 2, "
            f"got {len(points)} and {len(heights)}"
        )
    if any(b <= a for a, b in itertools.pairwise(points)):
        raise PriorError(f"{where}: 'points' must increase, got {list(points)}")
    if min(heights) < 0.0 or max(heights) <= 0.0:
        raise PriorError(f"{where}: 'density' must not be negative and not be zero everywhere, got {list(heights)}")
    return Tabulated(points, heights)


def _intervals(tables: object, where: str) -> tuple[MassInterval, ...]:
    if not isinstance(tables, list) or not tables:
        raise PriorError(f"{where}: [[interval]] tables are wanted")
    found, previous = [], 0.0
    for number, table in enumerate(tables, 1):
        inside = f"{where}, interval {number}"
        _only(table, ("mass", *_COORDINATES), inside)
        bounds = table.get("mass")
        if not isinstance(bounds, list) or len(bounds) != 2:
            raise PriorError(f"{inside}: 'mass' must be [lower, upper] in solar masses, got {bounds!r}")
        lower, upper = (math.inf if b == math.inf else _number({"mass": b}, "mass", inside) for b in bounds)
        if lower != previous or upper <= lower:
            raise PriorError(f"{inside}: intervals must follow each other from 0 to inf without gaps, got {bounds}")
        found.append(
            MassInterval(math.log(lower) if lower > 0.0 else -math.inf, math.log(upper), _mixture(table, inside))
        )
        previous = upper
    if previous != math.inf:
        raise PriorError(f"{where}: the last interval must reach inf, got {previous}")
    return tuple(found)


def _applies_to(table: object, where: str) -> AppliesTo:
    where = f"{where}, [applies_to]"
    _only(table, ("mass", "evolutionary_state"), where)
    mass = _numbers(table, "mass", where) if "mass" in table else None
    if mass is not None and (len(mass) != 2 or not 0.0 <= mass[0] < mass[1]):
        raise PriorError(f"{where}: 'mass' must be [lower, upper] in solar masses, got {list(mass)}")
    states = table.get("evolutionary_state", [])
    if not isinstance(states, list) or any(state not in _STATES for state in states):
        raise PriorError(f"{where}: 'evolutionary_state' must be a list from {', '.join(_STATES)}, got {states!r}")
    return AppliesTo(mass, tuple(states))


def _common(table: object, where: str) -> Common:
    where = f"{where}, [common]"
    _only(table, ("fraction", "within"), where)
    fraction, within = _number(table, "fraction", where), table.get("within")
    if not 0.0 <= fraction <= 1.0:
        raise PriorError(f"{where}: 'fraction' must lie in [0, 1], got {fraction}")
    if not isinstance(within, str) or not within:
        raise PriorError(f"{where}: 'within' must be 'all', 'mass' or the name of a column, got {within!r}")
    return Common(fraction, within)
