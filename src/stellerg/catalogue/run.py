"""A whole run: a table of stars in, a folder of results out, every row accounted for."""

import json
import shutil
import sys
from collections.abc import Mapping
from dataclasses import asdict, dataclass, field
from importlib.metadata import version
from pathlib import Path

import numpy as np
from rich.console import Console, Group, RenderableType
from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn
from rich.table import Table
from rich.text import Text

from stellerg import constants
from stellerg.assembly import Notes, assemble
from stellerg.catalogue.columns import Columns, recognise, suspicious
from stellerg.catalogue.readers import Source, open_table
from stellerg.catalogue.writers import WRITERS, Rejected, put
from stellerg.checks.budget import tail_names
from stellerg.errors import InputError
from stellerg.observables import OBSERVABLES, SolarReferences
from stellerg.posterior import Posterior
from stellerg.posterior.columns import summary_columns
from stellerg.propagation import propagate
from stellerg.status import FLAG_TEXT, STATUS_TEXT, VALUE, Flag, Status
from stellerg.structure.files import load_prior
from stellerg.structure.model import StructureModel
from stellerg.wording import counted, label

__all__ = ["Run", "explain_columns", "run"]

_BATCH = 4096  # stars propagated together: bounds memory, changes no bit
_REDUNDANT_PROBABILITY = 0.99
_REDUNDANT_SHARE = 0.10


@dataclass(frozen=True)
class Run:
    """What to do.

    Attributes
    ----------
    source : Path
        CSV or ECSV.
    folder : Path or None
        For the results.
    output_format : str
        parquet, csv or ecsv.
    overwrite : bool
        Replace the results of an earlier run.
    shape, correlation, evolutionary_state, solar
        For rows that do not say themselves.
    propagation : mapping
        Keyword arguments of `stellerg.propagate`.
    """

    source: Path
    folder: Path | None
    output_format: str
    overwrite: bool
    shape: str
    correlation: Mapping[tuple[str, str], float]
    evolutionary_state: str
    solar: SolarReferences
    propagation: Mapping[str, object]

    def star_options(self) -> dict:
        """Return what the reader of the columns needs."""
        return {
            "shape": self.shape,
            "correlation": self.correlation,
            "evolutionary_state": self.evolutionary_state,
            "solar": self.solar,
        }


@dataclass
class Tally:
    """Counts over all parts."""

    rows: int = 0
    status: dict[int, int] = field(default_factory=dict)
    flags: dict[int, int] = field(default_factory=dict)
    aside: dict[tuple[str, ...], int] = field(default_factory=dict)
    over_determined: int = 0
    too_consistent: int = 0
    structure: dict[str, list[float]] = field(default_factory=dict)

    def add(self, posterior: Posterior) -> None:
        """Count one batch."""
        self.rows += len(posterior)
        for code, count in zip(*np.unique(posterior.status, return_counts=True), strict=True):
            self.status[int(code)] = self.status.get(int(code), 0) + int(count)
        for flag in FLAG_TEXT:
            marked = int((posterior.has_results & (posterior.flags & int(flag) != 0)).sum())
            self.flags[int(flag)] = self.flags.get(int(flag), 0) + marked
        for code, count in zip(*np.unique(posterior.aside, return_counts=True), strict=True):
            names = posterior.aside_sets[code]
            if names:
                self.aside[names] = self.aside.get(names, 0) + int(count)
        probability = posterior.probability[~np.isnan(posterior.probability)]
        self.over_determined += len(probability)
        self.too_consistent += int((probability > _REDUNDANT_PROBABILITY).sum())
        for output in posterior.outputs:
            share = posterior.budget(output).get("structure", np.zeros(0))
            share = share[~np.isnan(share)]
            total = self.structure.setdefault(output, [0.0, 0.0])
            total[0] += float(share.sum())
            total[1] += len(share)

    @property
    def redundant_columns(self) -> bool:
        """Whether over-determined rows agree too well for their columns to be independent."""
        return self.too_consistent > _REDUNDANT_SHARE * self.over_determined

    def counts(self) -> dict[str, int]:
        """Rows by status word, in the order of the table of statuses."""
        return {STATUS_TEXT[s].word: self.status[s] for s in Status if s in self.status}


def run(plan: Run) -> RenderableType:
    """Run a catalogue and return the closing summary.

    Raises
    ------
    InputError
        If the table or an option cannot be used, or the folder cannot be written.
    """
    if plan.output_format not in WRITERS:
        raise InputError(f"--format: {plan.output_format!r} is unknown; choose from {', '.join(WRITERS)}")
    if plan.folder is None:
        raise InputError("--out is missing: name a folder for the results")
    source = open_table(plan.source)
    columns = recognise(source)
    propagation = {**plan.propagation, "prior": load_prior(plan.propagation["prior"])}
    _check_use(propagation["use"], columns)
    folder = plan.folder
    earlier = _earlier(folder, plan.overwrite)
    tally, writer, rejected = Tally(), None, Rejected(folder)
    with _progress() as progress:
        task = progress.add_task("stars", total=source.rows)
        for part in source.parts():
            first = tally.rows + 1
            stars = columns.stars(part, first, **plan.star_options())
            batches = []
            for start in range(0, len(stars), _BATCH):
                some = stars.take(np.arange(start, min(start + _BATCH, len(stars))))
                posterior = propagate(some, **propagation)
                tally.add(posterior)
                batches.append(summary_columns(posterior, _budget_names(columns, propagation["prior"])))
                if writer is None:
                    meta = {
                        "prior": posterior.prior,
                        "energy_convention": posterior.energy_convention,
                        "time_convention": posterior.time_convention,
                    }
                    # only now, with the input understood and the first stars done, is anything touched
                    _clear(folder, earlier)
                    writer = WRITERS[plan.output_format](folder, meta)
                progress.advance(task, len(some))
            summary = _join(batches)
            carrying = {STATUS_TEXT[s].word for s in (Status.OK, Status.PARTIAL, Status.DOUBTFUL)}
            rejected.add(np.flatnonzero([word not in carrying for word in summary[1].values]), summary, first)
            writer.add(summary)
    writer.finish()
    rejected.finish()
    _write_record(folder, plan, source, columns, propagation, tally)
    return _closing(plan, folder, tally, columns)


def explain_columns(plan: Run) -> RenderableType:
    """Say how the columns of a table are read, without computing."""
    source = open_table(plan.source)
    columns = recognise(source)
    table = Table(box=None, pad_edge=False, padding=(0, 3, 0, 0), header_style="dim")
    for heading in ("quantity", "columns", "unit", "default unit"):
        table.add_column(heading)
    for name in columns.observables:
        endings = ("", "_error", "_error_upper", "_error_lower", "_shape")
        attached = [name + e for e in endings if name + e in columns.names]
        own = OBSERVABLES[name].unit if not OBSERVABLES[name].unit_required else "none: state it"
        table.add_row(label(name), ", ".join(attached), source.units.get(name, ""), own)
    lines = [f"{pair[0]} and {pair[1]}: column {column}" for pair, column in columns.correlations.items()]
    texts = [Text("How the columns are read", style="bold"), table]
    texts += [Text(f"Correlation of {line}") for line in lines]
    if columns.unrecognised:
        texts.append(Text(f"Not used: {', '.join(columns.unrecognised)}"))
    notes = _first_notes(plan, source, columns)
    for code, count in zip(*np.unique(notes.aside, return_counts=True), strict=True):
        if notes.aside_sets[code]:
            names = ", ".join(notes.aside_sets[code])
            texts.append(Text(f"{_aside_words(plan)} in {count} of the first {len(notes.aside)} rows: {names}"))
    for code, count in zip(*np.unique(notes.reason, return_counts=True), strict=True):
        if code:
            sentence = notes.sentences[code].replace(VALUE, "")
            first = int(np.flatnonzero(notes.reason == code)[0]) + 1
            texts.append(Text(f"{count} of the first {len(notes.aside)} rows (row {first} first): {sentence}"))
    return Group(*texts)


def _first_notes(plan: Run, source: Source, columns: Columns) -> Notes:
    """What is selected for the first rows."""
    stars = columns.stars(next(iter(source.parts())), 1, **plan.star_options())
    options = plan.propagation
    _check_use(options["use"], columns)
    some = stars.take(np.arange(min(_BATCH, len(stars))))
    return assemble(
        some, options["outputs"], options["conventions"], load_prior(options["prior"]), options["use"]
    ).notes


def _check_use(use, columns: Columns) -> None:
    for name in use or ():
        if name in OBSERVABLES and name not in columns.observables:
            raise InputError(f"use: the table has no column {name!r}")


def _budget_names(columns: Columns, structure: StructureModel) -> tuple[str, ...]:
    return (*columns.observables, *tail_names(structure))


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


def _join(batches: list) -> list:
    """Join the columns of batches."""
    if len(batches) == 1:
        return batches[0]
    return [
        type(same[0])(same[0].name, np.concatenate([c.values for c in same]), same[0].unit, same[0].description)
        for same in zip(*batches, strict=True)
    ]


def _write_record(folder: Path, plan: Run, source: Source, columns: Columns, propagation, tally: Tally) -> None:
    """`run.json`: all that made the numbers, and what became of the rows."""
    prior = propagation["prior"]
    record = {
        "stellerg": version("stellerg"),
        "input": {"file": source.path.name, "sha256": source.sha256(), "rows": tally.rows},
        "options": {
            "format": plan.output_format,
            "engine": str(propagation["engine"]),
            "seed": propagation["seed"],
            "outputs": list(propagation["outputs"]),
            "use": list(propagation["use"] or ()),
            "shape": plan.shape,
            "correlation": {",".join(pair): value for pair, value in plan.correlation.items()},
            "evolutionary_state": plan.evolutionary_state,
            "solar_references": asdict(plan.solar),
        },
        "conventions": asdict(propagation["conventions"]),
        "prior": {"name": prior.name, "text": prior.text},
        "constants": {name.lower(): getattr(constants, name) for name in constants.__all__},
        "versions": {name: version(name) for name in ("numpy", "scipy", "astropy", "pyarrow")},
        "columns": {
            "observables": list(columns.observables),
            "correlations": sorted(columns.correlations.values()),
            "not_used": list(columns.unrecognised),
            "left_aside": [{"columns": list(names), "rows": count} for names, count in sorted(tally.aside.items())],
        },
        "counts": tally.counts(),
        "flags": {FLAG_TEXT[Flag(flag)].word: count for flag, count in tally.flags.items() if count},
        "catalogue_flags": ["redundant-columns"] if tally.redundant_columns else [],
    }
    text = json.dumps(record, indent=2, ensure_ascii=False) + "\n"
    put(folder / "run.json", lambda path: path.write_text(text, encoding="utf-8"))


def _aside_words(plan: Run) -> str:
    return "Given but not named in use" if plan.propagation["use"] else "Left aside as redundant"


def _closing(plan: Run, folder: Path, tally: Tally, columns: Columns) -> RenderableType:
    table = Table(box=None, pad_edge=False, padding=(0, 3, 0, 0), header_style="dim")
    table.add_column("status")
    table.add_column("stars", justify="right")
    for word, count in tally.counts().items():
        table.add_row(word, f"{count:,}")
    table.add_row("all", f"{tally.rows:,}", style="bold")
    lines = []
    for output, (total, count) in tally.structure.items():
        if count:
            lines.append(
                f"Structure carries {100 * total / count:.0f} % of the variance of ln({label(output)}) on average."
            )
    for names, count in sorted(tally.aside.items()):
        lines.append(f"{_aside_words(plan)} in {counted(count, 'star')}: {', '.join(names)}.")
    for flag, count in tally.flags.items():
        if count:
            text = FLAG_TEXT[Flag(flag)]
            lines.append(f"{text.word} ({counted(count, 'star')}): {text.sentence}")
    if tally.redundant_columns:
        lines.append(
            "redundant-columns: over-determined stars agree too well for their columns to be independent; "
            "name the independent ones with --use."
        )
    unused = [name for name in columns.unrecognised if suspicious(name)]
    if unused:
        lines.append(f"Columns that are not understood and were not used: {', '.join(unused)} (see --explain).")
    rejected = sum(count for code, count in tally.status.items() if code > Status.DOUBTFUL)
    text = f"Results in {folder}"
    if rejected:
        text += f"; {counted(rejected, 'star')} not done, with reasons, in rejected.csv"
    lines.append(text + ".")
    return Group(table, Text(), *(Text(line) for line in lines))
