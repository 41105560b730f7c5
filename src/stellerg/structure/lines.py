"""On which line of a TOML text each table, key and list element starts.

The text is read twice: by `tomllib`, which gives the values and refuses what is no TOML, and here for the
places. So this reader may take the text to be valid, and leaves all decoding to `tomllib`.
"""

import re
import tomllib

__all__ = ["line_of", "line_of_decode_error", "lines_of"]

Keys = tuple[str | int, ...]

# TOML 1.0: four kinds of string, comments, line breaks, brackets and separators, and anything else (numbers,
# dates, bare keys). A multi-line string may end in up to two more quotes that belong to it.
_TOKEN = re.compile(
    r'"""(?:\\.|[^\\])*?"{3,5}' + r"|'''.*?'{3,5}" + r'|"(?:\\.|[^"\\])*"' + r"|'[^']*'"
    r"|\#[^\n]*|\n|[\[\]{},=]|[^\s\[\]{},=\#\"']+",
    re.DOTALL,
)


def lines_of(text: str) -> dict[Keys, int]:
    """Return the line of every table, key and list element of a valid TOML text.

    Returns
    -------
    dict
        From the keys that lead to it (numbers from 0 for elements of lists) to a line, counted from 1: the
        header of a table, the line of a key, the first of what stands in several places.
    """
    return _Places(text).found


def line_of(text: str, keys: Keys) -> int:
    """Return the line of a key, or of the nearest table around it that is written out, or 1."""
    found = lines_of(text)
    for end in range(len(keys), 0, -1):
        if keys[:end] in found:
            return found[keys[:end]]
    return 1


def line_of_decode_error(text: str, problem: Exception) -> int:
    """Return the line that `tomllib` names in its message; the last one if it names the end of the document."""
    named = re.search(r"\(at line (\d+), column \d+\)", str(problem))
    return int(named[1]) if named else max(len(text.rstrip().splitlines()), 1)


class _Places:
    """One pass over the tokens of a text."""

    def __init__(self, text: str):
        self.found: dict[Keys, int] = {}
        self._text = text
        self._tokens = [(m.group(), m.start()) for m in _TOKEN.finditer(text) if not m.group().startswith("#")]
        self._at = 0
        self._last: dict[Keys, int] = {}  # number of the last table of each array of tables
        self._line, self._counted = 1, 0
        table: Keys = ()
        while self._skip_breaks():
            if self._token == "[":
                table = self._header()
            else:
                self._pair(table)

    @property
    def _token(self) -> str:
        return self._tokens[self._at][0] if self._at < len(self._tokens) else ""

    @property
    def _start(self) -> int:
        return self._tokens[self._at][1]

    def _skip_breaks(self) -> bool:
        """Go to the next token that is no line break; whether there is one."""
        while self._token == "\n":
            self._at += 1
        return self._token != ""

    def _here(self) -> int:
        """Line of the present token; tokens are passed in order."""
        self._line += self._text.count("\n", self._counted, self._start)
        self._counted = self._start
        return self._line

    def _key(self, end: str) -> Keys:
        """Read a key, dotted or quoted, up to (and past) the token that ends it."""
        start = self._start
        while self._token != end:
            self._at += 1
        key = self._text[start : self._start]
        self._at += 1
        nested, keys = tomllib.loads(f"{key} = 0"), []
        while isinstance(nested, dict):
            ((name, nested),) = nested.items()
            keys.append(name)
        return tuple(keys)

    def _header(self) -> Keys:
        line = self._here()
        array = self._text[self._start + 1] == "["
        self._at += 2 if array else 1
        *outer, name = self._key("]")
        self._at += 1 if array else 0
        table: Keys = ()
        for key in outer:
            self.found.setdefault((*table, key), line)
            table = self._into((*table, key))
        table = (*table, name)
        if not array:
            self.found[table] = line
            return table
        self.found.setdefault(table, line)
        self._last[table] = self._last.get(table, -1) + 1
        table = self._into(table)
        self.found[table] = line
        return table

    def _into(self, keys: Keys) -> Keys:
        """The last table of an array of tables; any other table itself."""
        return (*keys, self._last[keys]) if keys in self._last else keys

    def _pair(self, table: Keys) -> None:
        line = self._here()
        keys = self._key("=")
        for end in range(1, len(keys)):
            self.found.setdefault((*table, *keys[:end]), line)
        self.found[(*table, *keys)] = line
        self._value((*table, *keys))

    def _value(self, keys: Keys) -> None:
        if self._token == "[":
            self._list(keys)
        elif self._token == "{":
            self._inline_table(keys)
        else:
            while self._token not in ("\n", ",", "]", "}", ""):  # a date and a time are two tokens
                self._at += 1

    def _list(self, keys: Keys) -> None:
        self._at += 1
        number = 0
        while self._skip_breaks() and self._token != "]":
            if self._token == ",":
                self._at += 1
                continue
            self.found[(*keys, number)] = self._here()
            self._value((*keys, number))
            number += 1
        self._at += 1

    def _inline_table(self, keys: Keys) -> None:
        self._at += 1
        while self._token != "}":
            if self._token in (",", "\n"):
                self._at += 1
                continue
            self._pair(keys)
        self._at += 1
