"""``stellerg priors``: the structure models, one of them, or a check of a user's own file."""

from pathlib import Path
from typing import Annotated

import typer

__all__ = ["priors"]

priors = typer.Typer(no_args_is_help=True, help="Structure models: list them, show one, check a file of your own.")

_JSON = typer.Option("--json", help="Print JSON.")


@priors.command("list")
def list_models(*, as_json: Annotated[bool, _JSON] = False) -> None:
    """List the structure models that come with stellerg: what each is, and the stars it is meant for."""
    from stellerg.structure.files import available_priors, load_prior

    models = [load_prior(name) for name in available_priors()]
    if as_json:
        from stellerg.report.prior_document import prior_document

        _print_json([prior_document(model) for model in models])
        return
    from stellerg.report.prior_text import priors_text

    _print(priors_text(models))


@priors.command("show", no_args_is_help=True)
def show(
    model: Annotated[str, typer.Argument(help="Name of a structure model, or a .toml file.", show_default=False)],
    *,
    plot: Annotated[
        Path | None, typer.Option(help="Write a figure (PNG, PDF or SVG) of its density.", show_default=False)
    ] = None,
    as_json: Annotated[bool, _JSON] = False,
) -> None:
    """Show a structure model: its density, in numbers and as a figure, and what it excludes."""
    from stellerg.structure.files import load_prior

    if plot is not None:
        from stellerg.report.figures import check_ending, write
        from stellerg.report.prior_figure import prior_figure

        check_ending(plot)
    found = load_prior(model)
    _answer(found, as_json)
    if plot is not None:
        write(prior_figure(found), plot)


@priors.command("check", no_args_is_help=True)
def check(
    file: Annotated[str, typer.Argument(help="A .toml file.", show_default=False)],
    *,
    as_json: Annotated[bool, _JSON] = False,
) -> None:
    """Check a structure model of your own: say what it does, or name the fault and its line (exit code 2)."""
    from stellerg.structure.files import load_prior

    found = load_prior(file)
    if not as_json:
        print(f"{file}: no fault found.\n")
    _answer(found, as_json)


def _answer(model, as_json: bool) -> None:
    if as_json:
        from stellerg.report.prior_document import prior_document

        _print_json(prior_document(model))
        return
    from stellerg.report.prior_text import prior_text

    _print(prior_text(model))


def _print(text) -> None:
    from rich.console import Console

    Console(highlight=False).print(text)


def _print_json(document) -> None:
    import json

    print(json.dumps(document, indent=2, ensure_ascii=False))
