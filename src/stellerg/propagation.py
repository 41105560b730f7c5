"""The one question: from what was measured of stars to the posterior of their energies and times."""

import math
from collections.abc import Sequence
from dataclasses import fields, replace
from pathlib import Path

import numpy as np

from stellerg.assembly import assemble
from stellerg.checks.budget import budget
from stellerg.checks.inside import inside
from stellerg.checks.validity import flags
from stellerg.energetics import DEFAULT_OUTPUTS, OUTPUTS, Conventions
from stellerg.engines import AUTO_ORDER, ENGINES, Engine
from stellerg.engines.least_squares import fit
from stellerg.engines.linear import Linear
from stellerg.engines.sampling import Draws, Plan, sample
from stellerg.errors import InputError
from stellerg.notes import Notes
from stellerg.observables import OBSERVABLES
from stellerg.posterior import Piece, Posterior
from stellerg.problem import Problem
from stellerg.stars import Stars
from stellerg.status import Flag, Status
from stellerg.structure.calibration import Calibration
from stellerg.structure.files import load_prior, main_sequence
from stellerg.structure.model import StructureModel
from stellerg.structure.observed import DISCREPANCY

__all__ = ["propagate"]


def propagate(
    stars: Stars,
    *,
    outputs: Sequence[str] = DEFAULT_OUTPUTS,
    prior: str | Path | StructureModel | Calibration = "uniform-index",
    engine: str | Engine = "auto",
    conventions: Conventions | None = None,
    use: Sequence[str] | None = None,
    seed: int = 0,
    discrepancy: float = DISCREPANCY,
) -> Posterior:
    """Propagate measurements to posterior distributions.

    Parameters
    ----------
    stars : Stars
    outputs : sequence of str
        Of `stellerg.energetics.OUTPUTS`.
    prior : str, Path, StructureModel or Calibration
        A shipped structure model by name, a .toml file, or a loaded model.
    engine : str or Engine
        ``auto`` (for each star the cheapest engine that is exact for it), a name of
        `stellerg.engines.ENGINES`, or an engine with options of its own.
    conventions : Conventions, optional
        Which energy and time.
    use : sequence of str, optional
        Observables that are independent measurements; all of them are used. Default: the first determining
        set, since redundant columns are not evidence.
    seed : int
        For engines that draw; randomness is keyed by (seed, star).
    discrepancy : float
        Standard deviation of the misfit between the index of the energy and that of k2, for structure observables.

    Returns
    -------
    Posterior
        One row per star, in order; a star that cannot be done has a status and a sentence.

    Raises
    ------
    InputError
        If an output, observable or engine is unknown.
    PriorError
        If the structure model does not exist or is not a proper density.
    """
    if not (math.isfinite(discrepancy) and discrepancy >= 0.0):
        raise InputError(f"discrepancy: must be a number and not negative, got {discrepancy}; 0 for none")
    if seed < 0:
        raise InputError(f"seed: must not be negative, got {seed}")
    conventions = conventions or Conventions()
    structure = load_prior(prior) if isinstance(prior, str | Path) else prior
    outputs, use = _listed(outputs), None if use is None else _listed(use)
    choices = _choices(engine, seed)
    assembly = assemble(stars, outputs, conventions, structure, use, discrepancy)
    conventions, notes = assembly.conventions, assembly.notes
    used = np.full(len(stars), -1, np.int8)
    why = np.zeros(len(stars), np.int16)
    reasons = [""]
    chi2, probability = np.full((2, len(stars)), np.nan)
    freedom = np.zeros(len(stars), int)
    pieces = []
    ionisation = stars.binding(conventions.binding, ionisation=True).ionisation
    if structure.training:
        notes.flags[np.isin(stars.key, np.array(structure.training, np.uint64))] |= int(Flag.USED_IN_TRAINING)
    for problem in assembly.problems:
        for part, number, reason in _assign(problem, choices, engine == "auto", notes):
            if reason not in reasons:
                reasons.append(reason)
            answer = choices[number].solve(part)
            if part.over_determined:
                best = fit(part)
                chi2[part.rows], probability[part.rows] = best.chi2, best.probability
                freedom[part.rows] = best.degrees_of_freedom
            judged = inside(part, ionisation[part.rows])
            notes.flags[part.rows] |= flags(part, answer, probability[part.rows]) | judged.flags
            used[part.rows], why[part.rows] = number, reasons.index(reason)
            failed = answer.status != Status.OK
            for star in np.flatnonzero(failed):
                notes.set(part.rows[star : star + 1], Status.NOT_CONVERGED, answer.failure(int(star)))
            if failed.any():
                stands = np.flatnonzero(~failed)
                part, answer, judged = part.take(stands), answer.take(stands), judged.take(stands)
            if len(part):
                pieces.append(Piece(part.rows, answer, Linear().solve(part), *budget(answer), judged))
    excluded = np.flatnonzero(notes.flags & Flag.PRIOR_EXCLUDES_CALIBRATION)
    return Posterior(
        star=stars.identifier,
        outputs=assembly.outputs,
        units={name: OUTPUTS[name].unit_for(conventions) for name in assembly.outputs},
        descriptions={name: OUTPUTS[name].meaning for name in assembly.outputs},
        status=notes.status,
        reason=notes.reason,
        sentences=tuple(notes.sentences),
        quoted=_quoted(stars, notes),
        flags=notes.flags,
        aside=notes.aside,
        aside_sets=tuple(notes.aside_sets),
        engine=used,
        engine_reason=why,
        engines=tuple(choice.name for choice in choices),
        engine_reasons=tuple(reasons),
        use=tuple(use or ()),
        prior=structure.name,
        prior_summary=structure.summary,
        energy_convention=conventions.energy_text,
        time_convention=conventions.time_text,
        chi2=chi2,
        degrees_of_freedom=freedom,
        probability=probability,
        pieces=tuple(pieces),
        sampler=_sampler,
        radiation_counted=conventions.pressure != "gas",
        ionisation_counted=conventions.ionisation,
        calibrated_medians=_calibrated_medians(
            stars.take(excluded), excluded, len(stars), outputs, conventions, use, seed, discrepancy
        ),
    )


def _calibrated_medians(stars, rows, count, outputs, conventions, use, seed, discrepancy) -> dict[str, np.ndarray]:
    """Medians under the calibration of the outputs that carry structure, (star,) each; NaN but for some rows."""
    carrying = [name for name in outputs if OUTPUTS[name].carries_structure(conventions)]
    medians = {name: np.full(count, np.nan) for name in carrying}
    if len(rows) and carrying:
        under = propagate(
            stars,
            outputs=carrying,
            prior=main_sequence(),
            conventions=conventions,
            use=use,
            seed=seed,
            discrepancy=discrepancy,
        )
        for name in carrying:
            medians[name][rows] = under.median(name)
    return medians


def _listed(names: str | Sequence[str]) -> tuple[str, ...]:
    """Names as a tuple; one text may hold several, separated by commas."""
    if isinstance(names, str):
        return tuple(name.strip() for name in names.split(",") if name.strip())
    return tuple(names)


def _choices(engine: str | Engine, seed: int) -> list[Engine]:
    """Engines to try, in order."""
    if not isinstance(engine, str):
        return [engine]
    names = AUTO_ORDER if engine == "auto" else (engine,)
    unknown = [name for name in names if name not in ENGINES]
    if unknown:
        raise InputError(f"engine: {engine!r} is unknown; choose from auto, {', '.join(ENGINES)}")
    made = [ENGINES[name]() for name in names]
    return [replace(e, seed=seed) if any(f.name == "seed" for f in fields(e)) else e for e in made]


def _assign(problem: Problem, choices: list[Engine], auto: bool, notes: Notes):
    """Yield (stars, engine number, reason): each star goes to the first engine that accepts it."""
    left = np.arange(len(problem))
    refusal = np.zeros(len(problem), int)
    for number, engine in enumerate(choices):
        if not left.size:
            return
        verdict = engine.accepts(problem.take(left))
        for previous in np.unique(refusal[left][verdict == 0]):
            rows = left[(verdict == 0) & (refusal[left] == previous)]
            if not auto:
                reason = "asked for"
            elif number == 0:
                reason = "the cheapest engine that is exact for these measurements"
            else:
                reason = f"{choices[number - 1].name} refuses: {choices[number - 1].reasons[previous]}"
            yield problem.take(rows), number, reason
        refusal[left] = verdict
        left = left[verdict != 0]
    for code in np.unique(refusal[left]):
        rows = problem.rows[left[refusal[left] == code]]
        notes.set(rows, Status.ENGINE_REFUSED, f"{choices[-1].name} refuses: {choices[-1].reasons[code]}")


def _quoted(stars: Stars, notes: Notes) -> dict[int, str]:
    """What stands in the cell at fault, for each row whose status is about one."""
    quoted = {}
    names = list(OBSERVABLES)
    for code in np.unique(notes.culprit[notes.culprit >= 0]):
        measured = stars.measured[names[code]]
        rows = np.flatnonzero(notes.culprit == code)
        cells = measured.cells[rows] if measured.cells is not None else np.char.mod("%g", measured.value[rows])
        quoted.update(zip(rows.tolist(), map(str, cells), strict=True))
    return quoted


def _sampler(problem: Problem, count: int, seed: int) -> Draws:
    return sample(problem, Plan(count, seed, randomisations=1, shuffled=True))
