"""Which characteristics look unlike normal samples by themselves?  Shapiro and Wilk's W of each.

References
----------
.. [1] S. S. Shapiro and M. B. Wilk, "An analysis of variance test for normality
   (complete samples)", Biometrika 52 (1965) 591-611.
.. [2] P. Royston, "Remark AS R94: A remark on Algorithm AS 181: The W-test for
   normality", Applied Statistics 44 (1995) 547-551.
"""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from scipy import special

from service.stats.arrays import Matrix, Vector, frozen
from service.stats.moments import Moments
from service.stats.multiplicity import holm
from service.stats.screen import ScreenStatistic, not_applicable

FEWEST_UNITS, MOST_UNITS = 3, 5000
"""Range of n over which Royston's approximations were fitted."""

# Royston 1995: polynomials in ascending powers, of 1/sqrt(n) for the two outermost weights ...
_OUTERMOST = (0.0, 0.221157, -0.147981, -2.07119, 4.434685, -2.706056)
_SECOND = (0.0, 0.042981, -0.293762, -1.752461, 5.682633, -3.582633)
# ... of n for the law of -ln(gamma - ln(1 - W)) up to 11 units ...
_GAMMA = (-2.273, 0.459)
_SMALL_MEAN = (0.544, -0.39978, 0.025054, -6.714e-4)
_SMALL_LOG_DEVIATION = (1.3822, -0.77857, 0.062767, -0.0020322)
# ... and of ln n for the law of ln(1 - W) from 12 units on.
_LARGE_MEAN = (-1.5861, -0.31082, -0.083751, 0.0038915)
_LARGE_LOG_DEVIATION = (-0.4803, -0.082676, 0.0030302)
_MOST_SMALL_UNITS = 11


def margins(moments: Moments) -> ScreenStatistic:
    """Screen each characteristic by itself; explains what the joint screens find.

    Parameters
    ----------
    moments : Moments
        Of 3 to 5000 units.

    Returns
    -------
    ScreenStatistic
        The W that is least likely and the smallest Holm-adjusted p-value.  ``detail`` has W, p-value
        and adjusted p-value of every characteristic (None for a constant one, which has no W), and
        the places of the constant ones from 0.
    """
    n = moments.units
    if not FEWEST_UNITS <= n <= MOST_UNITS:
        return not_applicable(f"Shapiro and Wilk's W is for {FEWEST_UNITS} to {MOST_UNITS} units; the batch has {n}.")
    ordered = np.sort(moments.centred, axis=0)
    varies = ordered[-1] > ordered[0]
    constant = [] if varies.all() else np.flatnonzero(~varies).tolist()
    if len(constant) == moments.dimension:
        return not_applicable("Every characteristic is constant.")
    w, p_values = shapiro_wilk(ordered[:, varies] if constant else ordered)
    adjusted = holm(p_values)
    worst = int(p_values.argmin())
    columns = {"w": w, "p_values": p_values, "holm_p_values": adjusted}
    detail: dict[str, object] = {name: _spread(values.tolist(), constant) for name, values in columns.items()}
    detail["constant_characteristics"] = constant
    return ScreenStatistic(float(w[worst]), float(adjusted[worst]), "asymptotic", detail=detail)


def _spread(values: list[float], constant: list[int]) -> list[float | None]:
    """Return the values with None put in the places of the constant characteristics."""
    spread: list[float | None] = [*values]
    for place in constant:
        spread.insert(place, None)
    return spread


def shapiro_wilk(ordered: Matrix) -> tuple[Vector, Vector]:
    """Return W and its p-value for each column.

    Parameters
    ----------
    ordered : ndarray, shape (n, p)
        Columns less their means, each in ascending order, none constant, 3 <= n <= 5000.

    Returns
    -------
    w, p_values : ndarray, shape (p,)
        ``W = (a' x)^2 / x' x`` of the column x; small values speak against normality.

    References
    ----------
    .. [1] Royston 1995; the law is exact at n = 3.
    """
    n = ordered.shape[0]
    scaled = ordered / (ordered[-1] - ordered[0])
    length = np.sqrt(np.add.reduce(scaled * scaled, axis=0))
    slope = weights(n) @ scaled
    # 1 - W as a product keeps its digits where W is near 1.
    lack = np.maximum((length - slope) * (length + slope) / (length * length), 1e-300)
    return 1.0 - lack, _p_values(lack, n)


@lru_cache(maxsize=512)
def weights(n: int) -> Vector:
    """Return Royston's approximation of the weights a, shape (n,), antisymmetric and of length 1.

    References
    ----------
    .. [1] Royston 1995, section 2: the outermost weights (two from n = 6 on) by polynomials in
       ``1/sqrt(n)``, the others proportional to Blom's scores.
    """
    if n == 3:
        return frozen([-math.sqrt(0.5), 0.0, math.sqrt(0.5)])
    scores = special.ndtri((np.arange(1, n + 1) - 0.375) / (n + 0.25))
    scores = (scores - scores[::-1]) / 2
    square = float(scores @ scores)
    fitted = (_OUTERMOST, _SECOND) if n > 5 else (_OUTERMOST,)
    outer = len(fitted)
    a = np.empty(n)
    for i, coefficients in enumerate(fitted):
        a[i] = scores[i] / math.sqrt(square) - _polynomial(coefficients, 1 / math.sqrt(n))
    ends, rest = a[:outer], scores[outer : n - outer]
    a[outer : n - outer] = rest * math.sqrt((1 - 2 * float(ends @ ends)) / float(rest @ rest))
    a[n - outer :] = -ends[::-1]
    return frozen(a)


def _polynomial(coefficients: tuple[float, ...], x: float) -> float:
    value = 0.0
    for coefficient in reversed(coefficients):
        value = value * x + coefficient
    return value


def _p_values(lack: Vector, n: int) -> Vector:
    """Return the p-values of ``1 - W``."""
    if n == 3:
        # W lies between 3/4 and 1, and its arcsine is uniform.
        angle = np.arcsin(np.sqrt(1.0 - lack)) - math.asin(math.sqrt(0.75))
        return np.clip(angle * (6 / math.pi), 0.0, 1.0)
    logs = np.log(lack)
    if n <= _MOST_SMALL_UNITS:
        # W is at least n a_n^2/(n - 1), which keeps ln(1 - W) below gamma at every n from 4 to 11.
        logs = -np.log(_polynomial(_GAMMA, n) - logs)
    mean, deviation = _law(n)
    return np.asarray(special.ndtr((mean - logs) / deviation))


@lru_cache(maxsize=512)
def _law(n: int) -> tuple[float, float]:
    """Return mean and standard deviation of the transformed ``1 - W``."""
    if n <= _MOST_SMALL_UNITS:
        return _polynomial(_SMALL_MEAN, n), math.exp(_polynomial(_SMALL_LOG_DEVIATION, n))
    return _polynomial(_LARGE_MEAN, math.log(n)), math.exp(_polynomial(_LARGE_LOG_DEVIATION, math.log(n)))
