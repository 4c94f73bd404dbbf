"""Is the reporting fine enough?  Steps between reported values beside the reference standard deviation.

Rounding to a coarse step adds variance, makes ties, and breaks every law that
takes values to be continuous.  The limit of 0.6 standard deviations is common
practice and not a law: rounding to a step s adds about ``s^2/12`` to the
variance (Sheppard's correction), 3% at this limit.

References
----------
.. [1] W. F. Sheppard, "On the calculation of the most probable values of
   frequency-constants", Proceedings of the London Mathematical Society s1-29
   (1898) 353-380.
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np

from service.stats.arrays import Matrix, Vector
from service.stats.screen import ScreenStatistic

COARSEST = 0.6
"""Largest reporting step, in reference standard deviations, that is not noted."""

_BY_CHANCE = 1e-3
_MOST_DECIMALS = 17
_MOST_EXACT = 2.0**53


def resolution(rows: Matrix, scale: Vector, names: Sequence[str]) -> ScreenStatistic:
    """Look for characteristics that are reported too coarsely.

    Parameters
    ----------
    rows : ndarray, shape (n, p)
        Values as reported, in units of measurement, before any change of scale.
    scale : ndarray, shape (p,)
        Standard deviations to compare with, in the same units.
    names : sequence of str
        Characteristics.

    Returns
    -------
    ScreenStatistic
        `statistic` is the number of characteristics with a step above 0.6 standard
        deviations; there is no null law.  In detail: their names, steps, and steps in standard
        deviations.  A constant characteristic shows no step.
    """
    # Two values closer together than the limit show a step below it, whatever the step is.
    gaps = np.diff(np.sort(rows, axis=0), axis=0)
    near = (gaps > 0) & (gaps <= COARSEST * scale)
    coarse: list[dict[str, Any]] = []
    for j in np.flatnonzero(~near.any(axis=0)):
        step = reporting_step(rows[:, j])
        if step is not None and step > COARSEST * scale[j]:
            ratio = float(step / scale[j])
            coarse.append({"characteristic": names[int(j)], "step": step, "standard_deviations": ratio})
    detail = {"coarse_steps": coarse} if coarse else {}
    return ScreenStatistic(float(len(coarse)), None, "none", detail=detail)


def reporting_step(values: Vector) -> float | None:
    """Return the step in which values are reported.

    Parameters
    ----------
    values : ndarray, shape (n,)
        Reported values.

    Returns
    -------
    float or None
        ``10^-k``, k the most decimals of any value: 0.01 for values to two decimals.  Where all values
        lie whole multiples of ``m 10^-k`` apart, as halves and hundreds do, and that would happen by
        chance less than once in a thousand times, ``m 10^-k``.  None where all values are alike,
        or have more digits than a double holds.
    """
    for decimals in range(_MOST_DECIMALS + 1):
        power = 10.0**decimals
        whole = np.rint(values * power)
        if not (np.abs(whole) < _MOST_EXACT).all():
            return None
        # Quotients of exact numbers are rounded once, as a decimal is when it is read: equality is exact.
        if (whole / power == values).all():
            differences = np.abs(whole - whole[0]).astype(np.int64)
            common = int(np.gcd.reduce(differences))
            return _step(common, values.size) / power if common else None
    return None


def _step(common: int, n: int) -> int:
    """Return `common`, or 1 where n - 1 random differences might all be its multiples."""
    return common if common ** (1.0 - n) < _BY_CHANCE else 1
