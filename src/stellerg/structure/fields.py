"""The values of a TOML file of ours: taken out one by one, each refused with its file, line and rule if it is wrong."""

import math
from dataclasses import dataclass

from stellerg.errors import PriorError
from stellerg.structure.lines import line_of

__all__ = ["Place", "check_keys", "read_finite", "read_number", "read_numbers", "read_text", "wanted_value"]


@dataclass(frozen=True)
class Place:
    """A table of a file: the words for it in messages, and the keys that lead to it."""

    text: str
    title: str
    words: str = ""
    keys: tuple[str | int, ...] = ()

    def inside(self, words: str, *keys: str | int) -> "Place":
        """A table within this one."""
        return Place(self.text, self.title, f"{self.words}, {words}", (*self.keys, *keys))

    def fault(self, message: str, *keys: str | int) -> PriorError:
        """What to raise for a fault of this table, or of what `keys` lead to in it."""
        line = line_of(self.text, (*self.keys, *keys))
        return PriorError(f"{self.title}, line {line}{self.words}: {message}", line)


def check_keys(table: object, allowed: tuple[str, ...], where: Place) -> None:
    """Refuse what is no table, and keys that are not allowed in it."""
    if not isinstance(table, dict):
        raise where.fault(f"a table is wanted here, got {table!r}")
    for key in table:
        if key not in allowed:
            raise where.fault(f"unknown key {key!r}; allowed here: {', '.join(allowed)}", key)


def wanted_value(table: dict, key: str, wanted: str, where: Place) -> object:
    """The value of a key that must be there."""
    if key not in table:
        raise where.fault(f"{key!r} is missing; it must be {wanted}")
    return table[key]


def read_text(table: dict, key: str, where: Place) -> str:
    """One line of text, without blanks at its ends."""
    wanted = "one line of text" + (" (a reference, or 'judgement')" if key == "source" else "")
    value = wanted_value(table, key, wanted, where)
    if not isinstance(value, str) or not value.strip():
        raise where.fault(f"{key!r} must be {wanted}, got {value!r}", key)
    return value.strip()


def read_number(table: dict, key: str, where: Place) -> float:
    """A finite number."""
    return read_finite(wanted_value(table, key, "a finite number", where), where, key)


def read_finite(value: object, where: Place, *keys: str | int) -> float:
    """A finite number that stands at `keys`."""
    try:
        number = math.nan if isinstance(value, bool) or not isinstance(value, (int, float)) else float(value)
    except OverflowError:  # a whole number beyond the largest float
        number = math.inf
    if not math.isfinite(number):
        shown = value if len(repr(value)) < 40 else f"one of {len(repr(value))} characters"
        raise where.fault(f"{keys[0]!r} must be a finite number, got {shown!r}", *keys)
    return number


def read_numbers(table: dict, key: str, where: Place) -> tuple[float, ...]:
    """A list of finite numbers."""
    values = wanted_value(table, key, "a list of numbers", where)
    if not isinstance(values, list):
        raise where.fault(f"{key!r} must be a list of numbers, got {values!r}", key)
    return tuple(read_finite(value, where, key, place) for place, value in enumerate(values))
