"""One star's answer for reading in a terminal, in words (rich)."""

from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from stellerg.posterior.content import ACROSS, StarContent, number, percentage, star_content
from stellerg.posterior.result import Posterior

__all__ = ["number", "star_text"]

_BAR = 20  # characters of a full bar in the budget


def star_text(posterior: Posterior, row: int = 0) -> RenderableType:
    """Return the answer for one star, ready to print.

    Parameters
    ----------
    posterior : Posterior
    row : int

    Raises
    ------
    InputError
        If there is no such row.
    """
    content = star_content(posterior, row)
    title = Text.assemble((content.star, "bold"), ": ", (content.status, _colour(content.status)))
    if content.status_text:
        title.append(f"\n{content.status_text}")
    if not content.outputs:
        return title
    parts: list[RenderableType] = [title, Text(), _values(content), Text()]
    if content.uncertain:
        parts += [Text("Share of each quantity in the variance of the logarithm", style="bold"), _budget(content)]
    parts += [Text(), *map(Text, content.sentences)]
    parts += [Text(f"{word}: {sentence}", style="yellow") for word, sentence in content.flags.items()]
    return Group(*parts)


def _colour(status: str) -> str:
    return "green" if status == "ok" else "yellow" if status in ("partial", "doubtful") else "red"


def _table() -> Table:
    return Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="dim")


def _values(content: StarContent) -> Table:
    table = _table()
    table.add_column("")  # names may wrap, numbers may not
    for heading, justify in (
        ("median", "right"),
        ("68.27 % interval", "right"),
        ("95.45 % interval", "right"),
        ("unit", "left"),
    ):
        table.add_column(heading, justify=justify, no_wrap=True)
    for row in content.values:
        table.add_row(row.name, row.median, row.interval68, row.interval95, row.unit)
    return table


def _budget(content: StarContent) -> Table:
    """Quantities down and outputs across, with bars; the other way round where there are many outputs."""
    table = _table()
    table.add_column("")
    if len(content.outputs) <= ACROSS:
        for name in content.outputs:
            table.add_column(name, no_wrap=True)
        for quantity, values in content.shares.items():
            table.add_row(quantity, *map(_share, values))
        return table
    for quantity in content.shares:
        table.add_column(quantity, justify="right")
    for place, name in enumerate(content.outputs):
        values = [values[place] for values in content.shares.values()]
        table.add_row(name, *("" if v is None else percentage(v) for v in values))
    return table


def _share(share: float | None) -> str:
    if share is None:
        return ""
    bar = "█" * round(_BAR * min(max(share, 0.0), 1.0))
    return f"{percentage(share):>8}  {bar:<{_BAR}}"
