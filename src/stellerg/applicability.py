"""Which stars a structure model describes, decided on the medians of their mass and radius.

M, R and temperature cannot tell a contracting star from a giant; a star stated evolved is described only by a model
that says so, since its core holds the energy. Stars a model does not describe keep the outputs without structure.
"""

from dataclasses import replace

import numpy as np
from scipy.special import ndtr

from stellerg.binding import MEAN_MOLECULAR_WEIGHT, Kind
from stellerg.notes import Notes
from stellerg.observables import STRUCTURE_OBSERVABLES
from stellerg.problem import COEFFICIENT, Problem
from stellerg.stars import EvolutionaryState, Stars
from stellerg.status import STATUS_TEXT, Flag, Status
from stellerg.structure.calibration import Calibration, Place
from stellerg.structure.files import main_sequence
from stellerg.structure.interior import Interior
from stellerg.structure.model import StructureModel
from stellerg.structure.observed import DISCREPANCY, Observed, direct_share
from stellerg.structure.relation import Relation
from stellerg.wording import label

__all__ = ["applicable"]

_EXCLUDED = 0.0227501319  # share of a prior beyond a calibrated value: outside the central 95.45 % (judgement)
_NEAR = 0.05  # probability beyond a boundary (judgement)
_STEP = 1e-4  # in ln M: for slopes of boundaries

_OUTSIDE = {
    Place.MASS_OUTSIDE: "the mass lies outside {low:g} to {high:g} solar masses; choose another prior",
    Place.TOO_SMALL: "the radius is below {small:g} of that of age zero: no main-sequence star of near-solar "
    "composition is so small; check mass and radius, or choose another prior",
    Place.CONTRACTING_OUTSIDE: "contracting stars above {convective:g} solar masses are covered only up to the "
    "radius at the end of the main sequence; choose another prior",
}


def applicable(
    problems: list[Problem],
    stars: Stars,
    structure: StructureModel | Calibration,
    discrepancy: float,
    notes: Notes,
) -> list[Problem]:
    """Give the stars that the model describes their interiors; the others a status, and what carries no structure."""
    kept = []
    for problem in problems:
        state = stars.evolutionary_state[problem.rows]
        notes.flags[problem.rows[state == EvolutionaryState.NOT_UNDERSTOOD]] |= int(Flag.STATE_NOT_UNDERSTOOD)
        if not problem.structured.any():
            kept.append(problem)
            continue
        if isinstance(structure, Calibration):
            kept += _calibrated(problem, stars, structure, discrepancy, notes)
        else:
            kept += _with_density(problem, stars, structure, discrepancy, notes)
    return [problem for problem in kept if len(problem)]


def _with_density(
    problem: Problem, stars: Stars, structure: StructureModel, discrepancy: float, notes: Notes
) -> list[Problem]:
    """Stars under a density on the index or the coefficient."""
    state = stars.evolutionary_state[problem.rows]
    evolved = state == EvolutionaryState.EVOLVED
    if "evolved" in structure.applies_to.evolutionary_state:
        evolved = np.zeros(len(problem), bool)
    outside = _outside(problem, state, structure) & ~evolved
    sentence = f"prior {structure.name} applies only to {_domain(structure)}; choose another prior"
    kept = _without_structure(problem, outside, Status.OUTSIDE_CALIBRATION, sentence, notes)
    sentence = STATUS_TEXT[Status.EVOLVED_OR_CONTRACTING].sentence
    kept += _without_structure(problem, evolved, Status.EVOLVED_OR_CONTRACTING, sentence, notes)
    here = ~outside & ~evolved
    described = problem.take(np.flatnonzero(here))
    if {"mass", "radius"} <= set(problem.latents) and len(described) and _asked_with_structure(problem):
        _compare(described, state[here], structure, notes)
    return [*kept, *_inside(described, stars, structure, None, discrepancy, notes)]


def _inside(
    problem: Problem, stars: Stars, structure, relation: Relation | None, discrepancy: float, notes: Notes
) -> list[Problem]:
    """Give stars their interiors: those with structure observables apart from the others."""
    given = {name: stars.measured[name].take(problem.rows) for name in STRUCTURE_OBSERVABLES if name in stars.measured}
    faulty = np.zeros(len(problem), bool)
    for measured in given.values():
        faulty |= measured.fault != Status.OK
    notes.flags[problem.rows[faulty]] |= int(Flag.MEASUREMENT_UNUSABLE)
    has = np.logical_or.reduce([m.usable for m in given.values()]) if given else np.zeros(len(problem), bool)
    made = []
    for rows, inside in ((np.flatnonzero(~has), False), (np.flatnonzero(has), True)):
        if not rows.size:
            continue
        some, law = problem.take(rows), relation and relation.take(rows)
        observed = None
        if inside:
            observed = _observed({n: m.take(rows) for n, m in given.items()}, some, stars, law, discrepancy)
        some = replace(some, interior=Interior.of(structure, law, observed, len(some)))
        unbound = _unbound(some)
        sentence = STATUS_TEXT[Status.NOT_BOUND].sentence
        made += _without(some, unbound, np.isin(some.kinds, (Kind.BINDING,)), Status.NOT_BOUND, sentence, notes)
        made.append(some.take(np.flatnonzero(~unbound)))
    return made


def _unbound(problem: Problem) -> np.ndarray:
    """Where the energy of ionisation exceeds what binds a star, at the medians, (star,)."""
    if problem.binding.ionisation is None or not (problem.kinds == Kind.BINDING).any():
        return np.zeros(len(problem), bool)
    latents = problem.log_latents(problem.log_median)
    known = {name: latents[:, k, None] for k, name in enumerate(problem.latents)}
    q = problem.interior.quantile(np.full((len(problem), 1), 0.5), known["mass"], known["radius"])
    molecular = known.get("mean_molecular_weight", np.log(MEAN_MOLECULAR_WEIGHT))
    return problem.binding.bound_share(q, known["mass"], known["radius"], molecular)[:, 0] <= 0.0


def _observed(measured, problem: Problem, stars: Stars, relation: Relation | None, discrepancy: float) -> Observed:
    """Structure observables of stars, with the size of the misfit and the relations that hold for each."""
    size = np.full(len(problem), discrepancy / DISCREPANCY)
    direct = np.zeros(len(problem))
    if "mass" in problem.latents:
        log_mass = problem.log_latents(problem.log_median)[:, problem.latent("mass")]
        size = size * main_sequence().misfit(log_mass)
        if relation is not None:
            direct = direct_share(log_mass)
    weight = stars.k2_weight[problem.rows]
    return Observed({n: m for n, m in measured.items() if m.usable.any()}, weight, DISCREPANCY * size, size, direct)


def _compare(problem: Problem, state: np.ndarray, structure: StructureModel, notes: Notes) -> None:
    """Mark stars too large for the main sequence, and those whose calibrated coefficient the prior excludes."""
    calibration = main_sequence()
    contracting = state == EvolutionaryState.PRE_MAIN_SEQUENCE
    log_mass, log_radius = _medians(problem)
    place = calibration.place(log_mass, log_radius, contracting)
    notes.flags[problem.rows[place == Place.CONTRACTING]] |= int(Flag.TAKEN_AS_CONTRACTING)
    notes.add(problem.rows[place == Place.BEYOND], Status.DOUBTFUL, STATUS_TEXT[Status.DOUBTFUL].sentence)
    covered = np.flatnonzero(_covered(place) & (state != EvolutionaryState.EVOLVED))
    if covered.size:
        relation = calibration.relation(log_mass[covered], log_radius[covered], contracting[covered])
        at = (log_mass[covered, None], log_radius[covered, None])
        value = relation.quantile(np.full((covered.size, 1), 0.5), *at)
        below = structure.cumulative(value, at[0])[:, 0]
        excluded = (below < _EXCLUDED) | (below > 1.0 - _EXCLUDED)
        notes.flags[problem.rows[covered[excluded]]] |= int(Flag.PRIOR_EXCLUDES_CALIBRATION)


def _covered(place: np.ndarray) -> np.ndarray:
    return np.isin(place, [kind for kind in Place if kind.covered])


def _medians(problem: Problem) -> tuple[np.ndarray, np.ndarray]:
    latents = problem.log_latents(problem.log_median)
    return latents[:, problem.latent("mass")], latents[:, problem.latent("radius")]


def _calibrated(
    problem: Problem, stars: Stars, structure: Calibration, discrepancy: float, notes: Notes
) -> list[Problem]:
    """Stars under a calibration, with their relations."""
    state = stars.evolutionary_state[problem.rows]
    if COEFFICIENT not in problem.outputs:  # mass or radius is unknown: no output with structure is asked of these
        return [problem]
    contracting = state == EvolutionaryState.PRE_MAIN_SEQUENCE
    evolved = state == EvolutionaryState.EVOLVED
    log_mass, log_radius = _medians(problem)
    place = np.where(evolved, Place.BEYOND, structure.place(log_mass, log_radius, contracting))
    numbers = {
        "low": structure.nodes.mass[0],
        "high": structure.nodes.mass[-1],
        "small": structure.smallest,
        "convective": structure.boundaries.last_mass("convective_above"),
    }
    kept = []
    for kind, sentence in _OUTSIDE.items():
        sentence = f"prior {structure.name}: {sentence.format(**numbers)}"
        kept += _without_structure(problem, place == kind, Status.OUTSIDE_CALIBRATION, sentence, notes)
    sentence = STATUS_TEXT[Status.EVOLVED_OR_CONTRACTING].sentence
    kept += _without_structure(problem, evolved, Status.EVOLVED_OR_CONTRACTING, sentence, notes)
    sentence = (
        f"prior {structure.name}: the star is too large for the main sequence: either a giant, which no prior here "
        "describes, or a star still contracting; if it is contracting, state evolutionary_state pre-main-sequence"
    )
    beyond = (place == Place.BEYOND) & ~evolved
    kept += _without_structure(problem, beyond, Status.EVOLVED_OR_CONTRACTING, sentence, notes)
    here = np.flatnonzero(_covered(place))
    described = problem.take(here)
    relation = structure.relation(log_mass[here], log_radius[here], contracting[here])
    for kind, flag in ((Place.CONTRACTING, Flag.TAKEN_AS_CONTRACTING), (Place.INFLATED, Flag.RADIUS_INFLATED)):
        notes.flags[described.rows[place[here] == kind]] |= int(flag)
    near = _beyond_boundary(described, structure, place[here]) > _NEAR
    notes.flags[described.rows[near]] |= int(Flag.NEAR_BOUNDARY)
    return [*kept, *_inside(described, stars, structure, relation, discrepancy, notes)]


def _beyond_boundary(problem: Problem, structure: Calibration, place: np.ndarray) -> np.ndarray:
    """Largest probability beyond a boundary of the calibration, with ln M and ln x taken as normal, (star,)."""
    log_mass, log_radius = _medians(problem)
    weights = np.broadcast_to(problem.latent_input_weights, (len(problem), *problem.latent_input_weights.shape[1:]))
    of_mass, of_radius = (weights[:, problem.latent(name)] for name in ("mass", "radius"))

    def probability(distance, weight):
        """P(distance > 0), for a distance that varies with the inputs as `weight` says."""
        sd = np.sqrt(np.maximum(problem.variance_of(weight), 0.0))
        with np.errstate(divide="ignore", invalid="ignore"):
            return np.where(sd > 0.0, ndtr(distance / sd), (distance > 0.0).astype(float))

    low, high = np.log(structure.nodes.mass[[0, -1]])
    found = np.maximum(probability(low - log_mass, of_mass), probability(log_mass - high, of_mass))

    def ends(at):
        return structure.relation_at(at)[:, 0], np.log(structure.boundaries.at("end", at))

    zams, end = ends(log_mass)
    next_zams, next_end = ends(log_mass + _STEP)
    slope, slope_end = (next_zams - zams) / _STEP, (next_zams + next_end - zams - end) / _STEP
    log_x = log_radius - zams
    found = np.maximum(found, probability(np.log(structure.smallest) - log_x, of_radius - slope[:, None] * of_mass))
    side = np.where(place == Place.CONTRACTING, -1.0, 1.0)
    past_end = probability(side * (log_x - end), of_radius - slope_end[:, None] * of_mass)
    stated = (place == Place.STATED_CONTRACTING) & (
        np.exp(log_mass) <= structure.boundaries.last_mass("convective_above")
    )
    return np.maximum(found, np.where(stated, 0.0, past_end))


def _outside(problem: Problem, state: np.ndarray, structure: StructureModel) -> np.ndarray:
    """Where a star's stated evolution or median mass lies outside what a model applies to, (star,)."""
    limits = structure.applies_to
    outside = np.zeros(len(problem), bool)
    if limits.evolutionary_state:
        allowed = [EvolutionaryState[word.replace("-", "_").upper()] for word in limits.evolutionary_state]
        allowed += [EvolutionaryState.UNKNOWN, EvolutionaryState.NOT_UNDERSTOOD]
        outside |= ~np.isin(state, allowed)
    if limits.mass is not None:
        mass = np.exp(problem.log_latents(problem.log_median)[:, problem.latent("mass")])
        outside |= (mass < limits.mass[0]) | (mass > limits.mass[1])
    return outside


def _asked_with_structure(problem: Problem) -> list[str]:
    """Outputs asked for that carry structure; the coefficient comes along unasked."""
    return [n for n, has in zip(problem.outputs, problem.structured, strict=True) if has and n != COEFFICIENT]


def _domain(structure: StructureModel) -> str:
    limits = structure.applies_to
    words = [f"{limits.mass[0]:g} to {limits.mass[1]:g} solar masses"] if limits.mass else []
    if limits.evolutionary_state:
        words.append("stars stated " + " or ".join(limits.evolutionary_state))
    return ", ".join(words)


def _without_structure(problem: Problem, rows: np.ndarray, status: Status, sentence: str, notes: Notes) -> list:
    """Give rows a status; what carries no structure stays available to them (`partial`)."""
    return _without(problem, rows, problem.structured, status, sentence, notes)


def _without(problem: Problem, rows, lost: np.ndarray, status: Status, sentence: str, notes: Notes) -> list:
    """Give rows a status and take some outputs from them; the others stay available (`partial`)."""
    rows = np.flatnonzero(rows)
    plain = np.flatnonzero(~lost)
    if not len(rows):
        return []
    if not any(problem.outputs[k] != COEFFICIENT for k in plain):
        notes.set(problem.rows[rows], status, sentence)
        return []
    part = problem.take(rows).only(plain)
    lacking = [n for n, gone in zip(problem.outputs, lost, strict=True) if gone and n != COEFFICIENT]
    if lacking:
        notes.add(problem.rows[rows], Status.PARTIAL, f"no {', '.join(map(label, lacking))}: {sentence}")
    return [part]
