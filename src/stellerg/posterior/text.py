"""One star's answer for reading in a terminal, in words (rich)."""

import math

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from stellerg.posterior.document import star_document
from stellerg.posterior.result import Posterior
from stellerg.status import FLAG_TEXT
from stellerg.wording import label

__all__ = ["number", "star_text"]

_BAR = 20  # characters of a full bar in the budget


def number(value: float, power: int = 0, digits: int = 4) -> str:
    """Return a number with significant digits, in units of a power of ten."""
    scaled = value / 10.0**power
    if scaled == 0.0:
        return "0"
    decimals = max(digits - 1 - math.floor(math.log10(abs(scaled))), 0)
    return f"{scaled:.{decimals}f}"


def _power(value: float) -> int:
    """Power of ten to take out of a number too long to read."""
    exponent = math.floor(math.log10(abs(value))) if value else 0
    return exponent if not -4 < exponent < 5 else 0


def _unit(unit: str, power: int) -> str:
    return f"10^{power} {unit}".strip() if power else unit


def star_text(posterior: Posterior, row: int = 0) -> RenderableType:
    """Return the answer for one star, ready to print.

    Parameters
    ----------
    posterior : Posterior
    row : int
    """
    answer = star_document(posterior, row)
    title = Text.assemble((answer["star"], "bold"), ": ", (answer["status"], _colour(answer["status"])))
    if answer["status_text"]:
        title.append(f"\n{answer['status_text']}")
    given = {name: output for name, output in answer["outputs"].items() if output is not None}
    if not given:
        return title
    parts: list[RenderableType] = [title, Text(), _values(given, answer["structure"]), Text()]
    parts += [Text("Share of each quantity in the variance of the logarithm", style="bold"), _budget(given)]
    parts += [Text(), *_sentences(posterior, answer, given, row)]
    return Group(*parts)


def _colour(status: str) -> str:
    return "green" if status == "ok" else "yellow" if status in ("partial", "doubtful") else "red"


def _table() -> Table:
    return Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="dim")


def _values(given: dict, structure: dict) -> Table:
    table = _table()
    table.add_column("")  # names may wrap, numbers may not
    for heading, justify in (
        ("median", "right"),
        ("68.27 % interval", "right"),
        ("95.45 % interval", "right"),
        ("unit", "left"),
    ):
        table.add_column(heading, justify=justify, no_wrap=True)
    rows = [(name, output, output["unit"]) for name, output in given.items()]
    rows += [
        (name, values, "")
        for name, values in (
            ("structure coefficient", structure["coefficient"]),
            ("n_effective", structure["n_effective"]),
        )
        if values is not None
    ]
    for name, values, unit in rows:
        power = _power(values["median"])
        intervals = [" to ".join(number(end, power) for end in values[key]) for key in ("interval68", "interval95")]
        table.add_row(label(name), number(values["median"], power), *intervals, _unit(unit, power))
    return table


def _budget(given: dict) -> Table:
    """Quantities down and outputs across, with bars; the other way round where there are many outputs."""
    quantities = list(dict.fromkeys(key for output in given.values() for key in output["budget"]))
    idle = ("correlations", "mass_and_structure")
    shares = {q: [output["budget"].get(q) for output in given.values()] for q in quantities}
    shares = {q: values for q, values in shares.items() if q not in idle or any(values)}
    table = _table()
    table.add_column("")
    if len(given) <= 2:
        for name in given:
            table.add_column(label(name), no_wrap=True)
        for quantity, values in shares.items():
            table.add_row(label(quantity), *(_share(share) for share in values))
        return table
    for quantity in shares:
        table.add_column(label(quantity), justify="right")
    for place, name in enumerate(given):
        values = [values[place] for values in shares.values()]
        table.add_row(label(name), *("" if v is None else f"{100.0 * v:.1f} %" for v in values))
    return table


def _share(share: float | None) -> str:
    if share is None:
        return ""
    bar = "█" * round(_BAR * min(max(share, 0.0), 1.0))
    return f"{100.0 * share:6.1f} %  {bar:<{_BAR}}"


def _sentences(posterior: Posterior, answer: dict, given: dict, row: int) -> list[Text]:
    lines = [
        f"Convention: {answer['convention']['energy']}; {answer['convention']['time']}.",
        f"Structure: prior {answer['prior']}. {posterior.prior_summary}",
        f"Engine: {answer['engine']} ({answer['engine_reason']}).",
    ]
    linear = []
    for name, output in given.items():
        value, uncertainty = output["linear"]["value"], output["linear"]["standard_uncertainty"]
        if value is not None:
            power = _power(value)
            text = f"{number(value, power)} ± {number(uncertainty, power, 3)}"
            unit = _unit(output["unit"], power)
            linear.append(f"{label(name)} {text if not power else f'({text})'} {unit}".rstrip())
    if linear:
        lines.append(f"First-order propagation would give: {'; '.join(linear)}.")
    else:
        lines.append("First-order propagation has no derivative of this structure model here.")
    if answer["consistency"]:
        c = answer["consistency"]
        lines.append(
            f"Consistency of the redundant measurements: chi-squared {number(c['chi2'])} with "
            f"{c['degrees_of_freedom']} degrees of freedom, probability {c['probability']:.3g}."
        )
    aside = posterior.aside_sets[posterior.aside[row]]
    if aside:
        names = ", ".join(map(label, aside))
        if posterior.use:
            lines.append(f"Not named in use, and so not used: {names}.")
        else:
            lines.append(f"Left aside as redundant: {names} (--use names independent measurements).")
    texts = [Text(line) for line in lines]
    sentences = {text.word: text.sentence for text in FLAG_TEXT.values()}
    texts += [Text(f"{word}: {sentences[word]}", style="yellow") for word in answer["flags"]]
    return texts
