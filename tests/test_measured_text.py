"""Texts of measured values: every form, every refusal, and laws over random numbers and random texts."""

from decimal import Decimal

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from stellerg.errors import InputError
from stellerg.measured.text import LONGEST_CELL, ParsedText, TextKind, parse_text

NAN = float("nan")
EMPTY, VALUE_ONLY, SYMMETRIC, ASYMMETRIC, EXACT, LIMIT, NOT_A_NUMBER = TextKind

# (text, value, upper, lower, unit) by kind
STATED = {
    VALUE_ONLY: [
        *((text, 1.02, NAN, NAN, "") for text in ("1.02", "  1.02\t", "+1.02", "$1.02$", "1.020e+00")),
        *((text, -0.0005, NAN, NAN, "") for text in ("-0.0005", "-.5e-3", "\u22125.E-4", "-5d-4", "-5.D-04")),
        *((text, 0.0, NAN, NAN, "") for text in ("0", ".0", "0.000e-999")),
        ("1e+05", 1e5, NAN, NAN, ""),
        ("4.9e-324", 5e-324, NAN, NAN, ""),
        ("5 %", 5.0, NAN, NAN, "%"),
        ("1.02 solMass", 1.02, NAN, NAN, "solMass"),
        ("1.02Rsun", 1.02, NAN, NAN, "Rsun"),
        ("1.5d3 K", 1500.0, NAN, NAN, "K"),
        ("5°C", 5.0, NAN, NAN, "°C"),
        ("5 M$_\\odot$", 5.0, NAN, NAN, "M_\\odot"),
        ("$5\\,M_{\\odot}$", 5.0, NAN, NAN, "M_{\\odot}"),
        ("5\u00a0erg\u2009s\u22121", 5.0, NAN, NAN, "erg s-1"),
    ],
    SYMMETRIC: [
        ("1.02 ± 0.03", 1.02, 0.03, 0.03, ""),
        ("1.02±0.03", 1.02, 0.03, 0.03, ""),
        ("2.8e-1 ± 3e-05", 0.28, 3e-5, 3e-5, ""),
        ("1.02+/-0.03", 1.02, 0.03, 0.03, ""),
        ("1.02 +- 0.03", 1.02, 0.03, 0.03, ""),
        ("1.02 +/\u2212 0.03", 1.02, 0.03, 0.03, ""),
        ("1.02\\pm0.03", 1.02, 0.03, 0.03, ""),
        ("$1.02 \\pm 0.03$", 1.02, 0.03, 0.03, ""),
        ("1.02 $\\pm$ 0.03", 1.02, 0.03, 0.03, ""),
        ("-1.02 ± .03", -1.02, 0.03, 0.03, ""),
        ("1.02 ± 0.0", 1.02, 0.0, 0.0, ""),
        ("1.5D3 ± 2d1", 1500.0, 20.0, 20.0, ""),
        ("1.02 ± 0.03 solMass", 1.02, 0.03, 0.03, "solMass"),
        ("(5772 ± 50) K", 5772.0, 50.0, 50.0, "K"),
        ("( 5772 ± 50 )", 5772.0, 50.0, 50.0, ""),
        ("5772 ± 50 K", 5772.0, 50.0, 50.0, "K"),
        ("5772 ± 50K", 5772.0, 50.0, 50.0, "K"),
        ("1.2e-8 ± 1e-10 erg / (s cm2)", 1.2e-8, 1e-10, 1e-10, "erg / (s cm2)"),
        ("(1.2 ± 0.1) %", 1.2, 0.1, 0.1, "%"),
        ("1.02 ± 0.03 $M_\\odot$", 1.02, 0.03, 0.03, "M_\\odot"),
        ("1.02(3)", 1.02, 0.03, 0.03, ""),
        ("1.02(12)", 1.02, 0.12, 0.12, ""),
        ("1.02(0)", 1.02, 0.0, 0.0, ""),
        ("-1.02(3)", -1.02, 0.03, 0.03, ""),
        (".5(3)", 0.5, 0.3, 0.3, ""),
        ("5.(3)", 5.0, 3.0, 3.0, ""),
        ("5772(50)", 5772.0, 50.0, 50.0, ""),
        ("5772.0(50) K", 5772.0, 5.0, 5.0, "K"),
        ("1.02(0.03)", 1.02, 0.03, 0.03, ""),
        ("1.02(.03)", 1.02, 0.03, 0.03, ""),
        ("5772(1.5)", 5772.0, 1.5, 1.5, ""),
        ("1.2(3)e-5", 1.2e-5, 0.3e-5, 0.3e-5, ""),
        ("1.2(3)E+5 solLum", 1.2e5, 0.3e5, 0.3e5, "solLum"),
        ("1.2(3)d5", 1.2e5, 0.3e5, 0.3e5, ""),
        ("1.2(0.3)e-5", 1.2e-5, 0.3e-5, 0.3e-5, ""),
        ("1.02 +0.03 -0.030", 1.02, 0.03, 0.03, ""),
    ],
    ASYMMETRIC: [
        ("1.02 +0.04 -0.03", 1.02, 0.04, 0.03, ""),
        ("1.02 -0.03 +0.04", 1.02, 0.04, 0.03, ""),
        ("1.02+0.04-0.03", 1.02, 0.04, 0.03, ""),
        ("1.02 +0.04/-0.03", 1.02, 0.04, 0.03, ""),
        ("1.02 +0.04, -0.03", 1.02, 0.04, 0.03, ""),
        ("1.02 + 0.04 - 0.03", 1.02, 0.04, 0.03, ""),
        ("1.02 +0.04 -0", 1.02, 0.04, 0.0, ""),
        ("1e-5+2e-6-3e-06", 1e-5, 2e-6, 3e-6, ""),
        ("1.02^{+0.04}_{-0.03}", 1.02, 0.04, 0.03, ""),
        ("1.02_{-0.03}^{+0.04}", 1.02, 0.04, 0.03, ""),
        ("1.02 ^{ +0.04 } _{ -0.03 }", 1.02, 0.04, 0.03, ""),
        ("1.02^+0.04_-0.03", 1.02, 0.04, 0.03, ""),
        ("1.02_-0.03^+0.04", 1.02, 0.04, 0.03, ""),
        ("$1.02^{+0.04}_{-0.03}$", 1.02, 0.04, 0.03, ""),
        ("1.02$_{-0.03}^{+0.04}$", 1.02, 0.04, 0.03, ""),
        ("$-1.02^{+0.04}_{-0.03}$ $M_\\odot$", -1.02, 0.04, 0.03, "M_\\odot"),
        ("1.02 \uff0b0.04 \uff0d0.03", 1.02, 0.04, 0.03, ""),
        ("1.02 +0.04 -0.03 M_sun", 1.02, 0.04, 0.03, "M_sun"),
        ("(5772 +40 -30) K", 5772.0, 40.0, 30.0, "K"),
    ],
    EXACT: [
        ("1.02 exact", 1.02, NAN, NAN, ""),
        ("1.02 EXACT", 1.02, NAN, NAN, ""),
        ("1.02 (exact)", 1.02, NAN, NAN, ""),
        ("1.02(Exact)", 1.02, NAN, NAN, ""),
        ("5772exact", 5772.0, NAN, NAN, ""),
        ("5772 exact K", 5772.0, NAN, NAN, "K"),
        ("5772 K exact", 5772.0, NAN, NAN, "K"),
        ("5772 (exact) K", 5772.0, NAN, NAN, "K"),
        ("4.4 dex(cm s-2) (exact)", 4.4, NAN, NAN, "dex(cm s-2)"),
    ],
    LIMIT: [
        (f"{sign}1.2", 1.2, NAN, NAN, "")
        for sign in (*"<>≤≥≲≳＜", "<=", ">=", "\\le", "\\leq", "\\lesssim", "\\gt", "&lt;", "&gt;")
    ]
    + [("< -1.2e3 K", -1200.0, NAN, NAN, "K"), ("$<$1.2 M$_\\odot$", 1.2, NAN, NAN, "M_\\odot")],
}

EMPTY_CELLS = [None, "", " ", "\u00a0", "\t\n", "-", "--", "---", "\u2212", "—", "nan", "NaN", "NULL", "None"]
EMPTY_CELLS += ["n/a", "N/A", "NA", "#N/A", "<NA>", "...", "…", "\\nodata", "$\\cdots$", " -- "]

# in groups, each with its reason
REFUSED = {
    "no number": ["abc", "K", "cm2", "?", ".", "+", "e5", "exact", "± 0.03", "inf", "-inf", "Infinity", "∞"],
    "decimal comma": ["1,02", "1,02 ± 0,03", "1.02 ± 0,03", "1.02 +0,04 -0,03", "1.02(0,03)", "1,020.5"],
    "error missing": ["1.02 ±", "1.02 ± ", "1.02 +/-", "1.02 ± K", "1.02()", "1.02 +0.04 -", "1.02 + -0.03"],
    "error negative": ["1.02 ± -0.03", "1.02 ± \u22120.03", "1.02 ± +0.03", "1.02(-3)", "1.02(-0.03)"],
    "sign missing": ["1.02 +0.04 0.03", "1.02 0.04 0.03", "1.02 -0.03 0.04", "1.02^{0.04}_{0.03}"],
    "sign wrong": ["1.02 +0.04 +0.03", "1.02 -0.04 -0.03", "1.02^{-0.03}_{+0.04}"],
    "single signed error": ["1.02 +0.04", "1.02 -0.03", "1.02^{+0.04}", "1.02-1.05", "1.02 to 1.05"],
    "about": ["~1.02", "≈1.02", "\\sim1.02", "1.02:", "1.02?", "1.02 ± ~0.03"],
    "not quite a number": ["1_000", "1e", "1.02e", "1e5.5", "1.02.3", "1..2", "--1.02", "+-1.02", "- 1.02"],
    "exponent": ["1.02 e-5", "1.02 E5", "5d", "1e+", "1e12345", "1.02 ± 0.03 e-5", "1.02 ± 3e"],
    "other notations": ["1 000", "0x1F", "0xff", "12:30", "2020-01-15", "10²", "1½", "１", "$1.02", "1.02$"],
    "hidden characters": ["1\u200b02", "1.02\x00", "1\x002", "1.\u00ad02"],
    "words": ["1.02 nan", "nan K", "1.02 inf", "1.02 none"],
    "power of ten": ["1.2 x 10^-5", "1.2 × 10^-5", "1.2x10-5", "1.2*10^5", "(1.2 ± 0.3) x 10^5", "1.2·10⁵"],
    "value out of range": ["1e999", "-1e400", "1e-999", "1e999 exact", "<1e999", "1e999 K", "9" * 350],
    "error out of range": ["1 ± 1e999", "1 ± 1e-400", "1 +1e999 -1", "1 +1 -1e999", "1(3)e308", "1(3)e-324"],
    "last places": ["1.02 (3)", "1.02(3)(4)", "1.02(3", "1.2e-5(3)", "1.02(3)e", "1.02(a)", "1.02[3]"],
    "unit": ["1.02 (K)", "1.02 [K]", "1.02 K ± 0.03 K", "1.02 K ± 0.03", "1.02 K)", "1.02 K, x", "1.02 \\"],
    "number in unit": ["1.02 K 0.03", "1.02 K 3", "1.02 ± 0.03 K 3", "1.02 K -3", "1.02 K-0.03", "1.02 K=5"],
    "per cent of what": ["1.02 ± 3%", "1.02 ± 3 %", "1.02 +3 -2 %"],
    "brackets": ["(1.02 ± 0.03", "1.02 ± 0.03) K", "(1.02)", "(1.02 +0.04 -0.03", "1.02^{+0.04_{-0.03}"],
    "second error": ["1.02 ± 0.03 ± 0.02", "1.02 ± 0.04 -0.03", "1.02(3) ± 0.1", "1.02 +0.4 -0.3 -0.2"],
    "exact": ["1.02 ± 0.03 exact", "1.02 exactly", "1.02 inexact", "1.02 K exact K", "1.02 exactRsun"],
    "limit": ["<", "<K", "<1.2 ± 0.1", "<<1.2", "1.2<", "\\lefty1.2", "<1.2 +0.1 -0.1", "<1.02 exact"],
}

UNITS = [
    "d",
    "dex",
    "dex(cm s-2)",
    "erg s^-1",
    "erg / (s cm2)",
    "erg/s/cm**2",
    "mW.m-2",
    "W m⁻²",
    "Å",
    "\u212b",
    "µm",
]
UNITS += ["°C", "M⊙", "⊙", "M☉", "M_{\\odot}", "\\mathrm{K}", "s-1", "electron", "Rsun"]

ROWS = [(kind, *row) for kind, rows in STATED.items() for row in rows]
BAD_ROWS = [(why, text) for why, texts in REFUSED.items() for text in texts]


def one(text):
    """Read one text: (value, upper, lower, kind, unit)."""
    parsed = parse_text([text])
    assert len(parsed) == 1
    numbers = (parsed.value[0], parsed.upper[0], parsed.lower[0])
    return *numbers, TextKind(parsed.kind[0]), parsed.unit[0].as_py()


def join(parts) -> ParsedText:
    """Append the columns."""
    names = ("value", "upper", "lower", "kind")
    arrays = (np.concatenate([getattr(part, name) for part in parts]) for name in names)
    return ParsedText(*arrays, pa.concat_arrays([part.unit for part in parts]))


def assert_same(first: ParsedText, second: ParsedText):
    """Equal to the bit, NaN where NaN."""
    for name in ("value", "upper", "lower", "kind"):
        np.testing.assert_array_equal(getattr(first, name), getattr(second, name), err_msg=name)
    assert first.unit.equals(second.unit)


@pytest.mark.parametrize(("kind", "text", "value", "upper", "lower", "unit"), ROWS)
def test_form_is_read(kind, text, value, upper, lower, unit):
    got = one(text)
    np.testing.assert_array_equal(got[:3], (value, upper, lower))
    assert got[3:] == (kind, unit)


@pytest.mark.parametrize("unit", UNITS)
def test_unit_is_cut_out_as_written(unit):
    before = ["5", "5 ± 1", "(5 ± 1)", "5(1)", "5 +2 -1", "5^{+2}_{-1}", "<5", "5 exact"]
    parsed = parse_text([f"{text} {unit}" for text in before])
    np.testing.assert_array_equal(parsed.value, [5.0] * len(before))
    assert parsed.unit.to_pylist() == [unit] * len(before)


@pytest.mark.parametrize("text", EMPTY_CELLS)
def test_nothing_is_empty(text):
    got = one(text)
    assert np.isnan(got[:3]).all()
    assert got[3:] == (EMPTY, "")


@pytest.mark.parametrize(("why", "text"), BAD_ROWS)
def test_ambiguous_or_meaningless_is_refused(why, text):
    got = one(text)
    assert got[3:] == (NOT_A_NUMBER, ""), why
    assert np.isnan(got[:3]).all()


@pytest.mark.parametrize("minus", list("-\u2212\u2010\u2011\u2012\u2013\u2014\u2015\ufe58\ufe63\uff0d"))
def test_every_pasted_minus(minus):
    text = f"{minus}1.2e{minus}5 {minus}3e{minus}6 +4e{minus}6"
    assert one(text) == (-1.2e-5, 4e-6, 3e-6, ASYMMETRIC, "")


@pytest.mark.parametrize("space", [*" \t\n\u00a0\u2007\u2009\u200a\u202f\u200b\u3000\ufeff", "\\,"])
def test_every_pasted_space(space):
    assert one(space.join(("", "1.02", "±", "0.03", "K", ""))) == (1.02, 0.03, 0.03, SYMMETRIC, "K")


def test_types_and_order_of_a_mixed_column():
    rows = [row[1:] for row in ROWS] + [(text, NAN, NAN, NAN, "") for _, text in BAD_ROWS]
    kinds = [row[0] for row in ROWS] + [NOT_A_NUMBER] * len(BAD_ROWS)
    order = np.random.default_rng(20261).permutation(len(rows))
    texts, value, upper, lower, unit = zip(*(rows[i] for i in order), strict=True)
    parsed = parse_text(texts)
    assert parsed.value.dtype == parsed.upper.dtype == parsed.lower.dtype == np.float64
    assert (parsed.kind.dtype, parsed.unit.type) == (np.uint8, pa.string())
    assert parsed.unit.null_count == 0
    np.testing.assert_array_equal(parsed.value, value)
    np.testing.assert_array_equal(parsed.upper, upper)
    np.testing.assert_array_equal(parsed.lower, lower)
    np.testing.assert_array_equal(parsed.kind, [kinds[i] for i in order])
    assert parsed.unit.to_pylist() == list(unit)


TEXTS = ["1.02 ± 0.03 K", None, "abc", "5772(50)", "", "−3", "1 +2 -3 L_sun", "7 exact", "<5"]


@pytest.mark.parametrize(
    "cells",
    [  # the two last are slices, of one array and over the border of two
        tuple(TEXTS),
        np.array(TEXTS, object),
        pa.array(TEXTS, pa.string()),
        pa.array(TEXTS, pa.large_string()),
        pa.array(TEXTS, pa.string_view()),
        pa.array(TEXTS).dictionary_encode(),
        pa.chunked_array([TEXTS[:2], [], TEXTS[2:7], TEXTS[7:]], pa.string()),
        pa.array(["9 m", None, *TEXTS, "8"])[2:-1],
        pa.chunked_array([["9 m", *TEXTS[:4]], [*TEXTS[4:], "8"]])[1:-1],
    ],
)
def test_every_container_reads_alike(cells):
    parsed = parse_text(cells)
    np.testing.assert_array_equal(parsed.value, [1.02, NAN, NAN, 5772.0, NAN, -3.0, 1.0, 7.0, 5.0])
    np.testing.assert_array_equal(parsed.upper, [0.03, NAN, NAN, 50.0, NAN, NAN, 2.0, NAN, NAN])
    np.testing.assert_array_equal(parsed.lower, [0.03, NAN, NAN, 50.0, NAN, NAN, 3.0, NAN, NAN])
    kinds = [SYMMETRIC, EMPTY, NOT_A_NUMBER, SYMMETRIC, EMPTY, VALUE_ONLY, ASYMMETRIC, EXACT, LIMIT]
    np.testing.assert_array_equal(parsed.kind, kinds)
    assert parsed.unit.to_pylist() == ["K", "", "", "", "", "", "L_sun", "", ""]


@pytest.mark.parametrize("cells", [[], pa.array([], pa.string()), pa.chunked_array([], pa.string())])
def test_column_without_cells(cells):
    parsed = parse_text(cells)
    assert len(parsed) == len(parsed.kind) == len(parsed.upper) == len(parsed.lower) == len(parsed.unit) == 0


def test_column_of_nulls():
    parsed = parse_text(pa.nulls(3))
    assert parsed.kind.tolist() == [EMPTY] * 3
    assert parsed.unit.to_pylist() == [""] * 3


@pytest.mark.parametrize("cells", ["1.02", b"1.02", [1.02], pa.array([1.02]), np.array([1, 2]), ["\ud800"]])
def test_what_is_no_column_of_texts_raises(cells):
    with pytest.raises(InputError, match=r"^cells: .*; "):
        parse_text(cells)


@pytest.mark.parametrize("piece", ["7", "a", " ", "(", "±", "+1-", "$", "\\pm", "e5 ", "\u00a0", "^{+", "1 "])
def test_cell_of_a_million_characters(piece):
    long = "1.02" + piece * (10**6 // len(piece)) + "x"
    parsed = parse_text(["1 K", long, long[::-1], "2"])
    assert parsed.kind.tolist() == [VALUE_ONLY, NOT_A_NUMBER, NOT_A_NUMBER, VALUE_ONLY]
    assert parsed.unit.to_pylist() == ["K", "", "", ""]


def test_length_limit_does_not_count_blanks_around():
    longest = "1." + "0" * (LONGEST_CELL - 2)
    assert one(longest)[3] == VALUE_ONLY
    assert one(longest + "0")[3] == NOT_A_NUMBER
    assert one(" " * 10**6 + longest + " " * 10**6)[3] == VALUE_ONLY


def test_bytes_that_are_no_text_are_refused():
    broken = [b"\xff1.02", b"1.02\xff", b"1.02 K\xff", b"\xe2\x88 1", b"1.02 \xff exact", b"$\xff$"]
    parsed = parse_text(pa.array([*broken, b"1"], pa.binary()).view(pa.string()))
    assert parsed.kind.tolist() == [NOT_A_NUMBER] * len(broken) + [VALUE_ONLY]


# --- Laws ---
values = st.floats(allow_nan=False, allow_infinity=False)
errors = st.floats(min_value=0.0, allow_nan=False, allow_infinity=False)
units = st.sampled_from(["", " K", " solMass", "Rsun", " erg / (s cm2)"])
columns = st.lists(st.tuples(values, errors, errors, units), min_size=1, max_size=8)

WRITTEN = {
    "plain": ("{v!r}{u}", VALUE_ONLY),
    "exact": ("{v!r}{u} exact", EXACT),
    "limit": ("<{v!r}{u}", LIMIT),
    "plus-minus": ("{v!r} ± {a!r}{u}", SYMMETRIC),
    "ascii": ("{v!r}+/-{a!r}{u}", SYMMETRIC),
    "brackets": ("({v!r} ± {a!r}){u}", SYMMETRIC),
    "17 digits": ("{v:.16e}±{a:.16E}{u}", SYMMETRIC),
    "pair": ("{v!r} +{a!r} -{b!r}{u}", ASYMMETRIC),
    "pair reversed": ("{v!r}-{b!r}+{a!r}{u}", ASYMMETRIC),
    "scripts": ("${v!r}^{{+{a!r}}}_{{-{b!r}}}${u}", ASYMMETRIC),
}


@pytest.mark.parametrize("form", WRITTEN)
@settings(max_examples=60, deadline=None)
@given(column=columns)
def test_numbers_survive_every_form(form, column):
    template, kind = WRITTEN[form]
    parsed = parse_text([template.format(v=v, a=a, b=b, u=u) for v, a, b, u in column])
    value, a, b, unit = (list(x) for x in zip(*column, strict=True))
    np.testing.assert_allclose(parsed.value, value, rtol=1e-15, atol=0.0)
    if kind == ASYMMETRIC:
        expected = [SYMMETRIC if x == y else ASYMMETRIC for x, y in zip(a, b, strict=True)]
    else:
        a = b = a if kind == SYMMETRIC else [NAN] * len(a)
        expected = [kind] * len(a)
    np.testing.assert_allclose(parsed.upper, a, rtol=1e-15, atol=0.0)
    np.testing.assert_allclose(parsed.lower, b, rtol=1e-15, atol=0.0)
    assert parsed.kind.tolist() == expected
    assert parsed.unit.to_pylist() == [u.strip() for u in unit]


@settings(max_examples=200, deadline=None)
@given(
    digits=st.integers(0, 10**15),
    decimals=st.integers(0, 12),
    error=st.integers(0, 10**6),
    power=st.none() | st.integers(-250, 250),
    negative=st.booleans(),
)
@example(digits=102, decimals=2, error=12, power=None, negative=False)
def test_last_places_are_those_of_the_decimal_text(digits, decimals, error, power, negative):
    mantissa = f"{Decimal(digits).scaleb(-decimals):f}"
    text = f"{'-' * negative}{mantissa}({error})" + (f"e{power}" if power is not None else "")
    ten = power or 0
    value = float(Decimal(mantissa).scaleb(ten)) * (-1.0 if negative else 1.0)
    width = float(Decimal(error).scaleb(ten - decimals))
    assert one(text) == (value, width, width, SYMMETRIC, "")


@settings(max_examples=300, deadline=None)
@given(st.text("0123456789+-.eE _", min_size=1, max_size=12))
@example("1_0")
@example("1e-400")
@example("- 1")
def test_plain_numbers_are_those_of_the_language(text):
    """`float` of Python and this grammar agree on plain numbers, but for underscores and the range."""
    value, _, _, kind, unit = one(text)
    try:
        expected = float(text)
    except ValueError:
        assert not (kind == VALUE_ONLY and unit == "")
        return
    mantissa, _, exponent = text.strip().lower().partition("e")
    lost = np.isinf(expected) or (expected == 0.0 and any(c in "123456789" for c in mantissa))
    if "_" in text or lost or len(exponent.lstrip("+-")) > 4:
        assert kind == NOT_A_NUMBER
    else:
        assert (value, kind, unit) == (expected, VALUE_ONLY, "")


near_texts = st.text("0123456789.+-±()^_{}$/ eEdDKx%,<~\\pm−\u00a0", max_size=16)
any_texts = st.none() | near_texts | st.text(max_size=12) | st.sampled_from([row[1] for row in ROWS])


@settings(max_examples=300, deadline=None)
@given(st.lists(any_texts, min_size=1, max_size=10))
def test_any_text_is_read_the_same_alone_and_keeps_the_promises(texts):
    parsed = parse_text(texts)
    assert_same(parsed, join([parse_text([text]) for text in texts]))
    given_value = ~np.isin(parsed.kind, (EMPTY, NOT_A_NUMBER))
    given_error = np.isin(parsed.kind, (SYMMETRIC, ASYMMETRIC))
    np.testing.assert_array_equal(np.isfinite(parsed.value), given_value)
    for error in (parsed.upper, parsed.lower):
        np.testing.assert_array_equal(np.isfinite(error), given_error)
        assert (error[given_error] >= 0.0).all()
    same = parsed.upper[given_error] == parsed.lower[given_error]
    np.testing.assert_array_equal(same, parsed.kind[given_error] == SYMMETRIC)
    assert all(given_value[i] or unit == "" for i, unit in enumerate(parsed.unit.to_pylist()))
