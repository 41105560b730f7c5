"""``stellerg catalogue``: a table of stars in, a table of results out."""

from pathlib import Path
from typing import Annotated

import typer

from stellerg.cli.options import Settings

__all__ = ["catalogue"]


def catalogue(
    file: Annotated[
        Path, typer.Argument(help="Table of stars: CSV, Parquet, FITS, ECSV, VOTable or MRT.", show_default=False)
    ],
    *,
    settings: Settings,
    out: Annotated[Path | None, typer.Option(help="Folder for the results.", show_default=False)] = None,
    output_format: Annotated[str, typer.Option("--format", help="parquet, csv or ecsv.")] = "parquet",
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace the results of an earlier run.")] = False,
    explain: Annotated[bool, typer.Option("--explain", help="Say how the columns are read, and stop.")] = False,
) -> None:
    """Binding energies and Kelvin-Helmholtz times of a table of stars.

    Row count and order are kept; a row that cannot be done has a status, a sentence and a line in rejected.csv.
    Columns: star, and for each quantity X (mass, radius, ...) X, X_error or X_error_upper and X_error_lower,
    optionally X_shape; correlation_X_Y; evolutionary_state; mean_log_k2_weight.
    """
    from rich.console import Console

    from stellerg.catalogue.explain import explain_columns
    from stellerg.catalogue.plan import Run
    from stellerg.catalogue.run import run

    console = Console(highlight=False)
    plan = Run(
        source=file,
        folder=out,
        output_format=output_format,
        overwrite=overwrite,
        shape=settings.shape,
        correlation=settings.correlations(),
        evolutionary_state=settings.evolutionary_state,
        solar=settings.solar(),
        k2_weight=settings.k2_weight,
        propagation=settings.propagation(),
    )
    console.print(explain_columns(plan) if explain else run(plan))
