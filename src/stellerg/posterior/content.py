"""What is said of one star, as words: `text` (terminal) and `html` (notebook) only lay it out."""

import math
from dataclasses import dataclass, field

from stellerg.errors import InputError
from stellerg.posterior.document import star_document
from stellerg.posterior.result import Posterior
from stellerg.status import FLAG_TEXT
from stellerg.wording import counted, label

__all__ = ["ACROSS", "StarContent", "ValueRow", "number", "percentage", "power_of_ten", "star_content", "with_power"]

ACROSS = 2  # with more outputs than this, the budget has outputs down and quantities across
_SILENT = ("correlations", "mass_and_structure")  # left out of the budget where they are zero everywhere


@dataclass(frozen=True)
class ValueRow:
    """One quantity with its intervals; a unit may begin with a power of ten (``10^48 erg``)."""

    name: str
    median: str
    interval68: str
    interval95: str
    unit: str


@dataclass(frozen=True)
class StarContent:
    """All that is said of one star; `outputs` is empty where there is no result.

    Attributes
    ----------
    star, status, status_text : str
    outputs : tuple of str
        In words.
    values : tuple of ValueRow
    shares : dict of str to list of (float or None)
        By quantity in words, one for each output.
    sentences : tuple of str
    flags : dict of str to str
        Sentence by word.
    """

    star: str
    status: str
    status_text: str
    outputs: tuple[str, ...] = ()
    values: tuple[ValueRow, ...] = ()
    shares: dict[str, list[float | None]] = field(default_factory=dict)
    sentences: tuple[str, ...] = ()
    flags: dict[str, str] = field(default_factory=dict)

    @property
    def uncertain(self) -> bool:
        """Whether anything has a share of a variance."""
        return any(share is not None for values in self.shares.values() for share in values)


def number(value: float, power: int = 0, digits: int = 4) -> str:
    """Return a number with significant digits, in units of a power of ten."""
    scaled = value / 10.0**power
    if scaled == 0.0:
        return "0"
    exponent = int(f"{scaled:.{digits - 1}e}".partition("e")[2])  # after rounding: 9.9996 has that of 10.00
    return f"{scaled:.{max(digits - 1 - exponent, 0)}f}"


def power_of_ten(value: float) -> int:
    """Power of ten to take out of a number too long to read."""
    exponent = math.floor(math.log10(abs(value))) if value else 0
    return exponent if not -4 < exponent < 5 else 0


def with_power(unit: str, power: int) -> str:
    """Return a unit with its power of ten: ``10^48 erg``."""
    return f"10^{power} {unit}".strip() if power else unit


def percentage(share: float) -> str:
    """Return a share of one in per cent."""
    return f"{100.0 * share:.1f} %"


def star_content(posterior: Posterior, row: int = 0, use_option: str = "--use") -> StarContent:
    """Return what is said of one star.

    Parameters
    ----------
    posterior : Posterior
    row : int
    use_option : str
        How the reader names independent measurements.

    Raises
    ------
    InputError
        If there is no such row.
    """
    if not 0 <= row < len(posterior):
        rows = counted(len(posterior), "row")
        raise InputError(f"row: {row} is not one of the {rows}, which are counted from 0")
    answer = star_document(posterior, row)
    given = {name: output for name, output in answer["outputs"].items() if output is not None}
    heading = {key: answer[key] for key in ("star", "status", "status_text")}
    if not given:
        return StarContent(**heading)
    sentences = {text.word: text.sentence for text in FLAG_TEXT.values()}
    return StarContent(
        **heading,
        outputs=tuple(map(label, given)),
        values=tuple(_values(given, answer["structure"])),
        shares=_shares(given),
        sentences=tuple(_sentences(posterior, answer, given, row, use_option)),
        flags={word: sentences[word] for word in answer["flags"]},
    )


def _values(given: dict, structure: dict):
    rows = [(name, output, output["unit"]) for name, output in given.items()]
    rows += [
        (name, values, "")
        for name, values in (
            ("structure coefficient", structure["coefficient"]),
            ("n_effective", structure["n_effective"]),
        )
        if values is not None
    ]
    for name, values, unit in rows:
        power = power_of_ten(values["median"])
        intervals = [" to ".join(number(end, power) for end in values[key]) for key in ("interval68", "interval95")]
        yield ValueRow(label(name), number(values["median"], power), *intervals, with_power(unit, power))


def _shares(given: dict) -> dict[str, list[float | None]]:
    quantities = dict.fromkeys(key for output in given.values() for key in output["budget"])
    shares = {q: [output["budget"].get(q) for output in given.values()] for q in quantities}
    return {label(q): values for q, values in shares.items() if q not in _SILENT or any(values)}


def _sentences(posterior: Posterior, answer: dict, given: dict, row: int, use_option: str) -> list[str]:
    lines = [
        f"Convention: {answer['convention']['energy']}; {answer['convention']['time']}.",
        f"Structure: prior {answer['prior']}. {posterior.prior_summary}",
        f"Engine: {answer['engine']} ({answer['engine_reason']}).",
        *_judgement(posterior.diagnostics(row)),
        _first_order(given),
    ]
    lines += _inside(answer, given)
    if answer["consistency"]:
        c = answer["consistency"]
        lines.append(
            f"Consistency of the redundant measurements: chi-squared {number(c['chi2'])} with "
            f"{counted(c['degrees_of_freedom'], 'degree')} of freedom, probability {c['probability']:.3g}."
        )
    aside = posterior.aside_sets[posterior.aside[row]]
    if aside:
        names = ", ".join(map(label, aside))
        if posterior.use:
            lines.append(f"Not named in use, and so not used: {names}.")
        else:
            lines.append(f"Left aside as redundant: {names} ({use_option} names independent measurements).")
    return lines


def _inside(answer: dict, given: dict) -> list[str]:
    """What is left out of the inside, what contradicts the prior, and what the calibration would give."""
    lines = []
    for name, sentence in (
        ("radiation", "Radiation carries {share} of the pressure ({counted})."),
        ("ionisation", "The energy of ionisation is {share} of the binding energy ({counted})."),
    ):
        part = answer[name]
        if part["share"] is not None:
            counted = "counted" if part["counted"] else "not counted"
            lines.append(sentence.format(share=f"{100.0 * part['share']:.2g} %", counted=counted))
    components = answer["structure"]["components"]
    if components:
        words = (f"{c['interior']} (w {number(c['coefficient'])}): {percentage(c['weight'])}" for c in components)
        lines.append(f"Structure is a mixture: {'; '.join(words)}.")
    for name, probability in answer["structure"]["predictive_probability"].items():
        if probability is not None:
            lines.append(f"{label(name)}: two-sided predictive probability under the prior {probability:.2g}.")
    calibrated = []
    for name, output in given.items():
        value = output["calibrated"]
        if value is not None:
            power = power_of_ten(value)
            text = f"{label(name)} {number(value, power)}"
            calibrated.append(f"{text} {with_power(output['unit'], power)}".strip())
    if calibrated:
        lines.append(f"Medians under the calibrated coefficient: {'; '.join(calibrated)}.")
    return lines


def _judgement(numbers: dict[str, float]) -> list[str]:
    """What an engine that draws says of its own work."""
    if "nested_rhat" in numbers:
        tau, error = numbers["autocorrelation_time"], numbers["largest_quantile_error"]
        return [
            f"Chains: {numbers['steps']:.0f} steps are {numbers['steps'] / tau:.0f} autocorrelation times of {tau:.1f} "
            f"steps; nested R-hat {numbers['nested_rhat']:.4f}; each quantile rests on "
            f"{numbers['effective_draws']:,.0f} effective draws or more, with a standard error of {error:.2g} or less "
            "in the logarithm."
        ]
    if "draws" in numbers:
        return [f"Draws: {numbers['draws']:,.0f}, worth {numbers['effective_draws']:,.0f} independent ones."]
    return []


def _first_order(given: dict) -> str:
    linear = []
    for name, output in given.items():
        value, uncertainty = output["linear"]["value"], output["linear"]["standard_uncertainty"]
        if value is not None:
            power = power_of_ten(value)
            text = f"{number(value, power)} ± {number(uncertainty, power, 3)}"
            unit = with_power(output["unit"], power)
            linear.append(f"{label(name)} {text if not power else f'({text})'} {unit}".rstrip())
    if not linear:
        return "First-order propagation has no derivative of this structure model here."
    return f"First-order propagation would give: {'; '.join(linear)}."
