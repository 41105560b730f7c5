"""What the README shows is what the commands print."""

import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest
from typer.testing import CliRunner

from stellerg.cli import app

ROOT = Path(__file__).resolve().parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
BLOCKS = re.findall(r"```console\n\$ stellerg ([^\n]*)\n(.*?)```", README, flags=re.DOTALL)


@pytest.mark.parametrize(("command", "shown"), BLOCKS, ids=[command.split()[0] for command, _ in BLOCKS])
def test_console_blocks_are_real_output(command, shown, tmp_path, monkeypatch):
    monkeypatch.chdir(ROOT)
    monkeypatch.setenv("COLUMNS", "110")
    words = shlex.split(command)
    if "--out" in words:  # results go elsewhere, under a name of the same length on screen
        monkeypatch.chdir(tmp_path)
        words = [str(ROOT / word) if word.startswith("examples/") else word for word in words]
    result = CliRunner().invoke(app, words)
    assert result.exit_code == 0, result.output
    printed = [line.rstrip() for line in result.stdout.strip().splitlines()]
    assert printed == [line.rstrip() for line in shown.strip().splitlines()]


def test_both_kinds_of_command_are_shown():
    assert {command.split()[0] for command, _ in BLOCKS} == {"star", "catalogue"}


def test_the_first_paragraph_and_two_one_line_commands_come_first():
    lines = README.splitlines()
    assert lines[0] == "# stellerg"
    assert lines[2].startswith("`stellerg` takes what was measured")
    commands = [line for line in lines if line.startswith("    python3 -m venv")]
    assert len(commands) == 2
    assert "stellerg catalogue examples/survey.csv" in commands[0]
    assert "pytest" in commands[1]


def test_the_python_shown_runs(tmp_path, monkeypatch):
    (code,) = re.findall(r"```python\n(.*?)```", README, flags=re.DOTALL)
    monkeypatch.chdir(ROOT)
    names: dict = {}
    exec(compile(code, "README.md", "exec"), names)  # the README's own lines, run as a reader would
    assert len(names["survey"]) == 24
    assert names["posterior"].median("binding_energy")[0] > 1e48


def test_the_table_of_structure_is_what_the_example_prints():
    (shown,) = re.findall(r"```console\n\$ python examples/structure.py\n(.*?)```", README, flags=re.DOTALL)
    run = subprocess.run(
        [sys.executable, "examples/structure.py"], cwd=ROOT, capture_output=True, text=True, check=True
    )
    number = r"\d+\.\d+"  # a last digit may turn over on another processor
    assert re.sub(number, "#", run.stdout).split() == re.sub(number, "#", shown).split()
    printed, stored = (list(map(float, re.findall(number, text))) for text in (run.stdout, shown))
    assert printed == pytest.approx(stored, abs=1.5e-3)
