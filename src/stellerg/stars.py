"""Stars: what was measured of one or many stars, star axis first."""

from collections.abc import Mapping
from dataclasses import dataclass, field, replace
from enum import IntEnum

import numpy as np

from stellerg.binding import Binding
from stellerg.composition import mass_fractions, with_molecular_weight
from stellerg.errors import InputError
from stellerg.inputs import measured_from
from stellerg.keyed_random import hash_identifiers
from stellerg.measured import Measured
from stellerg.observables import COMPOSITION, MEASURABLE, OBSERVABLES, STRUCTURE_OBSERVABLES, SolarReferences

__all__ = ["EvolutionaryState", "Stars", "state_codes"]


class EvolutionaryState(IntEnum):
    """What is stated about a star's evolution; masses and radii alone cannot tell a giant from a young star."""

    UNKNOWN = 0
    MAIN_SEQUENCE = 1
    PRE_MAIN_SEQUENCE = 2
    EVOLVED = 3
    NOT_UNDERSTOOD = 4  # a cell of a table that is none of the words; treated as unknown, and flagged


STATE_WORDS = {
    state.name.lower().replace("_", "-"): state
    for state in EvolutionaryState
    if state is not EvolutionaryState.NOT_UNDERSTOOD
}


@dataclass(frozen=True)
class Stars:
    """Measurements of stars.

    Attributes
    ----------
    identifier : ndarray of str, (star,)
    measured : dict of str to Measured
        By observable name; each over all stars, ABSENT where a star has no such measurement.
    correlation : dict of (str, str) to ndarray, (star,)
        Correlations of the normal scores of two observables, 0 where none was given.
    evolutionary_state : ndarray of uint8, (star,)
        `EvolutionaryState`.
    solar : SolarReferences
        For the asteroseismic scaling relations.
    k2_weight : ndarray, (star,)
        Weight of the star in the mean k2 of its system; 1 where it has none.
    key : ndarray of uint64, (star,)
        Hash of the identifier: what randomness is keyed by.
    """

    identifier: np.ndarray
    measured: Mapping[str, Measured]
    correlation: Mapping[tuple[str, str], np.ndarray] = field(default_factory=dict)
    evolutionary_state: np.ndarray | None = None
    solar: SolarReferences = field(default_factory=SolarReferences)
    k2_weight: np.ndarray | None = None
    key: np.ndarray | None = None

    def __post_init__(self):
        if self.key is None:
            object.__setattr__(self, "key", hash_identifiers(self.identifier))
        if self.evolutionary_state is None:
            object.__setattr__(self, "evolutionary_state", np.zeros(len(self.identifier), np.uint8))
        if self.k2_weight is None:
            object.__setattr__(self, "k2_weight", np.ones(len(self.identifier)))
        if set(COMPOSITION) & set(self.measured):
            object.__setattr__(self, "measured", with_molecular_weight(self.measured))

    def __len__(self) -> int:
        return len(self.identifier)

    @classmethod
    def of(
        cls,
        star=None,
        *,
        correlation: Mapping | None = None,
        shape=None,
        unit: Mapping[str, str] | None = None,
        evolutionary_state=None,
        solar: SolarReferences | None = None,
        mean_log_k2_weight=None,
        **observables,
    ) -> "Stars":
        """Build stars from whatever was measured.

        Parameters
        ----------
        star : str or sequence of str, optional
            Identifiers; the row number (from 1) where none is given.
        correlation : mapping of (str, str) to float or array_like, optional
            Correlations between two observables, in [-1, 1]. Correlations that ufloats carry are used too.
        shape : str or mapping of str to str or sequence of str, optional
            Shape of the errors, for all observables or by observable.
        unit : mapping of str to str, optional
            Units of bare numbers, by observable.
        evolutionary_state : str or sequence of str, optional
            main-sequence, pre-main-sequence, evolved or unknown.
        solar : SolarReferences, optional
        mean_log_k2_weight : float or array_like, (star,), optional
            Weight of the star in the mean k2 of its system, in (0, 1]; needed with `mean_log_k2`.
        **observables
            By name (``mass="1.02 ± 0.03"``, ``radius=(value, error)``, ...): see `measured_from`.

        Raises
        ------
        InputError
            If an observable is unknown, lengths differ, or a state or shape is unknown.

        Examples
        --------
        >>> Stars.of("K-7", mass="1.02 ± 0.03", radius="1.05(2)", luminosity="1.10 +0.12 -0.10")  # doctest: +SKIP
        """
        for name in (*observables, *(unit or ()), *(shape if isinstance(shape, Mapping) else ())):
            if name not in MEASURABLE:
                raise InputError(f"{name!r} is not an observable; choose from {', '.join(MEASURABLE)}")
        shapes = shape if isinstance(shape, Mapping) else dict.fromkeys(observables, shape)
        units = unit or {}
        measured = {
            name: measured_from(MEASURABLE[name], given, shape=shapes.get(name), unit=units.get(name, ""))
            for name, given in observables.items()
            if given is not None
        }
        for name in STRUCTURE_OBSERVABLES:
            if name in measured and measured[name].exact.any():
                raise InputError(f"{name}: what is measured of the inside needs an error; give one, however small")
        count = _common_length(measured, star)
        if star is None:
            star = np.arange(1, count + 1).astype(str)
        given = {pair: _correlation(pair, value, measured, count) for pair, value in (correlation or {}).items()}
        correlations = {**_correlations_of_ufloats(observables), **_symmetric(given)}
        return cls(
            identifier=np.atleast_1d(np.asarray(star)).astype(str),
            measured=measured,
            correlation={pair: _correlation(pair, value, measured, count) for pair, value in correlations.items()},
            evolutionary_state=state_codes(evolutionary_state, count),
            solar=solar or SolarReferences(),
            k2_weight=_k2_weight(mean_log_k2_weight, "mean_log_k2" in measured, count),
        )

    @classmethod
    def joined(cls, parts: "list[Stars]") -> "Stars":
        """Join stars that hold the same observables, in order."""
        first = parts[0]
        return replace(
            first,
            identifier=np.concatenate([p.identifier for p in parts]),
            measured={name: Measured.joined([p.measured[name] for p in parts]) for name in first.measured},
            correlation={pair: np.concatenate([p.correlation[pair] for p in parts]) for pair in first.correlation},
            evolutionary_state=np.concatenate([p.evolutionary_state for p in parts]),
            k2_weight=np.concatenate([p.k2_weight for p in parts]),
            key=np.concatenate([p.key for p in parts]),
        )

    def binding(self, binding: Binding, *, ionisation: bool) -> Binding:
        """How the stars are bound, with their energies of ionisation if these count."""
        if not ionisation:
            return binding
        from stellerg.structure.radiation import ionisation_energy

        return replace(binding, ionisation=ionisation_energy(*mass_fractions(self.measured, len(self))))

    def take(self, rows: np.ndarray) -> "Stars":
        """Return the rows asked for."""
        return replace(
            self,
            identifier=self.identifier[rows],
            measured={name: m.take(rows) for name, m in self.measured.items()},
            correlation={pair: c[rows] for pair, c in self.correlation.items()},
            evolutionary_state=self.evolutionary_state[rows],
            k2_weight=self.k2_weight[rows],
            key=self.key[rows],
        )


def state_codes(states, count: int, *, forgiving: bool = False) -> np.ndarray:
    """Codes of evolutionary states given by name, (star,).

    Parameters
    ----------
    states : str or array_like of str, (star,)
        '' , None and masked cells: unknown. Case, blanks and underscores do not matter.
    count : int
    forgiving : bool
        Whether an unknown name gives `NOT_UNDERSTOOD` (a cell of a table) instead of an error.

    Raises
    ------
    InputError
        If a name is unknown, or there are not as many as stars.
    """
    given = np.ma.filled(np.ma.asarray("" if states is None else states).astype(object), "")
    words = np.atleast_1d(np.where(np.equal(given, None), "", given)).astype(str)
    if len(words) not in (1, count):
        raise InputError(f"evolutionary_state: {len(words)} names for {count} stars; give one name, or one a star")
    plain = np.char.replace(np.char.replace(np.char.lower(np.char.strip(words)), "_", "-"), " ", "-")
    plain = np.broadcast_to(plain, (count,))
    codes = np.zeros(count, np.uint8)
    unknown = ~np.isin(plain, ("", *STATE_WORDS))
    if unknown.any() and not forgiving:
        row = int(np.flatnonzero(unknown)[0])
        raise InputError(
            f"evolutionary_state: {str(words[row if len(words) > 1 else 0])!r} is unknown; "
            f"choose from {', '.join(STATE_WORDS)}"
        )
    codes[unknown] = EvolutionaryState.NOT_UNDERSTOOD
    for word, state in STATE_WORDS.items():
        codes[plain == word] = state
    return codes


def _k2_weight(given, needed: bool, count: int) -> np.ndarray:
    """Weights in the mean k2 of systems, (star,)."""
    if given is None:
        if needed:
            raise InputError(
                "mean_log_k2: the weight of the star in the mean of its system is missing; give mean_log_k2_weight in "
                "(0, 1], or log_k2 if the value is of the star alone"
            )
        return np.ones(count)
    if not needed:
        raise InputError("mean_log_k2_weight: it weighs mean_log_k2, which was not given; give both, or leave it out")
    weight = np.broadcast_to(np.asarray(given, float), (count,)).copy()
    weight = np.where(np.isnan(weight), 1.0, weight)
    wrong = ~((weight > 0.0) & (weight <= 1.0))
    if wrong.any():
        raise InputError(f"mean_log_k2_weight: must lie in (0, 1], got {weight[wrong][0]:g}")
    return weight


def _common_length(measured: Mapping[str, Measured], star) -> int:
    lengths = {name: len(m) for name, m in measured.items()}
    if star is not None:
        lengths["star"] = len(np.atleast_1d(np.asarray(star)))
    if not measured:
        raise InputError("no measurement was given; give at least one observable, such as mass")
    if len(set(lengths.values())) > 1:
        raise InputError(
            f"columns have different lengths: {lengths}; give one value per star in each (a value with its error is a "
            "pair: (value, error))"
        )
    return next(iter(lengths.values()))


def _correlation(pair, value, measured: Mapping[str, Measured], count: int) -> np.ndarray:
    if len(pair) != 2 or pair[0] == pair[1]:
        raise InputError(f"correlation: {pair!r} must name two different observables")
    for name in pair:
        if name in measured and name not in OBSERVABLES:
            raise InputError(
                f"correlation: {name!r} constrains structure or composition, and is taken as independent; drop it"
            )
        if name not in measured:
            raise InputError(f"correlation: {name!r} was not given as an observable; give it, or drop the correlation")
    try:
        return np.array(np.broadcast_to(np.asarray(value, float), (count,)))
    except (TypeError, ValueError):
        raise InputError(
            f"correlation of {pair[0]} and {pair[1]}: {value!r} must be one number, or one for each of {count} stars"
        ) from None


def _symmetric(given: Mapping) -> dict:
    """One entry a pair, in the order of the table; what is given both ways and differs is no correlation."""
    found: dict[tuple[str, str], np.ndarray] = {}
    order = list(MEASURABLE)
    for pair, values in given.items():
        key = tuple(sorted(pair, key=order.index))
        found[key] = np.where(found[key] == values, values, np.inf) if key in found else values
    return found


def _correlations_of_ufloats(observables: Mapping) -> dict:
    """Correlations that ufloats carry between each other, by pair of observables.

    Ufloats are objects: this is the one place that looks at stars one by one, and only at those.
    """
    from itertools import combinations

    order = [name for name in OBSERVABLES if name in observables]
    lists = {}
    for name in order:
        given = observables[name]
        items = [given] if hasattr(given, "derivatives") else given
        many = isinstance(items, (list, tuple, np.ndarray)) and len(items) > 0
        if many and all(hasattr(item, "derivatives") for item in items):
            lists[name] = items
    if len(lists) < 2:
        return {}
    import uncertainties

    found = {}
    for (first, left), (second, right) in combinations(lists.items(), 2):
        pairs = zip(left, right, strict=False)
        rho = np.array([uncertainties.correlation_matrix(p)[0, 1] if p[0].s and p[1].s else 0.0 for p in pairs])
        if rho.any():
            found[first, second] = rho
    return found
