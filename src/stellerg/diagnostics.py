"""Diagnostics of sampled chains, and chains for other tools: the only module that imports arviz.

Arrays are (ensemble, walker, draw). Walkers of one ensemble are not independent chains: R-hat is taken nested
(Margossian et al. 2022, doi:10.1214/24-BA1453, from memory), with the ensembles as superchains.
"""

import warnings
from collections.abc import Mapping

import numpy as np

__all__ = ["effective_draws", "nested_rhat", "quantile_error", "to_datatree"]


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


def effective_draws(values: np.ndarray, probability: float) -> float:
    """Effective number of independent draws for a quantile of one quantity, (ensemble, walker, draw)."""
    if np.ptp(values) == 0.0:
        return float(values.size)
    return float(_stats().ess(_chains(values), method="quantile", prob=probability))


def quantile_error(values: np.ndarray, probability: float) -> float:
    """Monte Carlo standard error of a quantile of one quantity, (ensemble, walker, draw)."""
    if np.ptp(values) == 0.0:
        return 0.0
    return float(_stats().mcse(_chains(values), method="quantile", prob=probability))


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
