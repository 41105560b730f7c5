r"""Texts of measured values, read a column at a time: value, errors, what kind of statement it is, and unit.

What is read (blanks are free between the parts; `x` is a number such as `1.02`, `.5`, `5.`, `-2.8e-1`)::

    x                                 a value without an error
    x exact   x (exact)   x K exact   a value stated to have no error
    x ± a   x +/- a   x +- a   x\pm a one error; also (x ± a) before a unit
    x(3)   x(0.03)   x(3)e-5          one error in the last places of x; literal if it has a decimal point
    x +a -b   x -b +a   x +a/-b       upper and lower error, the signs always written
    x^{+a}_{-b}   x_{-b}^{+a}         the same as super- and subscript, in any $...$; braces may be left out
    <x   >x   <=x   ≤x   \lesssim x   a limit

A unit may follow. It is cut out, not interpreted. Exponents are e, E or Fortran's d, D, of up to four digits.
The minus signs, plus signs and spaces that come with pasted text count as the plain ones.

What is refused (`NOT_A_NUMBER`), because it has more than one meaning or none: a decimal comma; an error that
is missing, negative, or without its sign in an upper and lower pair; a single signed error; a second error;
`~x` and `x:` (about x: the error is not stated); `x (3)` with a blank (often the number of a reference);
`x ± a %` without brackets (a per cent of x, or both in per cent); `5d` without a blank (a day, or a broken
exponent); `x × 10^-5`; a unit written twice, or one that holds a separate number or a decimal power; a number
too large or too small for float64; a cell of more than 400 bytes.

All is done in a few passes of linear-time regular expressions (RE2) over the column.
"""

from dataclasses import dataclass
from enum import IntEnum

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from stellerg.errors import InputError

__all__ = ["ParsedText", "TextKind", "parse_text"]

# No quoted measurement is longer (judgement); a longer cell is refused unread.
LONGEST_CELL = 400


class TextKind(IntEnum):
    """What a cell states."""

    EMPTY = 0
    VALUE_ONLY = 1
    SYMMETRIC = 2
    ASYMMETRIC = 3
    EXACT = 4
    LIMIT = 5
    NOT_A_NUMBER = 6


@dataclass(frozen=True)
class ParsedText:
    """What the cells of a column state.

    Attributes
    ----------
    value : ndarray of float64, (cell,)
        The value, or the number of a limit (whose side is not kept); NaN when EMPTY or NOT_A_NUMBER.
    upper, lower : ndarray of float64, (cell,)
        Errors as written, zero included, never negative; NaN unless SYMMETRIC or ASYMMETRIC.
    kind : ndarray of uint8, (cell,)
        `TextKind`. Upper and lower errors of equal size are SYMMETRIC, however they are written.
    unit : pyarrow.StringArray, (cell,)
        The unit as written, '' where there is none; never null.
    """

    value: np.ndarray
    upper: np.ndarray
    lower: np.ndarray
    kind: np.ndarray
    unit: pa.StringArray

    def __len__(self) -> int:
        return len(self.value)


# --- The grammar, after pasted characters have been made plain ---
_UNSIGNED = r"(?:\d+\.?\d*|\.\d+)(?:[eEdD][+-]?\d{1,4})?"
_SIGNED = rf"[+-]?{_UNSIGNED}"
_VALUE = rf"(?P<value>{_SIGNED})"
_UPPER = rf"\+\s*(?P<upper>{_UNSIGNED})"
_LOWER = rf"-\s*(?P<lower>{_UNSIGNED})"
_OPEN, _CLOSE = r"(?P<open>\(\s*)?", r"(?P<close>\s*\))?"
_REST = r"(?P<rest>.*)"

# 'n/a' and the like: what astropy, pandas, spreadsheets and AASTeX write for an empty cell (from memory)
_EMPTY = r"(?i)^(?:-*|\.{2,}|…|nan|null|none|n/?a|#n/a|<na>|\\nodata|\\[lc]?dots)$"
_PLAIN = rf"^{_SIGNED}$"
_SYMMETRIC = rf"^{_OPEN}{_VALUE}\s*(?:±|\+/?-)\s*(?P<upper>{_UNSIGNED}){_CLOSE}{_REST}$"
_PLAIN_PAIRS, _SCRIPT_PAIRS = (
    tuple(rf"^{_OPEN}{_VALUE}\s*{pair}{_CLOSE}{_REST}$" for pair in pairs)
    for pairs in (
        (rf"{_UPPER}\s*[,/;]?\s*{_LOWER}", rf"{_LOWER}\s*[,/;]?\s*{_UPPER}"),
        (
            rf"\^\s*\{{\s*{_UPPER}\s*\}}\s*_\s*\{{\s*{_LOWER}\s*\}}",
            rf"_\s*\{{\s*{_LOWER}\s*\}}\s*\^\s*\{{\s*{_UPPER}\s*\}}",
            rf"\^{_UPPER}\s*_{_LOWER}",
            rf"_{_LOWER}\s*\^{_UPPER}",
        ),
    )
)
_LAST_PLACES = (
    r"^(?P<mantissa>[+-]?(?:\d+\.?\d*|\.\d+))\(\s*(?P<error>\d+\.?\d*|\.\d+)\s*\)"
    rf"(?:[eEdD](?P<exponent>[+-]?\d{{1,4}}))?{_REST}$"
)
_BELOW_OR_ABOVE = (
    r"[<>＜＞]=?|[≤≥⩽⩾≦≧≲≳]|\\(?:leqslant|leq|lesssim|le|lt|la|geqslant|geq|gtrsim|ge|gt|ga)|"
    r"&[lg]t;=?"
)
_LIMIT = rf"^(?:{_BELOW_OR_ABOVE})\s*{_VALUE}{_REST}$"
_BARE = rf"^{_VALUE}{_REST}$"
_EXACT = r"(?i)^(?P<before>.*?)\s*(?:\(\s*exact\s*\)|\bexact)(?P<after>|\s.*)$"

# What may follow a number as its unit, and what must not although its characters are those of a unit.
_UNIT = r"^\s*(?:\\?\p{L}|[%°⊙☉⊕])[\p{L}\p{M}\d %°⊙☉⊕·⋅*/^_.(){}\\⁰¹²³⁴-⁹⁻-]*$"
_NO_UNIT = "(?i)" + "|".join(
    (
        r"^[ed](?:\P{L}|$)",  # 1.02e, 5d: an exponent without its digits?
        r"^\s*[ed][+-]?\.?\d",  # 1.02 e-5: an exponent after a blank?
        r"^\s*x(?:\P{L}|$)",  # 1.2 x 10^-5
        r"^x[\da-f]+$",  # 0xff
        r"\s[+-]?\.?\d",  # K 0.03: a second number
        r"\.\d",  # K-0.03
        r"\b(?:nan|inf|infinity|null|none)\b|exact",
    )
)

# --- Characters of pasted text ---
_PASTED = r"[^ -#%-\[\]-~±]"
_REPLACED = (
    (r"\$([^$]*)\$", r" \1 "),
    (r"[\s\v\x{85}\p{Z}\x{200B}-\x{200F}\x{2060}\x{FEFF}]|\\[,;:! ]", " "),
    # hyphens U+2010 and U+2011, figure dash, en dash, em dash, bar, minus, small and full-width hyphens
    (r"[\x{2010}-\x{2015}\x{2212}\x{FE58}\x{FE63}\x{FF0D}]", "-"),
    (r"[\x{FE62}\x{FF0B}]", "+"),
    (r"\x{FF0F}", "/"),
    (r"\\pm", "±"),
)


def parse_text(cells) -> ParsedText:
    """Read a column of texts of measured values.

    Parameters
    ----------
    cells : pyarrow.Array or pyarrow.ChunkedArray of strings, or sequence of str or None, (cell,)
        Texts in the forms listed at the top of this module. Null, blank, dashes, dots and the usual words for
        "nothing" (nan, null, none, na, n/a, #n/a, <na>, \\nodata; in any case) are EMPTY.

    Returns
    -------
    ParsedText
        In the order of the cells. A text that cannot be read is `TextKind.NOT_A_NUMBER`; none raises.

    Raises
    ------
    InputError
        If `cells` is not a column of texts.
    """
    texts = pc.ascii_trim_whitespace(_strings(cells))
    column = _Column(len(texts))
    size = pc.fill_null(pc.binary_length(texts), 0).to_numpy()
    column.kind[size == 0] = TextKind.EMPTY
    rows = np.flatnonzero((size > 0) & (size <= LONGEST_CELL))
    texts = _make_plain(texts.take(pa.array(rows)))

    empty = _mask(pc.match_substring_regex(texts, _EMPTY))
    column.kind[rows[empty]] = TextKind.EMPTY
    rows, texts = rows[~empty], texts.filter(pa.array(~empty))
    plain = _mask(pc.match_substring_regex(texts, _PLAIN))
    if plain.any():
        column.write(rows[plain], TextKind.VALUE_ONLY, _numbers(texts.filter(pa.array(plain))))
        rows, texts = rows[~plain], texts.filter(pa.array(~plain))
    for sign, pattern, read in _FORMS:
        if not pc.any(pc.match_substring(texts, sign), min_count=0).as_py():
            continue
        parts = pc.extract_regex(texts, pattern)
        found = _mask(parts.is_valid())
        if found.any():
            parts = parts.filter(pa.array(found))
            names = [field.name for field in parts.type]
            read(column, rows[found], dict(zip(names, parts.flatten(), strict=True)))
            rows, texts = rows[~found], texts.filter(pa.array(~found))
    return column.finish()


class _Column:
    """The column under construction: every cell is NOT_A_NUMBER until something is written to it."""

    def __init__(self, length: int):
        self.value, self.upper, self.lower = (np.full(length, np.nan) for _ in range(3))
        self.kind = np.full(length, TextKind.NOT_A_NUMBER, np.uint8)
        # units are gathered at the end: a cell holds the place of its unit in the pieces, 0 being ''
        self._pieces = [pa.array([""], pa.large_string())]
        self._place = np.zeros(length, np.int64)
        self._places = 1

    def write(self, rows, kind, value, upper=None, lower=None, good=True, unit=None):
        """Write what was read, except where a number is out of range (NaN) or `good` is false."""
        good = good & ~np.isnan(value)
        if upper is not None:
            good &= ~(np.isnan(upper) | np.isnan(lower))
            self.upper[rows[good]], self.lower[rows[good]] = upper[good], lower[good]
        self.value[rows[good]] = value[good]
        self.kind[rows[good]] = np.broadcast_to(kind, good.shape)[good]
        if unit is not None:
            self._place[rows[good]] = self._places + np.flatnonzero(good)
            self._pieces.append(unit)
            self._places += len(unit)

    def finish(self) -> ParsedText:
        if self._places == 1:
            unit = pa.repeat(pa.scalar("", pa.string()), len(self.value))
        else:
            unit = pc.cast(pa.concat_arrays(self._pieces).take(pa.array(self._place)), pa.string())
        return ParsedText(self.value, self.upper, self.lower, self.kind, unit)


def _read_symmetric(column, rows, parts):
    unit, good = _unit(parts["rest"])
    error = _numbers(parts["upper"])
    good &= _brackets_agree(parts, unit)
    column.write(rows, TextKind.SYMMETRIC, _numbers(parts["value"]), error, error, good, unit)


def _read_asymmetric(column, rows, parts):
    unit, good = _unit(parts["rest"])
    good &= _brackets_agree(parts, unit)
    value, upper, lower = (_numbers(parts[name]) for name in ("value", "upper", "lower"))
    kind = np.where(upper == lower, TextKind.SYMMETRIC, TextKind.ASYMMETRIC)
    column.write(rows, kind, value, upper, lower, good, unit)


def _read_last_places(column, rows, parts):
    unit, good = _unit(parts["rest"])
    mantissa, error = parts["mantissa"], parts["error"]
    power = pc.if_else(pc.equal(parts["exponent"], ""), "0", pc.ascii_ltrim(parts["exponent"], "+"))
    power = pc.cast(power, pa.int64())
    # digits without a point count the last places of the mantissa: its decimals shift their power of ten
    point = pc.find_substring(mantissa, ".")
    decimals = pc.subtract(pc.subtract(pc.cast(pc.binary_length(mantissa), pa.int64()), point), 1)
    literal = pc.or_(pc.equal(point, -1), pc.match_substring(error, "."))
    error_power = pc.subtract(power, pc.if_else(literal, 0, decimals))
    # the decimal text is put together before it is converted, so that it is rounded only once
    value, error = (
        _numbers(pc.binary_join_element_wise(digits, pc.cast(ten, pa.large_string()), _TEN_TO))
        for digits, ten in ((mantissa, power), (error, error_power))
    )
    column.write(rows, TextKind.SYMMETRIC, value, error, error, good, unit)


def _read_limit(column, rows, parts):
    unit, good = _unit(parts["rest"])
    column.write(rows, TextKind.LIMIT, _numbers(parts["value"]), good=good, unit=unit)


def _read_bare(column, rows, parts):
    """A value with a unit, the word 'exact', both, or something that is neither."""
    value, rest = _numbers(parts["value"]), parts["rest"]
    exact = twice = np.zeros(len(rows), bool)
    if pc.any(pc.match_substring_regex(rest, _EXACT)).as_py():
        around = pc.extract_regex(rest, _EXACT)
        exact = _mask(around.is_valid())
        before, after = (pc.fill_null(piece, "") for piece in around.flatten())
        twice = _mask(pc.and_(_written(before), _written(after)))
        rest = pc.if_else(pa.array(exact), pc.binary_join_element_wise(before, after, _NOTHING), rest)
    unit, good = _unit(rest)
    kind = np.where(exact, TextKind.EXACT, TextKind.VALUE_ONLY)
    column.write(rows, kind, value, good=good & ~twice, unit=unit)


# joining needs separators of the type of the texts
_NOTHING, _TEN_TO = pa.scalar("", pa.large_string()), pa.scalar("e", pa.large_string())

# In the order tried, each with a sign without which no text has the form: it saves most columns a slow pass.
_FORMS = (
    ("", _SYMMETRIC, _read_symmetric),
    *(("+", pattern, _read_asymmetric) for pattern in _PLAIN_PAIRS),
    *(("^", pattern, _read_asymmetric) for pattern in _SCRIPT_PAIRS),
    ("(", _LAST_PLACES, _read_last_places),
    ("", _LIMIT, _read_limit),
    ("", _BARE, _read_bare),
)


def _strings(cells) -> pa.Array:
    """Return the cells as one array of large strings."""
    if isinstance(cells, (str, bytes)):
        raise InputError(f"cells: a column of texts is wanted, got the text {cells[:40]!r}; make it a list")
    if not isinstance(cells, (pa.Array, pa.ChunkedArray)):
        try:
            return _strings(pa.array(cells, pa.large_string()))
        except (pa.ArrowInvalid, pa.ArrowTypeError) as error:
            message = f"cells: a column of texts or None is wanted ({error}); pass numbers as numbers"
            raise InputError(message) from error
        except UnicodeEncodeError as error:
            message = f"cells: texts must be Unicode ({error}); decode the file with errors='replace'"
            raise InputError(message) from error
    kind = cells.type.value_type if pa.types.is_dictionary(cells.type) else cells.type
    if kind not in (pa.string(), pa.large_string(), pa.string_view(), pa.null()):
        raise InputError(f"cells: a column of texts is wanted, got the type {kind}; pass numbers as numbers")
    if isinstance(cells, pa.ChunkedArray):
        cells = cells.cast(pa.large_string()).combine_chunks()
        return pa.concat_arrays(cells.chunks) if isinstance(cells, pa.ChunkedArray) else cells
    return cells.cast(pa.large_string())


def _make_plain(texts):
    """Replace the characters of pasted text and of LaTeX by plain ones, in the cells that have any."""
    pasted = pc.match_substring_regex(texts, _PASTED)
    replaced = texts.filter(pasted)
    if not len(replaced):
        return texts
    for pattern, replacement in _REPLACED:
        replaced = pc.replace_substring_regex(replaced, pattern, replacement)
    return pc.replace_with_mask(texts, pasted, pc.ascii_trim_whitespace(replaced))


def _numbers(texts) -> np.ndarray:
    """Convert texts that the grammar calls numbers; NaN where float64 cannot hold them."""
    texts = pc.ascii_ltrim(texts, "+")
    if pc.any(pc.match_substring_regex(texts, "[dD]")).as_py():
        texts = pc.replace_substring_regex(texts, "[dD]", "e")
    numbers = np.array(pc.cast(texts, pa.float64()))
    zero = numbers == 0.0
    if zero.any():
        # a number other than zero that became zero is too small
        zero[zero] = _mask(pc.match_substring_regex(texts.filter(pa.array(zero)), "^[-.0]*[1-9]"))
    numbers[zero | np.isinf(numbers)] = np.nan
    return numbers


def _unit(rest):
    """Return the units in what follows the numbers ('' for none), and where it is nothing or a unit."""
    if not _mask(_written(rest)).any():
        return None, np.ones(len(rest), bool)
    good = pc.and_not(pc.match_substring_regex(rest, _UNIT), pc.match_substring_regex(rest, _NO_UNIT))
    balanced = pc.equal(pc.count_substring(rest, "("), pc.count_substring(rest, ")"))
    good = pc.or_(pc.and_(good, balanced), pc.invert(_written(rest)))
    # removing $ left blanks before sub- and superscripts
    unit = pc.replace_substring_regex(pc.ascii_trim_whitespace(rest), r"\s+([\s_^])", r"\1")
    return unit, _mask(good)


def _brackets_agree(parts, unit) -> np.ndarray:
    """Whether both or no brackets are there, and both before a per cent sign."""
    opened, closed = (_mask(pc.not_equal(parts[name], "")) for name in ("open", "close"))
    agree = opened == closed
    return agree if unit is None else agree & (opened | ~_mask(pc.starts_with(unit, "%")))


def _written(texts):
    """Whether there is more than blanks."""
    return pc.not_equal(pc.ascii_trim_whitespace(texts), "")


def _mask(booleans) -> np.ndarray:
    return booleans.to_numpy(zero_copy_only=False)
