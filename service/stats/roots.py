"""The root of one increasing function, found inside a bracket.

References
----------
.. [1] T. R. Chandrupatla, "A new hybrid quadratic/bisection algorithm for finding
   the zero of a nonlinear function without using derivatives", Advances in
   Engineering Software 28 (1997) 145-149.
"""

from __future__ import annotations

import math
from collections.abc import Callable

_RELATIVE = 4e-16


def increasing_root(function: Callable[[float], float], low: float, high: float) -> float:
    """Return x in [low, high] where an increasing function crosses zero.

    Parameters
    ----------
    function : callable
        Continuous and increasing.
    low, high : float
        Where ``function(low) <= 0 <= function(high)``; an end that breaks this is
        returned, as the point of the bracket nearest to the crossing.

    Returns
    -------
    float
        To within a few units in the last place.
    """
    a, b = high, low
    fa, fb = function(a), function(b)
    if fb >= 0:
        return b
    if fa <= 0:
        return a
    c, fc, step = a, fa, 0.5
    for _ in range(200):
        x = a + step * (b - a)
        fx = function(x)
        if (fx > 0) == (fa > 0):
            c, fc = a, fa
        else:
            c, b, fc, fb = b, a, fb, fa
        a, fa = x, fx
        best, fbest = (a, fa) if abs(fa) < abs(fb) else (b, fb)
        share = _RELATIVE * max(abs(best), 1e-300) / abs(b - a) if a != b else 1.0
        if share > 0.5 or fbest == 0:
            return best
        step = min(max(_step((a, fa), (b, fb), (c, fc)), share), 1.0 - share)
    return best


def upper_bracket(function: Callable[[float], float], start: float) -> float:
    """Return the first of start, 2 start, 4 start, ... where an increasing function is not negative.

    Parameters
    ----------
    function : callable
        Increasing, and somewhere not negative.
    start : float
        Positive.

    Returns
    -------
    float
        Infinite where doubling never reaches the crossing.
    """
    high = start
    while function(high) < 0:
        high *= 2.0
        if math.isinf(high):
            break
    return high


def _step(newest: tuple[float, float], other: tuple[float, float], last: tuple[float, float]) -> float:
    """Return the share of the bracket to go: inverse quadratic where that is safe, else one half."""
    (a, fa), (b, fb), (c, fc) = newest, other, last
    xi, phi = (a - b) / (c - b), (fa - fb) / (fc - fb)
    if not (phi * phi < xi and (1.0 - phi) ** 2 < 1.0 - xi):
        return 0.5
    return fa / (fb - fa) * fc / (fb - fc) + (c - a) / (b - a) * fa / (fc - fa) * fb / (fc - fb)
