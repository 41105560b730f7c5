"""How the columns of a table are read, without computing."""

import numpy as np
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from stellerg.assembly import assemble
from stellerg.catalogue.columns import Columns, recognise
from stellerg.catalogue.plan import Run
from stellerg.catalogue.readers import Source, open_table
from stellerg.catalogue.run import check_use
from stellerg.catalogue.tally import aside_words
from stellerg.notes import Notes
from stellerg.observables import MEASURABLE
from stellerg.status import VALUE
from stellerg.structure.files import load_prior
from stellerg.wording import label

__all__ = ["explain_columns"]

_ROWS = 4096  # rows whose selection of measurements is shown


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
        own = MEASURABLE[name].unit if not MEASURABLE[name].unit_required else "none: state it"
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
            why = aside_words(bool(plan.propagation["use"]))
            texts.append(Text(f"{why} in {count} of the first {len(notes.aside)} rows: {names}"))
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
    check_use(options["use"], columns)
    some = stars.take(np.arange(min(_ROWS, len(stars))))
    return assemble(
        some, options["outputs"], options["conventions"], load_prior(options["prior"]), options["use"]
    ).notes
