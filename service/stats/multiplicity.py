"""Several tests at once: p-values adjusted for their number."""

from __future__ import annotations

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
    order = p_values.argsort(kind="stable")
    m = p_values.shape[0]
    steps = np.maximum.accumulate(p_values[order] * np.arange(m, 0, -1))
    adjusted = np.empty(m)
    adjusted[order] = np.minimum(steps, 1.0)
    return adjusted
