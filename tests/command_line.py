"""Call the command line inside the test's own process, as a user's shell would: words in, texts and exit code out."""

import io
import json
import sys
from contextlib import redirect_stderr, redirect_stdout
from dataclasses import dataclass
from unittest.mock import patch

from stellerg.cli import main


@dataclass(frozen=True)
class Result:
    """What a call printed, and its exit code. An exception that escapes is a traceback and fails the test."""

    code: int
    out: str
    err: str

    @property
    def words(self):
        """The text without line breaks and frames."""
        return " ".join((self.out + " " + self.err).replace("│", " ").split())

    @property
    def json(self):
        return json.loads(self.out)


def stellerg(*arguments, columns=120):
    out, err = io.StringIO(), io.StringIO()
    with (
        patch.object(sys, "argv", ["stellerg", *map(str, arguments)]),
        patch.dict("os.environ", {"COLUMNS": str(columns)}),
        redirect_stdout(out),
        redirect_stderr(err),
    ):
        try:
            main()
            code = 0
        except SystemExit as end:
            code = end.code or 0
    return Result(code, out.getvalue(), err.getvalue())


def assert_one_message(result, *wanted):
    """A wrong call: exit code 2, nothing on standard output, one message that names what is wrong."""
    assert result.code == 2, result
    assert result.out == ""
    lines = result.err.strip().splitlines()
    ours = len(lines) == 1 and lines[0].startswith("stellerg: ")
    usage = result.err.count("─ Error ─") == 1 and "stellerg: " not in result.err
    assert ours or usage, result.err
    for word in wanted:
        assert word in result.words
    assert "Traceback" not in result.err
    assert "np." not in result.err  # no name of a library's type in a user's message
