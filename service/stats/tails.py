"""Upper tail probabilities and critical values, with logarithms that never underflow.

Ordinary tails come from the complementary functions of `scipy.special`, and the
logarithm from whichever tail is the smaller.  Near underflow both come from the
continued fraction of the same tail, so that ``log10_p_value`` still stands where
``p_value`` is 0.

References
----------
.. [1] NIST Digital Library of Mathematical Functions, 8.9.2 (incomplete gamma
   function): continued fraction.
.. [2] W. J. Lentz, "Generating Bessel functions in Mie scattering calculations
   using continued fractions", Applied Optics 15 (1976) 668-671: the evaluation.
.. [3] A. R. Didonato and A. H. Morris, "Algorithm 708: significant digit computation
   of the incomplete beta function ratios", ACM Transactions on Mathematical
   Software 18 (1992) 360-373: continued fraction, without cancellation.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from typing import NamedTuple

import numpy as np
from scipy import special

from service.stats.arrays import Vector
from service.stats.roots import increasing_root

_LN10 = math.log(10.0)
# Below this the survival functions lose digits to gradual underflow of what they multiply.
_SMALLEST_TRUSTED = 1e-200
# Where the inverse of the incomplete beta function can return NaN or too few digits.
_SMALLEST_INVERTED, _LARGEST_INVERTED_DOF = 1e-100, 1e6
_LARGEST_LOG = 709.0
_TINY = 1e-300
_CONVERGED, _MOST_TERMS = 5e-16, 100_000


class Tail(NamedTuple):
    """An upper tail probability and its decimal logarithm."""

    p_value: float
    log10_p_value: float


def _from_logarithm(log_p: float) -> Tail:
    return Tail(math.exp(log_p), log_p / _LN10)


def _lentz(first: float, term: Callable[[int], tuple[float, float]]) -> float:
    """Return the continued fraction first + a1/(b1 + a2/(b2 + ...)) by Lentz's method, (am, bm) being term(m)."""
    value = first or _TINY
    c, d, step, m = value, 0.0, math.inf, 0
    # Two units in the last place: rounding may never let a step be 1 exactly.
    while abs(step - 1.0) > _CONVERGED and m < _MOST_TERMS:
        m += 1
        a, b = term(m)
        d = 1.0 / (b + a * d or _TINY)
        c = b + a / c or _TINY
        step = c * d
        value *= step
    return value


def _log_gamma_upper(a: float, x: float) -> float:
    """Return ln Q(a, x), the regularised upper incomplete gamma function (DLMF 8.9.2)."""
    fraction = _lentz(x + 1 - a, lambda m: (-m * (m - a), x + 2 * m + 1 - a))
    return a * math.log(x) - x - float(special.gammaln(a)) - math.log(fraction)


def _log_beta_lower(a: float, b: float, log_x: float) -> float:
    """Return ln I_x(a, b), the regularised incomplete beta function, where x is below the mean."""
    # Both x and its complement to 1 to full precision, as a may be many orders above b.
    x, y = math.exp(log_x), -math.expm1(log_x)
    gap = a * y - b * x + 1

    def term(m: int) -> tuple[float, float]:
        middle = a + 2 * m
        above = (a + m - 1) * (a + b + m - 1) * m * (b - m) * (x / (middle - 1)) ** 2
        return above, m + m * (b - m) * x / (middle - 1) + (a + m) / (middle + 1) * (gap + m * (1 + y))

    fraction = _lentz(a / (a + 1) * gap, term)
    return a * log_x + b * math.log(y) - float(special.betaln(a, b)) - math.log(fraction)


def chi_square_tail(x: float, dof: float) -> Tail:
    """Return P(chi-square > x).

    Parameters
    ----------
    x : float
        Observed value, at least 0.
    dof : float
        Degrees of freedom, positive.

    Returns
    -------
    Tail
        The probability and its decimal logarithm.
    """
    upper = float(special.chdtrc(dof, x))
    if upper < _SMALLEST_TRUSTED:
        return _from_logarithm(_log_gamma_upper(dof / 2, x / 2))
    if upper <= 0.5:
        return Tail(upper, math.log10(upper))
    return Tail(upper, math.log1p(-float(special.chdtr(dof, x))) / _LN10)


def f_tail(x: float, dof1: float, dof2: float) -> Tail:
    """Return P(F > x) for the F law with `dof1` and `dof2` degrees of freedom.

    Parameters
    ----------
    x : float
        Observed value, at least 0.
    dof1, dof2 : float
        Degrees of freedom of numerator and denominator, positive.

    Returns
    -------
    Tail
        The probability and its decimal logarithm.
    """
    return _ratio_tail(x * (dof1 / dof2), dof1, dof2)


def _ratio_tail(ratio: float, dof1: float, dof2: float) -> Tail:
    """Return the upper tail of the ratio of two independent chi-squares, not divided by their dof."""
    a, b, small = dof1 / 2, dof2 / 2, ratio < 1.0
    # Of the two arguments of the beta law the one that is not near 1 carries all the digits.
    share = ratio / (1.0 + ratio) if small else 1.0 / (1.0 + ratio)
    upper = float(special.betaincc(a, b, share) if small else special.betainc(b, a, share))
    if upper < _SMALLEST_TRUSTED:
        return _from_logarithm(_log_beta_lower(b, a, -math.log1p(ratio)))
    if upper <= 0.5:
        return Tail(upper, math.log10(upper))
    lower = float(special.betainc(a, b, share) if small else special.betaincc(b, a, share))
    return Tail(upper, math.log1p(-lower) / _LN10)


def t_two_sided(t: Vector, dof: float) -> Vector:
    """Return P(abs(T) > abs(t)) for Student's law, or the normal one where `dof` is infinite.

    Parameters
    ----------
    t : ndarray
        Observed ratios, any shape.
    dof : float
        Degrees of freedom, positive, may be infinite.

    Returns
    -------
    ndarray
        Two-sided p-values of the same shape.
    """
    if math.isinf(dof):
        return 2.0 * special.ndtr(-np.abs(t))
    return np.asarray(2.0 * special.stdtr(dof, -np.abs(t)), dtype=np.float64)


def t_upper(t: Vector, dof: float) -> Vector:
    """Return P(T > t) for Student's law, or the normal one where `dof` is infinite.

    Parameters
    ----------
    t : ndarray
        Observed ratios, any shape and sign.
    dof : float
        Degrees of freedom, positive, may be infinite.

    Returns
    -------
    ndarray
        One-sided p-values of the same shape, exact in the upper tail.
    """
    return np.asarray(special.ndtr(-t) if math.isinf(dof) else special.stdtr(dof, -t))


def t_two_sided_log10(t: Vector, dof: float) -> Vector:
    """Return log10 P(abs(T) > abs(t)), also where the probability itself underflows.

    Parameters
    ----------
    t : ndarray, shape (m,)
        Observed ratios, finite.
    dof : float
        Degrees of freedom, positive, infinite for the normal law.

    Returns
    -------
    ndarray, shape (m,)
        Right to 1e-11 relative from t = 1e-8 to t = 1e150 and dof = 1e6.
    """
    size = np.abs(t)
    if math.isinf(dof):
        # ln 2 + ln ndtr(-t) cancels near t = 0, where the central probability is exact.
        inner = np.log1p(-special.erf(np.minimum(size, 1.0) / math.sqrt(2.0)))
        return np.asarray(np.where(size < 1.0, inner, special.log_ndtr(-size) + math.log(2.0)) / _LN10)
    outside = t_two_sided(size, dof)
    logs = np.log(np.maximum(outside, _TINY))
    if outside.max() > 0.99:
        square = np.square(size)
        inside = special.betainc(0.5, dof / 2, square / (dof + square))
        logs = np.where(outside > 0.99, np.log1p(-np.minimum(inside, 0.5)), logs)
    for i in np.flatnonzero(outside < _SMALLEST_TRUSTED):
        logs[i] = _log_beta_lower(dof / 2, 0.5, -_log1p_ratio(float(size[i]), dof))
    return np.asarray(logs / _LN10)


def _log1p_ratio(t: float, dof: float) -> float:
    """Return ln(1 + t^2/dof) for a large t without squaring it."""
    ratio = math.sqrt(dof) / t
    return -2.0 * math.log(ratio) + math.log1p(ratio * ratio)


def t_critical(level: float, dof: float) -> float:
    """Return the two-sided critical value of Student's law at significance level `level`."""
    if math.isinf(dof):
        return -float(special.ndtri(level / 2))
    return math.sqrt(f_critical(level, 1.0, dof))


def chi_square_critical(level: float, dof: float) -> float:
    """Return x with P(chi-square > x) = `level`."""
    return float(special.chdtri(dof, level))


def f_critical(level: float, dof1: float, dof2: float) -> float:
    """Return x with P(F > x) = `level`; infinite where it nears the largest float."""
    if level < _SMALLEST_INVERTED or dof2 > _LARGEST_INVERTED_DOF:
        return _searched_f_critical(level, dof1, dof2)
    # From both tails of the beta law, so that no digit cancels.
    x = float(special.betaincinv(dof2 / 2, dof1 / 2, level))
    y = float(special.betainccinv(dof1 / 2, dof2 / 2, level))
    return dof2 * y / (dof1 * x)


def _searched_f_critical(level: float, dof1: float, dof2: float) -> float:
    """Return the critical value as the root of the tail's logarithm over that of the ratio."""
    wanted = math.log10(level)
    log_ratio = increasing_root(
        lambda s: wanted - _ratio_tail(math.exp(s), dof1, dof2).log10_p_value, -_LARGEST_LOG, _LARGEST_LOG
    )
    return math.exp(log_ratio) * (dof2 / dof1) if log_ratio < _LARGEST_LOG else math.inf
