"""Laws of the mean tests where the mean is off its target: noncentral chi-square and F.

Both are Poisson mixtures of their central laws, so either tail is a sum of
positive terms, with no cancellation however deep the tail.  Only the terms that
count are summed: they form one hill, found from its two possible peaks.

References
----------
.. [1] N. L. Johnson, S. Kotz and N. Balakrishnan, Continuous Univariate
   Distributions, vol. 2, 2nd ed., Wiley 1995, chapters 29 and 30.
.. [2] C. Loader, "Fast and accurate computation of binomial probabilities" (2000):
   Poisson weights without cancellation.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from scipy import special

from service.stats.arrays import Vector
from service.stats.laws import QuadraticLaw
from service.stats.roots import increasing_root, upper_bracket

Terms = Callable[[Vector], Vector]
"""From Poisson counts j to the central tail probabilities with 2j more degrees of freedom."""

_MOST_TERMS = 2048
# A term this much below the largest, on the logarithmic scale, no longer counts.
_NEGLIGIBLE = 45.0
# Below this one argument of the beta law has lost digits in the other, which is its
# complement to 1; then the slower complementary function takes its place.
_SMALL_SHARE = 1e-2
# Beyond this noncentrality the incomplete gamma function itself loses digits.
_FAR = 1e5
# Beyond this one the numerator of F is its mean, but for a relative variance of 4e-13.
_FIXED = 1e13
_TINY = 1e-300


def chi_square_lower(x: float, dof: float, noncentrality: float) -> float:
    """Return P(chi-square <= x) of the noncentral law.

    Parameters
    ----------
    x : float
        At least 0.
    dof, noncentrality : float
        Degrees of freedom, positive; squared length of the shifted mean, at least 0.
    """
    if noncentrality > _FAR:
        root = math.sqrt(x) - math.sqrt(noncentrality)
        return max(float(special.ndtr(root)) - _layer(x, dof, root), 0.0)
    half = noncentrality / 2
    peak = _gamma_peak(x, dof, half)
    return _mixture(lambda j: np.asarray(special.gammainc(dof / 2 + j, x / 2), np.float64), half, min(half, peak), half)


def chi_square_upper(x: float, dof: float, noncentrality: float) -> float:
    """Return P(chi-square > x) of the noncentral law; parameters as `chi_square_lower`."""
    if noncentrality > _FAR:
        root = math.sqrt(x) - math.sqrt(noncentrality)
        return float(special.ndtr(-root)) + _layer(x, dof, root)
    half = noncentrality / 2
    peak = _gamma_peak(x, dof, half)
    return _mixture(
        lambda j: np.asarray(special.gammaincc(dof / 2 + j, x / 2), np.float64), half, half, max(half, peak)
    )


def f_lower(x: float, dof1: float, dof2: float, noncentrality: float) -> float:
    """Return P(F <= x) of the noncentral law.

    Parameters
    ----------
    x : float
        At least 0.
    dof1, dof2 : float
        Degrees of freedom of numerator and denominator, positive.
    noncentrality : float
        Of the numerator, at least 0.
    """
    if noncentrality > _FIXED:
        return float(special.chdtrc(dof2, dof2 / dof1 * ((noncentrality + dof1) / max(x, _TINY))))
    a, b, half = dof1 / 2, dof2 / 2, noncentrality / 2
    share, rest = dof1 * x / (dof1 * x + dof2), dof2 / (dof1 * x + dof2)
    peak = min(half, _beta_peak(share, a, b, half))
    if rest > _SMALL_SHARE:
        return _mixture(lambda j: special.betainc(a + j, b, share), half, peak, half)
    return _mixture(lambda j: special.betaincc(b, a + j, rest), half, peak, half)


def f_upper(x: float, dof1: float, dof2: float, noncentrality: float) -> float:
    """Return P(F > x) of the noncentral law; parameters as `f_lower`."""
    if noncentrality > _FIXED:
        return float(special.chdtr(dof2, dof2 / dof1 * ((noncentrality + dof1) / max(x, _TINY))))
    a, b, half = dof1 / 2, dof2 / 2, noncentrality / 2
    share, rest = dof1 * x / (dof1 * x + dof2), dof2 / (dof1 * x + dof2)
    peak = max(half, _beta_peak(share, a, b, half))
    if share > _SMALL_SHARE:
        return _mixture(lambda j: special.betainc(b, a + j, rest), half, half, peak)
    return _mixture(lambda j: special.betaincc(a + j, b, share), half, half, peak)


@dataclass(frozen=True, slots=True)
class ShiftedLaw:
    """Law of ``T2 = k d' Sigma^-1 d`` where the mean is off its target.

    Parameters
    ----------
    null : QuadraticLaw
        Its law where the mean agrees.
    noncentrality : float
        ``k delta^2``, delta the Mahalanobis shift of the mean.

    References
    ----------
    .. [1] T. W. Anderson, An Introduction to Multivariate Statistical Analysis,
       3rd ed., Wiley 2003, theorem 5.2.2.
    """

    null: QuadraticLaw
    noncentrality: float

    def lower(self, statistic: float) -> float:
        """Return P(T2 <= statistic), right to 1e-11 relative."""
        law, scaled = self.null, statistic * self.null.factor
        if law.is_chi_square:
            return chi_square_lower(scaled, law.dimension, self.noncentrality)
        return f_lower(scaled, law.dimension, law.degrees_of_freedom - law.dimension + 1, self.noncentrality)

    def upper(self, statistic: float) -> float:
        """Return P(T2 > statistic), right to 1e-11 relative."""
        law, scaled = self.null, statistic * self.null.factor
        if law.is_chi_square:
            return chi_square_upper(scaled, law.dimension, self.noncentrality)
        return f_upper(scaled, law.dimension, law.degrees_of_freedom - law.dimension + 1, self.noncentrality)

    def quantile(self, level: float) -> float:
        """Return the value, in units of ``T2``, not exceeded with probability `level` in (0, 1)."""
        return _quantile(self, level)


@lru_cache(maxsize=4096)
def _quantile(law: ShiftedLaw, level: float) -> float:
    # On the scale of a distance the lower tail is a power, not a root, of its argument.
    if level <= 0.5:

        def excess(root: float) -> float:
            return law.lower(root * root) - level
    else:

        def excess(root: float) -> float:
            return 1.0 - level - law.upper(root * root)

    high = upper_bracket(excess, math.sqrt(law.null.dimension + law.noncentrality))
    return increasing_root(excess, 0.0, high) ** 2


def _layer(x: float, dof: float, root: float) -> float:
    """Return the part of the upper tail that all axes but the shifted one add to a far chi-square.

    With Z along the shift, ``root = sqrt(x) - delta`` and C the chi-square of the other
    axes, ``P((Z + delta)^2 + C > x) = P(Z > root) + P(Z = root - t, C > 2 sqrt(x) t - t^2)``
    over t > 0, which counts for t of the order of 1/sqrt(x) alone.
    """
    if dof == 1 or abs(root) > 40:
        return 0.0
    others = dof - 1
    widest = (others + 2 * math.sqrt(_NEGLIGIBLE * others) + 2 * _NEGLIGIBLE) / (2 * math.sqrt(x))
    nodes, weights = _gauss_legendre()
    # C starts as a power of sqrt(t): on the scale of sqrt(t) nothing is singular.
    share = (nodes + 1) / 2
    t = widest * share * share
    inner = special.gammaincc(others / 2, (math.sqrt(x) - t / 2) * t)
    density = np.exp(-np.square(root - t) / 2) / math.sqrt(2 * math.pi)
    return float(widest * (weights * share) @ (density * inner))


@lru_cache(maxsize=1)
def _gauss_legendre() -> tuple[Vector, Vector]:
    nodes, weights = special.roots_legendre(96)
    return np.asarray(nodes, np.float64), np.asarray(weights, np.float64)


def _gamma_peak(x: float, dof: float, half: float) -> float:
    """Return the largest term j of the noncentral chi-square density at x."""
    a = dof / 4
    return math.sqrt(a * a + half * x / 2) - a


def _beta_peak(share: float, a: float, b: float, half: float) -> float:
    """Return the largest term j of the noncentral beta density at `share`."""
    tilt = half * share
    centre = (tilt - a) / 2
    return max(centre + math.sqrt(centre * centre + tilt * (a + b)), 0.0)


def _mixture(terms: Terms, half: float, low: float, high: float) -> float:
    """Return the sum of Poisson(half) weights times `terms`, whose peak lies between low and high."""
    first = float(max(0, math.floor(low - math.sqrt(2 * _NEGLIGIBLE * low))))
    last = float(math.ceil(high + 15.0 + math.sqrt(225.0 + 2 * _NEGLIGIBLE * high)))
    while last - first > _MOST_TERMS:
        narrower = _narrowed(terms, half, first, last)
        if narrower[1] - narrower[0] > (last - first) / 2:
            return _smooth_sum(terms, half, first, last)
        first, last = narrower
    counts = np.arange(first, last + 1, dtype=np.float64)
    return min(float(_poisson(counts, half) @ terms(counts)), 1.0)


def _smooth_sum(terms: Terms, half: float, first: float, last: float) -> float:
    """Return the sum over a hill of thousands of counts, from 4097 points of it.

    Weights and terms are smooth in the count on the scale of the hill's width, so
    the trapezoidal rule converges faster than any power of its step.
    """
    counts = np.linspace(first, last, 4097)
    step = (last - first) / 4096
    return min(step * float(_smooth_poisson(np.maximum(counts, 1.0), half) @ terms(counts)), 1.0)


def _narrowed(terms: Terms, half: float, first: float, last: float) -> tuple[float, float]:
    """Return the stretch of a wide window whose terms count, judged on 65 of its points."""
    grid = np.unique(np.linspace(first, last, 65).round())
    with np.errstate(divide="ignore"):
        logs = grid * math.log(half) - half - special.gammaln(grid + 1) + np.log(terms(grid))
    peak = logs.max()
    if np.isneginf(peak):
        return first, first
    # One hill: its true peak lies beside the largest point of the grid.
    kept = np.flatnonzero(logs > peak - _NEGLIGIBLE)
    return float(grid[max(kept[0] - 1, 0)]), float(grid[min(kept[-1] + 1, grid.size - 1)])


def _poisson(counts: Vector, half: float) -> Vector:
    """Return Poisson weights of consecutive counts, outwards from the one nearest to the mean."""
    first, last = counts[0], counts[-1]
    start = int(min(max(math.floor(half), first), last) - first)
    up = np.cumprod(half / counts[start + 1 :])
    down = np.cumprod(counts[start:0:-1] / half) if start else counts[:0]
    return np.asarray(np.concatenate((down[::-1], [1.0], up)) * _poisson_weight(counts[start], half))


def _poisson_weight(count: float, half: float) -> float:
    """Return the Poisson weight of one count."""
    if count < 16:
        return math.exp(float(special.xlogy(count, half)) - half) / math.factorial(int(count))
    return float(_smooth_poisson(np.array([count]), half)[0])


def _smooth_poisson(counts: Vector, half: float) -> Vector:
    """Return Poisson weights of counts from 16 on, by their deviance so that nothing large cancels."""
    u = (counts - half) / half
    small = u * u * (1 / 2 - u * (1 / 6 - u * (1 / 12 - u * (1 / 20 - u / 30))))
    deviance = half * np.where(np.abs(u) > 1e-3, special.xlog1py(1 + u, u) - u, small)
    square = counts * counts
    stirling = (1 / 12 - (1 / 360 - (1 / 1260 - 1 / 1680 / square) / square) / square) / counts
    return np.asarray(np.exp(-deviance - stirling) / np.sqrt(2 * math.pi * counts))
