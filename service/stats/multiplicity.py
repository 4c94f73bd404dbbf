"""Several tests at once: p-values adjusted for their number."""

from __future__ import annotations

from operator import itemgetter

import numpy as np

from service.stats.arrays import Vector


def holm(p_values: Vector) -> Vector:
    """Return Holm's adjusted p-values.

    Parameters
    ----------
    p_values : ndarray, shape (m,)
        One for each hypothesis, under any dependence.

    Returns
    -------
    ndarray, shape (m,)
        The smallest family-wise levels at which each hypothesis is rejected.

    References
    ----------
    .. [1] S. Holm, "A simple sequentially rejective multiple test procedure",
       Scandinavian Journal of Statistics 6 (1979) 65-70.
    """
    ordered = sorted(enumerate(p_values.tolist()), key=itemgetter(1))
    m = len(ordered)
    adjusted = np.empty(m)
    largest = 0.0
    for step, (place, p_value) in enumerate(ordered):
        largest = max(largest, (m - step) * p_value)
        adjusted[place] = min(largest, 1.0)
    return adjusted
