"""The project's own rules: style, direction of imports, size of files, what a clone and a wheel contain."""

import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]


def run(*command):
    return subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=False)


@pytest.mark.parametrize("arguments", [("check",), ("format", "--check")])
def test_ruff_is_content(arguments):
    found = run(sys.executable, "-m", "ruff", *arguments, "src", "tests", "examples")
    assert found.returncode == 0, found.stdout + found.stderr


def test_imports_go_one_way():
    found = run(str(Path(sys.executable).parent / "lint-imports"), "--no-cache")
    assert found.returncode == 0, found.stdout


def test_files_are_short():
    lengths = {path: len(path.read_text().splitlines()) for path in (ROOT / "src").rglob("*.py")}
    long = {str(path): count for path, count in lengths.items() if count > 400}
    assert not long
    assert sorted(lengths.values())[len(lengths) // 2] <= 200


def test_heavy_libraries_are_imported_behind_one_file_each():
    """matplotlib in five files of report, astropy.table where tables are read and written; others in theirs."""
    homes = {}
    for path in (ROOT / "src").rglob("*.py"):
        for line in path.read_text().splitlines():
            words = line.split()
            if words[:1] in (["import"], ["from"]) and len(words) > 1:
                library = words[1].split(".")[0]
                homes.setdefault(library, set()).add(path.relative_to(ROOT / "src" / "stellerg").as_posix())
    figures = ("figures", "prior_figure", "domain_figure", "learned_figure", "comparison_figure")
    assert homes["matplotlib"] == {f"report/{name}.py" for name in figures}
    assert "pickle" not in homes
    assert "random" not in homes


@pytest.mark.slow
def test_a_wheel_carries_the_priors_and_finds_them(tmp_path):
    """Built, unpacked beside the dependencies, and run from a folder that is no checkout."""
    built = run(sys.executable, "-m", "hatchling", "build", "-t", "wheel", "-d", str(tmp_path))
    assert built.returncode == 0, built.stderr
    (wheel,) = tmp_path.glob("*.whl")
    with zipfile.ZipFile(wheel) as archive:
        names = archive.namelist()
        archive.extractall(tmp_path / "site")
    shipped = sorted(path.name for path in (ROOT / "priors").glob("*.toml"))
    assert sorted(Path(name).name for name in names if name.startswith("stellerg/priors/")) == shipped
    assert "stellerg/py.typed" in names
    code = "import stellerg, pathlib; print(stellerg.__file__); print(*stellerg.available_priors())"
    found = subprocess.run(
        [sys.executable, "-c", code],
        cwd=tmp_path,
        env={"PYTHONPATH": str(tmp_path / "site")},
        capture_output=True,
        text=True,
        check=True,
    ).stdout.splitlines()
    assert found[0].startswith(str(tmp_path))
    assert found[1].split() == [name.removesuffix(".toml") for name in shipped]
