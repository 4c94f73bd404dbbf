"""Take away the most outlying unit, look again, and so on: a group of outliers cannot hide itself.

A group of outlying units inflates the covariance that measures it, so that none
of them stands out beside all others.  Each stage here measures the remaining
units with their own mean and covariance.

All stages come from one matrix, ``M = I - H``, where H is the projection on the
columns of the batch and a constant: ``1 - m_ii`` is ``1/n + D2_i/(n-1)``, and
deleting unit i turns M into its Schur complement in ``m_ii``.

References
----------
.. [1] C. Caroni and P. Prescott, "Sequential application of Wilks's multivariate
   outlier test", Applied Statistics 41 (1992) 355-364.
.. [2] S. S. Wilks, "Multivariate statistical outliers", Sankhya A 25 (1963)
   407-426.
.. [3] B. Rosner, "Percentage points for a generalized ESD many-outlier
   procedure", Technometrics 25 (1983) 165-172.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy import special

from service.stats.arrays import Matrix, Vector, squared_lengths
from service.stats.moments import sample_moments

MAXIMUM = "within-maximum"
"""Name of the null law of the largest squared distance within a batch."""

SEQUENTIAL = "within-sequential"
"""Name of the null law of the strongest evidence over all stages."""

_SMALLEST_P = 1e-300
_MOST_STAGES = 21
# A Schur complement loses as many digits as its pivot has leading zeros; below
# this the remaining units are whitened afresh.
_SMALLEST_PIVOT = 1e-6


@dataclass(frozen=True, slots=True, eq=False)
class Stages:
    """Units in the order in which they were taken away, and how far out each stood.

    Parameters
    ----------
    units : tuple of int
        Deleted units, from 0, the most outlying first.
    squared_distances : ndarray, shape (k,)
        Of each deleted unit, among the units that remained.
    p_values : ndarray, shape (k,)
        Wilks' bound of each stage, as if the remaining units had been a batch
        of their own; above 1 where the bound says nothing.
    evidence : ndarray, shape (k,)
        ``-log10`` of `p_values`.
    """

    units: tuple[int, ...]
    squared_distances: Vector
    p_values: Vector
    evidence: Vector

    @property
    def size(self) -> int:
        """Number of stages."""
        return len(self.units)

    @property
    def strongest(self) -> float:
        """Largest evidence of any stage."""
        return float(self.evidence.max())

    def to_list(self) -> list[dict[str, float]]:
        """Return the stages as plain values, in turn."""
        distances, p_values = self.squared_distances.tolist(), self.p_values.tolist()
        names = ("unit", "squared_distance", "p_value")
        return [dict(zip(names, stage, strict=True)) for stage in zip(self.units, distances, p_values, strict=True)]


def most_deleted(n: int, p: int) -> int:
    """Return the number of stages: ``floor(n/10) + 1``, at most 21, each with at least p + 2 units to measure."""
    return max(0, min(n // 10 + 1, n - p - 1, _MOST_STAGES))


def evidence_of(p_values: Vector) -> Vector:
    """Return ``-log10(p)``, finite also where p underflows."""
    return np.asarray(-np.log10(np.maximum(p_values, _SMALLEST_P)))


@lru_cache(maxsize=1024)
def _stage_constants(n: int, p: int, stages: int) -> tuple[Vector, Vector, Vector]:
    """Return the units that each stage measures, the first parameter of its beta law, and the largest distance."""
    left = n - np.arange(stages, dtype=np.float64)
    return left, (left - p - 1) / 2, np.square(left - 1) / left


def wilks_p_values(ratios: Vector, n: int, p: int) -> Vector:
    """Return Wilks' bound of each stage.

    Parameters
    ----------
    ratios : ndarray, shape (..., k)
        At stage s, ``|A without the unit| / |A|`` of the scatter A of the
        ``m = n - s`` units that remain; ``1 - m D2/(m-1)^2``.
    n, p : int
        Units of the whole batch, and characteristics.

    Returns
    -------
    ndarray
        ``m P(w <= ratio)``, w ~ Beta((m-p-1)/2, p/2): the same shape.
    """
    left, first, _ = _stage_constants(n, p, ratios.shape[-1])
    return np.asarray(left * special.betainc(first, p / 2, ratios))


def delete_in_turn(whitened: Matrix, squared: Vector) -> Stages:
    """Delete the most outlying unit, `most_deleted` times.

    Parameters
    ----------
    whitened : ndarray, shape (n, p)
        Centred rows with ``W'W = (n - 1) I``, n > p + 1.
    squared : ndarray, shape (n,)
        Squared lengths of the rows.

    Returns
    -------
    Stages
        Fewer than `most_deleted` only where the units that remain are collinear.
    """
    n, p = whitened.shape
    units, found = _deleted(whitened, squared, most_deleted(n, p))
    ratios = np.array(found)
    _, _, largest = _stage_constants(n, p, ratios.size)
    p_values = wilks_p_values(ratios, n, p)
    return Stages(tuple(units), largest * (1 - ratios), p_values, evidence_of(p_values))


def _deleted(whitened: Matrix, squared: Vector, stages: int) -> tuple[list[int], list[float]]:
    """Return the units deleted and the ratio of determinants at each stage."""
    n = whitened.shape[0]
    rest = (1 - 1 / n) - squared / (n - 1)
    columns = np.empty((stages, n))
    units: list[int] = []
    ratios: list[float] = []
    for s in range(stages):
        i = int(rest.argmin())
        pivot = max(float(rest[i]), 0.0)
        units.append(i)
        ratios.append(pivot * (n - s) / (n - s - 1))
        if s + 1 == stages:
            break
        if pivot < _SMALLEST_PIVOT:
            further, following = _afresh(whitened, units, stages - s - 1)
            return units + further, ratios + following
        column = whitened @ (whitened[i] / (1 - n))
        column -= 1 / n
        if s:
            column -= columns[:s, i] @ columns[:s]
        column /= math.sqrt(pivot)
        columns[s] = column
        rest -= column * column
        rest[i] = math.inf
    return units, ratios


def _afresh(whitened: Matrix, deleted: list[int], stages: int) -> tuple[list[int], list[float]]:
    """Go on with the units that remain, whitened with their own covariance."""
    kept = np.delete(np.arange(whitened.shape[0]), deleted)
    rows = whitened[kept]
    moments = sample_moments(rows, rows[0])
    if moments.whitened is None:
        return [], []
    units, ratios = _deleted(moments.whitened, squared_lengths(moments.whitened), stages)
    return [int(kept[i]) for i in units], ratios


def sequential_maxima(whitened: Matrix) -> Mapping[str, Vector]:
    """Return the statistics of many batches whose null laws `outliers.within_batch` needs.

    Parameters
    ----------
    whitened : ndarray, shape (b, n, p)
        Batches, each centred and whitened with its own covariance (divisor n - 1).

    Returns
    -------
    mapping of str to ndarray, shape (b,)
        ``within-maximum``: largest squared distance.  ``within-sequential``:
        largest `Stages.evidence`.
    """
    b, n, p = whitened.shape
    every = np.arange(b)
    rest = (1 - 1 / n) - np.einsum("bij,bij->bi", whitened, whitened) / (n - 1)
    ratios = np.empty((b, most_deleted(n, p)))
    columns = np.empty((b, ratios.shape[1], n))
    for s in range(ratios.shape[1]):
        i = rest.argmin(axis=1)
        pivot = rest[every, i]
        ratios[:, s] = pivot * (n - s) / (n - s - 1)
        column = (whitened @ (whitened[every, i] / (1 - n))[:, :, None])[:, :, 0] - 1 / n
        column -= np.einsum("bs,bsn->bn", columns[every, :s, i], columns[:, :s])
        columns[:, s] = column / np.sqrt(pivot)[:, None]
        rest -= np.square(columns[:, s])
        rest[every, i] = math.inf
    evidence = evidence_of(wilks_p_values(ratios, n, p)).max(axis=1)
    return {MAXIMUM: (n - 1) ** 2 / n * (1 - ratios[:, 0]), SEQUENTIAL: evidence}
