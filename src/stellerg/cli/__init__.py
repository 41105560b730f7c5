"""The command line: one file a command. Commands parse, call and print; they compute nothing.

At start-up only typer is imported, so that help comes at once; a command imports what it needs when it runs.
Exit codes: 0 with an answer (a catalogue: every row accounted for), 1 when a published number is not found
again (`verify`), 2 for a wrong call or a faulty structure file, 3 when the star cannot be done.
"""

import sys

import typer

from stellerg.cli.catalogue import catalogue
from stellerg.cli.options import with_options
from stellerg.cli.priors import priors
from stellerg.cli.star import star
from stellerg.cli.verify import verify
from stellerg.errors import StellergError

__all__ = ["app", "main"]

app = typer.Typer(
    name="stellerg",
    help="Posterior distributions of the energy that binds a star and of its Kelvin-Helmholtz time.",
    no_args_is_help=True,
    add_completion=False,
    pretty_exceptions_enable=False,
)
app.command("star", no_args_is_help=True)(with_options(star, observables=True))
app.command("catalogue", no_args_is_help=True)(with_options(catalogue, observables=False))
app.command("verify")(verify)
app.add_typer(priors, name="priors")


def _show_version(asked: bool) -> None:
    if asked:
        from stellerg import __version__

        print(f"stellerg {__version__}")
        raise typer.Exit


@app.callback()
def _common(
    version: bool = typer.Option(
        False, "--version", help="Show the version and stop.", is_eager=True, callback=_show_version
    ),
) -> None:
    """Options before the command."""


def main() -> None:
    """Run the command line; a user's mistake is one message on standard error and exit code 2."""
    try:
        app()
    except StellergError as mistake:
        print(f"stellerg: {mistake}", file=sys.stderr)
        sys.exit(2)
