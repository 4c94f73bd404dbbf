"""Factors that make the minimum covariance determinant unbiased, and the law of its distances.

References
----------
.. [1] C. Croux and G. Haesbroeck, "Influence function and efficiency of the
   minimum covariance determinant scatter matrix estimator", Journal of
   Multivariate Analysis 71 (1999) 161-190.
.. [2] G. Pison, S. Van Aelst and G. Willems, "Small sample corrections for LTS and
   MCD", Metrika 55 (2002) 111-123.
.. [3] J. Hardin and D. M. Rocke, "The distribution of robust distances", Journal of
   Computational and Graphical Statistics 14 (2005) 928-946, section 3 and
   equation 3.1.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import NamedTuple

import numpy as np
import numpy.typing as npt
from scipy import special

from service.stats import mcd, tails
from service.stats.arrays import Matrix

WEIGHT_QUANTILE = 0.975
"""Units within this quantile of chi-square(p) of the raw distances count in the reweighted estimate."""

# The fitted curves ``1 - exp(a)/n^b`` for h about n/2 [2]: (a, b) for p = 1 and 2, and for
# more characteristics two curves in p, (gamma, kappa, q), that fix a and b.
_RAW = {1: (0.262024211897096, 0.604756680630497), 2: (0.673292623522027, 0.691365864961895)}
_RAW_MANY = ((-1.42764571687802, 1.26263336932151, 2), (-1.06141115981725, 1.28907991440387, 3))
_REWEIGHTED = {1: (1.11098143415027, 1.5182890270453), 2: (3.11101712909049, 1.91401056721863)}
_REWEIGHTED_MANY = ((-1.02842572724793, 1.67659883081926, 2), (-0.26800273450853, 1.35968562893582, 3))


class Reweighted(NamedTuple):
    """Raw and reweighted estimates of b batches, in standardised coordinates.

    Parameters
    ----------
    raw_scatter : ndarray, shape (b, p, p)
        Consistent and corrected covariance of each subset.
    raw_squared : ndarray, shape (b, n)
        Squared distances under it.
    weights : ndarray of bool, shape (b, n)
        Units within the 0.975 quantile.
    centre, scatter : ndarray, shapes (b, p) and (b, p, p)
        Of the units with weight, consistent and corrected.
    squared : ndarray, shape (b, n)
        Squared distances under them.
    """

    raw_scatter: Matrix
    raw_squared: Matrix
    weights: npt.NDArray[np.bool_]
    centre: Matrix
    scatter: Matrix
    squared: Matrix


def reweight(z: Matrix, subsets: mcd.Subsets) -> Reweighted:
    """Return the one-step reweighted estimates.

    Parameters
    ----------
    z : ndarray, shape (b, n, p)
        Batches.
    subsets : Subsets
        One for each batch.
    """
    n, p = z.shape[1:]
    h = subsets.members.shape[1]
    factor = h / (h - 1) * consistency(p, h / n) * small_sample(n, p)
    raw_squared = mcd.distances(z, subsets) / factor
    weights = raw_squared <= tails.chi_square_critical(1 - WEIGHT_QUANTILE, p)
    count = weights.sum(axis=1)
    centre = np.einsum("bn,bnp->bp", weights, z) / count[:, None]
    kept = (z - centre[:, None]) * weights[:, :, None]
    scale = np.array([consistency(p, share) for share in count / n]) * small_sample(n, p, reweighted=True) / (count - 1)
    scatter = kept.transpose(0, 2, 1) @ kept * scale[:, None, None]
    squared = mcd.distances(z, mcd.Subsets(subsets.members, centre, scatter, subsets.log_determinant))
    return Reweighted(subsets.scatter * factor, raw_squared, weights, centre, scatter, squared)


@lru_cache(maxsize=4096)
def consistency(p: int, share: float) -> float:
    """Return the factor for a covariance of the `share` of units nearest the centre [1]_.

    ``share / P(chi-square(p + 2) <= q)``, q the `share` quantile of chi-square(p); 1 for all units.
    """
    if share >= 1:
        return 1.0
    return share / float(special.chdtr(p + 2, special.chdtri(p, 1 - share)))


@lru_cache(maxsize=4096)
def small_sample(n: int, p: int, *, reweighted: bool = False) -> float:
    """Return the factor against the bias at few units, for h about n/2 [2]_."""
    single, many = (_REWEIGHTED, _REWEIGHTED_MANY) if reweighted else (_RAW, _RAW_MANY)
    a, b = single[p] if p in single else _curve(p, many)
    return float(1 / (1 - math.exp(a) / n**b))


def _curve(p: int, many: tuple[tuple[float, float, int], ...]) -> tuple[float, float]:
    """Return (a, b) from the bias at n = 2 p^2 and n = 3 p^2, each ``1 + gamma/p^kappa``."""
    (y1, x1), (y2, x2) = ((math.log(-gamma / p**kappa), -math.log(q * p * p)) for gamma, kappa, q in many)
    b = (y1 - y2) / (x1 - x2)
    return y1 - b * x1, b


@dataclass(frozen=True, slots=True)
class RobustLaw:
    """F law of a raw squared distance of a unit outside the subset [3]_.

    Parameters
    ----------
    units, dimension : int
        n and p.
    denominator : float
        Degrees of freedom ``m - p + 1``; no law where it is not positive.
    factor : float
        Turns a raw squared distance into its F equivalent.
    """

    units: int
    dimension: int
    denominator: float
    factor: float

    def p_value(self, largest: float) -> float:
        """Return the p-value of the largest of the n squared distances, by Sidak's rule."""
        single = tails.f_tail(largest * self.factor, float(self.dimension), self.denominator).p_value
        return 1.0 if single >= 1 else -math.expm1(self.units * math.log1p(-single))

    def limit(self, level: float) -> float:
        """Return the squared distance whose p-value is `level`."""
        return self.quantile(-math.expm1(math.log1p(-level) / self.units))

    def quantile(self, level: float) -> float:
        """Return the squared distance that a single unit passes with probability `level`."""
        return tails.f_critical(level, float(self.dimension), self.denominator) / self.factor


@lru_cache(maxsize=1024)
def hardin_rocke(n: int, p: int) -> RobustLaw:
    """Return the law of raw squared distances as `reweight` scales them.

    Hardin and Rocke take the subset's covariance with its consistency factor alone: their
    distances are these times `small_sample`, and times ``(m-p+1)/(p m)`` are F(p, m-p+1).
    """
    _, predicted = wishart_degrees(n, p)
    denominator = predicted - p + 1
    return RobustLaw(n, p, denominator, small_sample(n, p) * denominator / (p * predicted))


def wishart_degrees(n: int, p: int) -> tuple[float, float]:
    """Return the degrees of freedom m of the subset's covariance, asymptotic [1]_ and predicted for n [3]_.

    ``m = 2/(c^2 v)``, v the large-sample variance of a diagonal element of the covariance
    of the subset, c its consistency factor; predicted ``m exp(0.725 - 0.00663 p - 0.0780 ln n)``.
    """
    share = mcd.half(n, p) / n
    alpha, q, c = 1 - share, float(special.chdtri(p, 1 - share)), consistency(p, share)
    c2, c3 = -float(special.chdtr(p + 2, q)) / 2, -float(special.chdtr(p + 4, q)) / 2
    b1 = -2 * c * c3 / share
    b2 = 0.5 + c / share * (c3 - q / p * (c2 + share / 2))
    v1 = share * b1**2 * (alpha * (c * q / p - 1) ** 2 - 1)
    v1 -= 2 * c3 * c**2 * (3 * (b1 - p * b2) ** 2 + (p + 2) * b2 * (2 * b1 - p * b2))
    v2 = n * (b1 * (b1 - p * b2) * share) ** 2 * c**2
    m = 2 * v2 / (c**2 * v1)
    return m, m * math.exp(0.725 - 0.00663 * p - 0.0780 * math.log(n))
