"""``stellerg star``: one star, in words, as JSON or as a figure."""

from pathlib import Path
from typing import Annotated

import typer

from stellerg.cli.options import Settings

__all__ = ["star"]


def star(
    *,
    settings: Settings,
    given: dict[str, str],
    name: Annotated[str, typer.Option(help="Name of the star, to which randomness is keyed.")] = "star",
    as_json: Annotated[bool, typer.Option("--json", help="Print one JSON object.")] = False,
    plot: Annotated[Path | None, typer.Option(help="Write a figure (PNG, PDF or SVG) of the answer.")] = None,
    explain: Annotated[bool, typer.Option("--explain", help="Say first how each measurement was read.")] = False,
    compare_priors: Annotated[
        bool, typer.Option("--compare-priors", help="Answer under every shipped prior that applies, side by side.")
    ] = False,
) -> None:
    """Binding energy and Kelvin-Helmholtz time of one star.

    Example: stellerg star --mass "1.02 ± 0.03" --radius "1.05(2)" --luminosity "1.10 +0.12 -0.10"
    """
    import json

    from rich.console import Console

    from stellerg.posterior.document import star_document
    from stellerg.propagation import propagate
    from stellerg.stars import Stars

    stars = Stars.of(
        name,
        correlation=settings.correlations(),
        shape=settings.shape,
        evolutionary_state=settings.evolutionary_state,
        solar=settings.solar(),
        mean_log_k2_weight=settings.k2_weight,
        **given,
    )
    if plot is not None:
        from stellerg.report.figures import check_ending, star_figure, write

        check_ending(plot)
    if compare_priors:
        _compare(stars, settings, as_json=as_json, plot=plot, explain=explain)
        return
    posterior = propagate(stars, **settings.propagation())
    console = Console(highlight=False)
    if as_json:
        print(json.dumps(star_document(posterior), indent=2, ensure_ascii=False))
    else:
        from stellerg.posterior.text import star_text

        if explain:
            from stellerg.report.reading import explanation

            console.print(explanation(stars, posterior))
        console.print(star_text(posterior))
    if plot is not None and posterior.has_results[0]:
        write(star_figure(posterior), plot)
    if not posterior.has_results[0]:
        raise typer.Exit(3)


def _compare(stars, settings: Settings, *, as_json: bool, plot: Path | None, explain: bool) -> None:
    """Print, and draw, the answers of one star under every prior that applies."""
    import json

    from rich.console import Console

    from stellerg.report.comparison import compare, comparison_text

    comparison = compare(stars, **settings.propagation())
    console = Console(highlight=False)
    if as_json:
        print(json.dumps(comparison.documents(), indent=2, ensure_ascii=False))
    else:
        if explain:
            from stellerg.report.reading import explanation

            # measurements are read alike under each prior; only where there is a result were some left aside
            console.print(explanation(stars, (comparison.given or comparison.answers)[0].posterior))
        console.print(comparison_text(comparison))
    if not comparison.given:
        raise typer.Exit(3)
    if plot is not None:
        from stellerg.report.comparison_figure import comparison_figure
        from stellerg.report.figures import write

        write(comparison_figure(comparison), plot)
