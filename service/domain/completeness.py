"""Are the values all there, and are they measurements?  Missing cells, copied units, constant columns."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np

from service.domain.batch import Batch
from service.stats.arrays import Matrix
from service.stats.screen import ScreenStatistic

_CHANCE = 0.05
"""A copy is a finding where fewer than this many were to be expected by chance."""


def completeness(batch: Batch, rows: Matrix, names: Sequence[str]) -> ScreenStatistic:
    """Count what is missing or cannot be a measurement.

    Parameters
    ----------
    batch : Batch
        As posted, for its unit labels.
    rows : ndarray, shape (n, p)
        Values in the specification's order, NaN where missing.
    names : sequence of str
        Characteristics, in the same order.

    Returns
    -------
    ScreenStatistic
        `statistic` is the number of findings; there is no null law.
    """
    missing = [{"unit": batch.units[i], "characteristic": batch.names[j]} for i, j in batch.missing]
    ordered = np.sort(rows, axis=0)
    copies = _copied_units(rows, ordered)
    constant = [names[int(j)] for j in np.flatnonzero(ordered[0] == ordered[-1])] if rows.shape[0] > 1 else []
    detail: dict[str, Any] = {}
    if missing:
        detail["missing"] = missing
    if copies:
        detail["copied_units"] = [[batch.units[i] for i in group] for group in copies]
    if constant:
        detail["constant"] = constant
    units = sorted({i for group in copies for i in group} | {i for i, _ in batch.missing})
    count = len(missing) + len(copies) + len(constant)
    return ScreenStatistic(float(count), None, "none", units=tuple(units), detail=detail)


def _copied_units(rows: Matrix, ordered: Matrix) -> list[list[int]]:
    """Return groups of units whose every value is the same, unless chance makes such copies."""
    # Where one characteristic tells every unit from every other, no unit is a copy: the usual case, and quick.
    if (ordered[1:] != ordered[:-1]).all(axis=0).any():
        return []
    _, first, inverse, counts = np.unique(rows, axis=0, return_index=True, return_inverse=True, return_counts=True)
    if first.size == rows.shape[0] or _expected_copies(rows) >= _CHANCE:
        return []
    groups = np.asarray(inverse).ravel()
    return [[int(i) for i in np.flatnonzero(groups == g)] for g in np.flatnonzero(counts > 1)]


def _expected_copies(rows: Matrix) -> float:
    """Return how many pairs of units would agree in every column if columns were independent.

    The chance of one pair agreeing in a column is the sum of squared shares of
    its distinct values, the observed repeat rate; coarse reporting makes it large.
    """
    n = rows.shape[0]
    shares = [np.unique(column, return_counts=True)[1] / n for column in rows.T]
    repeat_rates = [max(float(np.square(share).sum()) - 1 / n, 0.0) for share in shares]
    return float(n * (n - 1) / 2 * math.prod(repeat_rates))
