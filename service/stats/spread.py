"""In what way a batch's covariance differs from the reference: wider, narrower or turned.

The rule.  The largest and the smallest eigenvalue of ``Sigma0^-1 S`` are the
variance, beside the reference, of the combinations along which the batch is
widest and narrowest.  Each has a range that chance alone leaves with
probability 0.05 [1]_.

- Only the largest is beyond its range: wider.
- Only the smallest is beyond its range: narrower.
- Both: turned, as the batch is wider one way and narrower another.
- Neither, though the whole differs: wider or narrower by ``ln |S|/|Sigma0|``
  where that departs from its exact mean by 1.96 of its exact standard deviations
  [2]_ (for n <= p, by the mean variance ratio and its chi-square law); else turned.

References
----------
.. [1] I. M. Johnstone, "Multivariate analysis and Jacobi ensembles: largest
   eigenvalue, Tracy-Widom limits and rates of convergence", Annals of Statistics
   36 (2008) 2638-2716, theorem 1 and section 2.
.. [2] T. W. Anderson, An Introduction to Multivariate Statistical Analysis, 3rd
   ed., Wiley 2003, section 7.5: the generalised variance is a product of
   independent chi-squares.
.. [3] A. C. Rencher and W. F. Christensen, Methods of Multivariate Analysis, 3rd
   ed., Wiley 2012, section 7.2.2.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from typing import Literal

import numpy as np
from scipy import special
from scipy.linalg import lapack

from service.stats import tails
from service.stats.arrays import Matrix, Vector
from service.stats.covariance import Covariance
from service.stats.moments import Moments

Direction = Literal["wider", "narrower", "turned"]

_TRACY_WIDOM_95 = 0.9793
"""Upper 5% point of the Tracy-Widom law of order 1."""

_AS_GOOD_AS_KNOWN = 1e7
_LARGEST_LOG = 300.0
_NORMAL_95 = 1.96


@dataclass(frozen=True, slots=True, eq=False)
class Eigen:
    """Eigenvalues of ``Sigma0^-1 S``, ascending, and eigenvectors in whitened coordinates.

    Parameters
    ----------
    values : ndarray, shape (p,)
        Variances beside the reference.
    vectors : ndarray, shape (p, p)
        Orthonormal columns.
    """

    values: Vector
    vectors: Matrix


def describe(eigen: Eigen, moments: Moments, sigma0: Covariance) -> dict[str, object]:
    """Return the word for the difference with the numbers that show it.

    Parameters
    ----------
    eigen : Eigen
        Of the batch beside the reference.
    moments : Moments
        Of the n units.
    sigma0 : Covariance
        Reference covariance.

    Returns
    -------
    dict
        ``direction``; ``expected_range`` of the eigenvalues, its upper end None where there is none;
        ``log_volume``, ``ln |S|/|Sigma0|``, with
        its standardised value ``log_volume_z`` (None for n <= p); ``mean_variance_ratio``;
        ``proportionality_p_value``, small where size alone does not explain the difference (None for
        n <= p or an estimated reference); ``standard_deviation_ratios``, batch to reference, shape
        (p,); ``widest`` and ``narrowest``, combinations of the characteristics in reference standard
        deviations, of reference variance 1; ``angle`` in degrees between the longest axes of batch
        and reference.
    """
    p, f1, f2 = sigma0.dimension, moments.units - 1.0, sigma0.degrees_of_freedom
    low, high = eigenvalue_range(p, f1, f2)
    z = _volume_z(eigen.values, f1, f2)
    combinations, _ = lapack.dtrtrs(sigma0.factor, eigen.vectors, lower=1, trans=1)
    scatter = moments.scatter / sigma0.scale / sigma0.scale[:, None]
    return {
        "direction": _direction(eigen.values, (low, high), z, f1),
        "expected_range": [low, high if math.isfinite(high) else None],
        "log_volume": float(np.log(eigen.values).sum()) if f1 >= p else None,
        "log_volume_z": z,
        "mean_variance_ratio": float(eigen.values.mean()),
        "proportionality_p_value": _proportional(eigen.values, f1) if f1 >= p and math.isinf(f2) else None,
        "standard_deviation_ratios": np.sqrt(np.diagonal(scatter)).tolist(),
        "widest": combinations[:, -1].tolist(),
        "narrowest": combinations[:, 0].tolist() if f1 >= p else None,
        "angle": _angle(scatter, sigma0.correlation),
    }


def proportionality(values: Vector, f: float) -> tuple[float, float]:
    """Test that the covariance is a multiple of the reference, which is the test of sphericity of whitened units.

    Parameters
    ----------
    values : ndarray, shape (p,)
        Eigenvalues of ``Sigma0^-1 S``.
    f : float
        Degrees of freedom of S, at least p.

    Returns
    -------
    tuple of float
        ``u = |V|/(tr V/p)^p`` and ``u' = -(f - (2p^2+p+2)/(6p)) ln u``, by the large-sample law chi-square
        with p(p+1)/2 - 1 degrees of freedom [3]_.
    """
    p = values.size
    log_u = float(np.log(values).sum()) - p * math.log(values.mean())
    return math.exp(log_u), -(f - (2 * p * p + p + 2) / (6 * p)) * log_u


def _proportional(values: Vector, f: float) -> float | None:
    p = values.size
    if p == 1:
        return None
    return tails.chi_square_tail(max(0.0, proportionality(values, f)[1]), p * (p + 1) / 2 - 1).p_value


def _direction(values: Vector, expected: tuple[float, float], z: float | None, f1: float) -> Direction:
    wide, narrow = float(values[-1]) > expected[1], float(values[0]) < expected[0]
    if wide != narrow:
        return "wider" if wide else "narrower"
    if wide:
        return "turned"
    if z is None:
        # f1 tr(Sigma0^-1 S) is chi-square(p f1), here as the normal deviate of the same probability.
        z = float(special.ndtri(special.chdtr(values.size * f1, f1 * values.sum())))
    if abs(z) < _NORMAL_95:
        return "turned"
    return "wider" if z > 0 else "narrower"


def _angle(batch: Matrix, reference: Matrix) -> float:
    """Return the angle in degrees, 0 to 90, between the longest axes of two covariances."""
    first, second = (lapack.dsyev(matrix)[1][:, -1] for matrix in (batch, reference))
    return math.degrees(math.acos(min(1.0, abs(float(first @ second)))))


@lru_cache(maxsize=1024)
def eigenvalue_range(p: int, f1: float, f2: float) -> tuple[float, float]:
    """Return what the smallest and the largest eigenvalue of ``S2^-1 S1`` each pass with probability 0.05.

    Parameters
    ----------
    p : int
        Characteristics.
    f1, f2 : float
        Degrees of freedom of S1 and S2; f2 >= p, infinite where S2 is known.

    Returns
    -------
    tuple of float
        Lower and upper end; the lower is 0 for f1 <= p, the upper infinite for f2 <= p.
        Johnstone 2008: ``ln(f1 l/f2)`` of the
        largest eigenvalue l is about ``mu + sigma TW1``; the smallest is the reciprocal of the
        largest of ``S1^-1 S2``.
    """
    f2 = min(f2, _AS_GOOD_AS_KNOWN)
    above = _largest(p, f2, f1)
    upper = f2 / f1 * math.exp(above) if above < _LARGEST_LOG else math.inf
    return f2 / f1 * math.exp(-_largest(p, f1, f2)), upper


def _largest(p: int, m: float, n: float) -> float:
    """Return the upper 5% point of the log of the largest eigenvalue of ``A^-1 B``, A and B Wishart on m and n.

    Infinite for m <= p: at m = p the angles below add up to pi, where the approximation has its pole.
    """
    if m <= p:
        return math.inf
    total = m + n - 1
    gamma = 2 * math.asin(math.sqrt((min(p, n) - 0.5) / total))
    phi = 2 * math.asin(math.sqrt((max(p, n) - 0.5) / total))
    if phi + gamma >= math.pi:
        return math.inf
    mu = 2 * math.log(math.tan((phi + gamma) / 2))
    cubed = 16 / (total**2 * math.sin(phi + gamma) ** 2 * math.sin(phi) * math.sin(gamma))
    return float(mu + _TRACY_WIDOM_95 * cubed ** (1 / 3))


def _volume_z(values: Vector, f1: float, f2: float) -> float | None:
    """Return ``ln |S|/|Sigma0|`` less its mean, in its standard deviations; None where S is singular."""
    p = values.size
    if f1 < p:
        return None
    mean, variance = _log_volume(p, f1)
    if math.isfinite(f2):
        mean2, variance2 = _log_volume(p, f2)
        mean, variance = mean - mean2, variance + variance2
    return (float(np.log(values).sum()) - mean) / math.sqrt(variance)


@lru_cache(maxsize=1024)
def _log_volume(p: int, f: float) -> tuple[float, float]:
    """Return mean and variance of ``ln |S|/|Sigma|``, S on f degrees of freedom."""
    halves = (f - np.arange(p)) / 2
    mean = float(special.digamma(halves).sum()) + p * math.log(2 / f)
    return mean, float(special.polygamma(1, halves).sum())
