"""The example notebook: its stored outputs are what its cells give."""

import re
import shutil
from pathlib import Path

import nbformat
import pytest
from nbclient import NotebookClient

EXAMPLES = Path(__file__).resolve().parents[1] / "examples"
NOTEBOOK = EXAMPLES / "one_star.ipynb"
TOLERANCE = 1e-6
NUMBER = re.compile(r"[-+]?\d+(?:,\d{3})*(?:\.\d+)?(?:e[-+]?\d+)?")
MACHINE_PATH = re.compile(r"/(?:home|Users|root|tmp|opt|usr)/|\b[A-Z]:\\")


def load():
    return nbformat.read(NOTEBOOK, as_version=4)


def code_cells(notebook):
    return [cell for cell in notebook.cells if cell.cell_type == "code"]


def outputs(cell):
    """(kind, text) of what a cell gives, in order; of a picture only that it is there."""
    found = []
    for output in cell.outputs:
        if output.output_type == "stream":
            found.append((output.name, output.text))
        elif output.output_type == "error":
            found.append(("error", f"{output.ename}: {output.evalue}"))
        else:
            found += [(kind, "" if kind.startswith("image/") else text) for kind, text in sorted(output.data.items())]
    return found


def differences(got, stored):
    """What differs between two texts: the words exactly, the numbers by more than the tolerance."""
    if NUMBER.sub("#", got) != NUMBER.sub("#", stored):
        return [(got, stored)]
    pairs = zip(NUMBER.findall(got), NUMBER.findall(stored), strict=True)
    values = [(float(a.replace(",", "")), float(b.replace(",", ""))) for a, b in pairs]
    return [(a, b) for a, b in values if abs(a - b) > TOLERANCE * abs(b)]


def test_the_comparison_sees_a_changed_number_and_a_changed_word():
    text = "median 2.053e+48, 1,000 stars"
    assert differences(text, text) == []
    assert differences("median 2.053000001e+48, 1,000 stars", text) == []
    assert differences("median 2.0531e+48, 1,000 stars", text) == [(2.0531e48, 2.053e48)]
    assert differences("mean 2.053e+48, 1,000 stars", text)
    assert differences("median 2.053e+48, 1,000 stars, 2", text)


def test_the_notebook_is_stored_executed_small_and_without_traces_of_a_machine():
    notebook = load()
    nbformat.validate(notebook)
    assert notebook.metadata == {
        "kernelspec": {"display_name": "Python 3", "language": "python", "name": "python3"},
        "language_info": {"name": "python"},
    }
    cells = code_cells(notebook)
    assert [cell.execution_count for cell in cells] == list(range(1, len(cells) + 1))
    assert all(cell.outputs for cell in cells)
    assert NOTEBOOK.stat().st_size < 300_000
    for cell in notebook.cells:
        assert not MACHINE_PATH.search(cell.source)
        assert cell.metadata == {}
    kinds = [kind for cell in cells for kind, _ in outputs(cell)]
    assert {"text/html", "image/png", "stdout"} <= set(kinds)
    assert {"stderr", "error"}.isdisjoint(kinds)
    assert not any(MACHINE_PATH.search(text) for cell in cells for _, text in outputs(cell))


@pytest.mark.slow
def test_the_notebook_gives_its_stored_outputs(tmp_path, monkeypatch):
    """In a copy, with the kernel of this interpreter and none of the user's settings."""
    for name in ("IPYTHONDIR", "JUPYTER_CONFIG_DIR", "JUPYTER_DATA_DIR", "JUPYTER_RUNTIME_DIR"):
        monkeypatch.setenv(name, str(tmp_path / name.lower()))
    monkeypatch.setenv("JUPYTER_PREFER_ENV_PATH", "1")
    folder = tmp_path / "examples"
    folder.mkdir()
    shutil.copy(EXAMPLES / "survey.csv", folder)
    stored, notebook = load(), load()
    for cell in code_cells(notebook):
        cell.outputs = []
    resources = {"metadata": {"path": str(folder)}}
    NotebookClient(notebook, timeout=300, kernel_name="python3", coalesce_streams=True, resources=resources).execute()
    for cell, expected in zip(code_cells(notebook), code_cells(stored), strict=True):
        got, wanted = outputs(cell), outputs(expected)
        assert [kind for kind, _ in got] == [kind for kind, _ in wanted], cell.source
        for (_, text), (_, text_stored) in zip(got, wanted, strict=True):
            assert not differences(text, text_stored), cell.source
