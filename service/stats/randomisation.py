"""Random draws that are the same for ever: counter-based words, turned to numbers here.

numpy keeps the raw words of its bit generators fixed, but not the streams of
its distribution methods; so only raw words are used.

References
----------
.. [1] J. K. Salmon, M. A. Moraes, R. O. Dror and D. E. Shaw, "Parallel random
   numbers: as easy as 1, 2, 3", SC11 (2011): the Philox 4x64 generator.
"""

from __future__ import annotations

import hashlib
from collections.abc import Iterator

import numpy as np
import numpy.typing as npt
from scipy import special

SCHEME = "philox4x64-ndtri/1"
"""Name of the way from purpose to numbers; a change of the way changes the name."""

_CHUNK_NUMBERS = 1 << 20


def word_source(purpose: str) -> np.random.Philox:
    """Return the generator of raw words whose key is the SHA-256 of `purpose`.

    Parameters
    ----------
    purpose : str
        What the draws are for, with every number that the law depends on.
    """
    key = hashlib.sha256(f"{SCHEME}:{purpose}".encode()).digest()[:16]
    return np.random.Philox(key=np.frombuffer(key, dtype="<u8").astype(np.uint64))


def uniforms(words: npt.NDArray[np.uint64]) -> npt.NDArray[np.float64]:
    """Turn 64-bit words to uniforms on the open interval (0, 1), multiples of 2**-53 plus half of one."""
    return ((words >> np.uint64(11)).astype(np.float64) + 0.5) * 2.0**-53


def normal_batches(purpose: str, n: int, p: int, draws: int) -> Iterator[npt.NDArray[np.float64]]:
    """Yield standard normal batches, in chunks that together hold `draws` of them.

    Parameters
    ----------
    purpose : str
        Names the stream; the same purpose always gives the same batches.
    n, p : int
        Units and characteristics of a batch.
    draws : int
        Number of batches in all.

    Yields
    ------
    ndarray, shape (b, n, p)
        Independent standard normal numbers; the chunk size b never changes the numbers.
    """
    source = word_source(purpose)
    step = max(1, _CHUNK_NUMBERS // (n * p))
    for start in range(0, draws, step):
        b = min(step, draws - start)
        yield special.ndtri(uniforms(source.random_raw(b * n * p))).reshape(b, n, p)


def sign_patterns(purpose: str, n: int, count: int) -> npt.NDArray[np.float64]:
    """Return `count` random patterns of signs for n units, shape (count, n), one word a sign."""
    words = word_source(purpose).random_raw(count * n)
    return np.where(words >> np.uint64(63), 1.0, -1.0).reshape(count, n)
