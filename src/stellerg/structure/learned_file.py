"""Learned structure models as files: the text that is written, and the table that names the training stars."""

import json
import math
from typing import TYPE_CHECKING

import numpy as np

from stellerg.structure.fields import Place, check_keys, wanted_value

if TYPE_CHECKING:
    from stellerg.structure.learning import LearnedPrior
    from stellerg.structure.model import AppliesTo

__all__ = ["learned_file_text", "read_training"]

_TRAINED_ON = ("log_k2", "moment_of_inertia_factor", "structure_coefficient")
_DIGITS = frozenset("0123456789abcdef")
_TREAD = 0.2  # in ln M, of the staircase that stands for a slope: with the usual slopes a step is below the spread
_KEYS_IN_A_LINE = 5


def read_training(table: object, where: Place) -> tuple[int, ...]:
    """Read the table [training] of a model file.

    Parameters
    ----------
    table : object
        What stands at [training].
    where : Place
        Of the file.

    Returns
    -------
    tuple of int
        64-bit keys of the stars the model was learned from.

    Raises
    ------
    PriorError
        If the table is not as `learned_file_text` writes it.
    """
    where = where.inside("[training]", "training")
    check_keys(table, ("stars", "keys", "observables"), where)
    rule = "a list of different keys of stars, each of 16 hexadecimal digits"
    keys = wanted_value(table, "keys", rule, where)
    if not isinstance(keys, list) or not keys:
        raise where.fault(f"'keys' must be {rule}, got {keys!r}", "keys")
    seen: set[str] = set()
    for place, key in enumerate(keys):
        if not isinstance(key, str) or len(key) != 16 or not set(key) <= _DIGITS:
            raise where.fault(f"'keys' must be {rule} (0-9, a-f), got {key!r}", "keys", place)
        if key in seen:
            raise where.fault(f"'keys' must be {rule}, got {key!r} twice", "keys", place)
        seen.add(key)
    stars = wanted_value(table, "stars", "the number of keys", where)
    if isinstance(stars, bool) or stars != len(keys):
        raise where.fault(f"'stars' must be the number of keys, {len(keys)}, got {stars!r}", "stars")
    rule = f"a list from {', '.join(_TRAINED_ON)}"
    observables = wanted_value(table, "observables", rule, where)
    if not isinstance(observables, list) or not observables or any(name not in _TRAINED_ON for name in observables):
        raise where.fault(f"'observables' must be {rule}, got {observables!r}", "observables")
    return tuple(int(key, 16) for key in keys)


def learned_file_text(
    learned: "LearnedPrior",
    *,
    summary: str | None = None,
    source: str | None = None,
    applies_to: "AppliesTo | None" = None,
) -> str:
    """Write a learned prior as the text of a model file.

    The density of n for a star is normal about the posterior mean of the mean, with the variance of the spread and of
    the mean together; what is uncertain of the mean is common to all stars. A slope becomes a staircase of mass
    intervals, at most 0.2 wide in ln M over the training masses, its end values beyond them.

    Parameters
    ----------
    learned : LearnedPrior
    summary, source : str, optional
        One line each; omitted: written from what was learned.
    applies_to : AppliesTo, optional
        The stars it is meant for; omitted: not restricted.
    """
    variance = float(np.var(learned.mean)) + float(np.mean(learned.spread**2))
    fraction = float(np.var(learned.mean)) / variance
    lines = [
        f"summary = {_quoted(summary or _summary(learned, math.sqrt(variance), fraction))}",
        f"source = {_quoted(source or _source(learned))}",
    ]
    if applies_to is not None:
        lines += ["", "[applies_to]"]
        lines += [] if applies_to.mass is None else [f"mass = [{', '.join(map(_number, applies_to.mass))}]"]
        states = ", ".join(map(_quoted, applies_to.evolutionary_state))
        lines += [f"evolutionary_state = [{states}]"] if states else []
    lines += ["", "[common]", f"fraction = {_number(fraction)}", 'within = "all"']
    if learned.log_mass is None:
        lines += ["", *_density("index", learned.mean, learned.spread)]
    else:
        lines += _staircase(learned)
    lines += ["", "[training]", f"stars = {learned.stars}"]
    lines += [f"observables = [{', '.join(map(_quoted, learned.observables))}]", "keys = ["]
    words = [f'"{int(key):016x}",' for key in learned.keys]
    lines += ["    " + " ".join(words[at : at + _KEYS_IN_A_LINE]) for at in range(0, len(words), _KEYS_IN_A_LINE)]
    return "\n".join([*lines, "]"]) + "\n"


def _density(table: str, mean: np.ndarray, spread: np.ndarray) -> list[str]:
    """A table of a normal density of n, from draws of the population's mean and spread."""
    location = min(max(float(mean.mean()), 0.0), 4.999)  # a steep slope may lead out of the range of polytropes
    sd = math.sqrt(float(np.mean(spread**2)) + float(np.var(mean)))
    return [
        f"[{table}]",
        'distribution = "normal"',
        f"mean = {_number(location)}",
        f"standard_deviation = {_number(sd)}",
    ]


def _staircase(learned: "LearnedPrior") -> list[str]:
    low, high = float(learned.log_mass.min()), float(learned.log_mass.max())
    # a whole number of treads; the small allowance keeps rounding from adding one
    treads = max(math.ceil((high - low) / _TREAD - 1e-9), 1)
    edges = np.linspace(low, high, treads + 1)
    masses = ["0.0", *(_number(mass) for mass in np.exp(edges[1:-1])), "inf"]
    lines = []
    for place, middle in enumerate(0.5 * (edges[1:] + edges[:-1])):
        mean = learned.mean + learned.slope * (middle - learned.average_log_mass)
        lines += ["", "[[interval]]", f"mass = [{masses[place]}, {masses[place + 1]}]"]
        lines += _density("interval.index", mean, learned.spread)
    return lines


def _summary(learned: "LearnedPrior", sd: float, fraction: float) -> str:
    text = f"Learned from {learned.stars} stars: n normal {learned.mean.mean():.2f} ± {sd:.2f}"
    if learned.log_mass is not None:
        text += (
            f" at {math.exp(learned.average_log_mass):.2g} solar masses, {learned.slope.mean():+.2f} per unit of ln M, "
            f"in steps of at most {_TREAD} in ln M from {math.exp(learned.log_mass.min()):.2g} to "
            f"{math.exp(learned.log_mass.max()):.2g}, constant beyond"
        )
    return text + f"; {100.0 * fraction:.0f} % of the variance is common to all stars."


def _source(learned: "LearnedPrior") -> str:
    named = ", ".join(learned.observables)
    return f"hierarchical fit of a normal population to {named} of {learned.stars} stars; its hyperpriors are judgement"


def _number(value: float) -> str:
    return f"{value:.6g}"


def _quoted(text: str) -> str:
    """A basic string of TOML on one line: the escapes of JSON are TOML's, but for one character."""
    return json.dumps(" ".join(text.split()), ensure_ascii=False).replace("\x7f", "\\u007f")
