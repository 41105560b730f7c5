"""Structure models in TOML files: found, read, and refused unless they describe proper densities.

A file holds `summary`, `source` ("judgement" or a reference), optionally `[applies_to]` and `[common]`, and
either one density (`[index]`, `[coefficient]` or `[log_coefficient]`) or several `[[interval]]`, each with
`mass = [lower, upper]` in nominal solar masses and a density. Plain data: nothing in a file is executed.
"""

import itertools
import math
import tomllib
from dataclasses import dataclass
from importlib import resources
from pathlib import Path

from stellerg.errors import PriorError
from stellerg.structure.distributions import Beta, Family, Normal, Point, Tabulated, Uniform
from stellerg.structure.lines import line_of, line_of_decode_error
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


def parse_prior(text: str, name: str = "prior", file: str = "") -> StructureModel:
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
    top = _Place(text, title)
    _only(table, ("summary", "source", "applies_to", "common", "interval", *_COORDINATES), top)
    for key in ("summary", "source"):
        _line_of_text(table, key, top)
    if "interval" in table:
        given = [key for key in table if key == "interval" or key in _COORDINATES]
        if len(given) > 1:
            raise top.fault("give either one density or [[interval]] tables, not both", given[1])
        intervals = _intervals(table["interval"], top)
    else:
        intervals = (MassInterval(-math.inf, math.inf, _mixture(table, top)),)
    return StructureModel(
        name=name,
        summary=table["summary"].strip(),
        source=table["source"].strip(),
        intervals=intervals,
        applies_to=_applies_to(table.get("applies_to", {}), top),
        common=_common(table["common"], top) if "common" in table else None,
        text=text,
    )


@dataclass(frozen=True)
class _Place:
    """A table of a file: the words for it in messages, and the keys that lead to it."""

    text: str
    title: str
    words: str = ""
    keys: tuple[str | int, ...] = ()

    def inside(self, words: str, *keys: str | int) -> "_Place":
        """A table within this one."""
        return _Place(self.text, self.title, f"{self.words}, {words}", (*self.keys, *keys))

    def fault(self, message: str, *keys: str | int) -> PriorError:
        """What to raise for a fault of this table, or of what `keys` lead to in it."""
        line = line_of(self.text, (*self.keys, *keys))
        return PriorError(f"{self.title}, line {line}{self.words}: {message}", line)


def _only(table: object, allowed: tuple[str, ...], where: _Place) -> None:
    if not isinstance(table, dict):
        raise where.fault(f"a table is wanted here, got {table!r}")
    for key in table:
        if key not in allowed:
            raise where.fault(f"unknown key {key!r}; allowed here: {', '.join(allowed)}", key)


def _given(table: dict, key: str, wanted: str, where: _Place) -> object:
    """The value of a key that must be there."""
    if key not in table:
        raise where.fault(f"{key!r} is missing; it must be {wanted}")
    return table[key]


def _line_of_text(table: dict, key: str, where: _Place) -> None:
    wanted = "one line of text" + (" (a reference, or 'judgement')" if key == "source" else "")
    value = _given(table, key, wanted, where)
    if not isinstance(value, str) or not value.strip():
        raise where.fault(f"{key!r} must be {wanted}, got {value!r}", key)


def _number(table: dict, key: str, where: _Place) -> float:
    return _finite(_given(table, key, "a finite number", where), where, key)


def _finite(value: object, where: _Place, *keys: str | int) -> float:
    """A finite number that stands at `keys`."""
    try:
        number = math.nan if isinstance(value, bool) or not isinstance(value, (int, float)) else float(value)
    except OverflowError:  # a whole number beyond the largest float
        number = math.inf
    if not math.isfinite(number):
        shown = value if len(repr(value)) < 40 else f"one of {len(repr(value))} characters"
        raise where.fault(f"{keys[0]!r} must be a finite number, got {shown!r}", *keys)
    return number


def _numbers(table: dict, key: str, where: _Place) -> tuple[float, ...]:
    values = _given(table, key, "a list of numbers", where)
    if not isinstance(values, list):
        raise where.fault(f"{key!r} must be a list of numbers, got {values!r}", key)
    return tuple(_finite(value, where, key, place) for place, value in enumerate(values))


def _mixture(table: dict, where: _Place) -> Mixture:
    """One density on one coordinate, as a mixture."""
    given = [key for key in table if key in _COORDINATES]
    if len(given) != 1:
        message = f"exactly one of {', '.join(_COORDINATES)} is wanted, got {', '.join(given) or 'none'}"
        raise where.fault(message, *given[1:2])
    (name,) = given
    coordinate, density = _COORDINATES[name], table[name]
    where = where.inside(f"[{name}]", name)
    if isinstance(density, dict) and density.get("distribution") == "mixture":
        _only(density, ("distribution", "component"), where)
        return _components(density, coordinate, where)
    return Mixture((1.0,), (Component(coordinate, _family(density, coordinate, where)),))


def _components(density: dict, coordinate: Coordinate, where: _Place) -> Mixture:
    parts = density.get("component")
    if not isinstance(parts, list) or not parts:
        raise where.fault("a mixture needs [[component]] tables", "component")
    weights, components = [], []
    for number, part in enumerate(parts):
        inside = where.inside(f"component {number + 1}", "component", number)
        if not isinstance(part, dict):
            raise inside.fault(f"a table is wanted here, got {part!r}")
        weight = _number(part, "weight", inside)
        if weight <= 0.0:
            raise inside.fault(f"'weight' must be positive, got {weight}", "weight")
        weights.append(weight)
        rest = {key: value for key, value in part.items() if key != "weight"}
        components.append(Component(coordinate, _family(rest, coordinate, inside)))
    total = sum(weights)
    if abs(total - 1.0) > 1e-6:
        raise where.fault(f"the weights of a mixture must sum to 1, got {total:g}", "component")
    return Mixture(tuple(weight / total for weight in weights), tuple(components))


def _family(table: object, coordinate: Coordinate, where: _Place) -> Family:
    if not isinstance(table, dict):
        raise where.fault(f"a table is wanted here, got {table!r}")
    choice = [key for key in _KEYS if key != "mixture"]
    kind = _given(table, "distribution", f"one of {', '.join(choice)}", where)
    if kind not in choice:
        raise where.fault(f"'distribution' must be one of {', '.join(choice)}, got {kind!r}", "distribution")
    _only(table, ("distribution", *_KEYS[kind]), where)
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


def _closed_form(kind: str, table: dict, where: _Place) -> Family:
    numbers = [_number(table, key, where) for key in _KEYS[kind]]
    if kind == "beta" and min(numbers[:2]) < 1.0:
        message = f"'alpha' and 'beta' must be at least 1 (a bounded density), got {numbers[:2]}"
        raise where.fault(message, "alpha" if numbers[0] < 1.0 else "beta")
    family = {"point": Point, "uniform": Uniform, "beta": Beta}[kind](*numbers)
    lower, upper = family.support
    if kind != "point" and not lower < upper:
        raise where.fault(f"'lower' must be below 'upper', got {lower} and {upper}", "upper")
    return family


def _normal(table: dict, least: float, most: float, where: _Place) -> Normal:
    mean, sd = _number(table, "mean", where), _number(table, "standard_deviation", where)
    if sd <= 0.0:
        message = f"'standard_deviation' must be positive, got {sd}; use 'point' for no spread"
        raise where.fault(message, "standard_deviation")
    # an unbounded coordinate ends where a normal has no probability left
    family = Normal(mean, sd, least, most if math.isfinite(most) else max(mean, least) + 9.0 * sd)
    if family.kept < 1e-3:
        raise where.fault(f"the normal has almost no probability in the allowed range, got mean {mean}", "mean")
    return family


def _tabulated(table: dict, where: _Place) -> Tabulated:
    points, heights = _numbers(table, "points", where), _numbers(table, "density", where)
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


def _intervals(tables: object, where: _Place) -> tuple[MassInterval, ...]:
    if not isinstance(tables, list) or not tables:
        raise where.fault(f"[[interval]] tables are wanted, got {tables!r}", "interval")
    found, previous = [], 0.0
    for number, table in enumerate(tables):
        inside = where.inside(f"interval {number + 1}", "interval", number)
        _only(table, ("mass", *_COORDINATES), inside)
        bounds = _given(table, "mass", "[lower, upper] in solar masses", inside)
        if not isinstance(bounds, list) or len(bounds) != 2:
            raise inside.fault(f"'mass' must be [lower, upper] in solar masses, got {bounds!r}", "mass")
        lower, upper = (math.inf if b == math.inf else _finite(b, inside, "mass", k) for k, b in enumerate(bounds))
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


def _applies_to(table: object, where: _Place) -> AppliesTo:
    where = where.inside("[applies_to]", "applies_to")
    _only(table, ("mass", "evolutionary_state"), where)
    mass = _numbers(table, "mass", where) if "mass" in table else None
    if mass is not None and (len(mass) != 2 or not 0.0 <= mass[0] < mass[1]):
        raise where.fault(f"'mass' must be [lower, upper] in solar masses, got {list(mass)}", "mass")
    states = table.get("evolutionary_state", [])
    if not isinstance(states, list) or any(state not in _STATES for state in states):
        message = f"'evolutionary_state' must be a list from {', '.join(_STATES)}, got {states!r}"
        raise where.fault(message, "evolutionary_state")
    return AppliesTo(mass, tuple(states))


def _common(table: object, where: _Place) -> Common:
    where = where.inside("[common]", "common")
    _only(table, ("fraction", "within"), where)
    fraction = _number(table, "fraction", where)
    if not 0.0 <= fraction <= 1.0:
        raise where.fault(f"'fraction' must lie in [0, 1], got {fraction}", "fraction")
    rule = "'all', 'mass' or the name of a column"
    within = _given(table, "within", rule, where)
    if not isinstance(within, str) or not within:
        raise where.fault(f"'within' must be {rule}, got {within!r}", "within")
    return Common(fraction, within)
