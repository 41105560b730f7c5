"""What became of a row (status) and what to know about it (flags): one table each.

Both are small integers everywhere inside; words and sentences are looked up when something is written.
"""

from dataclasses import dataclass
from enum import IntEnum, IntFlag

import numpy as np

__all__ = [
    "FLAG_TEXT",
    "STATUS_TEXT",
    "VALUE",
    "Flag",
    "Status",
    "carries_results",
    "flag_words",
    "status_word",
]


VALUE = "{value}"  # in a sentence, stands for the value of the cell at fault


class Status(IntEnum):
    """What became of a row. `OK`, `PARTIAL` and `DOUBTFUL` carry results."""

    OK = 0
    PARTIAL = 1
    DOUBTFUL = 2
    UNDERDETERMINED = 3
    ERROR_MISSING = 4
    ERROR_ZERO = 5
    NOT_POSITIVE = 6
    NOT_A_NUMBER = 7
    LIMIT_ONLY = 8
    UNIT_MISSING = 9
    SHAPE_INVALID = 10
    CORRELATION_INVALID = 11
    EXACT_VALUES_CONFLICT = 12
    PARALLAX_NOT_USABLE = 13
    EVOLVED_OR_CONTRACTING = 14
    OUTSIDE_CALIBRATION = 15
    NOT_BOUND = 16
    NOT_CONVERGED = 17
    ENGINE_REFUSED = 18


class Flag(IntFlag):
    """What to know about a result that was given."""

    NONE = 0
    MEASUREMENT_UNUSABLE = 1
    STRONGLY_ASYMMETRIC = 2
    POSITIVITY_RESTRICTED = 4
    PARALLAX_IMPRECISE = 8
    INCONSISTENT_OBSERVABLES = 16
    ABOVE_EDDINGTON_LIMIT = 32
    MASS_OUT_OF_RANGE = 64
    FEW_EFFECTIVE_DRAWS = 128
    STATE_NOT_UNDERSTOOD = 256
    TAKEN_AS_CONTRACTING = 512
    RADIUS_INFLATED = 1024
    NEAR_BOUNDARY = 2048
    PRIOR_EXCLUDES_CALIBRATION = 4096
    RADIATION_NEGLECTED = 8192
    PRIOR_DATA_CONFLICT = 16384
    USED_IN_TRAINING = 32768


@dataclass(frozen=True)
class Text:
    """A word for a column, and the sentence (with the way out) for a reader.

    A sentence may hold ``{name}`` and ``{unit}``, of the quantity at fault (`about`).
    """

    word: str
    sentence: str

    def about(self, name: str, unit: str) -> str:
        """Return the sentence about one quantity."""
        return self.sentence.replace("{name}", name).replace("{unit}", unit)


STATUS_TEXT: dict[Status, Text] = {
    Status.OK: Text("ok", "All requested outputs are given."),
    Status.PARTIAL: Text("partial", "Some requested outputs are given; the others lack a measurement."),
    Status.DOUBTFUL: Text(
        "doubtful",
        "if this star is a giant, the numbers are wrong by 10 to 300 times: it is too large for the main sequence, and "
        "a contracting star cannot be told from a giant by mass, radius and temperature; state its evolutionary_state "
        "(pre-main-sequence or evolved)",
    ),
    Status.UNDERDETERMINED: Text("underdetermined", "The measurements do not determine the requested outputs."),
    Status.ERROR_MISSING: Text(
        "error-missing",
        "a value without an error, or with one of two; quote it (1.0 ± 0.1, or a column {name}_error), or write "
        "'exact' after a value that has none",
    ),
    Status.ERROR_ZERO: Text(
        "error-zero",
        "an error of zero; quote the error, or write 'exact' after a value that has none",
    ),
    Status.NOT_POSITIVE: Text(
        "not-positive",
        "the value must be positive, and its errors are written without a sign; leave the cell empty if unknown "
        "(no -9.99)",
    ),
    Status.NOT_A_NUMBER: Text(
        "not-a-number",
        "this cannot be read as a finite number with its error; correct it (a decimal point, no comma; errors not "
        "in per cent), or leave the cell empty if unknown",
    ),
    Status.LIMIT_ONLY: Text(
        "limit-only", "a limit is not a measurement; give a value with its error, or leave the cell empty"
    ),
    Status.UNIT_MISSING: Text(
        "unit-missing", "the unit is missing or does not fit; state one that {name} can have, such as {unit}"
    ),
    Status.SHAPE_INVALID: Text(
        "shape-invalid",
        "the shape must be normal, lognormal, three-quantile, split-normal or exact, and the first two need equal "
        "upper and lower errors",
    ),
    Status.CORRELATION_INVALID: Text(
        "correlation-invalid",
        "the correlations must lie in [-1, 1] and form a positive semidefinite matrix (definite for "
        "over-determined stars); correct or drop them",
    ),
    Status.EXACT_VALUES_CONFLICT: Text(
        "exact-values-conflict", "values given as exact contradict each other; give at least one an error"
    ),
    Status.PARALLAX_NOT_USABLE: Text(
        "parallax-not-usable", "a parallax of zero or less gives no distance; give a distance instead"
    ),
    Status.EVOLVED_OR_CONTRACTING: Text(
        "evolved-or-contracting",
        "the star is stated evolved, and no prior here describes a giant (its energy sits in the core: an index "
        "prior is wrong by 10 to 300 times); ask for outputs without structure, or give a prior of your own that "
        "applies to evolved stars",
    ),
    Status.OUTSIDE_CALIBRATION: Text(
        "outside-calibration", "the structure model does not apply to this star; choose another prior"
    ),
    Status.NOT_BOUND: Text(
        "not-bound",
        "the total energy is not negative (adiabatic index of 4/3 or less, or more energy of ionisation than binds the "
        "star); give a larger --adiabatic-index, leave ionisation out, or ask for potential_energy",
    ),
    Status.NOT_CONVERGED: Text(
        "not-converged", "the engine did not reach a usable answer; see its diagnostics or try another engine"
    ),
    Status.ENGINE_REFUSED: Text(
        "engine-refused", "the engine chosen does not answer this star; choose the one named, or auto"
    ),
}

FLAG_TEXT: dict[Flag, Text] = {
    Flag.MEASUREMENT_UNUSABLE: Text(
        "measurement-unusable",
        "A measurement that cannot be used was left aside; the others determine the result.",
    ),
    Flag.STRONGLY_ASYMMETRIC: Text(
        "strongly-asymmetric",
        "An error pair has a ratio outside [1/2, 2]: the quoted numbers hardly fix the distribution (judgement).",
    ),
    Flag.POSITIVITY_RESTRICTED: Text(
        "positivity-restricted",
        "More than 0.1 % of the probability of a quoted value lay below zero and was removed (judgement).",
    ),
    Flag.PARALLAX_IMPRECISE: Text(
        "parallax-imprecise",
        "The parallax error exceeds 10 %: its inverse is a poor distance; give a distance (common practice).",
    ),
    Flag.INCONSISTENT_OBSERVABLES: Text(
        "inconsistent-observables",
        "The redundant measurements disagree: chi-squared probability below 0.01 (judgement).",
    ),
    Flag.ABOVE_EDDINGTON_LIMIT: Text(
        "above-eddington-limit",
        "With more than 5 % probability L exceeds 3.84e4 (M/Msun) Lsun, the Eddington limit for X = 0.7.",
    ),
    Flag.MASS_OUT_OF_RANGE: Text(
        "mass-out-of-range", "The mass lies below 0.075 or above 150 solar masses (judgement)."
    ),
    Flag.TAKEN_AS_CONTRACTING: Text(
        "taken-as-contracting",
        "Too large for the main sequence and below 0.7 solar masses, where no single star has evolved: still "
        "contracting (a stripped star in a binary is not covered).",
    ),
    Flag.RADIUS_INFLATED: Text(
        "radius-inflated",
        "Larger than any single star of its mass at the age of the Universe, and not evolved: the coefficient "
        "is held at its value for the largest such star, with a wider scatter (judgement).",
    ),
    Flag.NEAR_BOUNDARY: Text(
        "near-boundary",
        "More than 5 % of the probability of mass and radius lies beyond a boundary of the calibration (judgement).",
    ),
    Flag.PRIOR_EXCLUDES_CALIBRATION: Text(
        "prior-excludes-calibration",
        "The coefficient calibrated for main-sequence stars of this mass and radius lies outside the central 95.45 % "
        "of the prior: compare the medians under the calibration, or use prior main-sequence (judgement).",
    ),
    Flag.RADIATION_NEGLECTED: Text(
        "radiation-neglected",
        "Radiation carries more than 3 % of the pressure and is not counted: use pressure gas+radiation (judgement).",
    ),
    Flag.PRIOR_DATA_CONFLICT: Text(
        "prior-data-conflict",
        "A structure observable lies outside what the prior allows: two-sided predictive probability below 0.01 "
        "(judgement).",
    ),
    Flag.USED_IN_TRAINING: Text(
        "used-in-training",
        "The prior was learnt from stars that include this one: its measurements count twice.",
    ),
    Flag.STATE_NOT_UNDERSTOOD: Text(
        "state-not-understood",
        "The evolutionary state is not main-sequence, pre-main-sequence, evolved or unknown: taken as unknown.",
    ),
    Flag.FEW_EFFECTIVE_DRAWS: Text(
        "few-effective-draws",
        "The weighted draws are worth fewer than 1,000 independent ones: intervals are rough (judgement).",
    ),
}

# A row carries results when its status is one of the first three.
_LAST_WITH_RESULTS = Status.DOUBTFUL


def carries_results(status: np.ndarray) -> np.ndarray:
    """Whether rows carry results: boolean, of the shape of `status`."""
    return np.asarray(status) <= _LAST_WITH_RESULTS


def status_word(status: int) -> str:
    """Return the word written for a status."""
    return STATUS_TEXT[Status(status)].word


def flag_words(flags: int) -> tuple[str, ...]:
    """Return the words of the flags set in a bit mask, in the fixed order of the table."""
    return tuple(text.word for flag, text in FLAG_TEXT.items() if flags & flag)
