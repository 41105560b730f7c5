"""An answer as a fragment of HTML, which notebooks show: one star in full, many stars as a short table.

The fragment needs nothing from outside: no script, no file. Its rules apply only inside its own class, and its
colours are chosen to be read on white as on black. Whatever comes from the user is escaped.
"""

import re
from collections.abc import Iterable, Sequence
from html import escape

import numpy as np

from stellerg.posterior.content import (
    ACROSS,
    StarContent,
    number,
    percentage,
    power_of_ten,
    star_content,
    with_power,
)
from stellerg.posterior.result import STANDARD_PROBABILITIES, Posterior
from stellerg.status import FLAG_TEXT, STATUS_TEXT, Status, flag_words, status_word
from stellerg.wording import counted, label

__all__ = ["posterior_html", "star_html"]

ROWS = 20  # stars shown of many
# Quantiles of all stars are computed together, some 6,000 stars a second (README): above this many, showing an
# answer would make its reader wait (judgement).
_SPREAD = 1e4  # a column whose values differ by more has its powers of ten in the cells (judgement)
_USE_OPTION = "the argument use of propagate"

# Notebooks bring rules of their own for tables; these are as specific and come later, so they hold. Middle tones
# (contrast above 3 on white and on black) and the page's own ink serve light and dark.
_STYLE = """
.stellerg-answer { font-size: 13px; line-height: 1.45; overflow-x: auto; }
.stellerg-answer p { margin: 0.2em 0; max-width: 64em; }
.stellerg-answer sup { font-size: 75%; line-height: 0; }
.stellerg-answer .stellerg-title { font-size: 1.1em; }
.stellerg-answer .stellerg-good { color: #2f8f5b; font-weight: bold; }
.stellerg-answer .stellerg-fair { color: #b3791c; font-weight: bold; }
.stellerg-answer .stellerg-none { color: #d0483c; font-weight: bold; }
.stellerg-answer table.stellerg-table { border-collapse: collapse; border: 0; margin: 0.7em 0; font-size: 13px; }
.stellerg-answer .stellerg-table caption { caption-side: top; text-align: left; color: inherit; font-weight: bold;
  padding: 0 0 0.2em 0; white-space: nowrap; }
.stellerg-answer .stellerg-table thead tr, .stellerg-answer .stellerg-table tbody tr { background: transparent; }
.stellerg-answer .stellerg-table thead tr th, .stellerg-answer .stellerg-table tbody tr th,
.stellerg-answer .stellerg-table tbody tr td { border: 0; padding: 0.15em 1.1em 0.15em 0; text-align: left;
  vertical-align: top; font-weight: normal; max-width: none; white-space: nowrap; }
.stellerg-answer .stellerg-table thead tr:last-child th { border-bottom: 1px solid rgba(128, 128, 128, 0.6); }
.stellerg-answer .stellerg-table tbody tr + tr > * { border-top: 1px solid rgba(128, 128, 128, 0.2); }
.stellerg-answer .stellerg-table thead tr .stellerg-number, .stellerg-answer .stellerg-table tbody tr .stellerg-number {
  text-align: right; font-variant-numeric: tabular-nums; }
.stellerg-answer .stellerg-figure { display: inline-block; min-width: 4.8em; text-align: right;
  font-variant-numeric: tabular-nums; }
.stellerg-answer .stellerg-track { display: inline-block; width: 11em; height: 0.75em; margin-left: 0.6em; }
.stellerg-answer .stellerg-bar { display: block; box-sizing: border-box; height: 100%; background: #5f8fa8; }
.stellerg-answer .stellerg-structure { background: #a8823f; }
.stellerg-answer .stellerg-negative { background: transparent; border: 1px solid currentColor; }
""".strip()
_SHARE = "Under structure: its share in the variance of the logarithm."
_NEGATIVE = "A hollow bar is a negative share: it makes the variance smaller."


def star_html(posterior: Posterior, row: int = 0) -> str:
    """Return the answer for one star as a fragment of HTML.

    Parameters
    ----------
    posterior : Posterior
    row : int

    Raises
    ------
    InputError
        If there is no such row.
    """
    content = star_content(posterior, row, _USE_OPTION)
    parts = [
        f'<p class="stellerg-title"><strong>{escape(content.star)}</strong>: {_status(content.status)}</p>',
    ]
    if content.status_text:
        parts.append(_paragraph(content.status_text))
    if content.outputs:
        parts += [_values(content), *([_budget(content)] if content.uncertain else [])]
        if any(share < 0.0 for values in content.shares.values() for share in values if share is not None):
            parts.append(_paragraph(_NEGATIVE))
        parts += map(_paragraph, content.sentences)
        parts += [_flag(word, sentence) for word, sentence in content.flags.items()]
    return _fragment(parts)


def posterior_html(posterior: Posterior) -> str:
    """Return an answer as a fragment of HTML: one star in full, the first 20 of many as a table.

    Parameters
    ----------
    posterior : Posterior
    """
    if len(posterior) == 1:
        return star_html(posterior)
    many = len(posterior)
    parts = [f'<p class="stellerg-title"><strong>{counted(many, "star")}</strong>{_counts(posterior)}</p>']
    if many:
        parts += _summary(posterior.take(range(min(many, ROWS))))
    if many > ROWS:
        left = counted(many - ROWS, "more star")
        parts.append(_paragraph(f"{left} not shown here; table() gives every row."))
    parts.append(_paragraph(f"Convention: {posterior.energy_convention}; {posterior.time_convention}."))
    parts.append(_paragraph(f"Structure: prior {posterior.prior}. {posterior.prior_summary}"))
    for flag, text in FLAG_TEXT.items():
        count = int((posterior.has_results & (posterior.flags & int(flag) != 0)).sum())
        if count:
            parts.append(_flag(f"{text.word} ({counted(count, 'star')})", text.sentence))
    return _fragment(parts)


def _fragment(parts: Iterable[str]) -> str:
    return "\n".join(['<div class="stellerg-answer">', f"<style>\n{_STYLE}\n</style>", *parts, "</div>"])


def _words(text: str) -> str:
    """Text of the package, escaped; a power of ten is raised."""
    return re.sub(r"\b10\^(-?\d+)", r"10<sup>\1</sup>", escape(text))


def _paragraph(text: str) -> str:
    return f"<p>{_words(text)}</p>"


def _flag(word: str, sentence: str) -> str:
    return f'<p><span class="stellerg-fair">{escape(word)}</span>: {_words(sentence)}</p>'


def _status(word: str) -> str:
    kind = "good" if word == "ok" else "fair" if word in ("partial", "doubtful") else "none"
    return f'<span class="stellerg-{kind}">{escape(word)}</span>'


def _cell(html: str, kind: str = "number") -> str:
    return f'<td class="stellerg-{kind}">{html}</td>'


def _heading(text: str, kind: str = "number", scope: str = "col", span: int = 1) -> str:
    columns = f' colspan="{span}"' if span > 1 else ""
    return f'<th class="stellerg-{kind}" scope="{scope}"{columns}>{_words(text)}</th>'


def _name(text: str) -> str:
    """Heading of a row. Names of stars are shown as they are, so no power of ten is raised."""
    return f'<th class="stellerg-name" scope="row">{escape(text)}</th>'


def _table(head: Sequence[Sequence[str]], rows: Iterable[Sequence[str]], caption: str = "") -> str:
    lines = ['<table class="stellerg-table">']
    lines += [f"<caption>{escape(caption)}</caption>"] if caption else []
    lines += ["<thead>", *(f"<tr>{''.join(cells)}</tr>" for cells in head), "</thead>"]
    lines += ["<tbody>", *(f"<tr>{''.join(cells)}</tr>" for cells in rows), "</tbody>", "</table>"]
    return "\n".join(lines)


def _values(content: StarContent) -> str:
    head = [_heading("", "name"), *map(_heading, ("median", "68.27 % interval", "95.45 % interval"))]
    rows = [
        [
            _name(r.name),
            *(_cell(_words(x)) for x in (r.median, r.interval68, r.interval95)),
            _cell(_words(r.unit), "unit"),
        ]
        for r in content.values
    ]
    return _table([[*head, _heading("unit", "unit")]], rows)


def _budget(content: StarContent) -> str:
    """Quantities down and outputs across, with bars; the other way round, without, where there are many outputs."""
    caption = "Share of each quantity in the variance of the logarithm"
    if len(content.outputs) > ACROSS:
        head = [_heading("", "name"), *map(_heading, content.shares)]
        rows = [
            [_name(output), *(_cell(_percentage(values[place])) for values in content.shares.values())]
            for place, output in enumerate(content.outputs)
        ]
        return _table([head], rows, caption)
    known = [abs(share) for values in content.shares.values() for share in values if share is not None]
    full = max([1.0, *known])  # with correlations a share may exceed one
    head = [_heading("", "name"), *(_heading(output, "share") for output in content.outputs)]
    rows = [
        [_name(quantity), *(_cell(_bar(share, full, quantity), "share") for share in values)]
        for quantity, values in content.shares.items()
    ]
    return _table([head], rows, caption)


def _percentage(share: float | None) -> str:
    return "" if share is None else percentage(share).replace("-", "\N{MINUS SIGN}")


def _bar(share: float | None, full: float, quantity: str) -> str:
    if share is None:
        return ""
    kind = " stellerg-negative" if share < 0.0 else " stellerg-structure" if quantity == "structure" else ""
    bar = f'<span class="stellerg-bar{kind}" style="width: {100.0 * abs(share) / full:.1f}%"></span>'
    figure = f'<span class="stellerg-figure">{_percentage(share)}</span>'
    return f'{figure}<span class="stellerg-track" aria-hidden="true">{bar}</span>'


def _counts(posterior: Posterior) -> str:
    """Stars by status, in the order of the table of statuses."""
    counts = np.bincount(posterior.status, minlength=len(Status))
    listed = [
        f"{count:,} {_status(STATUS_TEXT[status].word)}" for status, count in zip(Status, counts, strict=True) if count
    ]
    return f": {', '.join(listed)}" if listed else ""


def _summary(posterior: Posterior) -> list[str]:
    """Table of stars (each output's median, interval and share of structure), and remarks on them."""
    shown = len(posterior)
    first = [_heading("star", "name"), _heading("status", "name")]
    second = [_heading("", "name"), _heading("", "name")]
    columns = []
    for output in posterior.outputs:
        values = posterior.quantile(STANDARD_PROBABILITIES, output)[:, :3]  # median and 68.27 %
        share = posterior.budget(output).get("structure", np.full(shown, np.nan))
        power = _column_power(values[:, 0])
        unit = with_power(posterior.units[output], power or 0)
        first.append(_heading(label(output) + (f" ({unit})" if unit else ""), "share", "colgroup", 3))
        second += [_heading(text) for text in ("median", "68.27 % interval", "structure")]
        columns.append([_output(*row, power) for row in zip(values, share, strict=True)])
    first.append(_heading("flags", "name"))
    second.append(_heading("", "name"))
    columns = list(zip(*columns, strict=True)) or [()] * shown
    rows, remarks = [], {}
    for row, text in enumerate(posterior.status_text()):
        star, flags = str(posterior.star[row]), flag_words(int(posterior.flags[row]))
        status = _cell(_status(status_word(posterior.status[row])), "status")
        rows.append([_name(star), status, *columns[row], _cell("<br>".join(flags), "flags")])
        if text:
            remarks.setdefault(text, []).append(star)
    sentences = [f"<p>{escape(', '.join(stars))}: {escape(text)}</p>" for text, stars in remarks.items()]
    return [_table([first, second], rows), f"<p>{_SHARE}</p>", *sentences]


def _column_power(medians: np.ndarray) -> int | None:
    """Power of ten common to a column; None where its values differ too much to share one."""
    known = medians[np.isfinite(medians) & (medians > 0.0)]
    if not known.size:
        return 0
    return power_of_ten(float(np.median(known))) if known.max() <= _SPREAD * known.min() else None


def _output(values: np.ndarray, share: float, power: int | None) -> str:
    """Return the three cells of one output; a dash where it is not given."""
    if not np.isfinite(values).all():
        return _cell("\N{EN DASH}") * 2 + _cell("")
    own = power_of_ten(float(values[0])) if power is None else power
    median, lower, upper = (number(float(value), own) for value in values)
    interval = f"{lower} to {upper}"
    if power is None and own:
        median, interval = (_words(text) for text in (f"{median} 10^{own}", f"({interval}) 10^{own}"))
    return _cell(median) + _cell(interval) + _cell("" if np.isnan(share) else _percentage(float(share)))
