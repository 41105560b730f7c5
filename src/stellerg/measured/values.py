"""Measured: one quantity of many stars, each a value with the distribution that its error assigns to it."""

from dataclasses import dataclass, field, fields
from functools import cached_property

import numpy as np

from stellerg.errors import InputError
from stellerg.measured import shapes
from stellerg.measured.shapes import SHAPE_WORDS, Scale, Shape
from stellerg.status import Status

__all__ = ["Measured", "assign"]

LN10 = float(np.log(10.0))
_HALF_LOG_2PI = 0.5 * float(np.log(2.0 * np.pi))
# d ln(quantity)/d(quoted value); a magnitude is -2.5 log10 of a flux or luminosity
LOG_PER_UNIT = {Scale.DEX: LN10, Scale.MAGNITUDE: -0.4 * LN10}

_CHUNK = 4096  # stars whose moments are taken together: bounds memory, changes no bit
_LARGEST_LOG10 = 60.0  # beyond is no star's quantity in any unit, and products of powers would overflow
_NO_EFFECT = 1e-25  # a probability below zero that moves no normal score above -10 by more than rounding

# Trapezoid in the normal score: spectrally accurate for smooth integrands, 1e-18 of the probability lies outside.
_COARSE = np.linspace(-6.5, 6.5, 27)  # for higher cumulants, which need no more than 1e-6 of themselves
_COARSE_WEIGHT = np.exp(-0.5 * _COARSE**2)
_COARSE_WEIGHT /= _COARSE_WEIGHT.sum()
_SCORE = np.linspace(-9.0, 9.0, 73)
_WEIGHT = np.exp(-0.5 * _SCORE**2)
_WEIGHT /= _WEIGHT.sum()


@dataclass(frozen=True)
class Measured:
    """One quantity of many stars in the scale in which it is quoted.

    Attributes
    ----------
    value, upper, lower : ndarray, (star,)
        Quoted value, upper and lower error (equal when symmetric; NaN where there is none).
    shape : ndarray of uint8, (star,)
        `Shape`: ABSENT where nothing usable was given.
    scale : Scale
        Linear, dex or magnitude; the same for all stars.
    fault : ndarray of uint8, (star,)
        `Status.OK`, or why the cell cannot be used (its shape is then ABSENT).
    cells : ndarray of object, (star,), or None
        The texts that were read, where there were texts: what a message quotes.
    """

    value: np.ndarray
    upper: np.ndarray
    lower: np.ndarray
    shape: np.ndarray
    scale: Scale = Scale.LINEAR
    fault: np.ndarray = field(default_factory=lambda: np.zeros(0, np.uint8))
    cells: np.ndarray | None = None

    def __post_init__(self):
        if self.fault.shape != self.shape.shape:
            object.__setattr__(self, "fault", np.zeros(self.shape.shape, np.uint8))

    def __len__(self) -> int:
        return len(self.value)

    def take(self, rows: np.ndarray) -> "Measured":
        """Return the rows asked for."""
        parts = {f.name: getattr(self, f.name) for f in fields(self)}
        taken = Measured(**{k: v[rows] if isinstance(v, np.ndarray) else v for k, v in parts.items()})
        for name in ("_moments", "log_cumulants", "removed"):  # what was worked out already goes along
            if name in self.__dict__:
                taken.__dict__[name] = self.__dict__[name][..., rows]
        return taken

    @classmethod
    def joined(cls, parts: "list[Measured]") -> "Measured":
        """Join the stars of several, in order."""
        whole = {}
        for f in fields(cls):
            values = [getattr(part, f.name) for part in parts]
            whole[f.name] = np.concatenate(values) if isinstance(values[0], np.ndarray) else values[0]
        return cls(**whole)

    @property
    def usable(self) -> np.ndarray:
        """Whether a row holds a measurement, (star,)."""
        return self.shape != Shape.ABSENT

    @property
    def exact(self) -> np.ndarray:
        """Whether a row holds an exact value, (star,)."""
        return self.shape == Shape.EXACT

    @property
    def log_normal(self) -> np.ndarray:
        """Whether ln(quantity) is normal or exact, (star,)."""
        return (self.shape == Shape.LOGNORMAL) | self.exact

    @cached_property
    def removed(self) -> np.ndarray:
        """Probability below zero that the restriction to positive values removed, (star,)."""
        removed = np.zeros(len(self))
        if self.scale is Scale.LINEAR:
            for shape, rows in self._groups:
                removed[rows] = shapes.probability_below_zero(shape, *self._parameters(rows))[:, 0]
        return np.where(removed < _NO_EFFECT, 0.0, removed)

    @cached_property
    def log_median(self) -> np.ndarray:
        """Logarithm of the quantity at normal score 0, (star,)."""
        return self.log_quantile(np.zeros((len(self), 1)))[:, 0]

    @cached_property
    def log_mean(self) -> np.ndarray:
        """Mean of ln(quantity), (star,)."""
        return self._moments[0]

    @cached_property
    def log_sd(self) -> np.ndarray:
        """Standard deviation of ln(quantity), (star,)."""
        return self._moments[1]

    @cached_property
    def log_cumulants(self) -> np.ndarray:
        """Cumulants 3 to 6 of ln(quantity), (4, star); 0 where it is normal or exact."""
        cumulants = np.zeros((4, len(self)))
        for shape, rows in self._groups:
            if shape in (Shape.EXACT, Shape.LOGNORMAL):
                continue
            for start in range(0, len(rows), _CHUNK):
                some = rows[start : start + _CHUNK]
                deviation = self.take(some).log_quantile(_COARSE[None, :]) - self.log_mean[some, None]
                power, moments = deviation * _COARSE_WEIGHT, []
                for _ in range(5):
                    power = power * deviation
                    moments.append(power.sum(axis=-1))
                two, three, four, five, six = moments
                cumulants[:, some] = (
                    three,
                    four - 3.0 * two**2,
                    five - 10.0 * three * two,
                    six - 15.0 * four * two - 10.0 * three**2 + 30.0 * two**3,
                )
        return cumulants

    @cached_property
    def expectation(self) -> np.ndarray:
        """Expectation of the quantity in its quoted scale, (star,)."""
        return self._moments[2]

    @cached_property
    def standard_deviation(self) -> np.ndarray:
        """Standard deviation of the quantity in its quoted scale, (star,)."""
        return self._moments[3]

    @cached_property
    def _moments(self) -> np.ndarray:
        """Means and standard deviations of ln(quantity) and of the quoted quantity, (4, star)."""
        moments = np.full((4, len(self)), np.nan)
        for shape, rows in self._groups:
            if shape in (Shape.EXACT, Shape.LOGNORMAL):
                moments[:, rows] = self._closed_moments(shape, rows)
                continue
            for start in range(0, len(rows), _CHUNK):
                some = rows[start : start + _CHUNK]
                quoted = self._quoted(shape, _SCORE[None, :], some)
                moments[:2, some] = _mean_and_sd(self.to_log(quoted))
                moments[2:, some] = _mean_and_sd(quoted)
        return moments

    def _closed_moments(self, shape, rows) -> tuple:
        """The four moments where exact formulas exist: exact values and log-normal ones."""
        value = self.value[rows]
        if shape is Shape.EXACT:
            return self.to_log(value), 0.0 * value, value, 0.0 * value
        sd = np.abs(self._log_slope(rows))
        if self.scale is not Scale.LINEAR:  # normal as quoted
            return self.to_log(value), sd, value, self.upper[rows]
        expectation = value * np.exp(0.5 * sd**2)
        return self.to_log(value), sd, expectation, expectation * np.sqrt(np.expm1(sd**2))

    def log_quantile(self, score: np.ndarray) -> np.ndarray:
        """ln(quantity) at normal scores.

        Parameters
        ----------
        score : ndarray, (star, k) or (1, k)

        Returns
        -------
        ndarray, (star, k)
            Decreasing in the score for magnitudes.
        """
        out = np.full((len(self), score.shape[1]), np.nan)
        for shape, rows in self._groups:
            here = score if len(score) == 1 else score[rows]
            if shape is Shape.LOGNORMAL:
                out[rows] = self.to_log(self.value[rows])[:, None] + self._log_slope(rows)[:, None] * here
            else:
                out[rows] = self.to_log(self._quoted(shape, here, rows))
        return out

    def score(self, logarithm: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Normal score of ln(quantity), and ln |d score/d ln(quantity)|: the inverse of `log_quantile`.

        Parameters
        ----------
        logarithm : ndarray, (star, k)

        Returns
        -------
        score, log_slope : ndarray, (star, k)
            Infinite, and minus infinity, beyond a hard end of the distribution.
        """
        score = np.full(logarithm.shape, np.nan)
        log_slope = np.full(logarithm.shape, np.nan)
        for shape, rows in self._groups:
            here = logarithm[rows]
            if shape is Shape.LOGNORMAL:
                step = self._log_slope(rows)[:, None]
                score[rows] = (here - self.to_log(self.value[rows])[:, None]) / step
                log_slope[rows] = -np.log(np.abs(step))
                continue
            quoted = self._to_quoted(here)
            base = shapes.base_score(shape, quoted, *self._parameters(rows))
            normal = shapes.restrict(base, self.removed[rows][:, None])
            # the slope is the density over ln(quantity) divided by that of the score
            inside = np.isfinite(normal)
            density = self._log_density(shape, base, quoted, here, rows) + _HALF_LOG_2PI
            score[rows] = normal
            log_slope[rows] = np.where(inside, density + 0.5 * np.square(np.where(inside, normal, 0.0)), -np.inf)
        return score, log_slope

    def log_density(self, logarithm: np.ndarray) -> np.ndarray:
        """Logarithm of the density over ln(quantity), (star, k)."""
        out = np.full(logarithm.shape, np.nan)
        for shape, rows in self._groups:
            here = logarithm[rows]
            if shape is Shape.LOGNORMAL:
                step = self._log_slope(rows)[:, None]
                score = (here - self.to_log(self.value[rows])[:, None]) / step
                out[rows] = -np.log(np.abs(step)) - 0.5 * score**2 - _HALF_LOG_2PI
            else:
                out[rows] = self._log_density(shape, None, self._to_quoted(here), here, rows)
        return out

    def _log_density(self, shape, score, quoted, logarithm, rows):
        """Logarithm of the density over ln(quantity) of the rows of one shape that is not log-normal."""
        density = shapes.log_base_density(shape, score, quoted, *self._parameters(rows))
        to_log = logarithm if self.scale is Scale.LINEAR else np.log(1.0 / abs(LOG_PER_UNIT[self.scale]))
        return density + to_log - np.log1p(-self.removed[rows])[:, None]

    @cached_property
    def _groups(self) -> tuple[tuple[Shape, np.ndarray], ...]:
        """Each shape present with its rows: at most five passes, never one a star."""
        shapes_present = (Shape.EXACT, Shape.NORMAL, Shape.LOGNORMAL, Shape.THREE_QUANTILE, Shape.SPLIT_NORMAL)
        groups = ((code, np.flatnonzero(self.shape == code)) for code in shapes_present)
        return tuple((code, rows) for code, rows in groups if rows.size)

    def _parameters(self, rows):
        return self.value[rows][:, None], self.upper[rows][:, None], self.lower[rows][:, None]

    def _log_slope(self, rows):
        """d ln(quantity)/d score of the log-normal rows."""
        if self.scale is Scale.LINEAR:
            return self.upper[rows] / self.value[rows]
        return LOG_PER_UNIT[self.scale] * self.upper[rows]

    def to_log(self, quoted):
        """ln(quantity) of a value in the quoted scale."""
        if self.scale is Scale.LINEAR:
            return np.log(quoted)
        return LOG_PER_UNIT[self.scale] * quoted

    def to_log_of_variable(self, quoted, log):
        """ln(quantity) of one value that carries its own arithmetic, given the logarithm that goes with it."""
        return log(quoted) if self.scale is Scale.LINEAR else LOG_PER_UNIT[self.scale] * quoted

    def log_derivative(self, quoted):
        """d ln(quantity)/d(quoted value)."""
        return 1.0 / quoted if self.scale is Scale.LINEAR else LOG_PER_UNIT[self.scale] + 0.0 * quoted

    def _to_quoted(self, logarithm):
        """Value in the quoted scale of ln(quantity)."""
        return np.exp(logarithm) if self.scale is Scale.LINEAR else logarithm / LOG_PER_UNIT[self.scale]

    def _quoted(self, shape, score, rows):
        value, upper, lower = self._parameters(rows)
        if shape is Shape.LOGNORMAL and self.scale is Scale.LINEAR:
            return value * np.exp(upper / value * score)
        if self.scale is not Scale.LINEAR or shape is Shape.EXACT:
            return shapes.base_value(shape, score, value, upper, lower)
        base = shapes.unrestrict(score, self.removed[rows][:, None])
        # far in the lower tail the restricted value may round to zero: the smallest positive share is kept
        return np.maximum(shapes.base_value(shape, base, value, upper, lower), 1e-16 * value)


def _mean_and_sd(values: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Mean and standard deviation of values at `_SCORE`, (star, node) to (star,)."""
    # a sum has the same bits in any company only along contiguous rows
    values = np.ascontiguousarray(values)
    mean = (values * _WEIGHT).sum(axis=-1)
    return mean, np.sqrt((np.square(values - mean[:, None]) * _WEIGHT).sum(axis=-1))


def assign(value, upper, lower, *, scale=Scale.LINEAR, exact=None, shape=None, fault=None, cells=None) -> Measured:
    """Assign distributions to quoted values: the rules of shapes and faults in one place.

    Parameters
    ----------
    value, upper, lower : array_like, (star,)
        As quoted; NaN where nothing was given.
    scale : Scale
    exact : array_like of bool, (star,), optional
        Values stated to have no error.
    shape : str or array_like of str, optional
        Shape by name, for all rows where it fits or for each row ('' or None: the default). The default is
        `normal` for symmetric errors (`lognormal` in dex and magnitudes), else `three-quantile`.
    fault : array_like of uint8, (star,), optional
        Faults found while reading.
    cells : ndarray of object, (star,), optional
        The texts that were read.

    Raises
    ------
    InputError
        If a shape given for all rows does not exist.
    """
    value, upper, lower = (np.array(x, float, ndmin=1) for x in (value, upper, lower))
    value, upper, lower = (np.array(x) for x in np.broadcast_arrays(value, upper, lower))
    fault = np.zeros(len(value), np.uint8) if fault is None else np.array(fault, np.uint8)
    exact = np.zeros(len(value), bool) if exact is None else np.array(np.broadcast_to(exact, value.shape))
    asymmetric = upper != lower
    code, unknown = _shape_codes(shape, asymmetric)
    exact |= code == Shape.EXACT
    given = ~np.isnan(value) | (fault != Status.OK)
    default = np.where(asymmetric, Shape.THREE_QUANTILE, Shape.NORMAL)
    code = np.where(exact, Shape.EXACT, np.where(code == Shape.ABSENT, default, code))
    if scale is not Scale.LINEAR:
        code = np.where(code == Shape.NORMAL, Shape.LOGNORMAL, code)
    # equal errors make the asymmetric shapes normal as quoted: one name for one distribution
    code = np.where(
        ~asymmetric & np.isin(code, (Shape.THREE_QUANTILE, Shape.SPLIT_NORMAL)),
        Shape.NORMAL if scale is Scale.LINEAR else Shape.LOGNORMAL,
        code,
    )
    with np.errstate(invalid="ignore"):
        for status, wrong in (
            (Status.NOT_A_NUMBER, np.isinf(value) | np.isinf(upper) | np.isinf(lower)),
            (Status.NOT_A_NUMBER, (value > 0.0) & (np.abs(_log10(value, scale)) > _LARGEST_LOG10)),
            (Status.NOT_POSITIVE, (value <= 0.0) if scale is Scale.LINEAR else np.zeros(len(value), bool)),
            (Status.NOT_POSITIVE, ~exact & ((upper < 0.0) | (lower < 0.0))),
            (Status.ERROR_MISSING, ~exact & (np.isnan(upper) | np.isnan(lower))),
            (Status.ERROR_ZERO, ~exact & ((upper == 0.0) | (lower == 0.0))),
            (Status.SHAPE_INVALID, unknown),
            (Status.SHAPE_INVALID, asymmetric & np.isin(code, (Shape.NORMAL, Shape.LOGNORMAL))),
        ):
            fault = np.where((fault == Status.OK) & given & wrong, status, fault)
    code = np.where(given & (fault == Status.OK), code, Shape.ABSENT).astype(np.uint8)
    return Measured(value, upper, lower, code, scale, fault.astype(np.uint8), cells)


def _log10(value: np.ndarray, scale: Scale) -> np.ndarray:
    """Logarithm to base 10 of quoted values; dex and magnitudes are logarithms already."""
    with np.errstate(divide="ignore", invalid="ignore"):
        return np.log10(value) if scale is Scale.LINEAR else value


def _shape_codes(shape, asymmetric: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Codes of shapes given by name (ABSENT where none), and where the name is unknown.

    One name for all rows applies where it fits: a symmetric shape to symmetric errors, an asymmetric one to
    asymmetric errors. A name in a row is meant for that row.
    """
    if shape is None or isinstance(shape, str):
        if shape and SHAPE_WORDS.get(shape, Shape.EXACT) is Shape.EXACT:
            choice = ", ".join(word for word, code in SHAPE_WORDS.items() if code is not Shape.EXACT)
            raise InputError(f"shape: {shape!r} cannot be the shape of all errors; choose one of {choice}")
        code = SHAPE_WORDS[shape] if shape else Shape.ABSENT
        fits = asymmetric == (code in (Shape.THREE_QUANTILE, Shape.SPLIT_NORMAL))
        return np.where(fits, code, Shape.ABSENT).astype(np.uint8), np.zeros(len(asymmetric), bool)
    words = np.array(["" if word is None else str(word).strip() for word in shape])
    if len(words) != len(asymmetric):
        raise InputError(f"shape: {len(words)} names for {len(asymmetric)} stars; give one name, or one a star")
    code = np.zeros(len(asymmetric), np.uint8)
    unknown = words != ""
    for word, member in SHAPE_WORDS.items():
        here = words == word
        code[here], unknown[here] = member, False
    return code, unknown
