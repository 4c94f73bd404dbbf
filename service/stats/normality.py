"""Do the units look like a normal sample?  Mardia's skewness and kurtosis, Henze and Zirkler's distance.

All three are statistics of the units whitened with ``S_n`` (divisor n), and so
do not change under affine maps.

References
----------
.. [1] K. V. Mardia, "Measures of multivariate skewness and kurtosis with
   applications", Biometrika 57 (1970) 519-530.
.. [2] K. V. Mardia, "Applications of some measures of multivariate skewness and
   kurtosis in testing normality and robustness studies", Sankhya B 36 (1974)
   115-128.
.. [3] N. Henze and B. Zirkler, "A class of invariant consistent tests for
   multivariate normality", Communications in Statistics - Theory and Methods 19
   (1990) 3595-3617.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from functools import lru_cache
from typing import Protocol

import numpy as np
from scipy import special

from service.stats import tails
from service.stats.arrays import Matrix, Vector
from service.stats.moments import Moments
from service.stats.screen import ScreenStatistic, not_applicable


class NullTables(Protocol):
    """What a screen asks of a table of null laws."""

    def upper(self, name: str, observed: float) -> float:
        """Return the upper-tail p-value."""
        ...

    def two_sided(self, name: str, observed: float) -> float:
        """Return the two-sided p-value."""
        ...


def skewness(moments: Moments, table: NullTables | None) -> ScreenStatistic:
    """Screen Mardia's skewness ``b1``.

    Parameters
    ----------
    moments : Moments
        Of n > p + 1 units.
    table : NullTable or None
        Exact null laws at (n, p); the corrected large-sample law where None.

    Returns
    -------
    ScreenStatistic
        Large values speak against normality.
    """
    found = _whitened(moments)
    if isinstance(found, str):
        return not_applicable(found)
    b1 = float(mardia_of_many(found[None])["mardia-skewness"][0])
    asymptotic = skewness_law(b1, *found.shape)
    return _result(b1, asymptotic, None if table is None else table.upper("mardia-skewness", b1))


def kurtosis(moments: Moments, table: NullTables | None) -> ScreenStatistic:
    """Screen Mardia's kurtosis ``b2``, two-sided; parameters as `skewness`."""
    found = _whitened(moments)
    if isinstance(found, str):
        return not_applicable(found)
    b2 = float(mardia_of_many(found[None])["mardia-kurtosis"][0])
    asymptotic = kurtosis_law(b2, *found.shape)
    return _result(b2, asymptotic, None if table is None else table.two_sided("mardia-kurtosis", b2))


def henze_zirkler(moments: Moments, table: NullTables | None) -> ScreenStatistic:
    """Screen Henze and Zirkler's distance, which answers to every departure; parameters as `skewness`."""
    found = _whitened(moments)
    if isinstance(found, str):
        return not_applicable(found)
    statistic = float(henze_zirkler_of_many(found[None])["henze-zirkler"][0])
    asymptotic = henze_zirkler_law(statistic, *found.shape)
    return _result(statistic, asymptotic, None if table is None else table.upper("henze-zirkler", statistic))


def _whitened(moments: Moments) -> Matrix | str:
    """Return the whitened units, or why there are none to judge."""
    n, p = moments.units, moments.dimension
    if n <= p + 1:
        # At n = p + 1 these statistics are constants, whatever the data.
        return f"{n} units of {p} characteristics say nothing about normality; at least {p + 2} are needed"
    if moments.whitened is None:
        return str(moments.obstacle)
    return moments.whitened


def _result(statistic: float, asymptotic: float, simulated: float | None) -> ScreenStatistic:
    if simulated is None:
        return ScreenStatistic(statistic, asymptotic, "asymptotic", asymptotic_p_value=asymptotic)
    return ScreenStatistic(statistic, simulated, "monte-carlo", asymptotic_p_value=asymptotic)


def mardia_of_many(whitened: Matrix) -> Mapping[str, Vector]:
    """Return Mardia's statistics of many batches.

    Parameters
    ----------
    whitened : ndarray, shape (b, n, p)
        Centred rows whitened with S (divisor n - 1).

    Returns
    -------
    mapping
        ``mardia-skewness``: ``b1 = mean_ij g_ij^3``, and ``mardia-kurtosis``:
        ``b2 = mean_i g_ii^2``, with g the Gram matrix of the rows whitened with S_n.
    """
    n, p = whitened.shape[1:]
    ratio = n / (n - 1)
    squared = np.einsum("bij,bij->bi", whitened, whitened) * ratio
    if p**3 <= n * (p + 2):
        # The third-moment tensor has p^3 entries, and its squared length is b1.
        products = (whitened[:, :, :, None] * whitened[:, :, None, :]).reshape(-1, n, p * p)
        moments = products.transpose(0, 2, 1) @ whitened
        skewness = np.square(moments).sum(axis=(1, 2)) * (ratio**3 / n**2)
    else:
        gram = whitened @ whitened.transpose(0, 2, 1)
        skewness = (gram * gram * gram).mean(axis=(1, 2)) * ratio**3
    return {"mardia-skewness": skewness, "mardia-kurtosis": np.square(squared).mean(axis=1)}


def skewness_law(b1: float, n: int, p: int) -> float:
    """Return the p-value of Mardia's skewness by its corrected large-sample law.

    ``n k b1 / 6`` is chi-square with ``p(p+1)(p+2)/6`` degrees of freedom, with
    ``k = (p+1)(n+1)(n+3)/(n((n+1)(p+1)-6))``, which makes its mean exact.

    References
    ----------
    .. [1] Mardia 1974, equation 5.5.
    """
    k = (p + 1) * (n + 1) * (n + 3) / (n * ((n + 1) * (p + 1) - 6))
    return tails.chi_square_tail(n * k * b1 / 6, p * (p + 1) * (p + 2) / 6).p_value


def kurtosis_law(b2: float, n: int, p: int) -> float:
    """Return the two-sided p-value of Mardia's kurtosis, normal with its exact mean and variance.

    References
    ----------
    .. [1] Mardia 1974: mean ``p(p+2)(n-1)/(n+1)``, variance
       ``8p(p+2)(n-3)(n-p-1)(n-p+1)/((n+1)^2(n+3)(n+5))``.
    """
    mean = p * (p + 2) * (n - 1) / (n + 1)
    variance = 8 * p * (p + 2) * (n - 3) * (n - p - 1) * (n - p + 1) / ((n + 1) ** 2 * (n + 3) * (n + 5))
    return float(2 * special.ndtr(-abs(b2 - mean) / math.sqrt(variance)))


def henze_zirkler_of_many(whitened: Matrix) -> Mapping[str, Vector]:
    """Return the Henze-Zirkler statistic of many batches, shape (b,) from (b, n, p).

    Parameters
    ----------
    whitened : ndarray, shape (b, n, p)
        Centred rows whitened with S (divisor n - 1).
    """
    n, p = whitened.shape[1:]
    beta2 = _beta(n, p) ** 2
    gram = whitened @ whitened.transpose(0, 2, 1) * (n / (n - 1))
    squared = np.einsum("bii->bi", gram)
    between = squared[:, :, None] + squared[:, None, :] - 2 * gram
    first = np.exp(between * (-beta2 / 2)).mean(axis=(1, 2))
    second = np.exp(squared * (-beta2 / (2 * (1 + beta2)))).mean(axis=1) * (2 * (1 + beta2) ** (-p / 2))
    return {"henze-zirkler": n * (first - second + (1 + 2 * beta2) ** (-p / 2))}


def _beta(n: int, p: int) -> float:
    """Return the smoothing parameter of Henze and Zirkler 1990, equation 3.1."""
    return float((n * (2 * p + 1) / 4) ** (1 / (p + 4)) / math.sqrt(2))


def henze_zirkler_law(statistic: float, n: int, p: int) -> float:
    """Return the p-value of Henze and Zirkler's statistic by its log-normal large-sample law."""
    mean, deviation = _log_moments(n, p)
    return float(special.ndtr((mean - math.log(statistic)) / deviation))


@lru_cache(maxsize=1024)
def _log_moments(n: int, p: int) -> tuple[float, float]:
    """Return mean and standard deviation of the logarithm (Henze and Zirkler 1990, theorem 3.1)."""
    b2 = _beta(n, p) ** 2
    b4, b8 = b2 * b2, b2**4
    a, w = 1 + 2 * b2, (1 + b2) * (1 + 3 * b2)
    mean = 1 - a ** (-p / 2) * (1 + p * b2 / a + p * (p + 2) * b4 / (2 * a * a))
    variance = (
        2 * (1 + 4 * b2) ** (-p / 2)
        + 2 * a**-p * (1 + 2 * p * b4 / a**2 + 3 * p * (p + 2) * b8 / (4 * a**4))
        - 4 * w ** (-p / 2) * (1 + 3 * p * b4 / (2 * w) + p * (p + 2) * b8 / (2 * w * w))
    )
    log_variance = math.log1p(variance / mean**2)
    return math.log(mean) - log_variance / 2, math.sqrt(log_variance)
