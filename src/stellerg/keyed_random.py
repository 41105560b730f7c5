"""Randomness keyed by what it belongs to: (seed, star, dimension), never by row, chunk, order or worker.

A star's numbers are a counter run through the 64-bit finaliser of SplitMix64 (Steele, Lea & Flood 2014,
doi:10.1145/2714064.2660195), twice, with the star's key between the rounds so that no two stars walk the
same sequence. Everything is element by element: a star alone has the same bits as in a catalogue.
"""

import hashlib
from functools import lru_cache

import numpy as np

__all__ = ["hash_identifiers", "low_discrepancy_set", "random_order", "shifted", "uniform", "words"]

_GOLDEN = np.uint64(0x9E3779B97F4A7C15)
_DIMENSION = np.uint64(0xD1B54A32D192ED03)  # an odd constant of its own for the dimension axis
_LONG_IDENTIFIER = 64  # bytes; longer ones go through blake2b
_BITS = 53


def _mix(x: np.ndarray) -> np.ndarray:
    """Finaliser of SplitMix64: a bijection of 64-bit integers, element by element."""
    x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return x ^ (x >> np.uint64(31))


def hash_identifiers(identifiers) -> np.ndarray:
    """Hash star identifiers to 64-bit keys, independent of the batch they stand in.

    Parameters
    ----------
    identifiers : array_like of str or int, (star,)
        An integer 7 and the text "7" are the same identifier.

    Returns
    -------
    ndarray of uint64, (star,)
    """
    text = np.asarray(identifiers).astype(str)
    if text.size == 0:
        return np.zeros(0, np.uint64)
    encoded = np.char.encode(text, "utf-8")
    width = -(-max(encoded.dtype.itemsize, 1) // 8) * 8
    block = encoded.astype(f"S{width}").view("<u8").reshape(len(text), width // 8)
    length = np.char.str_len(encoded).astype(np.uint64)
    with np.errstate(over="ignore"):
        key = _mix(length * _GOLDEN + np.uint64(1))
        for word in range(min(width, _LONG_IDENTIFIER) // 8):
            mixed = _mix((key ^ block[:, word]) + _GOLDEN)
            key = np.where(length > np.uint64(8 * word), mixed, key)
    for row in np.flatnonzero(length > np.uint64(_LONG_IDENTIFIER)):
        digest = hashlib.blake2b(bytes(encoded[row]), digest_size=8).digest()
        key[row] = np.uint64(int.from_bytes(digest, "little"))
    return key


def words(seed: int, key: np.ndarray, dimension: int, count: int) -> np.ndarray:
    """Uniform 64-bit words of each star.

    Parameters
    ----------
    seed : int
    key : ndarray of uint64, (star,)
    dimension : int
        Which of a star's random quantities.
    count : int

    Returns
    -------
    ndarray of uint64, (star, draw)
    """
    with np.errstate(over="ignore"):
        start = _mix(_mix(key ^ _mix(np.uint64(seed % 2**64) + _GOLDEN)) + np.uint64(dimension + 1) * _DIMENSION)
        other = _mix(start ^ _GOLDEN)
        counter = np.arange(1, count + 1, dtype=np.uint64) * _GOLDEN
        return _mix(_mix(start[:, None] + counter) + other[:, None])


def uniform(seed: int, key: np.ndarray, dimension: int, count: int) -> np.ndarray:
    """Uniform variates in the open interval (0, 1), (star, draw); parameters as `words`."""
    return _to_unit(words(seed, key, dimension, count) >> np.uint64(64 - _BITS))


def _to_unit(integers: np.ndarray) -> np.ndarray:
    return (integers.astype(np.float64) + 0.5) * 2.0**-_BITS


@lru_cache(maxsize=16)
def low_discrepancy_set(seed: int, dimensions: int, log2_count: int) -> np.ndarray:
    """Scrambled Sobol' points as 53-bit integers, (dimension, draw); one set for all stars.

    Each star uses it with its own digital shifts (`shifted`).
    """
    from scipy.stats import qmc

    sampler = qmc.Sobol(dimensions, scramble=True, bits=_BITS, rng=np.random.default_rng(seed % 2**64))
    points = sampler.random_base2(log2_count).T
    return np.ascontiguousarray((points * 2.0**_BITS).astype(np.uint64))


def shifted(points: np.ndarray, shift: np.ndarray) -> np.ndarray:
    """Digitally shifted points in (0, 1).

    Parameters
    ----------
    points : ndarray of uint64, (draw,)
        One dimension of `low_discrepancy_set`.
    shift : ndarray of uint64, (star, randomisation)

    Returns
    -------
    ndarray, (star, randomisation, draw)
    """
    return _to_unit(points[None, None, :] ^ (shift[:, :, None] >> np.uint64(64 - _BITS)))


def random_order(seed: int, key: np.ndarray, dimension: int, count: int) -> np.ndarray:
    """Return a permutation of the draws for each star, so that stars sharing one point set are independent.

    Returns
    -------
    ndarray of int, (star, draw)
    """
    return np.argsort(words(seed, key, dimension, count), axis=1, kind="stable")
