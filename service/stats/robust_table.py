"""Null law of robust distances by Monte Carlo, one table for each (n, p).

The search for the best subset costs near a millisecond, so these tables have
fewer draws than those of other statistics, and large batches have none.
"""

from __future__ import annotations

from functools import lru_cache

import numpy as np

from service.stats import robust
from service.stats.null_laws import NullTable, rounded
from service.stats.randomisation import normal_batches

DRAWS = 999
"""Simulated batches behind each table: p-values are multiples of 0.001."""

MOST_NUMBERS = 600
"""Batches of more numbers, n times p, have no table."""

_AT_ONCE = 111


@lru_cache(maxsize=64)
def robust_table(n: int, p: int) -> NullTable | None:
    """Return the law of ``robust-maximum`` at (n, p), made at the first asking: seconds for the largest.

    Parameters
    ----------
    n, p : int
        Units and characteristics.

    Returns
    -------
    NullTable or None
        Under independent standard normal characteristics; None where ``n p > 600`` or ``n < 5p``.
        The estimate does not change with origin and units of measurement; with correlations it
        does a little, as the deterministic search depends on the axes.
    """
    if n * p > MOST_NUMBERS or n < robust.FEWEST_UNITS_EACH * p:
        return None
    parts = [
        robust.maxima_of_many(batches[start : start + _AT_ONCE])[robust.MAXIMUM]
        for batches in normal_batches(f"robust distances, n={n}, p={p}", n, p, DRAWS)
        for start in range(0, batches.shape[0], _AT_ONCE)
    ]
    return NullTable(n, p, {robust.MAXIMUM: np.sort(rounded(np.concatenate(parts)))})
