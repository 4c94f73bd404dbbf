"""Confidence ellipses of the mean difference, one for each pair of characteristics.

An ellipse is the confidence region that the pair alone would give, with the
critical value of its own two-dimensional law; it is not a shadow of the region
over all p characteristics, which is wider.

References
----------
.. [1] R. A. Johnson and D. W. Wichern, Applied Multivariate Statistical
   Analysis, 6th ed., Prentice Hall 2007, equations 5-18 and 5-19.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import lru_cache

import numpy as np
import numpy.typing as npt

from service.stats import tails
from service.stats.arrays import Matrix, Vector
from service.stats.laws import QuadraticLaw
from service.stats.location import LocationResult

_OUT_AND_IN = np.array([1.0, -1.0])


@dataclass(frozen=True, slots=True, eq=False)
class Ellipses:
    """Confidence ellipses for the m = p (p - 1)/2 pairs of characteristics.

    Parameters
    ----------
    pairs : ndarray of int, shape (m, 2)
        Indices of the characteristics on the first and the second axis.
    centre : ndarray, shape (m, 2)
        Mean differences, in units of measurement; the target is at the origin.
    half_lengths : ndarray, shape (m, 2)
        Half the major and minor axis, in the plane where one unit of measurement
        of either characteristic has the same length.
    angle : ndarray, shape (m,)
        From the first axis to the major axis, in radians, in (-pi/2, pi/2].  It
        belongs to that same plane: another unit of measurement is another angle.
    standardised_half_lengths : ndarray, shape (m, 2)
        The same where one standard deviation of either has the same length.
    standardised_angle : ndarray, shape (m,)
        pi/4 or -pi/4, by the sign of the correlation; 0 where there is none.
    rectangle : ndarray, shape (m, 2)
        Half-widths of the separate ``1 - alpha`` intervals, in units of measurement.
    critical_value : float
        Of the pair's statistic: the boundary is where it takes this value.
    confidence : float
        ``1 - alpha``, of each ellipse by itself.
    """

    pairs: npt.NDArray[np.intp]
    centre: Matrix
    half_lengths: Matrix
    angle: Vector
    standardised_half_lengths: Matrix
    standardised_angle: Vector
    rectangle: Matrix
    critical_value: float
    confidence: float


def confidence_ellipses(result: LocationResult, alpha: float) -> Ellipses:
    """Return the confidence ellipse of every pair of characteristics.

    Parameters
    ----------
    result : LocationResult
        A mean test over p characteristics; one has no pairs, and the arrays are empty.
    alpha : float
        Significance level; each ellipse has confidence ``1 - alpha``.

    Returns
    -------
    Ellipses
        Johnson and Wichern 2007, equation 5-19, for each pair.
    """
    key = ("ellipses", result.law, result.effective_units, alpha)
    shape = result.covariance.keep(key, lambda: _shape(result, alpha))
    return replace(shape, centre=result.difference[shape.pairs])


def _shape(result: LocationResult, alpha: float) -> Ellipses:
    """Return the ellipses about the origin: what the mean itself does not change."""
    pairs = _pairs(result.law.dimension)
    critical, separate = _critical_values(result.law, alpha)
    scale = result.covariance.scale[pairs]
    correlation = result.covariance.correlation[pairs[:, 0], pairs[:, 1]]
    root = math.sqrt(result.effective_units)
    radius = math.sqrt(critical) / root
    lengths, angle = _axes(scale, correlation)
    standardised = np.sqrt(1.0 + np.abs(correlation)[:, None] * _OUT_AND_IN)
    return Ellipses(
        pairs=pairs,
        centre=np.zeros(pairs.shape),
        half_lengths=radius * lengths,
        angle=angle,
        standardised_half_lengths=radius * standardised,
        standardised_angle=np.sign(correlation) * (math.pi / 4),
        rectangle=separate / root * scale,
        critical_value=critical,
        confidence=1.0 - alpha,
    )


def _axes(scale: Matrix, correlation: Vector) -> tuple[Matrix, Vector]:
    """Return roots of the eigenvalues, larger first, and the major axis's angle, of 2 x 2 covariances."""
    variances = scale * scale
    product = scale[:, 0] * scale[:, 1]
    gap, cross = variances[:, 0] - variances[:, 1], 2.0 * correlation * product + 0.0
    lengths = np.empty_like(scale)
    larger = lengths[:, 0]
    np.sqrt((variances.sum(axis=1) + np.hypot(gap, cross)) / 2, out=larger)
    # The smaller one from the determinant: the difference of two eigenvalues would cancel.
    lengths[:, 1] = product * np.sqrt((1.0 - correlation) * (1.0 + correlation)) / larger
    return lengths, np.arctan2(cross, gap) / 2


@lru_cache(maxsize=64)
def _pairs(p: int) -> npt.NDArray[np.intp]:
    pairs = np.column_stack(np.triu_indices(p, 1))
    pairs.setflags(write=False)
    return pairs


@lru_cache(maxsize=1024)
def _critical_values(law: QuadraticLaw, alpha: float) -> tuple[float, float]:
    return law.over(min(2, law.dimension)).critical_value(alpha), tails.t_critical(alpha, law.degrees_of_freedom)
