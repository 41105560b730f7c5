"""The domain of the main sequence: the table against its reference, its boundaries, and what is said of large stars."""

import csv
from pathlib import Path

import numpy as np
import pytest

from stellerg import Stars, propagate
from stellerg.status import Flag, Status
from stellerg.structure.main_sequence import Place, end_of_main_sequence, place, radius_zams

PUBLISHED = Path(__file__).parent / "published"


def table(name):
    lines = (PUBLISHED / name).read_text(encoding="utf-8").splitlines()
    return list(csv.DictReader(line for line in lines if not line.startswith("#")))


def test_the_packaged_table_holds_the_reference_values():
    for row in table("structure_nodes.csv"):
        assert radius_zams(np.array(float(row["mass"]))) == pytest.approx(float(row["radius_zams"]), rel=1e-12)
    for row in table("structure_branches.csv"):
        assert end_of_main_sequence(np.array(float(row["mass"]))) == pytest.approx(float(row["x_end"]), rel=1e-12)


def test_zero_age_radii_of_integrated_models_lie_on_it():
    """Not independent of the nodes, which were made partly from them: a check of the implementation."""
    for row in table("structure_checks.csv"):
        if row["what"].startswith("zero-age"):
            assert radius_zams(np.array(float(row["mass"]))) == pytest.approx(float(row["radius"]), rel=0.03)


def test_radius_grows_smoothly_with_mass_and_ends_are_continuous():
    mass = np.exp(np.linspace(np.log(0.1), np.log(40.0), 4001))
    assert (np.diff(radius_zams(mass)) > 0.0).all()
    assert np.abs(np.diff(end_of_main_sequence(mass))).max() < 0.01
    assert np.isnan(radius_zams(np.array([0.09, 41.0]))).all()


@pytest.mark.parametrize("mass", [0.2, 0.5, 0.69, 0.7, 0.71, 1.0, 3.0, 20.0])
def test_every_boundary_has_a_neighbour_on_either_side(mass):
    end = float(radius_zams(np.array(mass)) * end_of_main_sequence(np.array(mass)))
    below, above = place(np.array([mass, mass]), end * np.array([0.999, 1.001]))
    assert below == Place.MAIN_SEQUENCE
    assert above == (Place.CONTRACTING if mass < 0.7 else Place.BEYOND)


GIANTS = [(1.0, 8.8, 4700.0), (1.0, 33.0, 4100.0), (3.0, 20.0, 4800.0), (5.0, 60.0, 4300.0)]


@pytest.mark.parametrize(("mass", "radius", "temperature"), GIANTS)
@pytest.mark.parametrize("prior", ["uniform-index", "wide-index", "polytrope-3", "by-mass"])
def test_giants_are_doubtful_with_and_without_temperature(mass, radius, temperature, prior):
    given = {"mass": (mass, 0.1 * mass), "radius": (radius, 0.05 * radius)}
    for more in ({}, {"effective_temperature": (temperature, 100.0)}):
        posterior = propagate(Stars.of(**given, **more), prior=prior)
        assert posterior.status[0] == Status.DOUBTFUL
        assert "if this star is a giant, the numbers are wrong by 10 to 300 times" in posterior.status_text()[0]
        assert posterior.median("binding_energy")[0] > 0.0


def test_what_is_stated_decides():
    given = {"mass": (0.9, 0.05), "radius": (1.6 * 0.796, 0.05), "luminosity": (0.8, 0.1)}
    status = {
        state: propagate(Stars.of(**given, evolutionary_state=state)).status[0]
        for state in ("unknown", "main-sequence", "pre-main-sequence", "evolved")
    }
    assert status == {
        "unknown": Status.DOUBTFUL,
        "main-sequence": Status.DOUBTFUL,
        "pre-main-sequence": Status.OK,
        "evolved": Status.EVOLVED_OR_CONTRACTING,
    }


def test_a_light_star_is_taken_as_contracting_with_a_flag():
    posterior = propagate(Stars.of(mass=(0.12, 0.01), radius=(0.43, 0.02), luminosity=(0.02, 0.002)))
    assert posterior.status[0] == Status.OK
    assert posterior.flags[0] & Flag.TAKEN_AS_CONTRACTING


def test_times_without_structure_are_not_doubtful():
    stars = Stars.of(mass=(1.0, 0.1), radius=(8.8, 0.5), luminosity=(35.0, 3.0))
    outputs = ("free_fall_time", "nuclear_time")
    assert propagate(stars, outputs=outputs).status[0] == Status.OK
    evolved = Stars.of(mass=(1.0, 0.1), radius=(8.8, 0.5), luminosity=(35.0, 3.0), evolutionary_state="evolved")
    assert propagate(evolved, outputs=outputs).status[0] == Status.OK


def test_a_missing_luminosity_and_a_doubtful_size_are_both_said():
    (text,) = propagate(Stars.of(mass=(1.0, 0.1), radius=(8.8, 0.5))).status_text()
    assert "no Kelvin-Helmholtz time" in text
    assert "if this star is a giant" in text
