"""Random numbers by counter: the n-th number of a stream, in any order.

A stream is a 64-bit key; its n-th draw is a hash of key and n. So every photon and
every pixel of every exposure owns a stream, and results do not depend on who computes
what when. The same arithmetic runs compiled on scalars and in NumPy on arrays.

Source: G. L. Steele, D. Lea, C. H. Flood, "Fast splittable pseudorandom number
generators", OOPSLA 2014 (finaliser and increment, from memory).
"""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
from numba import njit

if TYPE_CHECKING:
    from numpy.typing import NDArray

_STEP = np.uint64(0x9E3779B97F4A7C15)
_FIRST = np.uint64(0xBF58476D1CE4E5B9)
_SECOND = np.uint64(0x94D049BB133111EB)
_S30 = np.uint64(30)
_S27 = np.uint64(27)
_S31 = np.uint64(31)
_S12 = np.uint64(12)
_ONE = np.uint64(1)
_UNIT = 2.0**-52
_HALF_UNIT = 2.0**-53


@njit(nogil=True, cache=True, inline="always")
def mix(word: np.uint64) -> np.uint64:
    """Hash of one 64-bit word."""
    word = np.uint64(word)
    word = (word ^ (word >> _S30)) * _FIRST
    word = (word ^ (word >> _S27)) * _SECOND
    return word ^ (word >> _S31)


@njit(nogil=True, cache=True, inline="always")
def uniform(key: np.uint64, draw: np.uint64) -> float:
    """Draw number ``draw`` of stream ``key``, in the open interval (0, 1)."""
    word = mix(np.uint64(key) + (np.uint64(draw) + _ONE) * _STEP)
    return float(word >> _S12) * _UNIT + _HALF_UNIT


@njit(nogil=True, cache=True, inline="always")
def substream(key: np.uint64, number: np.uint64) -> np.uint64:
    """Key of the stream with a number, below another stream."""
    return mix(mix(np.uint64(key)) + (np.uint64(number) + _ONE) * _FIRST)


def mix_array(words: NDArray[np.uint64]) -> NDArray[np.uint64]:
    """`mix` of each word of an array."""
    words = np.atleast_1d(words)
    words = (words ^ (words >> _S30)) * _FIRST
    words = (words ^ (words >> _S27)) * _SECOND
    return words ^ (words >> _S31)


def uniform_array(
    key: NDArray[np.uint64], draw: NDArray[np.uint64]
) -> NDArray[np.float64]:
    """`uniform` of each pair of key and draw (broadcasting), at least 1-d."""
    key, draw = np.atleast_1d(key), np.atleast_1d(draw)
    word = mix_array(key + (draw + _ONE) * _STEP)
    return (word >> _S12).astype(np.float64) * _UNIT + _HALF_UNIT


def substream_array(
    key: NDArray[np.uint64], number: NDArray[np.uint64]
) -> NDArray[np.uint64]:
    """`substream` of each pair of key and number (broadcasting), at least 1-d."""
    key, number = np.atleast_1d(key), np.atleast_1d(number)
    return mix_array(mix_array(key) + (number + _ONE) * _FIRST)
