"""Start-up is a feature: help loads no heavy library, and `import stellerg` loads no numerics at all."""

import importlib
import json
import subprocess
import sys

import pytest

import stellerg

HEAVY = ("arviz", "arviz_base", "arviz_stats", "matplotlib", "astropy.table", "pyarrow")

PUBLIC = [
    "ENGINES",
    "OBSERVABLES",
    "OUTPUTS",
    "Conventions",
    "Exact",
    "InputError",
    "Posterior",
    "PriorError",
    "SolarReferences",
    "Stars",
    "StellergError",
    "available_priors",
    "convert_kelvin_helmholtz_time",
    "load_prior",
    "propagate",
    "read_stars",
]

RUN = """
import json, sys
sys.argv = ["stellerg", *sys.argv[1:]]
from stellerg.cli import main
try:
    main()
except SystemExit as end:
    code = end.code
else:
    code = 0
print(json.dumps([code, sorted(sys.modules)]), file=sys.stderr)
"""


def modules_after(program, *arguments):
    """Standard output, and what a fresh interpreter printed last on standard error."""
    done = subprocess.run(
        [sys.executable, "-c", program, *arguments],
        capture_output=True,
        text=True,
        encoding="utf-8",
        check=True,
    )
    return done.stdout, json.loads(done.stderr.strip().splitlines()[-1])


def loaded(modules, names):
    return [name for name in names if any(m == name or m.startswith(name + ".") for m in modules)]


@pytest.mark.parametrize(
    "arguments",
    [["--help"], ["star", "--help"], ["catalogue", "--help"], ["priors", "show", "--help"], ["--version"]],
    ids=" ".join,
)
def test_help_loads_no_heavy_library(arguments):
    text, (code, modules) = modules_after(RUN, *arguments)
    assert code in (0, None)
    assert ("Usage: stellerg" in text) == (arguments != ["--version"])
    assert loaded(modules, HEAVY) == []
    assert loaded(modules, ["stellerg.cli", "typer"]) == ["stellerg.cli", "typer"]


def test_the_check_sees_what_is_loaded(tmp_path):
    """A control: a figure needs matplotlib, and is seen to load it."""
    star = ["--mass", "1 exact", "--radius", "1 exact", "--luminosity", "1 exact"]
    _, (code, modules) = modules_after(RUN, "star", *star, "--plot", str(tmp_path / "star.svg"))
    assert code in (0, None)
    assert loaded(modules, ["matplotlib", "pyarrow"]) == ["matplotlib", "pyarrow"]


def test_an_answer_without_a_figure_loads_no_matplotlib():
    _, (_, modules) = modules_after(RUN, "star", "--mass", "1(1)", "--radius", "1(1)", "--json")
    assert loaded(modules, ["matplotlib", "arviz_base", "arviz_stats"]) == []


def test_import_loads_neither_numpy_nor_astropy():
    program = "import json, sys; import stellerg; print(json.dumps(sorted(sys.modules)), file=sys.stderr)"
    _, modules = modules_after(program)
    assert loaded(modules, ["numpy", "scipy", "astropy", "typer", *HEAVY]) == []
    assert "stellerg" in modules


def test_public_names_are_frozen():
    assert stellerg.__all__ == PUBLIC
    assert len(set(stellerg.__all__)) == len(PUBLIC)
    assert sorted(PUBLIC) == dir(stellerg)


@pytest.mark.parametrize("name", PUBLIC)
def test_public_name_is_importable(name):
    found = getattr(importlib.import_module("stellerg"), name)
    assert not isinstance(found, type(importlib))  # the object, not a module of the same name
    assert getattr(stellerg, name) is found


def test_all_names_at_once():
    program = f"from stellerg import {', '.join(PUBLIC)}\nimport sys\nprint(int(callable(propagate)), file=sys.stderr)"
    assert modules_after(program)[1] == 1


def test_a_name_that_does_not_exist():
    with pytest.raises(AttributeError, match="no attribute 'nothing'"):
        stellerg.nothing  # noqa: B018 - the access is what is tested
