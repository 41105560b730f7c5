"""Structure models in TOML files: found, read, and refused unless they describe proper densities.

A file holds `summary`, `source` ("judgement" or a reference), optionally `[applies_to]` and `[common]`, and
either one density (`[index]`, `[coefficient]` or `[log_coefficient]`) or several `[[interval]]`, each with
`mass = [lower, upper]` in nominal solar masses and a density; `[training]` names the stars that a density was
learned from. Plain data: nothing in a file is executed.
"""

import itertools
import math
import tomllib
from functools import lru_cache
from importlib import resources
from pathlib import Path

from stellerg.errors import PriorError
from stellerg.structure.calibration import Calibration
from stellerg.structure.calibration_file import parse_calibration
from stellerg.structure.distributions import Beta, Family, Normal, Point, Tabulated, Uniform
from stellerg.structure.fields import Place, check_keys, read_finite, read_number, read_numbers, read_text, wanted_value
from stellerg.structure.learned_file import read_training
from stellerg.structure.lines import line_of_decode_error
from stellerg.structure.model import (
    AppliesTo,
    Common,
    Component,
    Coordinate,
    MassInterval,
    Mixture,
    StructureModel,
)

__all__ = ["available_priors", "load_prior", "main_sequence", "parse_prior"]

# Where each coordinate may lie: n in [0, 5); w at least 3/5, the uniform sphere, the least bound star whose
# density does not increase outwards.
_RANGE = {
    Coordinate.INDEX: (0.0, 5.0),
    Coordinate.COEFFICIENT: (0.6, math.inf),
    Coordinate.LOG_COEFFICIENT: (math.log(0.6), math.inf),
}
_COORDINATES = {c.value: c for c in Coordinate}
_TRAINED_ON = ("log_k2", "moment_of_inertia_factor", "structure_coefficient")
_ABOUT = ("summary", "source", "applies_to", "common", "training")
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


def load_prior(name_or_path: str | Path) -> StructureModel | Calibration:
    """Load a structure model.

    Parameters
    ----------
    name_or_path : str or Path
        Name of a shipped model, or the path of a file that ends in .toml.

    Raises
    ------
    PriorError
        If there is no such model, or the file does not describe a proper density; then with file and line.
    """
    shipped = available_priors()
    if str(name_or_path) in shipped:
        path = shipped[str(name_or_path)]
    else:
        path = Path(name_or_path)
        if path.suffix != ".toml" or not path.is_file():
            if path.suffix == ".toml" and not path.exists():
                raise PriorError(f"prior: there is no file {str(name_or_path)!r}")
            raise PriorError(
                f"prior: {str(name_or_path)!r} is neither a shipped model nor a .toml file; "
                f"shipped: {', '.join(shipped)}"
            )
    try:
        text = path.read_bytes().decode("utf-8").replace("\r\n", "\n")
    except OSError as problem:
        raise PriorError(f"prior {path}: cannot be read: {problem.strerror}") from None
    except UnicodeDecodeError as problem:
        line = problem.object.count(b"\n", 0, problem.start) + 1
        raise PriorError(
            f"prior {path}, line {line}: cannot be read: a TOML file is UTF-8 text, got the byte "
            f"0x{problem.object[problem.start]:02x}; save it as UTF-8",
            line,
        ) from None
    return parse_prior(text, name=path.stem, file=str(path))


@lru_cache(maxsize=1)
def main_sequence() -> Calibration:
    """Return the shipped calibration, by which sizes are judged under every prior."""
    return load_prior("main-sequence")


def parse_prior(text: str, name: str = "prior", file: str = "") -> StructureModel | Calibration:
    """Read a structure model from the text of its file.

    Parameters
    ----------
    text : str
    name : str
        Of the model.
    file : str
        What messages call the text; the name where there is no file.

    Raises
    ------
    PriorError
        If a key is unknown or missing, or the density is improper; the message names the line and the key.
    """
    title = f"prior {file or name}"
    try:
        table = tomllib.loads(text)
    except ValueError as problem:  # no TOML, or a whole number of more digits than Python reads
        line = line_of_decode_error(text, problem)
        raise PriorError(f"{title}, line {line}: not a TOML file: {problem}", line) from None
    except RecursionError:
        raise PriorError(f"{title}: not a TOML file of ours: brackets are nested too deeply") from None
    top = Place(text, title)
    check_keys(table, (*_ABOUT, "interval", "calibration", *_COORDINATES), top)
    about = {
        "name": name,
        "summary": read_text(table, "summary", top),
        "source": read_text(table, "source", top),
        "applies_to": _applies_to(table.get("applies_to", {}), top),
        "common": _common(table["common"], top) if "common" in table else None,
        "text": text,
        "training": read_training(table["training"], top) if "training" in table else (),
    }
    given = [key for key in table if key not in _ABOUT]
    if len(given) > 1 and ("interval" in given or "calibration" in given):
        raise top.fault("give one density, or [[interval]] tables, or [calibration], not two of them", given[1])
    if "calibration" in table:
        return parse_calibration(table["calibration"], top, **about)
    if "interval" in table:
        intervals = _intervals(table["interval"], top)
    else:
        intervals = (MassInterval(-math.inf, math.inf, _mixture(table, top)),)
    return StructureModel(intervals=intervals, **about)


def _mixture(table: dict, where: Place) -> Mixture:
    """One density on one coordinate, as a mixture."""
    given = [key for key in table if key in _COORDINATES]
    if len(given) != 1:
        message = f"exactly one of {', '.join(_COORDINATES)} is wanted, got {', '.join(given) or 'none'}"
        raise where.fault(message, *given[1:2])
    (name,) = given
    coordinate, density = _COORDINATES[name], table[name]
    where = where.inside(f"[{name}]", name)
    if isinstance(density, dict) and density.get("distribution") == "mixture":
        check_keys(density, ("distribution", "component"), where)
        return _components(density, coordinate, where)
    return Mixture((1.0,), (Component(coordinate, _family(density, coordinate, where)),))


def _components(density: dict, coordinate: Coordinate, where: Place) -> Mixture:
    parts = density.get("component")
    if not isinstance(parts, list) or not parts:
        raise where.fault("a mixture needs [[component]] tables", "component")
    weights, components = [], []
    for number, part in enumerate(parts):
        inside = where.inside(f"component {number + 1}", "component", number)
        if not isinstance(part, dict):
            raise inside.fault(f"a table is wanted here, got {part!r}")
        weight = read_number(part, "weight", inside)
        if weight <= 0.0:
            raise inside.fault(f"'weight' must be positive, got {weight}", "weight")
        weights.append(weight)
        rest = {key: value for key, value in part.items() if key != "weight"}
        components.append(Component(coordinate, _family(rest, coordinate, inside)))
    total = sum(weights)
    if abs(total - 1.0) > 1e-6:
        raise where.fault(f"the weights of a mixture must sum to 1, got {total:g}", "component")
    return Mixture(tuple(weight / total for weight in weights), tuple(components))


def _family(table: object, coordinate: Coordinate, where: Place) -> Family:
    if not isinstance(table, dict):
        raise where.fault(f"a table is wanted here, got {table!r}")
    choice = [key for key in _KEYS if key != "mixture"]
    kind = wanted_value(table, "distribution", f"one of {', '.join(choice)}", where)
    if kind not in choice:
        raise where.fault(f"'distribution' must be one of {', '.join(choice)}, got {kind!r}", "distribution")
    check_keys(table, ("distribution", *_KEYS[kind]), where)
    least, most = _RANGE[coordinate]
    if kind == "normal":
        return _normal(table, least, most, where)
    family = _tabulated(table, where) if kind == "tabulated" else _closed_form(kind, table, where)
    lower, upper = family.support
    if lower < least or upper >= most:
        rule = "0 <= n < 5" if coordinate is Coordinate.INDEX else "w >= 3/5, the uniform sphere"
        end = {"point": "value", "tabulated": "points"}.get(kind, "lower" if lower < least else "upper")
        raise where.fault(f"the density must lie within {rule}, got {lower} to {upper}", end)
    return family


def _closed_form(kind: str, table: dict, where: Place) -> Family:
    numbers = [read_number(table, key, where) for key in _KEYS[kind]]
    if kind == "beta" and min(numbers[:2]) < 1.0:
        message = f"'alpha' and 'beta' must be at least 1 (a bounded density), got {numbers[:2]}"
        raise where.fault(message, "alpha" if numbers[0] < 1.0 else "beta")
    family = {"point": Point, "uniform": Uniform, "beta": Beta}[kind](*numbers)
    lower, upper = family.support
    if kind != "point" and not lower < upper:
        raise where.fault(f"'lower' must be below 'upper', got {lower} and {upper}", "upper")
    return family


def _normal(table: dict, least: float, most: float, where: Place) -> Normal:
    mean, sd = read_number(table, "mean", where), read_number(table, "standard_deviation", where)
    if sd <= 0.0:
        message = f"'standard_deviation' must be positive, got {sd}; use 'point' for no spread"
        raise where.fault(message, "standard_deviation")
    # an unbounded coordinate ends where a normal has no probability left
    family = Normal(mean, sd, least, most if math.isfinite(most) else max(mean, least) + 9.0 * sd)
    if family.kept < 1e-3:
        raise where.fault(f"the normal has almost no probability in the allowed range, got mean {mean}", "mean")
    return family


def _tabulated(table: dict, where: Place) -> Tabulated:
    points, heights = read_numbers(table, "points", where), read_numbers(table, "density", where)
    if len(points) != len(heights) or len(points) < 2:
        message = f"'points' and 'density' must have the same length, at least 2, got {len(points)} and {len(heights)}"
        raise where.fault(message, "density" if len(points) > 1 else "points")
    falls = [place for place, (a, b) in enumerate(itertools.pairwise(points), 1) if b <= a]
    if falls:
        raise where.fault(f"'points' must increase, got {list(points)}", "points", falls[0])
    if min(heights) < 0.0 or max(heights) <= 0.0:
        message = f"'density' must not be negative and not be zero everywhere, got {list(heights)}"
        raise where.fault(message, "density", *[place for place, y in enumerate(heights) if y < 0.0][:1])
    return Tabulated(points, heights)


def _intervals(tables: object, where: Place) -> tuple[MassInterval, ...]:
    if not isinstance(tables, list) or not tables:
        raise where.fault(f"[[interval]] tables are wanted, got {tables!r}", "interval")
    found, previous = [], 0.0
    for number, table in enumerate(tables):
        inside = where.inside(f"interval {number + 1}", "interval", number)
        check_keys(table, ("mass", *_COORDINATES), inside)
        bounds = wanted_value(table, "mass", "[lower, upper] in solar masses", inside)
        if not isinstance(bounds, list) or len(bounds) != 2:
            raise inside.fault(f"'mass' must be [lower, upper] in solar masses, got {bounds!r}", "mass")
        lower, upper = (math.inf if b == math.inf else read_finite(b, inside, "mass", k) for k, b in enumerate(bounds))
        if lower != previous or upper <= lower:
            message = f"intervals must follow each other from 0 to inf without gaps, got {bounds}"
            raise inside.fault(message, "mass")
        found.append(
            MassInterval(math.log(lower) if lower > 0.0 else -math.inf, math.log(upper), _mixture(table, inside))
        )
        previous = upper
    if previous != math.inf:
        message = f"the last interval must reach inf, got {previous}"
        raise where.fault(message, "interval", len(tables) - 1, "mass")
    return tuple(found)


def _applies_to(table: object, where: Place) -> AppliesTo:
    where = where.inside("[applies_to]", "applies_to")
    check_keys(table, ("mass", "evolutionary_state"), where)
    mass = read_numbers(table, "mass", where) if "mass" in table else None
    if mass is not None and (len(mass) != 2 or not 0.0 <= mass[0] < mass[1]):
        raise where.fault(f"'mass' must be [lower, upper] in solar masses, got {list(mass)}", "mass")
    states = table.get("evolutionary_state", [])
    if not isinstance(states, list) or any(state not in _STATES for state in states):
        message = f"'evolutionary_state' must be a list from {', '.join(_STATES)}, got {states!r}"
        raise where.fault(message, "evolutionary_state")
    return AppliesTo(mass, tuple(states))


def _common(table: object, where: Place) -> Common:
    where = where.inside("[common]", "common")
    check_keys(table, ("fraction", "standard_deviation", "within", "scale"), where)
    if ("fraction" in table) == ("standard_deviation" in table):
        raise where.fault("give either 'fraction' or 'standard_deviation' (of ln w)", "fraction")
    size = "fraction" if "fraction" in table else "standard_deviation"
    value = read_number(table, size, where)
    if not 0.0 <= value <= 1.0:
        raise where.fault(f"{size!r} must lie in [0, 1], got {value}", size)
    rule = "'all', 'mass' or the name of a column"
    within = wanted_value(table, "within", rule, where)
    if not isinstance(within, str) or not within:
        raise where.fault(f"'within' must be {rule}, got {within!r}", "within")
    scale = read_number(table, "scale", where) if "scale" in table else None
    if scale is not None and (scale <= 0.0 or within != "mass"):
        raise where.fault(f"'scale' goes with within = \"mass\" and must be positive, got {scale}", "scale")
    if size == "fraction":
        return Common(value, within, scale=scale)
    return Common(None, within, standard_deviation=value, scale=scale)
