"""Do the units look like a normal sample?  Mardia's skewness and kurtosis, Henze and Zirkler's distance.

All three are statistics of the Gram matrix ``g`` of the centred units whitened
with ``S_n`` (divisor n), and so do not change under affine maps: in terms of
units whitened with S (divisor n - 1), ``g = n/(n-1) W W'``.

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
from collections.abc import Iterator, Mapping
from functools import lru_cache

import numpy as np

from service.stats import tails
from service.stats.arrays import Matrix, Vector, squared_lengths
from service.stats.moments import Moments
from service.stats.screen import NullLaw, ScreenStatistic, not_applicable, unjudgeable

SKEWNESS = "mardia-skewness"
KURTOSIS = "mardia-kurtosis"
HENZE_ZIRKLER = "henze-zirkler"

# Gram matrices of large batches are taken in stripes of about this many numbers.
_STRIPE = 1 << 20


def skewness(moments: Moments, table: NullLaw | None) -> ScreenStatistic:
    """Screen Mardia's skewness ``b1 = mean_ij g_ij^3``; large values speak against normality.

    Parameters
    ----------
    moments : Moments
        Of n > p + 1 units.
    table : NullLaw or None
        Null laws at (n, p); the corrected large-sample law where None.

    Returns
    -------
    ScreenStatistic
        ``asymptotic_p_value`` is by `skewness_law`.
    """
    why = unjudgeable(moments)
    if why or moments.whitened is None:
        return not_applicable(why)
    b1 = skewness_of(moments.whitened)
    asymptotic = skewness_law(b1, moments.units, moments.dimension)
    return _result(b1, asymptotic, None if table is None else table.upper(SKEWNESS, b1))


def kurtosis(moments: Moments, table: NullLaw | None) -> ScreenStatistic:
    """Screen Mardia's kurtosis ``b2 = mean_i g_ii^2``, two-sided.

    Parameters
    ----------
    moments : Moments
        Of n > p + 1 units, and n > 3.
    table : NullLaw or None
        Null laws at (n, p); the large-sample law where None.

    Returns
    -------
    ScreenStatistic
        ``asymptotic_p_value`` is by `kurtosis_law`.
    """
    why = unjudgeable(moments)
    if why or moments.whitened is None:
        return not_applicable(why)
    if moments.units == 3:
        return not_applicable("The kurtosis of 3 units is the same whatever the data.")
    b2 = kurtosis_of(moments.whitened)
    asymptotic = kurtosis_law(b2, moments.units, moments.dimension)
    return _result(b2, asymptotic, None if table is None else table.two_sided(KURTOSIS, b2))


def henze_zirkler(moments: Moments, table: NullLaw | None) -> ScreenStatistic:
    """Screen Henze and Zirkler's distance, which answers in the end to every departure from normality.

    Parameters
    ----------
    moments : Moments
        Of n > p + 1 units.
    table : NullLaw or None
        Null laws at (n, p); the log-normal large-sample law where None.

    Returns
    -------
    ScreenStatistic
        Large values speak against normality; ``asymptotic_p_value`` is by `henze_zirkler_law`.
    """
    why = unjudgeable(moments)
    if why or moments.whitened is None:
        return not_applicable(why)
    statistic = henze_zirkler_of(moments.whitened)
    asymptotic = henze_zirkler_law(statistic, moments.units, moments.dimension)
    return _result(statistic, asymptotic, None if table is None else table.upper(HENZE_ZIRKLER, statistic))


def _result(statistic: float, asymptotic: float, simulated: float | None) -> ScreenStatistic:
    if simulated is None:
        return ScreenStatistic(statistic, asymptotic, "asymptotic", asymptotic_p_value=asymptotic)
    return ScreenStatistic(statistic, simulated, "monte-carlo", asymptotic_p_value=asymptotic)


# --- The statistics, of one batch ---------------------------------------------


def skewness_of(whitened: Matrix) -> float:
    """Return ``b1`` of units whitened with S, shape (n, p).

    References
    ----------
    .. [1] Mardia 1970, equation 2.23.
    """
    n, p = whitened.shape
    if _tensor_is_cheaper(n, p):
        # The tensor of third moments has p^3 entries, and its squared length is b1.
        products = (whitened[:, :, None] * whitened[:, None, :]).reshape(n, p * p)
        third = (products.T @ whitened).ravel()
        total = float(third @ third)
    else:
        total = 0.0
        for rows in _stripes(n):
            gram = whitened[rows] @ whitened.T
            total += float(np.vdot(gram * gram, gram))
    return float(total * n / (n - 1.0) ** 3)


def kurtosis_of(whitened: Matrix) -> float:
    """Return ``b2`` of units whitened with S, shape (n, p).

    References
    ----------
    .. [1] Mardia 1970, equation 3.5.
    """
    n = whitened.shape[0]
    squared = squared_lengths(whitened)
    return float(squared @ squared * n / (n - 1.0) ** 2)


def henze_zirkler_of(whitened: Matrix) -> float:
    """Return Henze and Zirkler's statistic of units whitened with S, shape (n, p).

    References
    ----------
    .. [1] Henze and Zirkler 1990, section 2.
    """
    n, p = whitened.shape
    b2 = _beta(n, p) ** 2
    scaled = whitened * math.sqrt(b2 * n / (n - 1))
    halves = squared_lengths(scaled)
    halves *= 0.5
    between = 0.0
    for rows in _stripes(n):
        # Half the squared distance of each pair, from inner products.
        exponents = scaled[rows] @ scaled.T
        exponents -= halves
        exponents -= halves[rows, None]
        between += float(np.exp(exponents, out=exponents).sum())
    centre = float(np.exp(halves / -(1 + b2)).sum())
    return float(between / n - 2 * (1 + b2) ** (-p / 2) * centre + n * (1 + 2 * b2) ** (-p / 2))


def _stripes(n: int) -> Iterator[slice]:
    """Yield slices of n rows whose inner products with all rows fit in working memory."""
    step = max(1, _STRIPE // n)
    for start in range(0, n, step):
        yield slice(start, start + step)


def _tensor_is_cheaper(n: int, p: int) -> bool:
    """Whether the p^3 third moments cost less than the n^2 inner products (measured, within a factor of two)."""
    return p * (p + 2) <= n


# --- The statistics, of many batches ------------------------------------------


def mardia_of_many(whitened: Matrix) -> Mapping[str, Vector]:
    """Return Mardia's statistics of many batches.

    Parameters
    ----------
    whitened : ndarray, shape (b, n, p)
        Centred rows whitened with S (divisor n - 1).

    Returns
    -------
    mapping of str to ndarray, shape (b,)
        `skewness_of` and `kurtosis_of`, under the names of their screens.
    """
    n, p = whitened.shape[1:]
    squared = np.einsum("bij,bij->bi", whitened, whitened)
    if _tensor_is_cheaper(n, p):
        total = _squared_third_moments(whitened)
    else:
        gram = whitened @ whitened.transpose(0, 2, 1)
        total = np.einsum("bij,bij,bij->b", gram, gram, gram)
    fourth = np.einsum("bi,bi->b", squared, squared)
    return {SKEWNESS: total * (n / (n - 1) ** 3), KURTOSIS: fourth * (n / (n - 1) ** 2)}


def _squared_third_moments(whitened: Matrix) -> Vector:
    j, k = np.triu_indices(whitened.shape[2])
    # A pair of different characteristics stands for its opposite too.
    weights = np.where(j == k, 1.0, 2.0)
    third = (whitened[:, :, j] * whitened[:, :, k]).transpose(0, 2, 1) @ whitened
    return np.asarray(np.einsum("bqi,bqi,q->b", third, third, weights))


def henze_zirkler_of_many(whitened: Matrix) -> Mapping[str, Vector]:
    """Return `henze_zirkler_of` of many batches, shape (b,) from (b, n, p), under the name of its screen."""
    n, p = whitened.shape[1:]
    b2 = _beta(n, p) ** 2
    scaled = whitened * math.sqrt(b2 * n / (n - 1))
    halves = np.einsum("bij,bij->bi", scaled, scaled)[:, :, None] / 2
    ones = np.ones_like(halves)
    # One product gives every -|a - b|^2 / 2, for a in the left and b in the right factor.
    left = np.concatenate([scaled, -halves, ones], axis=2)
    right = np.concatenate([scaled, ones, -halves], axis=2)
    exponents = left @ right.transpose(0, 2, 1)
    between = np.exp(exponents, out=exponents).reshape(-1, n * n).sum(axis=1) / n
    centre = np.exp(halves / -(1 + b2)).sum(axis=(1, 2)) * (2 * (1 + b2) ** (-p / 2))
    return {HENZE_ZIRKLER: between - centre + n * (1 + 2 * b2) ** (-p / 2)}


# --- The large-sample laws ----------------------------------------------------


def skewness_law(b1: float, n: int, p: int) -> float:
    """Return the p-value of Mardia's skewness by its corrected large-sample law.

    ``n k b1 / 6`` is chi-square with ``p(p+1)(p+2)/6`` degrees of freedom, where
    ``k = (p+1)(n+1)(n+3)/(n((n+1)(p+1)-6))`` makes its mean exact.

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
    return math.erfc(abs(b2 - mean) / math.sqrt(2 * variance))


def henze_zirkler_law(statistic: float, n: int, p: int) -> float:
    """Return the p-value of Henze and Zirkler's statistic by its log-normal large-sample law."""
    mean, deviation = _log_moments(n, p)
    return math.erfc((math.log(statistic) - mean) / (deviation * math.sqrt(2))) / 2


@lru_cache(maxsize=1024)
def _beta(n: int, p: int) -> float:
    """Return the smoothing parameter (Henze and Zirkler 1990, section 3)."""
    return float((n * (2 * p + 1) / 4) ** (1 / (p + 4)) / math.sqrt(2))


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
