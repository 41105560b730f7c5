"""`stellerg priors learn` through the command line, and its file used as a prior."""

import csv

import numpy as np
import pytest

from command_line import assert_one_message, stellerg
from stellerg import load_prior
from stellerg.structure.relations import log10_apsidal_constant

SEED = 20261210


@pytest.fixture
def table(tmp_path):
    """Thirty invented stars of index 3.1 ± 0.2, whose k2 is that of polytropes 0.15 lower."""
    rng = np.random.default_rng(SEED)
    path = tmp_path / "training.csv"
    with path.open("w", newline="") as file:
        writer = csv.writer(file)
        writer.writerow(("star", "mass", "mass_error", "log_k2", "log_k2_error", "group"))
        for number, index in enumerate(rng.normal(3.1, 0.2, 30)):
            value = float(log10_apsidal_constant(index - 0.15)) + rng.normal(0.0, 0.02)
            writer.writerow((f"Fen {number}", 1.0 + 0.1 * number, 0.02, f"{value:.5f}", 0.02, "ab"[number % 2]))
    return path


def test_a_learned_file_is_a_prior_and_names_its_stars(table, tmp_path):
    out = tmp_path / "fen.toml"
    result = stellerg("priors", "learn", table, "--out", out, "--plot", tmp_path / "fen.png")
    assert result.code == 0, result.err
    assert "Learned from 30 stars with log k2" in result.out
    assert "posterior predictive check" in result.out
    assert (tmp_path / "fen.png").stat().st_size > 10_000
    model = load_prior(out)
    mixture = model.intervals[0].mixture
    density = mixture.components[0].family
    # k2 sees n - misfit, and the misfit is one for all: the mean is the data's, its error 0.25 and more
    assert density.location == pytest.approx(2.95, abs=0.15)
    assert 0.25 < density.scale < 0.45
    assert model.common.fraction == pytest.approx(0.25**2 / density.scale**2, rel=0.15)
    assert len(model.training) == 30
    given = ("star", "--mass", "1.2 ± 0.02", "--radius", "1.2 ± 0.02", "--prior", out)
    assert "used-in-training" in stellerg(*given, "--name", "Fen 2").out
    assert "used-in-training" not in stellerg(*given, "--name", "Fen 200").out


def test_a_slope_and_stages(table, tmp_path):
    out = tmp_path / "fen.toml"
    result = stellerg("priors", "learn", table, "--out", out, "--slope", "--stage", "group")
    assert result.code == 0, result.err
    assert "slope with ln M" in result.out
    assert "misfit a" in result.out
    assert "misfit b" in result.out
    assert len(load_prior(out).intervals) > 3


@pytest.mark.parametrize(
    ("options", "words"),
    [
        (("--out", "x.txt"), "must end in .toml"),
        (("--out", "x.toml", "--stage", "age"), "has no column 'age'"),
        (("--out", "x.toml", "--plot", "x.doc"), "x.doc"),
        (("--out", "nowhere/x.toml"), "cannot be written"),
    ],
)
def test_wrong_calls_say_what_to_do(table, options, words, tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    result = stellerg("priors", "learn", table, *options)
    assert_one_message(result, words)


def test_a_file_is_not_overwritten_unasked(table, tmp_path):
    out = tmp_path / "fen.toml"
    out.write_text("kept")
    result = stellerg("priors", "learn", table, "--out", out)
    assert_one_message(result, "--overwrite")
    assert out.read_text() == "kept"


def test_too_few_stars_are_refused(tmp_path):
    path = tmp_path / "few.csv"
    path.write_text("star,log_k2,log_k2_error\na,-1.8,0.02\nb,-1.9,0.02\n")
    result = stellerg("priors", "learn", path, "--out", tmp_path / "x.toml")
    assert_one_message(result, "at least 5")
