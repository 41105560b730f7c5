"""What knowing the inside of a star is worth: on the invented Quayside survey, on the Sun, and for each shipped prior.

python examples/structure.py [FIGURE]
"""

import sys
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

from stellerg import Stars, available_priors, load_prior, propagate, read_stars
from stellerg.structure.relations import log10_apsidal_constant, log10_moment_of_inertia_factor

OUTPUTS = ("binding_energy", "kelvin_helmholtz_time")
INTERVALS = ((0.15865525, 0.84134475), (0.02275013, 0.97724987))


def main_sequence_stars():
    """Stars of the survey that the calibration covers, with both outputs; and their calibrated index."""
    survey = read_stars(Path(__file__).with_name("survey.csv"))
    calibrated = propagate(survey, prior="main-sequence")
    time = calibrated.median("kelvin_helmholtz_time")
    rows = np.flatnonzero(calibrated.has_results & ~np.isnan(time) & (calibrated.convective_share() != 0.0))
    rows = rows[survey.evolutionary_state[rows] != 2]  # not those stated to be contracting
    return survey.take(rows), calibrated.take(rows).median("n_effective")


def with_inside(stars, **inside):
    """The same stars with something measured of their inside (invented: what their calibrated index predicts)."""
    more = Stars.of(stars.identifier, **inside)
    return Stars(stars.identifier, {**stars.measured, **more.measured}, stars.correlation, stars.evolutionary_state)


def widths(posterior):
    """Median over the stars of half the 68.27 % interval of the logarithm, for both outputs."""
    found = []
    for output in OUTPUTS:
        low, high = np.log(posterior.interval(output)).T
        found.append(0.5 * float(np.median(high - low)))
    return found


def gain():
    """Widths under the default, with structure observables, and under the calibration."""
    stars, index = main_sequence_stars()
    k2, inertia = log10_apsidal_constant(index), 10.0 ** log10_moment_of_inertia_factor(index)
    coefficient = 3.0 / (5.0 - index)
    cases = {
        "uniform-index (default)": (stars, "uniform-index"),
        "wide-index": (stars, "wide-index"),
        "wide-index, log k2 ± 0.03": (with_inside(stars, log_k2=(k2, 0.03 + 0.0 * k2)), "wide-index"),
        "wide-index, moment of inertia ± 3 %": (
            with_inside(stars, moment_of_inertia_factor=(inertia, 0.03 * inertia)),
            "wide-index",
        ),
        "wide-index, coefficient ± 3 %": (
            with_inside(stars, structure_coefficient=(coefficient, 0.03 * coefficient)),
            "wide-index",
        ),
        "main-sequence": (stars, "main-sequence"),
    }
    return len(stars), {name: widths(propagate(some, prior=prior)) for name, (some, prior) in cases.items()}


def sun():
    """Energy of a star of exactly one nominal solar mass, radius and luminosity under some priors, 10^48 erg."""
    given = Stars.of("Sun", mass="1 exact", radius="1 exact", luminosity="1 exact")
    rows = {}
    for prior in ("uniform-index", "wide-index", "main-sequence", "present-sun"):
        posterior = propagate(given, outputs="potential_energy", prior=prior)
        rows[prior] = posterior.quantile((0.5, *INTERVALS[0], *INTERVALS[1]), "potential_energy")[0] / 1e48
    return rows


def coverage():
    """Share of main-sequence stars whose calibrated coefficient lies in the central intervals of each prior.

    Masses are uniform in ln M from 0.35 solar masses (lighter stars are fully convective, n = 1.4 to 1.5) to 40, radii
    in ln R from age zero to the end of the main sequence.
    """
    calibration = load_prior("main-sequence")
    ends = np.log([0.35, 40.0])
    log_mass = np.repeat(np.linspace(*ends, 400), 40)
    share = np.tile((np.arange(40) + 0.5) / 40.0, 400)
    log_radius = calibration.relation_at(log_mass)[:, 0] + share * np.log(calibration.boundaries.at("end", log_mass))
    relation = calibration.relation(log_mass, log_radius, np.zeros(len(log_mass), bool))
    half = np.full((len(log_mass), 1), 0.5)
    value = relation.quantile(half, log_mass[:, None], log_radius[:, None])
    rows = {}
    for name in available_priors():
        model = load_prior(name)
        if name == "main-sequence" or model.applies_to.mass is not None:
            continue
        below = model.cumulative(value, log_mass[:, None])[:, 0]
        rows[name] = [float(((below >= low) & (below <= high)).mean()) for low, high in INTERVALS]
    return rows


def figure(table, path):
    """Widths as bars."""
    names = list(table)[::-1]
    drawing = Figure(figsize=(7.2, 3.4), layout="constrained")
    axes = drawing.subplots(1, 2, sharey=True)
    for axis, column, title in zip(
        axes, (0, 1), ("ln of the binding energy", "ln of the Kelvin-Helmholtz time"), strict=True
    ):
        values = [table[name][column] for name in names]
        axis.barh(names, values, color="#3b6e8f", height=0.6)
        for place, value in enumerate(values):
            axis.text(value + 0.004, place, f"{value:.3f}", va="center", fontsize=9)
        axis.set_xlim(0.0, 1.2 * max(values))
        axis.set_title(f"half the 68.27 % interval of\n{title}", fontsize=10)
        axis.tick_params(labelsize=9)
        for side in ("top", "right"):
            axis.spines[side].set_visible(False)
    drawing.savefig(path, dpi=150)


if __name__ == "__main__":
    count, table = gain()
    print(f"Half the 68.27 % interval of the logarithm, median of {count} main-sequence stars of the survey")
    print(f"{'structure':38}{'|E|':>8}{'t_KH':>8}")
    for name, (energy, time) in table.items():
        print(f"{name:38}{energy:8.3f}{time:8.3f}")
    print("\nabs(Omega) of the Sun in 10^48 erg (published solar models: 6.118)")
    print(f"{'structure':38}{'median':>8}{'68.27 %':>16}{'95.45 %':>16}")
    for name, (middle, a, b, c, d) in sun().items():
        print(f"{name:38}{middle:8.3f}{f'{a:.3f} to {b:.3f}':>16}{f'{c:.3f} to {d:.3f}':>16}")
    print("\nMain-sequence stars whose calibrated coefficient lies in the central interval of a prior")
    print(f"{'prior':38}{'68.27 %':>8}{'95.45 %':>8}")
    for name, shares in coverage().items():
        print(f"{name:38}" + "".join(f"{f'{100 * share:.0f} %':>8}" for share in shares))
    if len(sys.argv) > 1:
        figure(table, sys.argv[1])
