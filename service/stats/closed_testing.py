"""Which characteristics moved, with the family-wise error held: closed testing of all subsets.

A set of characteristics is rejected when it and every set that holds it are
rejected by their own tests at alpha.  The probability of rejecting any set
whose means all agree is then at most alpha, and something is rejected exactly
when the joint test rejects.

All subset statistics come from one elimination: conditioning on a
characteristic, or leaving it out, doubles the sets at every step.

References
----------
.. [1] R. Marcus, E. Peritz and K. R. Gabriel, "On closed testing procedures with
   special reference to ordered analysis of variance", Biometrika 63 (1976) 655-660.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from scipy import special

from service.stats.arrays import Matrix, Vector
from service.stats.location import LocationResult

MOST_CHARACTERISTICS = 12
"""Beyond, the 2^p - 1 subsets are too many for a decision made on request."""


_MOST_INVERTED = 8
"""Characteristics up to which a lasting covariance keeps its subsets' inverses: 131 kB at 8."""


@dataclass(frozen=True, slots=True, eq=False)
class ClosedTest:
    """Closed testing over all non-empty subsets of p characteristics.

    Parameters
    ----------
    adjusted_p_value : ndarray, shape (p,)
        Of each characteristic: the largest p-value among the sets that hold it.
    minimal_sets : tuple of tuple of int
        Minimal incriminated sets, smallest first: every set that holds one is
        rejected, and none of its proper subsets has that property.  A pair here
        means that the two moved jointly while neither can be named alone.
    minimal_p_values : tuple of float
        The adjusted p-value of each minimal set.
    """

    adjusted_p_value: Vector
    minimal_sets: tuple[tuple[int, ...], ...]
    minimal_p_values: tuple[float, ...]


class _Laws(NamedTuple):
    """Parameters of the null law of each subset, in the order of their bit masks from 1."""

    numerator: Vector
    denominator: Vector
    factor: Vector


def closed_test(result: LocationResult, alpha: float) -> ClosedTest | None:
    """Test every subset of the characteristics, each with its own chi-square or F law.

    Parameters
    ----------
    result : LocationResult
        A mean test over p characteristics.
    alpha : float
        Significance level, held family-wise.

    Returns
    -------
    ClosedTest or None
        None where p > 12: Holm's adjustment alone is left then.
    """
    p = result.law.dimension
    if p > MOST_CHARACTERISTICS:
        return None
    p_values = subset_p_values(result)
    sets, set_p_values = _minimal_sets(p_values, p, alpha)
    return ClosedTest(p_values[_holders(p)].max(axis=1), sets, set_p_values)


def subset_statistics(result: LocationResult) -> Vector:
    """Return the statistic of every subset, shape (2^p,); bit j of an index says that j is in.

    A lasting covariance of few characteristics keeps the inverse of every subset's correlation
    matrix, so that all statistics are one product.
    """
    covariance = result.covariance
    z = result.difference / covariance.scale
    if covariance.lasting and covariance.dimension <= _MOST_INVERTED:
        inverses = covariance.keep("subset inverses", lambda: _subset_inverses(covariance.correlation))
        return result.effective_units * (inverses @ np.outer(z, z).ravel())
    return _eliminated(covariance.correlation, z * math.sqrt(result.effective_units))


def _subset_inverses(correlation: Matrix) -> Matrix:
    """Return the inverse of every subset's correlation matrix, zero elsewhere, shape (2^p, p^2)."""
    p = correlation.shape[0]
    inverses = np.zeros((1 << p, p, p))
    for mask in range(1, 1 << p):
        chosen = np.array([j for j in range(p) if mask >> j & 1])
        # From a Cholesky factor, as everywhere.
        factor = np.linalg.inv(np.linalg.cholesky(correlation[np.ix_(chosen, chosen)]))
        inverses[mask][np.ix_(chosen, chosen)] = factor.T @ factor
    return inverses.reshape(1 << p, p * p)


def _eliminated(correlation: Matrix, z: Vector) -> Vector:
    """Return the statistic of every subset by elimination.

    One block elimination of ``[R z; z' 0]``: what is left of the corner, once a
    set has been eliminated, is minus its statistic, a sum of squares only.
    """
    p = correlation.shape[0]
    block = np.zeros((p + 1, p + 1))
    block[:p, :p] = correlation
    block[p, :p] = z
    block[:p, p] = block[p, :p]
    table = block[None]
    for _ in range(p):
        left_out, row = table[:, 1:, 1:], table[:, :1, 1:]
        column = table[:, 1:, :1] / table[:, :1, :1]
        table = np.concatenate((left_out, left_out - column * row))
    return -table[:, 0, 0]


def subset_p_values(result: LocationResult) -> Vector:
    """Return the p-value of every subset by its own law, shape (2^p,); that of the empty set is 1."""
    laws = _laws(result.law.dimension, result.law.degrees_of_freedom)
    statistics = subset_statistics(result)[1:]
    p_values = np.ones(statistics.shape[0] + 1)
    if result.law.is_chi_square:
        p_values[1:] = special.chdtrc(laws.numerator, statistics)
    else:
        p_values[1:] = special.fdtrc(laws.numerator, laws.denominator, statistics * laws.factor)
    # The whole set is the joint test itself, so that the two cannot differ by rounding.
    p_values[-1] = result.p_value
    return p_values


def _minimal_sets(p_values: Vector, p: int, alpha: float) -> tuple[tuple[tuple[int, ...], ...], tuple[float, ...]]:
    """Return the rejected sets none of whose subsets is rejected, smallest first, with adjusted p-values."""
    if p_values[-1] > alpha:
        return (), ()
    adjusted = p_values.copy()
    for j in range(p):
        halves = adjusted.reshape(-1, 2, 1 << j)
        np.maximum(halves[:, 0], halves[:, 1], out=halves[:, 0])
    rejected = adjusted <= alpha
    minimal = rejected.copy()
    # Sets that hold a rejected set are rejected, so one characteristic less is enough to look at.
    for j in range(p):
        minimal.reshape(-1, 2, 1 << j)[:, 1] &= ~rejected.reshape(-1, 2, 1 << j)[:, 0]
    masks = sorted(np.flatnonzero(minimal).tolist(), key=lambda mask: (mask.bit_count(), mask))
    sets = tuple(tuple(j for j in range(p) if mask >> j & 1) for mask in masks)
    return sets, tuple(adjusted[masks].tolist())


@lru_cache(maxsize=MOST_CHARACTERISTICS)
def _holders(p: int) -> npt.NDArray[np.intp]:
    """Return, for each characteristic, the masks of the sets that hold it, shape (p, 2^(p-1))."""
    masks = np.arange(1 << p)
    return np.array([masks[masks >> j & 1 == 1] for j in range(p)])


@lru_cache(maxsize=128)
def _laws(p: int, degrees_of_freedom: float) -> _Laws:
    sizes = np.array([mask.bit_count() for mask in range(1, 1 << p)], dtype=np.float64)
    if math.isinf(degrees_of_freedom):
        return _Laws(sizes, sizes, np.ones_like(sizes))
    denominator = degrees_of_freedom - sizes + 1
    return _Laws(sizes, denominator, denominator / (degrees_of_freedom * sizes))
