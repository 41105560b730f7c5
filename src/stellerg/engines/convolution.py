"""The measured part of ln Y for independent inputs of any shape, on a grid scaled to each star.

ln Y's measured part is a sum of independent terms w_j ln(obs_j). Their characteristic functions are
multiplied: normal terms in closed form, wide terms by the discrete Fourier transform of their sampled
densities (spectrally accurate for smooth densities), narrow ones by Gauss-Hermite nodes in the normal score.
"""

from collections.abc import Iterator

import numpy as np
from scipy import fft

from stellerg.engines.parts import GridPart
from stellerg.measured import Measured

__all__ = ["convolve", "part_on_grid"]

_CELLS = 16.0  # grid cells in one standard deviation of the sum
_NARROW = 1.5  # terms narrower than this many cells are not sampled
_REACH = 5.0  # normal scores kept of each sampled term: 6e-7 lies outside
_SIZES = 2 ** np.arange(7, 13)  # grid sizes
_HERMITE, _HERMITE_WEIGHT = np.polynomial.hermite_e.hermegauss(24)
_HERMITE_WEIGHT = _HERMITE_WEIGHT / _HERMITE_WEIGHT.sum()
_WINDOW = 1e-9  # probability outside the window of the result
_LARGEST = 300.0  # exponent beyond which no quantile is ever asked for
_BATCH = 512  # stars transformed together, for the sake of the cache; no result depends on it


def convolve(
    terms: list[tuple[Measured, np.ndarray, np.ndarray]], mean: np.ndarray, normal_sd: np.ndarray
) -> Iterator[tuple[np.ndarray, GridPart, np.ndarray]]:
    """Distributions of sums of independent terms, in groups of stars that share a grid size.

    Parameters
    ----------
    terms : list of (Measured, weights, included)
        Each adds ``weight * (ln obs - mean of ln obs)`` to the stars where `included`; (star,) each.
    mean : ndarray, (star,)
        Mean of the sum.
    normal_sd : ndarray, (star,)
        Standard deviation of the normal term of the sum, 0 where there is none.

    Yields
    ------
    rows : ndarray of int, (m,)
    part : GridPart
        Of these stars.
    error : ndarray, (m,)
        Estimate of the error in the cumulative: what lies outside the grid, beyond its frequencies and between
        its points.
    """
    low, high = -7.0 * normal_sd, 7.0 * normal_sd
    variance = normal_sd**2
    for measured, weight, included in terms:
        ends = weight[:, None] * (measured.log_quantile(np.array([[-_REACH, _REACH]])) - measured.log_mean[:, None])
        low = low + np.where(included, ends.min(axis=1), 0.0)
        high = high + np.where(included, ends.max(axis=1), 0.0)
        variance = variance + np.where(included, (weight * measured.log_sd) ** 2, 0.0)
    size = np.searchsorted(_SIZES, _CELLS * (high - low) / np.sqrt(variance))
    size = _SIZES[np.minimum(size, len(_SIZES) - 1)]
    step = (high - low) / size
    for number in np.unique(size):
        rows = np.flatnonzero(size == number)
        for start in range(0, len(rows), _BATCH):
            some = rows[start : start + _BATCH]
            chosen = [(m.take(some), w[some], i[some]) for m, w, i in terms if i[some].any()]
            part, error = _on_grid(chosen, mean[some], low[some], step[some], normal_sd[some], int(number))
            yield some, part, error


def _on_grid(terms, mean, low, step, normal_sd, size) -> tuple[GridPart, np.ndarray]:
    """Distribution on one grid size, and the error estimate."""
    cumulative, density, error = _transform(terms, low, step, normal_sd, size)
    points = low[:, None] + step[:, None] * np.arange(size)
    part, more = _grid_part(points + mean[:, None], step, mean, cumulative, density, np.ones(len(mean)))
    return part, error + more


def part_on_grid(part, points: np.ndarray, step: np.ndarray, mean: np.ndarray) -> tuple[GridPart, np.ndarray]:
    """Tabulate any part.

    Parameters
    ----------
    part : a part of `stellerg.engines.parts`
    points : ndarray, (star, N)
        Equally spaced by `step` (star,), over all of the part.
    mean : ndarray, (star,)
        Where the tilted integral is of order one.

    Returns
    -------
    part : GridPart
    error : ndarray, (star,)
        Estimated error between the points.
    """
    cumulative, density = part.evaluate(points)
    return _grid_part(points, step, mean, cumulative, density, part.mass)


def _grid_part(points, step, mean, cumulative, density, mass) -> tuple[GridPart, np.ndarray]:
    """A part from its cumulative and density at points, and the error of interpolating them."""
    size = points.shape[1]
    tilt = np.exp(np.minimum(points - mean[:, None], _LARGEST))
    integrand = tilt * density
    error = _interpolation_error(density, step) + _interpolation_error(integrand, step, tilt)
    full = mass[:, None] - _WINDOW
    first = np.argmax(cumulative > _WINDOW, axis=1)
    last = np.where(cumulative[:, -1] > full[:, 0], np.argmax(cumulative >= full, axis=1), size - 1)
    part = GridPart(
        start=points[:, 0],
        step=step,
        lower=points[:, 0] + np.maximum(first - 1, 0) * step,
        upper=points[:, 0] + last * step,
        mean=mean,
        table=cumulative,
        slope=density,
        tilted=_running_integral(integrand, step),
        tilted_slope=integrand,
        mass=mass,
    )
    return part, error


def _transform(terms, low, step, normal_sd, size):
    """Cumulative and density on one grid size, and the error estimate."""
    frequency = (2.0 * np.pi / size) * np.arange(size // 2 + 1) / step[:, None]
    spectrum = np.exp(-0.5 * (frequency * normal_sd[:, None]) ** 2).astype(complex)
    points = low[:, None] + step[:, None] * np.arange(size)
    sampled = np.zeros(len(low))
    outside = np.zeros(len(low))
    for measured, weight, included in terms:
        wide = included & (np.abs(weight) * measured.log_sd > _NARROW * step)
        for rows, wide_here in ((np.flatnonzero(wide), True), (np.flatnonzero(included & ~wide), False)):
            if not rows.size:
                continue
            here, scale = measured.take(rows), weight[rows, None]
            if wide_here:
                where = points[rows] / scale + here.log_mean[:, None]
                density = np.exp(here.log_density(where)) * (step[rows, None] / np.abs(scale))
                outside[rows] += np.abs(1.0 - density.sum(axis=-1))
                spectrum[rows] *= fft.rfft(density, axis=-1)
                sampled[rows] += 1.0
            else:
                nodes = scale * (here.log_quantile(_HERMITE[None, :]) - here.log_mean[:, None])
                phase = np.exp(-1j * frequency[rows, None, :] * nodes[:, :, None])
                spectrum[rows] *= (_HERMITE_WEIGHT[None, :, None] * phase).sum(axis=1)
    # every sampled density carries the phase of its first point; one of them belongs to the result
    spectrum *= np.exp(-1j * frequency * (low * (sampled - 1.0))[:, None])
    spectrum /= spectrum[:, :1].real
    high_frequencies = np.abs(spectrum[:, -(size // 16) :]).max(axis=1)
    density = fft.irfft(spectrum, n=size, axis=-1) / step[:, None]
    # the integral, frequency by frequency; the mean density 1/(size step) integrates to a ramp
    integrated = np.zeros_like(spectrum)
    integrated[:, 1:-1] = spectrum[:, 1:-1] / (1j * frequency[:, 1:-1])
    ripple = fft.irfft(integrated, n=size, axis=-1) / step[:, None]
    cumulative = np.arange(size) / size + ripple - ripple[:, :1]
    return np.clip(cumulative, 0.0, 1.0), np.maximum(density, 0.0), outside + high_frequencies


def _running_integral(values: np.ndarray, step: np.ndarray) -> np.ndarray:
    """Integral from the first point to each, (star, N): sixth order, from six points around each cell."""
    padded = np.pad(values, ((0, 0), (2, 2)))
    inner = padded[:, 2:-3] + padded[:, 3:-2]
    middle = padded[:, 1:-4] + padded[:, 4:-1]
    outer = padded[:, :-5] + padded[:, 5:]
    cells = (802.0 * inner - 93.0 * middle + 11.0 * outer) * (step[:, None] / 1440.0)
    return np.concatenate([np.zeros((len(values), 1)), np.cumsum(cells, axis=1)], axis=1)


def _interpolation_error(slope: np.ndarray, step: np.ndarray, unit: np.ndarray | float = 1.0) -> np.ndarray:
    """Error of cubic Hermite interpolation, h^4/384 times the fourth derivative, (star,).

    Parameters
    ----------
    slope : ndarray, (star, N)
        First derivative of what is interpolated.
    step : ndarray, (star,)
    unit : ndarray or float
        Size of what is interpolated where the error counts.
    """
    third = np.abs(np.diff(slope, 3, axis=1))
    scale = unit if np.ndim(unit) == 0 else unit[:, 1:-2]
    return (third / scale).max(axis=1) * step / 384.0
