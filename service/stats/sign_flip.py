"""Does the mean test stand without normality?  The randomisation law of its statistic over sign patterns.

Where each unit's deviation from the target is as likely as its opposite, every
pattern of signs of ``y_i - mu0`` is equally likely given the data, and the
share of patterns whose statistic is at least the observed one is an exact
p-value.  Each statistic of the mean is, over the patterns, an increasing
function of ``|sum_i s_i v_i|^2`` for rows v that no pattern changes.

References
----------
.. [1] R. A. Fisher, The Design of Experiments, Oliver and Boyd 1935, section 21.
.. [2] E. S. Edgington and P. Onghena, Randomization Tests, 4th ed., Chapman and
   Hall 2007, chapter 3.
"""

from __future__ import annotations

import math
from collections.abc import Iterator
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from service.stats.arrays import Matrix, frozen
from service.stats.covariance import Covariance
from service.stats.location import pooled_covariance
from service.stats.moments import Moments
from service.stats.randomisation import sign_patterns
from service.stats.screen import ScreenStatistic, not_applicable

MOST_UNITS_IN_FULL = 14
"""Up to this many units every pattern is taken."""

DRAWN = 9_999
"""Patterns drawn beyond, next to the observed one."""

_BLOCKS = 9
_KEPT_UNITS = 200
# Rounding of the squared length, relative to the largest that it could be.
_ROUNDING = 1e-13


def reference_sign_flip(moments: Moments, sigma0: Covariance) -> ScreenStatistic:
    """Return the sign-flip check of ``n d' Sigma0^-1 d``, for a reference covariance known or estimated.

    Parameters
    ----------
    moments : Moments
        Of n >= 1 units about a fixed target; an estimated target breaks the symmetry.
    sigma0 : Covariance
        Reference covariance.

    Returns
    -------
    ScreenStatistic
        Law "exact" up to 14 units, where all 2^n patterns are taken, else "monte-carlo".
        ``detail`` has their number and the smallest p-value that they allow.
    """
    rows = sigma0.whiten(moments.deviations)
    return _flipped(rows, _quadratic(moments, sigma0))


def batch_sign_flip(moments: Moments) -> ScreenStatistic:
    """Return the sign-flip check of Hotelling's ``T2 = n d' S^-1 d``, with S of each pattern its own.

    ``A = sum_i y_i y_i'`` is the same for every pattern, and ``(n-1) S = A - n d d'``, so that
    ``T2 = (n-1) r/(1-r)`` with ``r = n d' A^-1 d``: no pattern needs a factor of its own.

    Parameters
    ----------
    moments : Moments
        Of n > p units about a fixed target.

    Returns
    -------
    ScreenStatistic
        As `reference_sign_flip`.
    """
    if moments.covariance is None:
        assert moments.obstacle is not None
        return not_applicable(moments.obstacle.detail)
    rows, _ = np.linalg.qr(moments.deviations / moments.covariance.scale)
    return _flipped(rows, _quadratic(moments, moments.covariance))


def pooled_sign_flip(moments: Moments, sigma0: Covariance) -> ScreenStatistic:
    """Return the sign-flip check of T2 with ``Sp = ((n-1) S + nu Sigma0)/(n-1+nu)``, S of each pattern its own.

    As in `batch_sign_flip`, with ``A + nu Sigma0`` in place of A.

    Parameters
    ----------
    moments : Moments
        Of n >= 1 units about a fixed target.
    sigma0 : Covariance
        Reference covariance with its finite degrees of freedom nu.

    Returns
    -------
    ScreenStatistic
        As `reference_sign_flip`.
    """
    reference = math.sqrt(sigma0.degrees_of_freedom) * sigma0.factor.T
    stacked = np.vstack([moments.deviations / sigma0.scale, reference])
    rows = np.linalg.qr(stacked)[0][: moments.units]
    return _flipped(rows, _quadratic(moments, pooled_covariance(moments, sigma0)))


def _quadratic(moments: Moments, covariance: Covariance) -> float:
    whitened = covariance.whiten(moments.difference)
    return moments.units * float(whitened @ whitened)


def _flipped(rows: Matrix, statistic: float) -> ScreenStatistic:
    """Return the share of patterns s with ``|s' rows|^2`` at least that of the observed pattern, all ones."""
    n = rows.shape[0]
    observed = np.square(rows.sum(axis=0)).sum()
    limit = observed - _ROUNDING * n * np.square(rows).sum()
    drawn = n > MOST_UNITS_IN_FULL
    count = reached = int(drawn)
    for patterns in _patterns(n):
        sums = patterns @ rows
        reached += int(np.count_nonzero(np.einsum("ij,ij->i", sums, sums) >= limit))
        count += patterns.shape[0]
    detail = {"patterns": count, "smallest_p_value": 1 / count}
    return ScreenStatistic(statistic, reached / count, "monte-carlo" if drawn else "exact", detail=detail)


def _patterns(n: int) -> Iterator[Matrix]:
    """Yield patterns of signs, each of shape (m, n): all that begin with plus, or `DRAWN` drawn ones."""
    if n <= MOST_UNITS_IN_FULL:
        yield every_pattern(n)
        return
    draw = _kept_block if n <= _KEPT_UNITS else _block
    for i in range(_BLOCKS):
        yield draw(n, i).astype(np.float64)


@lru_cache(maxsize=MOST_UNITS_IN_FULL)
def every_pattern(n: int) -> Matrix:
    """Return the patterns of n signs that begin with plus, shape (2^(n-1), n); the others are their opposites."""
    codes = np.arange(2 ** (n - 1))[:, None] >> np.arange(n - 1, -1, -1)
    return frozen(1 - 2 * (codes & 1))


def _block(n: int, i: int) -> npt.NDArray[np.int8]:
    return sign_patterns(f"sign flips, n={n}, block={i}", n, DRAWN // _BLOCKS).astype(np.int8)


@lru_cache(maxsize=_BLOCKS * 32)
def _kept_block(n: int, i: int) -> npt.NDArray[np.int8]:
    return _block(n, i)
