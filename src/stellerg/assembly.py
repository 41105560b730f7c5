"""From Stars to Problems: rows are grouped by the measurements they hold; nothing is looped over stars.

What keeps a row from an answer becomes a status with its sentence here; a row that stands in no problem has
one, and no row is dropped.
"""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from stellerg.applicability import applicable
from stellerg.binding import Kind
from stellerg.energetics import OUTPUTS, Conventions
from stellerg.errors import InputError
from stellerg.notes import Notes
from stellerg.observables import COMPOSITION, LATENTS, OBSERVABLES
from stellerg.problem import COEFFICIENT, Problem
from stellerg.selection import Need, Selection, determined, select
from stellerg.stars import Stars
from stellerg.status import STATUS_TEXT, Flag, Status
from stellerg.structure.calibration import Calibration
from stellerg.structure.interior import Interior
from stellerg.structure.model import StructureModel
from stellerg.structure.observed import DISCREPANCY
from stellerg.wording import label

__all__ = ["Assembly", "assemble"]

_EXACT_TOLERANCE = 1e-9  # relative disagreement of exact values that is taken for rounding
_SEMIDEFINITE = -1e-10  # an eigenvalue below is negative, not rounding


@dataclass(frozen=True)
class Assembly:
    """Problems, the outputs asked for and the conventions they follow, and notes on every row."""

    problems: tuple[Problem, ...]
    outputs: tuple[str, ...]
    conventions: Conventions
    notes: Notes


def assemble(
    stars: Stars,
    outputs: Sequence[str],
    conventions: Conventions,
    structure: StructureModel | Calibration,
    use: Sequence[str] | None = None,
    discrepancy: float = DISCREPANCY,
) -> Assembly:
    """Group stars into problems.

    Raises
    ------
    InputError
        If an output or an observable of `use` is unknown.
    """
    if isinstance(structure, Calibration):  # radiation always counts under it
        conventions = replace(conventions, pressure="gas+radiation")
    _check_names(outputs, OUTPUTS, "output")
    if use is not None:
        _check_names(use, OBSERVABLES, "observable in use")
        absent = [name for name in use if name not in stars.measured]
        if absent:
            raise InputError(f"use: {', '.join(absent)} was not given; name observables that the stars have")
    notes = Notes.empty(len(stars))
    for name in COMPOSITION:
        if name in stars.measured:
            notes.flags[stars.measured[name].fault != Status.OK] |= int(Flag.MEASUREMENT_UNUSABLE)
    needs, bound = _needs(outputs, conventions, structure)
    problems: list[Problem] = []
    for rows, selection in _patterns(stars, needs, use, notes):
        if selection.status != Status.OK:
            notes.set(rows, selection.status, selection.reason, selection.culprit)
        given = [n for n, has in zip(needs, selection.given, strict=True) if has]
        if not given:
            continue
        given = [need for need in given if need.name in bound]
        if not given:
            notes.add(rows, Status.NOT_BOUND, STATUS_TEXT[Status.NOT_BOUND].sentence)
            continue
        if len(given) < sum(selection.given):
            lacking = ", ".join(
                label(n.name) for n, has in zip(needs, selection.given, strict=True) if has and n not in given
            )
            notes.add(rows, Status.PARTIAL, f"no {lacking}: {STATUS_TEXT[Status.NOT_BOUND].sentence}")
        problems += _problems_of_pattern(stars, rows, selection, given, conventions, structure, notes)
    problems = applicable(problems, stars, structure, discrepancy, notes)
    return Assembly(tuple(problems), tuple(outputs), conventions, notes)


def _check_names(names: Sequence[str], known: Sequence[str], what: str) -> None:
    if not names:
        raise InputError(f"{what}: none was named; choose from {', '.join(known)}")
    for name in names:
        if name not in known:
            raise InputError(f"{what}: {name!r} is unknown; choose from {', '.join(known)}")
    if len(set(names)) < len(names):
        raise InputError(f"{what}: {', '.join(names)} names one twice")


def _needs(outputs, conventions, structure) -> tuple[list[Need], set[str]]:
    """What must be determined for each output, and the outputs whose factor is positive.

    What a structure model looks at is a need of every output that carries structure; radiation needs the mass, and
    ionisation the radius too.
    """
    unit = dict(zip(LATENTS, map(tuple, np.eye(len(LATENTS))), strict=True))
    needs, bound = [], set()
    for name in outputs:
        output = OUTPUTS[name]
        kind = output.kind(conventions)
        looks_at = set(structure.needs if kind != Kind.NONE else ())
        if kind in (Kind.BINDING, Kind.INTERNAL):
            looks_at |= {"mass"} if conventions.pressure != "gas" else set()
            looks_at |= {"mass", "radius"} if conventions.ionisation else set()
        monomial = (*map(float, output.exponents), *[0.0] * (len(LATENTS) - len(output.exponents)))
        needs.append(Need(name, (monomial, *(unit[latent] for latent in LATENTS if latent in looks_at))))
        if output.factor(conventions) > 0.0:
            bound.add(name)
    return needs, bound


def _patterns(stars: Stars, needs, use, notes: Notes):
    """Yield the rows of each pattern of usable and faulty cells with what is selected for them."""
    names = [name for name in OBSERVABLES if name in stars.measured]
    if len(stars) == 0:
        return
    if not names:  # nothing but what constrains structure or composition
        yield np.arange(len(stars)), select([], {}, needs, use)
        return
    # one integer a row: the fault, or the presence, of every observable
    states = np.stack([np.where(stars.measured[n].usable, 1, stars.measured[n].fault + 1) for n in names], axis=1)
    present = np.stack([stars.measured[n].usable | (stars.measured[n].fault != 0) for n in names], axis=1)
    patterns, which = np.unique(np.where(present, states, 0).astype(np.uint8), axis=0, return_inverse=True)
    order = np.argsort(which.ravel(), kind="stable")
    starts = np.searchsorted(which.ravel()[order], np.arange(len(patterns) + 1))
    for number, pattern in enumerate(patterns):
        rows = np.sort(order[starts[number] : starts[number + 1]])
        usable = [n for n, state in zip(names, pattern, strict=True) if state == 1]
        faults = {n: Status(state - 1) for n, state in zip(names, pattern, strict=True) if state > 1}
        selection = select(usable, faults, needs, use)
        if selection.aside not in notes.aside_sets:
            notes.aside_sets.append(selection.aside)
        notes.aside[rows] = notes.aside_sets.index(selection.aside)
        if faults and selection.status == Status.OK:
            notes.flags[rows] |= int(Flag.MEASUREMENT_UNUSABLE)
        yield rows, selection


def _problems_of_pattern(
    stars: Stars, rows, selection: Selection, given, conventions, structure, notes: Notes
) -> list[Problem]:
    """Split the rows of a pattern by which values are exact, eliminate those, and check the correlations."""
    exact = np.stack([stars.measured[name].exact[rows] for name in selection.chosen], axis=1)
    cases, which = np.unique(exact, axis=0, return_inverse=True)
    problems = []
    for number, case in enumerate(cases):
        here = rows[which.ravel() == number]
        problem, conflict = _eliminate(stars, here, selection.chosen, case, given, conventions, structure)
        notes.set(here[conflict], Status.EXACT_VALUES_CONFLICT, STATUS_TEXT[Status.EXACT_VALUES_CONFLICT].sentence)
        invalid = _invalid_correlations(stars, problem) | _idle_correlations(stars, problem, selection.chosen, case)
        notes.set(
            here[invalid & ~conflict],
            Status.CORRELATION_INVALID,
            STATUS_TEXT[Status.CORRELATION_INVALID].sentence,
        )
        problem = problem.take(np.flatnonzero(~conflict & ~invalid))
        if len(problem):
            problems.append(problem)
    return problems


def _eliminate(stars, rows, chosen, exact, given, conventions, structure) -> tuple[Problem, np.ndarray]:
    """The problem of some rows, with exact values as constraints; and where these contradict each other."""
    observables = [OBSERVABLES[name] for name in chosen]
    exponents = np.array([o.exponents for o in observables], float)
    reference = np.array([o.reference_for(stars.solar) for o in observables])
    # parameters: an orthonormal basis of what the observables see of (ln M, ln R, ln L, ln d)
    _, size, basis = np.linalg.svd(exponents, full_matrices=False)
    basis = basis[size > 1e-9]
    design = exponents @ basis.T
    measured = [stars.measured[name].take(rows) for name in chosen]
    fixed, conflict, free = np.zeros((len(rows), len(basis))), np.zeros(len(rows), bool), np.eye(len(basis))
    if exact.any():
        quoted = np.stack([m.log_median for m, e in zip(measured, exact, strict=True) if e], axis=1) - reference[exact]
        fixed = np.einsum("re,se->sr", np.linalg.pinv(design[exact]), quoted)
        misfit = np.einsum("er,sr->se", design[exact], fixed) - quoted
        conflict = np.abs(misfit).max(axis=1) > _EXACT_TOLERANCE
        _, size, directions = np.linalg.svd(design[exact])
        rank = int((size > 1e-9).sum())
        free = directions[rank:].T
    base = reference + np.einsum("jr,sr->sj", design, fixed)
    design = design @ free
    # a measured value of something that exact values fix carries no information
    kept = np.flatnonzero(~exact & (np.abs(design).max(axis=1, initial=0.0) > 1e-9))
    names = [need.name for need in given]
    wanted = np.array([need.monomials[0] for need in given]).reshape(len(given), len(LATENTS))
    kinds = [OUTPUTS[name].kind(conventions) for name in names]
    binding = stars.binding(conventions.binding, ionisation=conventions.ionisation).take(rows)
    constant = [
        OUTPUTS[name].log_constant(conventions)
        + np.log(OUTPUTS[name].factor(conventions) if binding.constant else OUTPUTS[name].prefactor(conventions))
        for name in names
    ]
    known = [n for n, latent in enumerate(LATENTS) if determined(tuple(np.eye(len(LATENTS))[n]), chosen)]
    latent = np.eye(len(LATENTS))[known]
    if {LATENTS.index(latent) for latent in structure.needs} <= set(known):
        names, kinds, constant = [*names, COEFFICIENT], [*kinds, Kind.COEFFICIENT], [*constant, 0.0]
        wanted = np.concatenate([wanted, np.zeros((1, len(LATENTS)))])
    problem = Problem(
        rows=rows,
        key=stars.key[rows],
        inputs=tuple(chosen[j] for j in kept),
        measured=tuple(measured[j] for j in kept),
        design=design[kept],
        base=base[:, kept],
        correlation=_correlation(stars, rows, [chosen[j] for j in kept]),
        outputs=tuple(names),
        weights=wanted @ basis.T @ free,
        constant=np.array(constant) + np.einsum("or,sr->so", wanted @ basis.T, fixed),
        kinds=np.array(kinds, int),
        latents=tuple(LATENTS[n] for n in known),
        latent_weights=latent @ basis.T @ free,
        latent_constant=np.einsum("lr,sr->sl", latent @ basis.T, fixed),
        interior=Interior(structure),
        binding=binding,
    )
    return problem, conflict


def _correlation(stars: Stars, rows, inputs) -> np.ndarray | None:
    """Correlation matrices, (star, input, input); None if no correlation was given."""
    matrix = None
    for (first, second), values in stars.correlation.items():
        if first in inputs and second in inputs and (values[rows] != 0.0).any():
            if matrix is None:
                matrix = np.tile(np.eye(len(inputs)), (len(rows), 1, 1))
            i, j = inputs.index(first), inputs.index(second)
            matrix[:, i, j] = matrix[:, j, i] = values[rows]
    return matrix


def _invalid_correlations(stars: Stars, problem: Problem) -> np.ndarray:
    """Where correlations are not numbers in [-1, 1] or not positive semidefinite, (star,).

    A correlation of two observables is checked also where one of them is exact or left aside.
    """
    invalid = np.zeros(len(problem), bool)
    for values in stars.correlation.values():
        here = values[problem.rows]
        invalid |= ~(np.abs(here) <= 1.0)
    if problem.correlation is not None:
        safe = np.where(invalid[:, None, None], np.eye(len(problem.inputs)), problem.correlation)
        least = np.linalg.eigvalsh(safe)[:, 0]
        invalid |= least < (-_SEMIDEFINITE if problem.over_determined else _SEMIDEFINITE)
    return invalid


def _idle_correlations(stars: Stars, problem: Problem, chosen, exact) -> np.ndarray:
    """Where a measurement of what exact values fix, which is not used, is correlated with one that is, (star,)."""
    idle = {name for name, fixed in zip(chosen, exact, strict=True) if not fixed} - set(problem.inputs)
    found = np.zeros(len(problem), bool)
    for pair, values in stars.correlation.items():
        if len(idle.intersection(pair)) == 1 and set(problem.inputs).intersection(pair):
            found |= values[problem.rows] != 0.0
    return found
