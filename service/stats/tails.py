"""Upper tail probabilities and critical values, with logarithms that never underflow.

Ordinary tails come from the survival functions of `scipy.special`.  Where they
underflow, the logarithm comes from the continued fraction of the same tail, so
that ``log10_p_value`` still stands where ``p_value`` is 0.

References
----------
.. [1] NIST Digital Library of Mathematical Functions, 8.9.2 (incomplete gamma
   function) and 8.17.22 (incomplete beta function): continued fractions.
.. [2] W. J. Lentz, "Generating Bessel functions in Mie scattering calculations
   using continued fractions", Applied Optics 15 (1976) 668-671: the evaluation.
"""

from __future__ import annotations

import math
from collections.abc import Iterable, Iterator
from typing import NamedTuple

import numpy as np
from scipy import special

from service.stats.arrays import Vector

_LN10 = math.log(10.0)
# Below this the survival functions lose digits to gradual underflow.
_SMALLEST_TRUSTED = 1e-290
_TINY = 1e-300


class Tail(NamedTuple):
    """An upper tail probability and its decimal logarithm."""

    p_value: float
    log10_p_value: float


def _log10(upper: float, lower: float) -> float:
    """Return log10 of the upper tail from whichever tail is the smaller."""
    return math.log10(upper) if upper <= 0.5 else math.log1p(-lower) / _LN10


def _lentz(first: float, terms: Iterable[tuple[float, float]]) -> float:
    """Return the continued fraction first + a1/(b1 + a2/(b2 + ...)) by Lentz's method."""
    value = first or _TINY
    c, d = value, 0.0
    for a, b in terms:
        d = 1.0 / (b + a * d or _TINY)
        c = b + a / c or _TINY
        step = c * d
        value *= step
        if abs(step - 1.0) < 1e-16:
            break
    return value


def _gamma_terms(a: float, x: float) -> Iterator[tuple[float, float]]:
    for i in range(1, 100_000):
        yield -i * (i - a), x + 2 * i + 1 - a


def _log_gamma_upper(a: float, x: float) -> float:
    """Return ln Q(a, x), the regularised upper incomplete gamma function (DLMF 8.9.2)."""
    fraction = _lentz(x + 1 - a, _gamma_terms(a, x))
    return a * math.log(x) - x - float(special.gammaln(a)) - math.log(fraction)


def _beta_terms(a: float, b: float, x: float) -> Iterator[tuple[float, float]]:
    for m in range(100_000):
        even = m * (b - m) * x / ((a + 2 * m - 1) * (a + 2 * m)) if m else 1.0
        odd = -(a + m) * (a + b + m) * x / ((a + 2 * m) * (a + 2 * m + 1))
        if m:
            yield even, 1.0
        yield odd, 1.0


def _log_beta_lower(a: float, b: float, log_x: float) -> float:
    """Return ln I_x(a, b), the regularised incomplete beta function (DLMF 8.17.22)."""
    x = math.exp(log_x)
    fraction = _lentz(1.0, _beta_terms(a, b, x))
    front = a * log_x + b * math.log1p(-x) - math.log(a) - float(special.betaln(a, b))
    return front - math.log(fraction)


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
        return Tail(upper, _log_gamma_upper(dof / 2, x / 2) / _LN10)
    return Tail(upper, _log10(upper, float(special.chdtr(dof, x))))


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
    upper = float(special.fdtrc(dof1, dof2, x))
    if upper < _SMALLEST_TRUSTED:
        log_x = -math.log1p(dof1 * x / dof2)
        return Tail(upper, _log_beta_lower(dof2 / 2, dof1 / 2, log_x) / _LN10)
    return Tail(upper, _log10(upper, float(special.fdtr(dof1, dof2, x))))


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
    """Return x with P(F > x) = `level`, from both tails of the beta law so that no digit cancels."""
    x = float(special.betaincinv(dof2 / 2, dof1 / 2, level))
    y = float(special.betainccinv(dof1 / 2, dof2 / 2, level))
    return dof2 * y / (dof1 * x)
