"""One star's answer as plain data: what ``stellerg star --json`` prints."""

import math

import numpy as np

from stellerg.posterior.result import COEFFICIENT, EFFECTIVE_INDEX, STANDARD_PROBABILITIES, Posterior
from stellerg.status import STATUS_TEXT, Status, flag_words

__all__ = ["star_document"]


def _plain(value) -> float | None:
    """A number that JSON can hold; None for what does not exist."""
    number = float(value)
    return number if math.isfinite(number) else None


def star_document(posterior: Posterior, row: int = 0) -> dict:
    """Return the answer for one star.

    Parameters
    ----------
    posterior : Posterior
    row : int

    Returns
    -------
    dict
        Numbers, texts, lists and None only.
    """
    if len(posterior) > 1:  # one star's numbers are computed, not everybody's
        posterior, row = posterior.take([row]), 0
    number = int(posterior.engine[row])
    over_determined = not np.isnan(posterior.probability[row])
    return {
        "star": str(posterior.star[row]),
        "status": STATUS_TEXT[Status(posterior.status[row])].word,
        "status_text": posterior.status_text()[row],
        "flags": list(flag_words(int(posterior.flags[row]))),
        "engine": posterior.engines[number] if number >= 0 else None,
        "engine_reason": posterior.engine_reasons[posterior.engine_reason[row]] or None,
        "prior": posterior.prior,
        "convention": {"energy": posterior.energy_convention, "time": posterior.time_convention},
        "outputs": {name: _output(posterior, name, row) for name in posterior.outputs},
        "structure": {
            "coefficient": _quantiles(posterior, COEFFICIENT, row),
            "n_effective": _quantiles(posterior, EFFECTIVE_INDEX, row),
            "components": _components(posterior, row),
            "predictive_probability": {
                name: _plain(values[row]) for name, values in posterior.predictive_probabilities().items()
            },
        },
        "radiation": {"share": _plain(posterior.radiation_share()[row]), "counted": posterior.radiation_counted},
        "ionisation": {"share": _plain(posterior.ionisation_share()[row]), "counted": posterior.ionisation_counted},
        "consistency": {
            "chi2": _plain(posterior.chi2[row]),
            "degrees_of_freedom": int(posterior.degrees_of_freedom[row]),
            "probability": _plain(posterior.probability[row]),
        }
        if over_determined
        else None,
    }


def _components(posterior: Posterior, row: int) -> list[dict] | None:
    """The two kinds of interior of a star whose calibrated structure is a mixture: weight and median coefficient."""
    weight = float(posterior.convective_share()[row])
    if math.isnan(weight):
        return None
    kinds = ("fully convective", "with a radiative core")
    shares, values = (weight, 1.0 - weight), posterior.branches()[row]
    return [
        {"interior": kind, "weight": share, "coefficient": float(value)}
        for kind, share, value in zip(kinds, shares, values, strict=True)
    ]


def _quantiles(posterior: Posterior, name: str, row: int) -> dict | None:
    values = [_plain(v) for v in posterior.quantile(STANDARD_PROBABILITIES, name)[row]]
    if values[0] is None:
        return None
    return {"median": values[0], "interval68": values[1:3], "interval95": values[3:5]}


def _output(posterior: Posterior, name: str, row: int) -> dict | None:
    quantiles = _quantiles(posterior, name, row)
    if quantiles is None:
        return None
    shares = {key: _plain(share[row]) for key, share in posterior.budget(name).items()}
    return {
        "unit": posterior.units[name],
        **quantiles,
        "calibrated": _plain(posterior.calibrated(name)[row]),
        "log10_mean": _plain(posterior.log10_mean(name)[row]),
        "log10_standard_deviation": _plain(posterior.log10_sd(name)[row]),
        "linear": {
            "value": _plain(posterior.linear_value(name)[row]),
            "standard_uncertainty": _plain(posterior.linear_uncertainty(name)[row]),
        },
        "budget": {key: share for key, share in shares.items() if share is not None},
    }
