"""Diagnostics of sampled chains, and chains for other tools: the only module that imports arviz.

Arrays are (ensemble, walker, draw). Walkers of one ensemble are not independent chains: R-hat is taken nested
(Margossian et al. 2022, doi:10.1214/24-BA1453, from memory), with the ensembles as superchains.
"""

import warnings
from collections.abc import Mapping

import numpy as np

__all__ = ["nested_rhat", "quantile_judgement", "share_error", "to_datatree"]


def _stats():
    from arviz_stats.base import array_stats

    return array_stats


def _chains(values: np.ndarray) -> np.ndarray:
    """All walkers as chains, (chain, draw)."""
    return np.ascontiguousarray(values.reshape(-1, values.shape[-1]))


def nested_rhat(values: np.ndarray) -> float:
    """Nested R-hat of one quantity over independent ensembles.

    Parameters
    ----------
    values : ndarray, (ensemble, walker, draw)
    """
    if np.ptp(values) == 0.0:
        return 1.0
    ensembles = np.repeat(np.arange(values.shape[0]), values.shape[1])
    return float(_stats().rhat_nested(_chains(values), superchain_ids=ensembles))


def share_error(below: np.ndarray) -> float:
    """Monte Carlo standard error of the share of draws that fulfil something.

    Walkers of one ensemble move by each other's differences; what is independent are the ensembles. The series judged
    are their means over walkers (Goodman & Weare 2010, doi:10.2140/camcos.2010.5.65), which assumes nothing about the
    walkers. (On eight stars the error was 0 to 4 % larger than with every walker taken as a chain.)

    Parameters
    ----------
    below : ndarray of bool, (ensemble, walker, draw)
    """
    means = below.mean(axis=1)
    return 0.0 if np.ptp(means) == 0.0 else float(_stats().mcse(means, method="mean"))


def quantile_judgement(values: np.ndarray, probability: float) -> tuple[float, float]:
    """Effective number of independent draws for a quantile of one quantity, and its standard error.

    The effective number is p(1 - p) over the squared error of the share below the quantile; the standard error
    spans the quantiles of p plus and minus that error.

    Parameters
    ----------
    values : ndarray, (ensemble, walker, draw)
    probability : float
    """
    if np.ptp(values) == 0.0:
        return float(values.size), 0.0
    error = share_error(values <= np.quantile(values, probability))
    if error == 0.0:
        return float(values.size), 0.0
    ends = np.quantile(values, np.clip([probability - error, probability + error], 0.0, 1.0))
    return probability * (1.0 - probability) / error**2, 0.5 * float(ends[1] - ends[0])


def to_datatree(
    posterior: Mapping[str, np.ndarray],
    sample_stats: Mapping[str, np.ndarray],
    constant_data: Mapping[str, np.ndarray],
    *,
    stars: np.ndarray,
    attributes: Mapping[str, str],
):
    """Return chains as an xarray DataTree for arviz.

    Parameters
    ----------
    posterior, sample_stats : mapping of str to ndarray, (chain, draw, star)
    constant_data : mapping of str to ndarray, (star,)
    stars : ndarray of str, (star,)
    attributes : mapping of str to str
        Conventions and units, kept with the tree.
    """
    import arviz_base

    dims = {name: ["star"] for group in (posterior, sample_stats, constant_data) for name in group}
    groups = {"posterior": dict(posterior), "sample_stats": dict(sample_stats), "constant_data": dict(constant_data)}
    with warnings.catch_warnings():
        # every walker is a chain here, so that there may be more chains than draws
        warnings.filterwarnings("ignore", message="Found chain dimension to be longer", category=UserWarning)
        return arviz_base.from_dict(groups, coords={"star": stars}, dims=dims, attrs={"/": dict(attributes)})
