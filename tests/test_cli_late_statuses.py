"""Statuses that only an engine, or the size of a star, can raise, through the command line."""

import json

import pytest

from command_line import stellerg

HOPELESS = ["--mass", "1.0 +0.02 -0.01", "--log-mass", "-0.3 +0.01 -0.02", "--radius", "1.0 ± 0.1"]
HOPELESS += ["--use", "mass,log_mass,radius", "--outputs", "binding_energy"]
STAR = ["--mass", "1.0 ± 0.1", "--radius", "1.0 ± 0.1", "--luminosity", "1.0 ± 0.1"]
GIANT = ["--mass", "1.0 ± 0.1", "--radius", "33 ± 2", "--effective-temperature", "4100 ± 100"]

CASES = {
    "hard ends that do not overlap": (HOPELESS, 3, "not-converged", "no value satisfies all measurements"),
    "the same for chains": ([*HOPELESS, "--engine", "mcmc"], 3, "not-converged", "no value satisfies all measurements"),
    "chains too short": ([*STAR, "--engine", "mcmc", "--most-steps", "1"], 3, "not-converged", "autocorrelation times"),
    "a giant, unstated": (GIANT, 0, "doubtful", "if this star is a giant, the numbers are wrong by 10 to 300 times"),
    "a giant, stated": (
        [*GIANT, "--evolutionary-state", "evolved"],
        3,
        "evolved-or-contracting",
        "the star is stated evolved",
    ),
    "stated contracting": ([*GIANT, "--evolutionary-state", "pre-main-sequence"], 0, "ok", ""),
}


@pytest.mark.parametrize("case", CASES)
def test_status_exit_code_and_sentence(case):
    arguments, code, word, sentence = CASES[case]
    result = stellerg("star", *arguments, "--json")
    answer = json.loads(result.out)
    assert (result.code, answer["status"]) == (code, word)
    assert sentence in answer["status_text"]
    given = [output for output in answer["outputs"].values() if output is not None]
    assert bool(given) == (code == 0)
