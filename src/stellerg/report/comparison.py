"""The answer of one star under every applicable prior, so that its dependence on structure is seen."""

from collections.abc import Iterable
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path

from rich.console import Console, ConsoleOptions, Group, RenderableType, RenderResult
from rich.measure import Measurement
from rich.table import Table
from rich.text import Text

from stellerg.errors import InputError
from stellerg.posterior import Posterior
from stellerg.posterior.content import number, percentage, power_of_ten, with_power
from stellerg.posterior.document import star_document
from stellerg.propagation import propagate
from stellerg.stars import Stars
from stellerg.status import FLAG_TEXT
from stellerg.structure.calibration import Calibration
from stellerg.structure.files import available_priors, load_prior
from stellerg.structure.model import StructureModel
from stellerg.wording import counted, label

__all__ = ["Comparison", "PriorAnswer", "compare", "comparison_text"]

_FOR_ONE_STAR = ("present-sun",)  # its summary: for the Sun only; shown where it is asked for
_NO_WIDTH = 1e-9  # relative width below which an interval is rounding (judgement)
_WORTH_SAYING = 0.005  # share of a variance (judgement)
_FEW = 2  # names after "every prior but"
_UNLIMITED = 10_000  # columns: to measure a table that nothing makes narrower


@dataclass(frozen=True)
class PriorAnswer:
    """The answer of one star under one prior.

    Attributes
    ----------
    name : str
        Of the prior, as it is shown.
    limit : bool
        Whether it is a shipped prior that takes one structure as known: a limit, not a state of knowledge.
    in_use : bool
        Whether it is the prior asked for.
    posterior : Posterior
        Of the one star.
    """

    name: str
    limit: bool
    in_use: bool
    posterior: Posterior

    @cached_property
    def document(self) -> dict:
        """The answer as plain data (`star_document`)."""
        return star_document(self.posterior)

    @property
    def given(self) -> bool:
        """Whether there is a result."""
        return bool(self.posterior.has_results[0])


@dataclass(frozen=True)
class Comparison:
    """Answers of one star under several priors.

    Attributes
    ----------
    answers : tuple of PriorAnswer
        A prior that is not shipped first, then the shipped ones by name, then shipped limits by name.
    """

    answers: tuple[PriorAnswer, ...]

    @property
    def star(self) -> str:
        """Name of the star."""
        return self.answers[0].document["star"]

    @property
    def given(self) -> tuple[PriorAnswer, ...]:
        """Answers with a result."""
        return tuple(answer for answer in self.answers if answer.given)

    @property
    def refused(self) -> tuple[PriorAnswer, ...]:
        """Answers without a result."""
        return tuple(answer for answer in self.answers if not answer.given)

    @property
    def outputs(self) -> tuple[str, ...]:
        """Outputs that some prior gives, in the order asked for."""
        names = self.answers[0].posterior.outputs
        return tuple(n for n in names if any(a.document["outputs"][n] is not None for a in self.given))

    def power(self, output: str) -> int:
        """Power of ten to take out of an output, the same under every prior."""
        values = [a.document["outputs"][output] for a in self.given]
        return power_of_ten(max(value["median"] for value in values if value is not None))

    def documents(self) -> list[dict]:
        """Return the answers as plain data, one per prior, with those that have no result."""
        return [answer.document for answer in self.answers]

    def refusals(self) -> dict[str, str]:
        """Names of priors without a result by their reason: word and sentence."""
        reasons = ((f"{a.document['status']}: {a.document['status_text']}", a) for a in self.refused)
        return _named(reasons, self.answers)

    def remarks(self) -> dict[str, str]:
        """Names of priors by what their results need said: outputs not given, doubts."""
        said = ((a.document["status_text"], a) for a in self.given if a.document["status_text"])
        return _named(said, self.given)

    def flags(self) -> dict[str, str]:
        """Names of priors by flag, in the order of the table of flags."""
        found = _named(((word, a) for a in self.given for word in a.document["flags"]), self.given)
        return {text.word: found[text.word] for text in FLAG_TEXT.values() if text.word in found}

    def conventions(self) -> dict[str, str]:
        """Names of priors by convention: radiation may be counted under some only."""
        words = ((f"{c['energy']}; {c['time']}", a) for a in self.given for c in [a.document["convention"]])
        return _named(words, self.given)


def _named(pairs: Iterable[tuple[str, PriorAnswer]], among: tuple[PriorAnswer, ...]) -> dict[str, str]:
    """Names that go with the same words, by the words; if most of all answers have them, those that have not."""
    found: dict[str, list[str]] = {}
    for words, answer in pairs:
        found.setdefault(words, []).append(answer.name)
    joined = {}
    for words, names in found.items():
        others = [answer.name for answer in among if answer.name not in names]
        if len(names) > 1 and len(others) <= _FEW:
            joined[words] = "every prior" + (f" but {' and '.join(others)}" if others else "")
        else:
            joined[words] = ", ".join(names)
    return joined


def compare(
    stars: Stars, *, prior: str | Path | StructureModel | Calibration = "uniform-index", **settings
) -> Comparison:
    """Propagate the measurements of one star under every shipped prior, and under the one in use.

    Parameters
    ----------
    stars : Stars
        One star.
    prior : str, Path, StructureModel or Calibration
        The prior in use. One that is not shipped comes first; ``present-sun`` takes part only if it is this one.
    **settings
        Further arguments of `stellerg.propagate`.

    Returns
    -------
    Comparison

    Raises
    ------
    InputError, PriorError
        As `stellerg.propagate`, or if there is not one star.
    """
    if len(stars) != 1:
        raise InputError(f"compare: one star is wanted, got {counted(len(stars), 'star')}; take one with stars.take")
    shipped = {name: load_prior(name) for name in available_priors()}
    used = load_prior(prior) if isinstance(prior, str | Path) else prior
    # the same text is the same prior, wherever it was read
    own = used.name not in shipped or shipped[used.name].text != used.text
    models = {}
    if own:
        models[f"{used.name} (own)" if used.name in shipped else used.name] = used
    common = {name: m for name, m in shipped.items() if name not in _FOR_ONE_STAR or (name == used.name and not own)}
    models |= dict(sorted(common.items(), key=lambda item: (_is_limit(item[1]), item[0])))
    answers = []
    for name, model in models.items():
        in_use = model is used if own else name == used.name
        limit = name in shipped and _is_limit(model)
        answers.append(PriorAnswer(name, limit, in_use, propagate(stars, prior=model, **settings)))
    return Comparison(tuple(answers))


def _is_limit(model: StructureModel | Calibration) -> bool:
    """Whether a model takes one structure as known (by interval of mass, where it has several)."""
    if isinstance(model, Calibration):
        return False
    mixtures = [piece.mixture for piece in model.intervals]
    return all(len(m.components) == 1 and m.components[0].is_point for m in mixtures)


def comparison_text(comparison: Comparison) -> RenderableType:
    """Return the comparison, ready to print: a table, what goes with it, and who refused.

    Parameters
    ----------
    comparison : Comparison
    """
    parts: list[RenderableType] = [
        Text.assemble((comparison.star, "bold"), ": the answer under each prior", "" if comparison.given else ": none")
    ]
    if comparison.given:
        parts += [Text(), _Numbers(comparison), Text(), *map(Text, _sentences(comparison))]
        parts += [Text(f"{names}: {words}", style="yellow") for words, names in comparison.remarks().items()]
        sentences = {text.word: text.sentence for text in FLAG_TEXT.values()}
        parts += [
            Text(f"{word} ({names}): {sentences[word]}", style="yellow") for word, names in comparison.flags().items()
        ]
    if comparison.refused:
        parts += [Text(), Text("Priors without a result", style="bold")]
        parts += [Text(f"{names}: {reason}") for reason, names in comparison.refusals().items()]
    return Group(*parts)


@dataclass(frozen=True)
class _Numbers:
    """The table: outputs side by side where they fit, else one below the other."""

    comparison: Comparison

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> RenderResult:
        wide = self._across()
        width = Measurement.get(console, options.update(max_width=_UNLIMITED), wide).maximum
        yield wide if width <= options.max_width else self._down()

    def _across(self) -> Table:
        table = _table()
        table.add_column("\n\nprior", no_wrap=True)
        for output in self.comparison.outputs:
            table.add_column("\n\nmedian", justify="right", no_wrap=True)
            table.add_column(f"{label(output)}\n{self._unit(output)}\n68.27 % interval", justify="right", no_wrap=True)
            table.add_column("\n\nstructure", justify="right", no_wrap=True)
        for answer in self._rows(table):
            cells = (self._cells(answer, output) for output in self.comparison.outputs)
            table.add_row(_name(answer), *(cell for three in cells for cell in three))
        return table

    def _down(self) -> Table:
        table = _table()
        table.add_column("prior")
        for heading in ("median", "68.27 % interval", "structure"):
            table.add_column(heading, justify="right", no_wrap=True)
        for place, output in enumerate(self.comparison.outputs):
            if place:
                table.add_row()
            unit = self._unit(output)
            table.add_row(Text(f"{label(output)}, {unit}" if unit else label(output), style="bold"))
            for answer in self._rows(table):
                table.add_row(_name(answer), *self._cells(answer, output))
        return table

    def _rows(self, table: Table) -> Iterable[PriorAnswer]:
        """Answers in order; before the first of the limits, a line that says so."""
        before = False
        for answer in self.comparison.given:
            if answer.limit and not before:
                table.add_row(Text("limits", style="dim"))
                before = True
            yield answer

    def _unit(self, output: str) -> str:
        return with_power(self.comparison.answers[0].posterior.units[output], self.comparison.power(output))

    def _cells(self, answer: PriorAnswer, output: str) -> tuple[str, str, str]:
        """Median, interval and share of structure in the variance of the logarithm."""
        values, power = answer.document["outputs"][output], self.comparison.power(output)
        if values is None:
            return "not given", "", ""
        low, high = values["interval68"]
        interval = f"{number(low, power)} to {number(high, power)}" if high > low * (1.0 + _NO_WIDTH) else "no width"
        share = values["budget"].get("structure")
        return number(values["median"], power), interval, "" if share is None else percentage(share)


def _table() -> Table:
    return Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), header_style="dim")


def _name(answer: PriorAnswer) -> Text:
    return Text(f"{answer.name} *", style="bold") if answer.in_use else Text(answer.name)


def _sentences(comparison: Comparison) -> list[str]:
    """What the table means, and how much depends on the prior."""
    used = next(answer for answer in comparison.answers if answer.in_use)
    lines = [
        f"* prior in use: {used.name}{'' if used.given else ' (no result)'}. Structure: its share in the variance of "
        "the logarithm. Limits take one structure as known; what spreads is measured."
    ]
    for output in comparison.outputs:
        lines += _range(comparison, output)
    conventions = comparison.conventions()
    if len(conventions) == 1:
        lines.append(f"Convention: {next(iter(conventions))}.")
    else:
        lines += [f"Convention ({names}): {words}." for words, names in conventions.items()]
    lines += _shared(comparison)
    return lines


def _range(comparison: Comparison, output: str) -> list[str]:
    """Between which medians an output lies, limits left out."""
    values = [a.document["outputs"][output] for a in comparison.given if not a.limit]
    medians = [value["median"] for value in values if value is not None]
    if len(medians) < 2:
        return []
    low, high, power = min(medians), max(medians), comparison.power(output)
    if high <= low * (1.0 + _NO_WIDTH):
        return [f"{label(output)}: the same under each prior."]
    unit = with_power(comparison.answers[0].posterior.units[output], power)
    ends = f"{number(low, power)} to {number(high, power)}"
    ends = f"({ends}) {unit}" if power else f"{ends} {unit}".strip()
    return [f"{label(output)}: medians {ends}, a factor of {number(high / low, digits=3)} (limits left out)."]


def _shared(comparison: Comparison) -> list[str]:
    """Variance that mass and structure share, which stands in no column."""
    lines = []
    for answer in comparison.given:
        values = answer.document["outputs"]
        shares = {n: v["budget"].get("mass_and_structure") or 0.0 for n, v in values.items() if v is not None}
        words = [f"{percentage(x)} of {label(n)}" for n, x in shares.items() if abs(x) > _WORTH_SAYING]
        if words:
            lines.append(f"Under {answer.name} mass and structure together have a further share: {', '.join(words)}.")
    return lines
