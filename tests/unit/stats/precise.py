"""The mean tests by their formulas in 60 digits, with explicit inverses: slow, and nothing shared with the service."""

from __future__ import annotations

from typing import Any

import mpmath as mp
import numpy as np
from numpy.typing import ArrayLike

DIGITS = 60


def matrix(values: ArrayLike) -> Any:
    """Return an mpmath matrix of the doubles as they are; a vector becomes a column."""
    array = np.asarray(values, dtype=np.float64)
    return mp.matrix(array.tolist() if array.ndim == 2 else [[value] for value in array.tolist()])


def scatter(x: ArrayLike, mu0: ArrayLike) -> tuple[Any, Any]:
    """Return the difference of the mean from the target and the covariance with divisor n - 1."""
    with mp.workdps(DIGITS):
        rows, target = matrix(x), matrix(mu0)
        n, p = rows.rows, rows.cols
        d = mp.matrix([mp.fsum(rows[i, j] - target[j] for i in range(n)) / n for j in range(p)])
        centred = mp.matrix(n, p)
        for i in range(n):
            for j in range(p):
                centred[i, j] = rows[i, j] - target[j] - d[j]
        return d, centred.T * centred / max(n - 1, 1)


def form(d: Any, sigma: Any) -> Any:
    """Return ``d' Sigma^-1 d``."""
    with mp.workdps(DIGITS):
        column = d if isinstance(d, mp.matrix) else matrix(d)
        square = sigma if isinstance(sigma, mp.matrix) else matrix(sigma)
        return (column.T * mp.inverse(square) * column)[0]


def direction(d: Any, sigma: Any) -> np.ndarray:
    """Return ``Sigma^-1 d`` over the square root of the form, shape (p,)."""
    with mp.workdps(DIGITS):
        scaled = mp.inverse(sigma) * d / mp.sqrt(form(d, sigma))
        return np.array([float(value) for value in scaled])


def chi_square_p_value(statistic: Any, dof: float) -> float:
    """Return P(chi-square > statistic)."""
    with mp.workdps(DIGITS):
        return float(mp.gammainc(mp.mpf(dof) / 2, statistic / 2, mp.inf, regularized=True))


def t_squared_p_value(statistic: Any, p: int, nu: float) -> float:
    """Return P(T2 > statistic) by the beta law of ``1/(1 + T2/nu)``."""
    with mp.workdps(DIGITS):
        share = 1 / (1 + statistic / mp.mpf(nu))
        return float(mp.betainc((mp.mpf(nu) - p + 1) / 2, mp.mpf(p) / 2, 0, share, regularized=True))
