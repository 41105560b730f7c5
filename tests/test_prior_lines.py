"""Lines of a TOML text: every key of it is found on the line where it stands, however it is written."""

import tomllib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from stellerg.structure.files import available_priors
from stellerg.structure.lines import line_of, line_of_decode_error, lines_of
from test_prior_files import REFUSED

AWKWARD = '''# a comment with [brackets] and = signs
title = "a # no comment, a ] and a \\" quote"

[index] # after a header
points = [ # a list over lines
    1.0,
    2.0, # in it "a quote"

    3.0,
]
text = """
[not.a.table]
key = 1
ends in quotes"""""
literal = \'\'\'
x = '[[neither]]'
\'\'\'
when = 1979-05-27 07:32:00
"a.b" . c = 1
d.e.f = { g = 1, h = [ { i = "}" }, { i = 2 } ] }

[[interval]]
mass = [0, 1]
  [interval.index]
  lower = 1

[[ interval ]]
mass = [1, inf]
[interval."index"]
lower = 2
[[interval.part]]
x = 1
[[interval.part]]
x = 2
[late.sub]
y = 1
[late]
z = 1'''

EXPECTED = {
    ("title",): 2,
    ("index",): 4,
    ("index", "points"): 5,
    ("index", "points", 0): 6,
    ("index", "points", 1): 7,
    ("index", "points", 2): 9,
    ("index", "text"): 11,
    ("index", "literal"): 15,
    ("index", "when"): 18,
    ("index", "a.b"): 19,
    ("index", "a.b", "c"): 19,
    ("index", "d", "e", "f", "h", 1, "i"): 20,
    ("interval",): 22,
    ("interval", 0): 22,
    ("interval", 0, "mass", 1): 23,
    ("interval", 0, "index"): 24,
    ("interval", 0, "index", "lower"): 25,
    ("interval", 1): 27,
    ("interval", 1, "mass"): 28,
    ("interval", 1, "index"): 29,
    ("interval", 1, "index", "lower"): 30,
    ("interval", 1, "part"): 31,
    ("interval", 1, "part", 0, "x"): 32,
    ("interval", 1, "part", 1): 33,
    ("interval", 1, "part", 1, "x"): 34,
    ("late", "sub"): 35,
    ("late",): 37,
    ("late", "z"): 38,
}


def paths(value, keys=()):
    """All keys that lead to something in what tomllib read."""
    if keys:
        yield keys
    items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, inner in items:
        yield from paths(inner, (*keys, key))


def readable(text):
    try:
        return bool(tomllib.loads(text))
    except tomllib.TOMLDecodeError:
        return False


TEXTS = [AWKWARD, *(text for text, _ in REFUSED.values() if readable(text))]
TEXTS += [path.read_text(encoding="utf-8") for path in available_priors().values()]


@pytest.mark.parametrize("keys", EXPECTED, ids=str)
def test_the_line_of_a_key(keys):
    assert lines_of(AWKWARD)[keys] == EXPECTED[keys]


@pytest.mark.parametrize("text", TEXTS)
def test_exactly_the_keys_that_tomllib_reads_are_found(text):
    found = lines_of(text)
    assert set(found) == set(paths(tomllib.loads(text)))
    lines = text.splitlines()
    for keys, line in found.items():
        if isinstance(keys[-1], str):
            assert keys[-1] in lines[line - 1]


def test_what_is_not_there_is_at_the_table_around_it():
    assert line_of(AWKWARD, ("interval", 1, "index", "upper")) == 29
    assert line_of(AWKWARD, ("interval", 1, "colour")) == 27
    assert line_of(AWKWARD, ("nothing", "at", "all")) == 1
    assert line_of("", ("summary",)) == 1


STRINGS = st.text(st.sampled_from("a\"'#[]{}=,\\\n. "), max_size=8)


@settings(derandomize=True, deadline=None)
@given(st.lists(STRINGS, min_size=1, max_size=6), st.integers(0, 3))
def test_no_string_misleads(strings, blank):
    """Strings of brackets, quotes, equals signs and line breaks stand between two keys; the second is found."""
    escaped = [s.replace("\\", "\\\\").replace('"', '\\"') for s in strings]
    lines = [f'k{i} = """\n{s}"""' if i % 2 else f'k{i} = "{s}"' for i, s in enumerate(escaped)]
    lines = [line if i % 2 else line.replace("\n", "\\n") for i, line in enumerate(lines)]
    text = "\n".join([*lines, "\n" * blank, "last = 1"])
    assert tomllib.loads(text)["k0"] == strings[0]
    assert lines_of(text)[("last",)] == text.count("\n") + 1


@pytest.mark.parametrize(
    ("text", "line"),
    [
        ("a = 1\nb = \n", 2),
        ("a = 1\n\n[a]\n", 3),
        ("a = 1\nb = [1,\n2,\n", 3),
        ('a = 1\nb = "open\nc = 2\n', 2),
        ("a = 1\na = 2\n", 2),
        ("[t]\nx = 1\n[t]\n", 3),
    ],
)
def test_what_is_no_toml_has_a_line_too(text, line):
    with pytest.raises(tomllib.TOMLDecodeError) as caught:
        tomllib.loads(text)
    assert line_of_decode_error(text, caught.value) == line
