"""``stellerg verify``: the published checks, recomputed on the user's machine."""

from typing import TYPE_CHECKING, Annotated

import typer

if TYPE_CHECKING:
    from rich.console import RenderableType

    from stellerg.verification import Outcome

__all__ = ["verify"]


def verify(
    *,
    group: Annotated[
        list[str] | None,
        typer.Option(help="polytropes, sun, kelvin-helmholtz or jcgm-101 (repeatable).", show_default="all"),
    ] = None,
    as_json: Annotated[bool, typer.Option("--json", help="Print one JSON object.")] = False,
) -> None:
    """Recompute published numbers on this machine, and compare.

    Each check has its source, reference and tolerance. Exit code 0 if all pass, 1 if one fails.
    """
    from stellerg.verification import verify as recompute

    outcomes = recompute(group or ())
    if as_json:
        import json

        print(json.dumps(_document(outcomes), indent=2, ensure_ascii=False, allow_nan=False))
    else:
        from rich.console import Console

        Console(highlight=False).print(_text(outcomes))
    if not all(outcome.passed for outcome in outcomes):
        raise typer.Exit(1)


def _document(outcomes: "list[Outcome]") -> dict:
    """Return all outcomes as one JSON object; a value that was not found is null."""
    from dataclasses import asdict

    from stellerg import __version__

    checks = [
        {key: None if number != number else number for key, number in asdict(outcome).items()} for outcome in outcomes
    ]
    failed = sum(not outcome.passed for outcome in outcomes)
    return {"version": __version__, "passed": len(checks) - failed, "failed": failed, "checks": checks}


def _text(outcomes: "list[Outcome]") -> "RenderableType":
    """Return the table of outcomes, the sources it numbers, and a closing line."""
    from rich.console import Group
    from rich.text import Text

    from stellerg.wording import counted

    sources = list(dict.fromkeys(outcome.source for outcome in outcomes))
    lines = [Text("Sources", style="bold")]
    lines += [Text(f"[{number}] {source}") for number, source in enumerate(sources, 1)]
    failed = [f"{outcome.group}: {outcome.name}" for outcome in outcomes if not outcome.passed]
    if failed:
        closing = Text(f"{len(failed)} of {counted(len(outcomes), 'check')} failed: {'; '.join(failed)}.", style="red")
    else:
        closing = Text(f"{counted(len(outcomes), 'check')}: all pass.", style="green")
    return Group(_table(outcomes, sources), Text(), *lines, Text(), closing)


def _table(outcomes: "list[Outcome]", sources: list[str]):
    """One line a check, a heading a group."""
    from rich.table import Table
    from rich.text import Text

    table = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="dim")
    table.add_column("check")  # names may wrap, numbers may not
    for heading in ("value", "reference", "difference", "tolerance"):
        table.add_column(heading, justify="right", no_wrap=True)
    table.add_column("source", no_wrap=True)
    table.add_column("", no_wrap=True)
    group = None
    for outcome in outcomes:
        if outcome.group != group:
            group = outcome.group
            table.add_row(Text(group, style="bold"))
        table.add_row(
            outcome.name,
            f"{outcome.value:.6g}",
            f"{outcome.reference:.6g}",
            f"{outcome.difference:.1e}",
            f"{outcome.tolerance:.1e}",
            Text(f"[{sources.index(outcome.source) + 1}]"),
            Text("pass", style="green") if outcome.passed else Text("FAIL", style="red"),
        )
    return table
