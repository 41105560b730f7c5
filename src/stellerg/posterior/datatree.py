"""Draws and chains as an xarray DataTree for arviz (through `stellerg.diagnostics`)."""

import numpy as np

from stellerg import diagnostics
from stellerg.posterior.result import COEFFICIENT, Piece, Posterior

__all__ = ["to_datatree"]


def to_datatree(posterior: Posterior, count: int, seed: int):
    """Return the posterior as a DataTree: groups posterior, sample_stats and constant_data.

    Parameters
    ----------
    posterior : Posterior
    count : int
        Draws of each star from engines that keep none (a power of two).
    seed : int

    Returns
    -------
    xarray.DataTree
        Variables over (chain, draw, star): mass, radius, luminosity, distance where determined (nominal solar, pc),
        u, index, structure_coefficient and the outputs in their units. Chains are the walkers of all ensembles
        where every star was sampled by mcmc, else one chain.
    """
    rows = [(piece, k) for piece in posterior.pieces for k in range(len(piece.rows))]
    rows.sort(key=lambda place: place[0].rows[place[1]])
    chains = all(hasattr(piece.answer, "stars") for piece, _ in rows)
    drawn = {id(piece): _draws(piece, posterior, count, seed) for piece in posterior.pieces}
    stars = [_star(drawn[id(piece)], piece, k, chains) for piece, k in rows]
    draws = min((v.shape[1] for star in stars for v in star[0].values()), default=0)
    groups = [_stack([star[g] for star in stars], draws) for g in (0, 1)]
    units = {name: posterior.units.get(name, "") for name in posterior.outputs}
    attributes = {
        "prior": posterior.prior,
        "energy_convention": posterior.energy_convention,
        "time_convention": posterior.time_convention,
        **{f"unit_of_{name}": unit for name, unit in units.items() if unit},
    }
    return diagnostics.to_datatree(
        groups[0],
        groups[1],
        _inputs(rows),
        stars=posterior.star[[int(piece.rows[k]) for piece, k in rows]],
        attributes=attributes,
    )


def _draws(piece: Piece, posterior: Posterior, count: int, seed: int):
    """Draws of a piece whose engine keeps no chains."""
    return None if hasattr(piece.answer, "stars") else posterior.sampler(piece.answer.problem, count, seed)


def _star(drawn, piece: Piece, k: int, chains: bool) -> tuple[dict, dict]:
    """Posterior and sample statistics of one star, (chain, draw) each."""
    problem = piece.answer.problem
    if drawn is None:
        star = piece.answer.stars[k]

        def shape(values):
            return values.reshape(-1, values.shape[-1]) if chains else values.reshape(1, -1)

        u, latents, outputs = shape(star.u), star.log_latents, star.log_outputs
        stats = {"lp": shape(star.log_probability)}
    else:
        chosen = _equal_weights(drawn, k)

        def shape(values):
            return values[chosen][None, :]

        u, latents, outputs = shape(drawn.u[k]), drawn.log_latents[k], drawn.log_outputs[k]
        stats = {"log_reference_density": shape(drawn.log_reference_density()[k])}
    values = {"u": u}
    values |= {name: np.exp(shape(v)) for name, v in zip(problem.latents, latents, strict=True)}
    values |= {name: np.exp(shape(v)) for name, v in zip(problem.outputs, outputs, strict=True)}
    if COEFFICIENT in values:
        values["index"] = 5.0 - 3.0 / values[COEFFICIENT]
    return values, stats


def _equal_weights(drawn, k: int) -> np.ndarray:
    """Which draws to take so that all count the same: systematic resampling, with no further randomness."""
    weight = drawn.weight
    count = drawn.u.shape[1]
    if weight is None:
        return np.arange(count)
    places = (np.arange(count) + 0.5) / count
    return np.minimum(np.searchsorted(np.cumsum(weight[k]), places), count - 1)


def _stack(stars: list[dict], draws: int) -> dict[str, np.ndarray]:
    """Stars side by side, (chain, draw, star); NaN where a star has no such quantity."""
    names = dict.fromkeys(name for star in stars for name in star)
    shape = next((v.shape[0] for star in stars for v in star.values()), 0), draws, len(stars)
    out = {name: np.full(shape, np.nan) for name in names}
    for s, star in enumerate(stars):
        for name, values in star.items():
            out[name][:, :, s] = values[:, :draws]
    return out


def _inputs(rows: list[tuple[Piece, int]]) -> dict[str, np.ndarray]:
    """Quoted values and errors, (star,); NaN where a star has no such measurement."""
    out: dict[str, np.ndarray] = {}
    for s, (piece, k) in enumerate(rows):
        problem = piece.answer.problem
        for name, measured in zip(problem.inputs, problem.measured, strict=True):
            parts = {"": measured.value, "_error_upper": measured.upper, "_error_lower": measured.lower}
            for ending, values in parts.items():
                column = out.setdefault(f"{name}{ending}", np.full(len(rows), np.nan))
                column[s] = values[k]
    return out
