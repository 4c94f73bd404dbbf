"""A covariance in correlation form with its one Cholesky factor; the inverse is never formed."""

from __future__ import annotations

import math
from collections.abc import Callable, Hashable
from dataclasses import dataclass, field
from functools import cached_property
from typing import Any, TypeVar

import numpy as np
from scipy.linalg import lapack

from service.errors import IllConditionedError, NotPositiveDefiniteError
from service.stats.arrays import Matrix, Vector, frozen, squared_lengths

T = TypeVar("T")

# Different numbers of units and levels that one covariance meets; beyond, all is made anew.
_MOST_KEPT = 256

REFUSED_BELOW = 1e-12
"""Reciprocal condition number of the correlation form below which a covariance is refused."""

WARNED_BELOW = 1e-8
"""Reciprocal condition number below which a covariance is used with a caution."""


@dataclass(frozen=True, eq=False)
class Covariance:
    """A positive definite covariance as standard deviations and a factored correlation.

    Parameters
    ----------
    scale : ndarray, shape (p,)
        Standard deviations, in units of measurement.
    factor : ndarray, shape (p, p)
        Lower Cholesky factor L of the correlation matrix, ``R = L L'``.
    degrees_of_freedom : float
        Degrees of freedom of the estimate; infinite where the covariance is known.
    reciprocal_condition : float
        Reciprocal condition number of the correlation matrix in the 1-norm.
    lasting : bool
        Whether many batches will be judged by it, so that what follows from it alone is worth keeping.
    """

    scale: Vector
    factor: Matrix
    degrees_of_freedom: float
    reciprocal_condition: float
    lasting: bool = False
    _kept: dict[Hashable, Any] = field(default_factory=dict, init=False, repr=False)

    @property
    def dimension(self) -> int:
        """Number p of characteristics."""
        return int(self.scale.shape[0])

    @cached_property
    def correlation(self) -> Matrix:
        """The correlation matrix, shape (p, p)."""
        return frozen(self.factor @ self.factor.T)

    @cached_property
    def matrix(self) -> Matrix:
        """The covariance matrix, shape (p, p)."""
        return frozen(self.correlation * np.outer(self.scale, self.scale))

    def keep(self, key: Hashable, make: Callable[[], T]) -> T:
        """Return what `make` computes from this covariance alone: once for a lasting one, else every time."""
        if not self.lasting:
            return make()
        # Threads share this: what one has found stays its own, whatever another clears.
        found: T | None = self._kept.get(key)
        if found is None:
            found = make()
            if len(self._kept) >= _MOST_KEPT:
                self._kept.clear()
            self._kept[key] = found
        return found

    def whiten(self, deviations: Matrix) -> Matrix:
        """Return ``L^-1 D^-1 y`` for each row y, so that the rows have unit covariance.

        Parameters
        ----------
        deviations : ndarray, shape (n, p) or (p,)
            Differences from a centre, in units of measurement.

        Returns
        -------
        ndarray
            The same shape; squared lengths of its rows are Mahalanobis squared distances.
        """
        solved, _ = lapack.dtrtrs(self.factor, (deviations / self.scale).T, lower=1)
        return np.asarray(solved.T)

    def solve(self, difference: Vector) -> Vector:
        """Return ``Sigma^-1 d`` by two triangular solves.

        Parameters
        ----------
        difference : ndarray, shape (p,)
            A difference, in units of measurement.

        Returns
        -------
        ndarray, shape (p,)
            In reciprocal units of measurement.
        """
        solved, _ = lapack.dpotrs(self.factor, difference / self.scale, lower=1)
        return np.asarray(solved.ravel() / self.scale)

    def squared_distances(self, deviations: Matrix) -> Vector:
        """Return the Mahalanobis squared distance of each row, shape (n,)."""
        return squared_lengths(self.whiten(deviations))


def factor_covariance(matrix: Matrix, degrees_of_freedom: float = math.inf, *, lasting: bool = False) -> Covariance:
    """Factor a covariance matrix, or refuse it by name.

    The matrix is brought to correlation form first, so that neither the factor
    nor the refusal depends on units of measurement.

    Parameters
    ----------
    matrix : ndarray, shape (p, p)
        Symmetric covariance, in products of units of measurement.
    degrees_of_freedom : float, optional
        Degrees of freedom of the estimate; infinite (the default) where known.
    lasting : bool, optional
        Whether many batches will be judged by it.

    Returns
    -------
    Covariance
        Standard deviations, Cholesky factor and condition.

    Raises
    ------
    NotPositiveDefiniteError
        Where a variance is not positive or an eigenvalue of the correlation form is negative.
    IllConditionedError
        Where the reciprocal condition number of the correlation form is below 1e-12.
    """
    variances = np.diagonal(matrix)
    if not (variances > 0).all():
        j = int(np.argmin(variances > 0))
        raise NotPositiveDefiniteError(f"Variance {j + 1} of the covariance matrix is not positive.")
    scale = np.sqrt(variances)
    correlation = matrix / scale / scale[:, None]
    factor, status = lapack.dpotrf(correlation, lower=1, clean=1)
    if status != 0:
        raise _refusal(correlation)
    rcond, _ = lapack.dpocon(factor, np.abs(correlation).sum(axis=0).max(), uplo="L")
    if rcond < REFUSED_BELOW:
        raise IllConditionedError(_too_close(float(rcond)))
    return Covariance(scale, factor, degrees_of_freedom, float(rcond), lasting)


def _refusal(correlation: Matrix) -> NotPositiveDefiniteError | IllConditionedError:
    """Return the error that fits a correlation matrix which has no Cholesky factor."""
    smallest = float(np.linalg.eigvalsh(correlation)[0])
    p = correlation.shape[0]
    if smallest < -p * np.finfo(np.float64).eps * 8:
        return NotPositiveDefiniteError(
            f"The covariance matrix is not positive definite: the smallest eigenvalue of its "
            f"correlation form is {smallest:.3g}. Check signs and that every correlation is "
            "possible beside the others."
        )
    return IllConditionedError(_too_close(max(smallest, 0.0) / p))


def _too_close(rcond: float) -> str:
    return (
        f"The covariance matrix is too close to singular: the reciprocal condition number of its "
        f"correlation form is {rcond:.3g}, below {REFUSED_BELOW:g}. Leave out a characteristic that "
        "the others determine."
    )
