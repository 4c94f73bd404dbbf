"""Made-up batches of a mineral premix, clean and with units apart, and null tables made once."""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from service.stats.arrays import Matrix
from service.stats.moments import Moments, sample_moments
from service.stats.null_laws import NullTable, make_table


@lru_cache(maxsize=16)
def table(n: int, p: int) -> NullTable:
    """Return the null laws at (n, p)."""
    return make_table(n, p)


def clean(n: int, p: int, seed: int) -> Matrix:
    """Return independent standard normal units."""
    return np.random.default_rng(seed).normal(size=(n, p))


def with_cluster(n: int, p: int, seed: int, *, units: int, shift: float, spread: float = 0.3) -> Matrix:
    """Return clean units, the last ones of another `spread` and moved by `shift` in the first characteristic."""
    rows = clean(n, p, seed)
    rows[-units:] *= spread
    rows[-units:, 0] += shift
    return rows


def moments(rows: Matrix) -> Moments:
    """Return the moments about a target of zeros."""
    return sample_moments(rows, np.zeros(rows.shape[1]))


def affine(p: int, seed: int) -> Matrix:
    """Return a well-conditioned matrix with clear scales and rotations."""
    rng = np.random.default_rng(seed)
    return np.linalg.qr(rng.normal(size=(p, p)))[0] * 10 ** rng.uniform(-2, 2, p)
