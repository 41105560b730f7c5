"""What was measured of a star's inside, and how the structure coefficient predicts it.

One index does not fit every integral of a real star, and the misfits of k2 and of the moment of inertia are one misfit:
with a common normal variate eps of the star and its misfit delta = misfit x eps in the index,

    n_k2 = n - delta,   n_I = n - 0.55 delta,   n = 5 - 3/w

predict log10 k2 and I/(M R^2) as those of polytropes. For main-sequence stars above 1.2 Msun direct relations of
interior models take over, entirely from 1.9 Msun:  ln w = -1.0272 - 0.3237 ln k2 + 0.028 eps  and
ln w = -1.2909 - 0.6436 ln(I/MR^2) + 0.016 eps.  The likelihood of a measurement is exp(-z^2/2), z its normal score.
"""

from collections.abc import Mapping
from dataclasses import dataclass, replace

import numpy as np
from scipy.special import ndtr, ndtri

from stellerg.measured import Measured
from stellerg.structure.relations import log10_apsidal_constant, log10_moment_of_inertia_factor

__all__ = ["DISCREPANCY", "INERTIA_SHARE", "Observed", "direct_share"]

DISCREPANCY = 0.25  # standard deviation of delta: derived from interior models, see above (judgement)
# The moment of inertia sees this part of the misfit of k2: the ratio over the stages of interior models, rounded
INERTIA_SHARE = 0.55
# slope, intercept and standard deviation of ln w = intercept + slope ln(observable), for M >= 1.9 Msun: fits to 41
# interior models (rms 2.8 % and 1.6 %)
_DIRECT = {"k2": (-0.3237, -1.0272, 0.028), "inertia": (-0.6436, -1.2909, 0.016)}
_DIRECT_FROM = (1.2, 1.9)  # solar masses between which the direct relations take over (judgement)
_LN10 = np.log(10.0)
_NODE, _WEIGHT = np.polynomial.legendre.leggauss(32)
_REACH = 45.0  # normal scores of eps: a sharp measurement that contradicts the prior is as far as that
_SEARCH = 17  # points of a search for the window of eps
_ROUNDS = 9  # at most; each narrows a window up to 8 times
_DROP = 32.0  # a likelihood lower by this in the logarithm does not count: 1e-14
_STRIDES = (59, 101, 149, 211, 277, 331, 383, 449)  # primes: share no factor with a power of two
_VALUES = 2**20  # bounds memory, changes no bit


def direct_share(log_mass: np.ndarray) -> np.ndarray:
    """Weight of the direct relations for main-sequence stars, any shape."""
    start, end = np.log(_DIRECT_FROM)
    return np.clip((log_mass - start) / (end - start), 0.0, 1.0)


@dataclass(frozen=True)
class Observed:
    """Structure observables of stars.

    Attributes
    ----------
    measured : dict of str to Measured
        log_k2, mean_log_k2, moment_of_inertia_factor, structure_coefficient; ABSENT where a star has none.
    k2_weight : ndarray, (star,)
        Of the star in the mean k2 of its system.
    misfit : ndarray, (star,)
        Standard deviation of delta; 0 for fully convective stars.
    size : ndarray, (star,)
        Misfit over that of `DISCREPANCY`: scales the direct relations' too.
    direct : ndarray, (star,)
        Weight of the direct relations.
    """

    measured: Mapping[str, Measured]
    k2_weight: np.ndarray
    misfit: np.ndarray
    size: np.ndarray
    direct: np.ndarray

    def take(self, which: np.ndarray) -> "Observed":
        """Return some of the stars."""
        return Observed(
            {name: m.take(which) for name, m in self.measured.items()},
            self.k2_weight[which],
            self.misfit[which],
            self.size[which],
            self.direct[which],
        )

    def convective(self) -> "Observed":
        """The same for fully convective stars: polytropes, without misfit."""
        none = np.zeros(len(self.misfit))
        return replace(self, misfit=none, size=none, direct=none)

    @property
    def any(self) -> np.ndarray:
        """Whether a star has a structure observable, (star,)."""
        return np.logical_or.reduce([m.usable for m in self.measured.values()])

    @property
    def has_companion(self) -> np.ndarray:
        """Whether a companion enters the likelihood of a star, (star,)."""
        if "mean_log_k2" not in self.measured:
            return np.zeros(len(self.misfit), bool)
        return self.measured["mean_log_k2"].usable & (self.k2_weight < 1.0)

    @property
    def blunt(self) -> np.ndarray:
        """Whether the likelihood of a star is an average over misfits or companions: no sharper than these, (star,)."""
        seen = [m.usable for name, m in self.measured.items() if name != "structure_coefficient"]
        sees = np.logical_or.reduce(seen) if seen else np.zeros(len(self.misfit), bool)
        return (sees & ((self.misfit > 0.0) | ((self.size > 0.0) & (self.direct > 0.0)))) | self.has_companion

    def predicted(self, name: str, q: np.ndarray, eps: np.ndarray, companion: np.ndarray | None = None) -> np.ndarray:
        """Natural logarithm of an observable at ln w = q, (star, m); `companion` is ln w of the companion."""
        if name == "structure_coefficient":
            return q + 0.0 * eps
        if name == "moment_of_inertia_factor":
            return self._relation("inertia", log10_moment_of_inertia_factor, INERTIA_SHARE, q, eps)
        own = self._relation("k2", log10_apsidal_constant, 1.0, q, eps)
        if name == "log_k2" or companion is None:
            return own
        other = self._relation("k2", log10_apsidal_constant, 1.0, companion, eps)
        share = self.k2_weight[:, None]
        with np.errstate(divide="ignore"):
            return np.logaddexp(np.log(share) + own, np.log1p(-share) + other)

    def _relation(self, key, polytropic, seen, q, eps):
        index = 5.0 - 3.0 * np.exp(-q)
        by_polytrope = _LN10 * polytropic(index - seen * self.misfit[:, None] * eps)
        if not self.direct.any():
            return by_polytrope
        slope, intercept, sd = _DIRECT[key]
        direct = (q - intercept - sd * self.size[:, None] * eps) / slope
        return by_polytrope + self.direct[:, None] * (direct - by_polytrope)

    def scores(self, name: str, q, eps, companion=None) -> np.ndarray:
        """Normal score of the prediction under the quoted distribution, (star, m); 0 where nothing was measured."""
        measured = self.measured[name]
        value = self.predicted(name, q, eps, companion)
        score = np.zeros(value.shape)
        here = np.flatnonzero(measured.usable)
        if here.size:
            score[here] = measured.take(here).score(value[here])[0]
        return score

    def log_likelihood(self, q, eps, companion=None) -> np.ndarray:
        """-z^2/2 summed over the observables, (star, m), at ln w, the variate of the misfit and ln w of a companion."""
        total = np.zeros(np.broadcast_shapes(np.shape(q), np.shape(eps)))
        for name in self.measured:
            with np.errstate(over="ignore"):
                total = total - 0.5 * np.square(self.scores(name, q, eps, companion))
        return total

    def marginal(self, q: np.ndarray, companions: np.ndarray | None = None) -> np.ndarray:
        """Logarithm of the likelihood averaged over eps and the companion.

        Parameters
        ----------
        q : ndarray, (star, m)
            ln w.
        companions : ndarray, (star, k), optional
            Equally probable values of ln w of the companion.
        """
        out = np.empty(q.shape)
        kind = np.where(self.has_companion, 2, np.where(self.blunt, 1, 0))
        for number in np.unique(kind):  # star by star, so that company changes no bit
            rows = np.flatnonzero(kind == number)
            if number == 0:
                out[rows] = self.take(rows).log_likelihood(q[rows], 0.0)
                continue
            pairs = companions if number == 2 else None
            count = q.shape[1] * _SEARCH * (1 if pairs is None else pairs.shape[1])
            size = max(1, _VALUES // count)
            for start in range(0, len(rows), size):
                some = rows[start : start + size]
                out[some] = self.take(some)._marginal(q[some], None if pairs is None else pairs[some])
        return out

    def _marginal(self, q, companions):
        stars, m = q.shape

        def log_integrand(eps):
            """At (star, m, k)."""
            k = eps.shape[2]
            flat_q = np.repeat(q, k, axis=1)
            flat = eps.reshape(stars, -1)
            value = self._averaged(flat_q, flat, companions) - 0.5 * flat**2
            return value.reshape(stars, m, k)

        low, high = self._window(q, companions)
        half = 0.5 * (high - low)
        eps = 0.5 * (high + low)[..., None] + half[..., None] * _NODE
        value = log_integrand(eps)
        top = value.max(axis=-1)
        safe = np.where(np.isfinite(top), top, 0.0)
        total = (np.exp(value - safe[..., None]) * _WEIGHT).sum(axis=-1) * half / np.sqrt(2.0 * np.pi)
        with np.errstate(divide="ignore"):
            return np.where(np.isfinite(top), safe + np.log(total), -np.inf)

    def _window(self, q, companions) -> tuple[np.ndarray, np.ndarray]:
        """Ends in eps between which the integrand counts, (star, m) each: searched until they stand, star by star."""
        low, high = np.full((2, *q.shape), _REACH)
        low, active = -low, np.arange(len(q))
        for _ in range(_ROUNDS):
            here = self.take(active)
            step = (high[active] - low[active]) / (_SEARCH - 1)
            eps = low[active][..., None] + step[..., None] * np.arange(_SEARCH)
            flat = eps.reshape(len(active), -1)
            pairs = None if companions is None else companions[active]
            value = here._averaged(np.repeat(q[active], _SEARCH, axis=1), flat, pairs) - 0.5 * flat**2
            value = value.reshape(eps.shape)
            counts = value >= value.max(axis=-1, keepdims=True) - _DROP
            first = np.argmax(counts, axis=-1)
            last = _SEARCH - 1 - np.argmax(counts[..., ::-1], axis=-1)
            start, length = low[active], high[active] - low[active]
            low[active] = start + step * np.maximum(first - 1, 0)
            high[active] = start + step * np.minimum(last + 1, _SEARCH - 1)
            shrinks = (high[active] - low[active] < 0.5 * length).any(axis=1)
            active = active[shrinks]
            if not active.size:
                break
        return low, high

    def _averaged(self, q, eps, companions):
        """Log likelihood averaged over companions, (star, m)."""
        if companions is None:
            return self.log_likelihood(q, eps)
        every = [self.log_likelihood(q, eps, companions[:, [k]]) for k in range(companions.shape[1])]
        return np.logaddexp.reduce(every, axis=0) - np.log(companions.shape[1])

    def predictive_probability(self, name: str, q: np.ndarray, companions: np.ndarray | None) -> np.ndarray:
        """Two-sided predictive probability of a measurement, (star,); NaN where there is none.

        Parameters
        ----------
        name : str
        q : ndarray, (star, m)
            Equally probable values of ln w before it was measured.
        companions : ndarray, (star, m), optional
            Idem of the companion, in an order of its own.
        """
        below, count = np.zeros(len(q)), q.shape[1]
        for stride in _STRIDES:  # equally probable misfits, in orders that have nothing to do with that of ln w
            eps = ndtri(((np.arange(count) * stride) % count + 0.5) / count)
            scores = self.scores(name, q, np.broadcast_to(eps, q.shape), companions)
            below += ndtr(-scores).mean(axis=-1) / len(_STRIDES)
        sense = np.where(below > 0.5, 1.0 - below, below)
        return np.where(self.measured[name].usable, 2.0 * np.maximum(sense, 0.0), np.nan)
