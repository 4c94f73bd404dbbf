"""Probability of a rectangle under a multivariate normal law.

One and two dimensions by a smooth one-dimensional integral; more by Genz's
separation of variables on a fixed lattice, so that the same question always
has the same answer, with its error estimated from shifts of the lattice.

References
----------
.. [1] A. Genz, "Numerical computation of multivariate normal probabilities",
   Journal of Computational and Graphical Statistics 1 (1992) 141-149.
.. [2] A. Genz and F. Bretz, Computation of Multivariate Normal and t
   Probabilities, Springer 2009, chapter 4.
.. [3] R. L. Plackett, "A reduction formula for normal multivariate integrals",
   Biometrika 41 (1954) 351-360.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
import numpy.typing as npt
from scipy import special

from service.stats.arrays import Matrix, Vector
from service.stats.covariance import Covariance
from service.stats.lattice import SHIFTS, shifted_lattices

_SMALLEST = 1e-300


@dataclass(frozen=True, slots=True)
class RectangleProbability:
    """A probability with the size of its numerical error.

    Parameters
    ----------
    probability : float
        The estimate.
    error : float
        Three standard errors over the shifts of the lattice, never below 1e-15;
        1e-14 where the integral is one-dimensional.
    """

    probability: float
    error: float


def family_wise_error(covariance: Covariance, level: float) -> RectangleProbability:
    """Return the probability that some separate test rejects although every mean agrees.

    Parameters
    ----------
    covariance : Covariance
        Only its correlations count.
    level : float
        Two-sided level of each separate test, in (0, 1).

    Returns
    -------
    RectangleProbability
        ``1 - P(abs(Z_j) <= z for all j)``, Z normal with these correlations.  Exact
        for tests with a known covariance; for t tests with an estimated one it is
        the limit of many degrees of freedom.
    """
    correlation = covariance.correlation
    return _family_wise_error(correlation.tobytes(), correlation.shape[0], level)


@lru_cache(maxsize=512)
def _family_wise_error(correlation: bytes, p: int, level: float) -> RectangleProbability:
    limit = np.full(p, -special.ndtri(level / 2))
    inside = rectangle_probability(np.frombuffer(correlation).reshape(p, p), -limit, limit)
    return RectangleProbability(1.0 - inside.probability, inside.error)


def rectangle_probability(correlation: Matrix, lower: Vector, upper: Vector) -> RectangleProbability:
    """Return P(lower <= Z <= upper) for standard normal Z with given correlations.

    Parameters
    ----------
    correlation : ndarray, shape (p, p)
        Positive definite correlation matrix.
    lower, upper : ndarray, shape (p,)
        Limits in standard deviations; may be infinite.

    Returns
    -------
    RectangleProbability
        The same to the last bit whenever it is asked for.
    """
    p = correlation.shape[0]
    if p == 1:
        return RectangleProbability(float(_between(lower, upper)[0]), 1e-14)
    if p == 2:
        return RectangleProbability(_bivariate(float(correlation[0, 1]), lower, upper), 1e-14)
    factor, low, high = _ordered_factor(correlation, lower, upper)
    means = np.array([_lattice_mean(factor, low, high, shifted) for shifted in shifted_lattices(p - 1)])
    spread = float(means.std(ddof=1)) / math.sqrt(SHIFTS)
    return RectangleProbability(float(means.mean()), max(3.0 * spread, 1e-15))


def _between(lower: Vector, upper: Vector) -> Vector:
    """Return P(lower <= Z <= upper) of one normal variable, from the tail on the nearer side."""
    flip = lower > 0
    a, b = np.where(flip, -upper, lower), np.where(flip, -lower, upper)
    return np.asarray(special.ndtr(b) - special.ndtr(a))


def _bivariate(rho: float, lower: Vector, upper: Vector) -> float:
    """Return the probability of a rectangle in two dimensions.

    The value at correlation 0, plus the integral of the density at the corners
    over the correlation (Plackett 1954), on the scale of its arc sine.
    """
    start = float(np.prod(_between(lower, upper)))
    nodes, weights = _graded_nodes()
    angles, turn = math.asin(rho) * nodes, math.asin(rho)
    total = 0.0
    for x, sign_x in ((upper[0], 1), (lower[0], -1)):
        for y, sign_y in ((upper[1], 1), (lower[1], -1)):
            if math.isfinite(x) and math.isfinite(y):
                exponent = ((x - y) ** 2 / 2 + x * y * (1 - np.sin(angles))) / np.square(np.cos(angles))
                total += sign_x * sign_y * float(weights @ np.exp(-exponent))
    return min(max(start + total * turn / (2 * math.pi), 0.0), 1.0)


@lru_cache(maxsize=1)
def _graded_nodes() -> tuple[Vector, Vector]:
    """Return nodes and weights on (0, 1): Gauss-Legendre on panels that halve towards 1.

    Near a correlation of 1 the integrand has its whole course close to the end.
    """
    nodes, weights = special.roots_legendre(24)
    edges = np.concatenate(([0.0], 1.0 - 0.5 ** np.arange(1, 25), [1.0]))
    widths = np.diff(edges)[:, None]
    return (edges[:-1, None] + widths * (nodes + 1) / 2).ravel(), (widths * weights / 2).ravel()


def _ordered_factor(correlation: Matrix, lower: Vector, upper: Vector) -> tuple[Matrix, Vector, Vector]:
    """Return the Cholesky factor and limits with the least likely variable first.

    Each next variable is the one whose interval is least likely given the means of
    the ones before it within theirs (Genz and Bretz 2009, chapter 4).
    """
    p = correlation.shape[0]
    matrix, low, high = correlation.copy(), lower.copy(), upper.copy()
    factor, centre = np.zeros((p, p)), np.zeros(p)
    for i in range(p):
        deviation = np.sqrt(np.maximum(np.diagonal(matrix)[i:] - np.square(factor[i:, :i]).sum(axis=1), _SMALLEST))
        mean = factor[i:, :i] @ centre[:i]
        j = i + int(np.argmin(_between((low[i:] - mean) / deviation, (high[i:] - mean) / deviation)))
        swap, back = [i, j], [j, i]
        matrix[swap], factor[swap], low[swap], high[swap] = matrix[back], factor[back], low[back], high[back]
        matrix[:, swap] = matrix[:, back]
        deviation[[0, j - i]], mean[[0, j - i]] = deviation[[j - i, 0]], mean[[j - i, 0]]
        factor[i, i] = deviation[0]
        factor[i + 1 :, i] = (matrix[i + 1 :, i] - factor[i + 1 :, :i] @ factor[i, :i]) / deviation[0]
        centre[i] = _truncated_mean((low[i] - mean[0]) / deviation[0], (high[i] - mean[0]) / deviation[0])
    return factor, low, high


def _truncated_mean(a: float, b: float) -> float:
    """Return the mean of a standard normal variable within [a, b]."""
    mass = float(_between(np.array([a]), np.array([b]))[0])
    density = math.exp(-a * a / 2) - math.exp(-b * b / 2)
    return density / math.sqrt(2 * math.pi) / mass if mass > _SMALLEST else min(max(0.0, a), b)


def _lattice_mean(factor: Matrix, low: Vector, high: Vector, points: npt.NDArray[np.float64]) -> float:
    """Return the mean over lattice points, shape (p - 1, points), of the product of conditional masses."""
    p = factor.shape[0]
    draws = np.empty_like(points)
    product = np.ones(points.shape[1])
    for i in range(p):
        mean = factor[i, :i] @ draws[:i] if i else np.zeros(points.shape[1])
        a, b = special.ndtr((low[i] - mean) / factor[i, i]), special.ndtr((high[i] - mean) / factor[i, i])
        product *= b - a
        if i < p - 1:
            draws[i] = special.ndtri(np.clip(a + points[i] * (b - a), _SMALLEST, 1.0 - 1e-16))
    return float(product.mean())
