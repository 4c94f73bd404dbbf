"""Do units measured one after another resemble each other?  Lag-one dependence in order of measurement.

References
----------
.. [1] J. R. M. Hosking, "The multivariate portmanteau statistic", Journal of the
   American Statistical Association 75 (1980) 602-608.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np

from service.stats import tails
from service.stats.arrays import Matrix, Vector
from service.stats.moments import Moments
from service.stats.screen import NullLaw, ScreenStatistic, not_applicable, unjudgeable

ORDER_DEPENDENCE = "order-dependence"


def order_dependence(moments: Moments, sequence: Vector | None, table: NullLaw | None) -> ScreenStatistic:
    """Screen the dependence of each unit on the one measured before it.

    Parameters
    ----------
    moments : Moments
        Of n > p + 1 units.
    sequence : ndarray, shape (n,), or None
        Place of each unit in the order of measurement: any increasing numbers, or times.
    table : NullLaw or None
        Null laws at (n, p); chi-square(p^2) where None.

    Returns
    -------
    ScreenStatistic
        `lag_term` at lag 1, large where the dependence is, of either sign.  ``detail`` has the
        autocorrelation at lag 1 of each characteristic; the statistic also answers to
        dependence of one characteristic on another before it.
    """
    if sequence is None:
        return not_applicable("The batch does not say in which order its units were measured.")
    why = unjudgeable(moments)
    if why or moments.whitened is None:
        return not_applicable(why)
    whitened, centred = moments.whitened, moments.centred
    if not _increases(sequence):
        order = sequence.argsort()
        if not _increases(sequence[order]):
            return not_applicable("Units share a place in the order of measurement.")
        whitened, centred = whitened[order], centred[order]
    statistic = lag_term(whitened)
    asymptotic = tails.chi_square_tail(statistic, moments.dimension**2).p_value
    detail = {"autocorrelations": _autocorrelations(centred).tolist()}
    if table is None:
        return ScreenStatistic(statistic, asymptotic, "asymptotic", asymptotic, detail=detail)
    p_value = table.upper(ORDER_DEPENDENCE, statistic)
    return ScreenStatistic(statistic, p_value, "monte-carlo", asymptotic, detail=detail)


def lag_term(ordered: Matrix, lag: int = 1) -> float:
    """Return one lag's term of Hosking's portmanteau statistic.

    With ``C_l = (1/n) sum_t z_t z_(t-l)'`` of the units z whitened with S_n
    (divisor n), the term is ``n^2/(n - l) tr(C_l' C_l)``.  The factor
    ``n^2/(n - l)`` is that of the paper's modified statistic, whose mean is closer to
    p^2 at few units than with the plain factor n.  At p = 1 it is
    ``n^2 r_l^2/(n - l)``: Ljung and Box have ``n (n + 2)`` in place of ``n^2``.

    Parameters
    ----------
    ordered : ndarray, shape (n, p)
        Centred units in order of measurement, whitened with S (divisor n - 1).
    lag : int, optional
        How many places apart, less than n.

    Returns
    -------
    float
        About chi-square(p^2) under independence, for many units.
    """
    n = ordered.shape[0]
    products = ordered[lag:].T @ ordered[:-lag]
    return float(np.vdot(products, products) * (n * n / ((n - lag) * (n - 1) ** 2)))


def of_many(whitened: Matrix) -> Mapping[str, Vector]:
    """Return `lag_term` at lag 1 of many batches, shape (b,) from (b, n, p)."""
    n = whitened.shape[1]
    products = whitened[:, 1:].transpose(0, 2, 1) @ whitened[:, :-1]
    return {ORDER_DEPENDENCE: np.einsum("bij,bij->b", products, products) * (n * n / (n - 1) ** 3)}


def _autocorrelations(centred: Matrix) -> Vector:
    """Return the lag-one autocorrelation of each column, shape (p,)."""
    lagged = np.add.reduce(centred[1:] * centred[:-1], axis=0)
    return np.asarray(lagged / np.add.reduce(centred * centred, axis=0))


def _increases(sequence: Vector) -> bool:
    return bool((sequence[1:] > sequence[:-1]).all())
