"""Counts over a whole run, and the closing summary made of them."""

from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from rich.console import Group, RenderableType
from rich.table import Table
from rich.text import Text

from stellerg.catalogue.columns import Columns
from stellerg.posterior import Posterior
from stellerg.status import FLAG_TEXT, STATUS_TEXT, Flag, Status
from stellerg.wording import counted, label

__all__ = ["Tally", "aside_words", "closing_summary"]

_REDUNDANT_PROBABILITY = 0.99
_REDUNDANT_SHARE = 0.10
_REDUNDANT_LEAST = 3  # stars: fewer show nothing (judgement)
_SHOWN = 10


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
        enough = self.too_consistent >= _REDUNDANT_LEAST
        return enough and self.too_consistent > _REDUNDANT_SHARE * self.over_determined

    def counts(self) -> dict[str, int]:
        """Rows by status word, in the order of the table of statuses."""
        return {STATUS_TEXT[s].word: self.status[s] for s in Status if s in self.status}


def aside_words(used: bool) -> str:
    """Return why columns were left aside."""
    return "Given but not named in use" if used else "Left aside as redundant"


def closing_summary(folder: Path, tally: Tally, columns: Columns, *, used: bool) -> RenderableType:
    """Statuses, flags and what was left aside, for the end of a run; `used`: whether use named measurements."""
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
        lines.append(f"{aside_words(used)} in {counted(count, 'star')}: {', '.join(names)}.")
    for flag, count in tally.flags.items():
        if count:
            text = FLAG_TEXT[Flag(flag)]
            lines.append(f"{text.word} ({counted(count, 'star')}): {text.sentence}")
    if tally.redundant_columns:
        lines.append(
            "redundant-columns: over-determined stars agree too well for their columns to be independent; "
            "name the independent ones with --use."
        )
    if columns.unrecognised:
        shown = ", ".join(columns.unrecognised[:_SHOWN])
        more = len(columns.unrecognised) - _SHOWN
        lines.append(f"Columns not used: {shown}" + (f" and {counted(more, 'other')}" if more > 0 else "") + ".")
    rejected = sum(count for code, count in tally.status.items() if code > Status.DOUBTFUL)
    text = f"Results in {folder}"
    if rejected:
        text += f"; {counted(rejected, 'star')} not done, with reasons, in rejected.csv"
    lines.append(text + ".")
    return Group(table, Text(), *(Text(line) for line in lines))
