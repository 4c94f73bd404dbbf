"""Is the batch spread as the reference covariance says?  Likelihood ratio, Ledoit and Wolf, Box.

Every statistic here is a function of the eigenvalues of ``Sigma0^-1 S``, all 1
where the batch has exactly the reference covariance.  What differs is named in
`spread`.

References
----------
.. [1] A. C. Rencher and W. F. Christensen, Methods of Multivariate Analysis, 3rd
   ed., Wiley 2012, sections 7.2.1 and 7.3.2.
.. [2] O. Ledoit and M. Wolf, "Some hypothesis tests for the covariance matrix
   when the dimension is large compared to the sample size", Annals of Statistics
   30 (2002) 1081-1102.
.. [3] G. E. P. Box, "A general distribution theory for a class of likelihood
   criteria", Biometrika 36 (1949) 317-346.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from typing import Protocol, TypeVar

import numpy as np
from scipy.linalg import lapack

from service.stats import tails
from service.stats.arrays import Matrix, Vector
from service.stats.covariance import Covariance
from service.stats.moments import Moments
from service.stats.screen import ScreenStatistic, not_applicable
from service.stats.spread import Eigen, describe

Numbers = TypeVar("Numbers", float, Vector)

NAME = "dispersion"
"""Name of the null law, of the likelihood ratio where n > p and of Ledoit and Wolf's statistic elsewhere."""

_SMALLEST, _LARGEST = 1e-15, 1e100
"""Eigenvalues count as at least this, so that a constant characteristic gives a large number and not infinity."""


class UpperLaw(Protocol):
    """What the screen asks of a table of null laws."""

    def upper(self, name: str, observed: float) -> float:
        """Return the upper-tail p-value."""
        ...


def against_reference(moments: Moments, sigma0: Covariance, table: UpperLaw | None, level: float) -> ScreenStatistic:
    """Compare the batch's covariance with the reference covariance.

    Parameters
    ----------
    moments : Moments
        Of n >= 3 units, or 2 of one characteristic; n > p where the reference covariance is an estimate.
    sigma0 : Covariance
        Reference covariance, known or with nu degrees of freedom.
    table : NullTable or None
        Exact null laws at (n, p); used where the reference covariance is known.
    level : float
        At which the difference is named.

    Returns
    -------
    ScreenStatistic
        Known reference: the likelihood ratio with its small-sample factor [1]_, or for n <= p
        Ledoit and Wolf's statistic [2]_.  Estimated reference: Box's M of the two with its F law
        [3]_.  In detail: the eigenvalues of ``Sigma0^-1 S``, the method, and where significant
        what `spread.describe` finds.
    """
    n, p, nu = moments.units, moments.dimension, sigma0.degrees_of_freedom
    if n < 2:
        return not_applicable("one unit has no spread")
    if math.isfinite(nu) and (n <= p or nu < p):
        return not_applicable(f"two estimated covariances of {p} characteristics need more than {p} units each")
    if n == 2 and p > 1:
        # The statistic would be p(p+1)/2 - tr V, which falls as the spread grows.
        return not_applicable(f"two units say too little of the spread of {p} characteristics")
    eigen = _eigen(moments, sigma0)
    detail: dict[str, object] = {"eigenvalues": eigen.values.tolist()}
    result = _box(eigen, n - 1, nu, detail) if math.isfinite(nu) else _against_known(eigen.values, n, table, detail)
    if result.p_value is not None and result.p_value <= level:
        detail |= describe(eigen, moments, sigma0)
    return result


def _eigen(moments: Moments, sigma0: Covariance) -> Eigen:
    whitened = sigma0.whiten(moments.centred)
    values, vectors, _ = lapack.dsyev(whitened.T @ whitened / (moments.units - 1))
    return Eigen(np.maximum(values, _SMALLEST), vectors)


def _against_known(values: Vector, n: int, table: UpperLaw | None, detail: dict[str, object]) -> ScreenStatistic:
    p = values.size
    if n > p:
        detail["method"] = "likelihood ratio"
        statistic = corrected_ratio(float(np.log(values).sum()), float(values.sum()), n, p)
    else:
        detail["method"] = "Ledoit-Wolf"
        # Beyond this size nothing is left to tell, and squares would leave the range of a double.
        values = np.minimum(values, _LARGEST)
        statistic = ledoit_wolf(float(values.sum()), float(values @ values), n, p)
    # Ledoit and Wolf's statistic can be below 0, where its large-sample law cannot.
    asymptotic = tails.chi_square_tail(max(0.0, statistic), p * (p + 1) / 2).p_value
    if table is None:
        return ScreenStatistic(statistic, asymptotic, "asymptotic", detail=detail)
    return ScreenStatistic(statistic, table.upper(NAME, statistic), "monte-carlo", asymptotic, detail=detail)


def corrected_ratio(log_determinant: Numbers, trace: Numbers, n: int, p: int) -> Numbers:
    """Return the likelihood ratio statistic with its small-sample factor.

    Parameters
    ----------
    log_determinant, trace : float or ndarray
        Of ``Sigma0^-1 S``.
    n, p : int
        Units and characteristics, n > p.

    Returns
    -------
    float or ndarray
        ``(1 - (2p + 1 - 2/(p+1))/(6(n-1) - 1)) (n-1) (tr - ln det - p)``, by the large-sample law
        chi-square with p(p+1)/2 degrees of freedom; Rencher and Christensen 2012 [1]_, 7.2.1.
    """
    factor = 1 - (2 * p + 1 - 2 / (p + 1)) / (6 * (n - 1) - 1)
    return factor * (n - 1) * (trace - log_determinant - p)


def ledoit_wolf(trace: Numbers, trace_of_square: Numbers, n: int, p: int) -> Numbers:
    """Return Ledoit and Wolf's statistic, which exists for n <= p too.

    Parameters
    ----------
    trace, trace_of_square : float or ndarray
        Of ``V = Sigma0^-1 S`` and of ``V V``.
    n, p : int
        Units, at least 2, and characteristics.

    Returns
    -------
    float or ndarray
        ``f p W/2``, ``W = tr (V - I)^2/p - (p/f) (tr V/p)^2 + p/f``, f = n - 1; by the large-sample
        law chi-square with p(p+1)/2 degrees of freedom; Ledoit and Wolf 2002 [2]_, equation 22.
    """
    f = n - 1
    w = (trace_of_square - 2 * trace + p) / p - (trace / p) ** 2 * p / f + p / f
    return f * p * w / 2


def statistics_of_many(batches: Matrix) -> Mapping[str, Vector]:
    """Return the statistic of many batches drawn with the reference covariance.

    Parameters
    ----------
    batches : ndarray, shape (b, n, p)
        Standard normal draws as they are, not whitened with their own covariance.

    Returns
    -------
    mapping of str to ndarray, shape (b,)
        ``dispersion``, as `against_reference` computes it for a known reference.
    """
    n, p = batches.shape[1:]
    centred = batches - batches.mean(axis=1, keepdims=True)
    scatter = centred.transpose(0, 2, 1) @ centred / (n - 1)
    trace = np.einsum("bii->b", scatter)
    if n > p:
        return {NAME: corrected_ratio(np.linalg.slogdet(scatter)[1], trace, n, p)}
    return {NAME: ledoit_wolf(trace, np.einsum("bij,bij->b", scatter, scatter), n, p)}


def _box(eigen: Eigen, f1: float, f2: float, detail: dict[str, object]) -> ScreenStatistic:
    statistic = box_m(eigen.values, f1, f2)
    detail["method"] = "Box M, F approximation"
    return ScreenStatistic(statistic, box_tail(statistic, eigen.values.size, f1, f2), "asymptotic", detail=detail)


def box_m(values: Vector, f1: float, f2: float) -> float:
    """Return Box's M of two covariances from the eigenvalues of one beside the other.

    Parameters
    ----------
    values : ndarray, shape (p,)
        Eigenvalues of ``S2^-1 S1``.
    f1, f2 : float
        Degrees of freedom of S1 and S2.

    Returns
    -------
    float
        ``(f1 + f2) ln|Sp| - f1 ln|S1| - f2 ln|S2|``, Sp the pooled covariance.
    """
    pooled = np.log1p(f1 * (values - 1) / (f1 + f2))
    return float(((f1 + f2) * pooled - f1 * np.log(values)).sum())


def box_tail(m: float, p: int, f1: float, f2: float) -> float:
    """Return the p-value of Box's M for two covariances by his F approximation [3]_.

    Rencher and Christensen 2012 [1]_, equations 7.20 to 7.25, with k = 2.
    """
    total = f1 + f2
    c1 = (1 / f1 + 1 / f2 - 1 / total) * (2 * p * p + 3 * p - 1) / (6 * (p + 1))
    c2 = (1 / f1**2 + 1 / f2**2 - 1 / total**2) * (p - 1) * (p + 2) / 6
    a1 = p * (p + 1) / 2
    a2 = (a1 + 2) / abs(c2 - c1 * c1)
    if c2 > c1 * c1:
        return tails.f_tail(m * (1 - c1 - a1 / a2) / a1, a1, a2).p_value
    b2 = (1 - c1 + 2 / a2) / a2
    # Beyond m = 1/b2 the approximating law has no mass left.
    return tails.f_tail(a2 * b2 * m / (a1 * (1 - b2 * m)), a1, a2).p_value if b2 * m < 1 else 0.0
