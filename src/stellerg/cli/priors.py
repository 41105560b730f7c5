"""``stellerg priors``: the structure models, one of them, a check of a user's own file, or one learned from stars."""

from pathlib import Path
from typing import Annotated

import typer

from stellerg.errors import InputError

__all__ = ["priors"]

priors = typer.Typer(no_args_is_help=True, help="Structure models: list them, show one, check or learn one.")

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
        Path | None,
        typer.Option(
            help="Write a figure (PNG, PDF or SVG): its density, or the plane of mass and radius of a calibration.",
            show_default=False,
        ),
    ] = None,
    stars: Annotated[
        Path | None,
        typer.Option(
            help="With --plot, of a calibration: a table of stars to draw in it and to count by place.",
            show_default=False,
        ),
    ] = None,
    as_json: Annotated[bool, _JSON] = False,
) -> None:
    """Show a structure model: its density or its calibration, in numbers and as a figure, and what it excludes."""
    from stellerg.structure.files import load_prior

    if plot is not None:
        from stellerg.report.figures import check_ending, write

        check_ending(plot)
    elif stars is not None:
        raise InputError("--stars: the stars are drawn in a figure, and none was asked for; add --plot FILE")
    found = load_prior(model)
    placed = None if stars is None else _placed(stars, found)
    _answer(found, as_json, placed)
    if plot is not None:
        write(_figure(found, placed), plot)


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


@priors.command("learn", no_args_is_help=True)
def learn(
    table: Annotated[
        Path, typer.Argument(help="Stars with log_k2, moment_of_inertia_factor or structure_coefficient.")
    ],
    *,
    out: Annotated[Path, typer.Option(help="Model file to write (.toml).", show_default=False)],
    slope: Annotated[bool, typer.Option("--slope", help="Let the mean index change with ln M.")] = False,
    stage: Annotated[
        str, typer.Option(help="Column that names the stage whose stars share one misfit.", show_default=False)
    ] = "",
    seed: Annotated[int, typer.Option(help="Seed of the chains.")] = 0,
    plot: Annotated[
        Path | None, typer.Option(help="Write a figure (PNG, PDF or SVG) of the predictive check.", show_default=False)
    ] = None,
    overwrite: Annotated[bool, typer.Option("--overwrite", help="Replace the file if it exists.")] = False,
) -> None:
    """Learn a structure model from stars whose inside was observed: mean and spread of the index, as a file."""
    import numpy as np

    from stellerg.catalogue.training import read_training_stars
    from stellerg.report.learned_text import learned_text
    from stellerg.structure.files import main_sequence
    from stellerg.structure.learned_file import learned_file_text
    from stellerg.structure.learning import LEARNED_FROM, ChainSettings, learn_prior

    if out.suffix != ".toml":
        raise InputError(f"--out: {out} must end in .toml, as every structure model does")
    if out.exists() and not overwrite:
        raise InputError(f"--out: {out} exists; name another file or add --overwrite")
    if plot is not None:
        from stellerg.report.figures import check_ending

        check_ending(plot)
    training = read_training_stars(table, stage)
    stars, log_mass = training.stars, training.log_mass()
    learned = learn_prior(
        {name: stars.measured[name] for name in LEARNED_FROM if name in stars.measured},
        stars.key,
        stages=training.stages,
        log_mass=log_mass if slope else None,
        misfit_scale=np.where(np.isnan(log_mass), 1.0, main_sequence().misfit(np.nan_to_num(log_mass))),
        settings=ChainSettings(seed=seed),
    )
    try:
        out.write_text(learned_file_text(learned), encoding="utf-8")
    except OSError as problem:
        raise InputError(f"--out: {out} cannot be written: {problem.strerror}") from None
    _print(learned_text(learned, str(out)))
    if plot is not None:
        from stellerg.report.learned_figure import predictive_figure

        predictive_figure(learned, plot)


def _answer(model, as_json: bool, placed=None) -> None:
    if as_json:
        from stellerg.report.prior_document import prior_document

        _print_json(prior_document(model) | ({} if placed is None else {"stars": placed.document()}))
        return
    from stellerg.report.prior_text import prior_text

    _print(prior_text(model))
    if placed is not None:
        from rich.text import Text

        _print(Text("\n" + placed.words()))


def _placed(table: Path, model):
    """The stars of a table in the plane of a calibration."""
    from stellerg.catalogue.read import read_stars
    from stellerg.report.prior_domain import place_stars
    from stellerg.structure.calibration import Calibration

    if not isinstance(model, Calibration):
        raise InputError(
            f"--stars: stars are drawn in the plane of mass and radius of a calibration, and {model.name!r} is a "
            "density of structure; show main-sequence, or leave --stars out"
        )
    return place_stars(read_stars(table), model, str(table))


def _figure(model, placed):
    from stellerg.structure.calibration import Calibration

    if isinstance(model, Calibration):
        from stellerg.report.domain_figure import domain_figure

        return domain_figure(model, placed)
    from stellerg.report.prior_figure import prior_figure

    return prior_figure(model)


def _print(text) -> None:
    from rich.console import Console

    Console(highlight=False).print(text)


def _print_json(document) -> None:
    import json

    print(json.dumps(document, indent=2, ensure_ascii=False))
