"""A whole run: a table of stars in, a folder of results out, every row accounted for."""

import shutil
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
from rich.console import Console, RenderableType
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

from stellerg.catalogue.columns import Columns, recognise
from stellerg.catalogue.plan import Run
from stellerg.catalogue.readers import open_table
from stellerg.catalogue.record import write_record
from stellerg.catalogue.tally import Tally, closing_summary
from stellerg.catalogue.writers import WRITERS, Rejected
from stellerg.checks.budget import tail_names
from stellerg.errors import InputError
from stellerg.observables import COMPOSITION, OBSERVABLES, STRUCTURE_OBSERVABLES
from stellerg.posterior.columns import conventions, joined, summary_columns
from stellerg.propagation import propagate
from stellerg.stars import Stars
from stellerg.status import STATUS_TEXT, Status
from stellerg.structure.files import load_prior

__all__ = ["check_use", "run"]

_BATCH = 4096  # stars propagated together: bounds memory, changes no bit
_CARRYING = [STATUS_TEXT[status].word for status in (Status.OK, Status.PARTIAL, Status.DOUBTFUL)]


def run(plan: Run) -> RenderableType:
    """Run a catalogue and return the closing summary.

    Raises
    ------
    InputError
        If the table or an option cannot be used, or the folder cannot be written. Nothing half-written is left.
    """
    if plan.output_format not in WRITERS:
        raise InputError(f"--format: {plan.output_format!r} is unknown; choose from {', '.join(WRITERS)}")
    if plan.folder is None:
        raise InputError("--out is missing: name a folder for the results")
    source = open_table(plan.source)
    columns = recognise(source)
    propagation = {**plan.propagation, "prior": load_prior(plan.propagation["prior"])}
    check_use(propagation["use"], columns)
    earlier = _earlier(plan.folder, plan.overwrite)
    tally, writer, rejected = Tally(), None, Rejected(plan.folder)
    try:
        with _progress() as progress:
            task = progress.add_task("stars", total=source.rows)
            for part in source.parts():
                first = tally.rows + 1
                stars = columns.stars(part, first, **plan.star_options())
                summary, meta = _summarise(stars, propagation, columns, tally, lambda n: progress.advance(task, n))
                if writer is None:
                    # only now, with the input understood and the first stars done, is anything touched
                    _clear(plan.folder, earlier)
                    writer = WRITERS[plan.output_format](plan.folder, meta)
                words = next(column.values for column in summary if column.name == "status")
                rejected.add(np.flatnonzero(~np.isin(words, _CARRYING)), summary, first)
                writer.add(summary)
        writer.finish()
    except BaseException:
        if writer is not None:
            writer.abandon()
        raise
    rejected.finish()
    write_record(plan.folder, plan, source, columns, propagation, tally)
    return closing_summary(plan.folder, tally, columns, used=bool(propagation["use"]))


def _summarise(stars: Stars, propagation, columns: Columns, tally: Tally, advance: Callable[[int], None]):
    """Summary columns of one part, computed batch by batch, and what a reader of them must know."""
    measured = [name for name in OBSERVABLES if name in columns.observables]
    if set(COMPOSITION) & set(columns.observables) and "mean_molecular_weight" not in measured:
        measured.append("mean_molecular_weight")  # which follows from the mass fractions
    names = (*measured, *tail_names(propagation["prior"]))
    inside = tuple(name for name in STRUCTURE_OBSERVABLES if name in columns.observables)
    batches = []
    for start in range(0, len(stars), _BATCH):
        posterior = propagate(stars.take(np.arange(start, min(start + _BATCH, len(stars)))), **propagation)
        tally.add(posterior)
        batches.append(summary_columns(posterior, names, inside))
        advance(len(posterior))
    return joined(batches), conventions(posterior)


def check_use(use, columns: Columns) -> None:
    """Refuse measurements named as independent that the table does not have."""
    for name in use or ():
        if name in OBSERVABLES and name not in columns.observables:
            raise InputError(f"use: the table has no column {name!r}")


def _earlier(folder: Path, overwrite: bool) -> list[Path]:
    """Results of an earlier run in the folder; refused unless they may be replaced."""
    ours = ("summary", "summary.csv", "summary.ecsv", "rejected.csv", "run.json")
    if folder.exists() and not folder.is_dir():
        raise InputError(f"--out: {folder} is a file; name a folder")
    earlier = [folder / name for name in ours if (folder / name).exists()]
    if earlier and not overwrite:
        raise InputError(f"--out: {folder} holds the results of an earlier run; name another or add --overwrite")
    return earlier


def _clear(folder: Path, earlier: list[Path]) -> None:
    """Make the folder, and take away what an earlier run left in it."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        for path in earlier:
            shutil.rmtree(path) if path.is_dir() else path.unlink()
    except OSError as problem:
        raise InputError(f"--out: {folder} cannot be written: {problem.strerror}") from None


def _progress() -> Progress:
    """A progress bar on standard error, silent where that is no terminal."""
    parts = (TextColumn("{task.description}"), BarColumn(), MofNCompleteColumn(), TimeElapsedColumn())
    return Progress(*parts, console=Console(stderr=True), disable=not sys.stderr.isatty(), transient=True)
