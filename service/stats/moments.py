"""Two-pass moments of a batch about its target: computed once, shared by every statistic."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from service.errors import IllConditionedError, NotPositiveDefiniteError, TooFewUnitsError
from service.stats.arrays import Matrix, Vector, squared_lengths
from service.stats.covariance import Covariance, factor_covariance

Obstacle = TooFewUnitsError | NotPositiveDefiniteError | IllConditionedError

_ROUNDING = 8 * np.finfo(np.float64).eps


@dataclass(frozen=True, slots=True, eq=False)
class Moments:
    """First and second moments of n units on p characteristics, about a target.

    Parameters
    ----------
    deviations : ndarray, shape (n, p)
        Measured values less the target, in units of measurement.
    difference : ndarray, shape (p,)
        Mean of the deviations: ``d = mean(y - mu0)``, never ``mean(y) - mu0``.
    centred : ndarray, shape (n, p)
        Deviations less their mean.
    scatter : ndarray, shape (p, p)
        Sample covariance S with divisor n - 1; NaN where n = 1.
    covariance : Covariance or None
        S factored, or None where it cannot be.
    whitened : ndarray, shape (n, p), or None
        Centred rows whitened with S (so ``W'W = (n - 1) I``), or None.
    squared_distances : ndarray, shape (n,), or None
        Of the units from their mean, ``(y - ybar)' S^-1 (y - ybar)``.
    obstacle : ServiceError or None
        Why `covariance` is None.
    """

    deviations: Matrix
    difference: Vector
    centred: Matrix
    scatter: Matrix
    covariance: Covariance | None
    whitened: Matrix | None
    squared_distances: Vector | None
    obstacle: Obstacle | None

    @property
    def units(self) -> int:
        """Number n of units."""
        return int(self.deviations.shape[0])

    @property
    def dimension(self) -> int:
        """Number p of characteristics."""
        return int(self.deviations.shape[1])

    def required_covariance(self) -> Covariance:
        """Return S factored, or raise the error that says why it cannot be."""
        if self.covariance is None:
            assert self.obstacle is not None
            raise self.obstacle
        return self.covariance


def sample_moments(x: Matrix, mu0: Vector) -> Moments:
    """Return the moments of a batch about its target.

    Parameters
    ----------
    x : ndarray, shape (n, p)
        Measured values, finite, in units of measurement.
    mu0 : ndarray, shape (p,)
        Target, in the same units.

    Returns
    -------
    Moments
        With `covariance` None, and `obstacle` saying why, where n <= p, a
        characteristic is constant or the characteristics are collinear.
    """
    deviations = x - mu0
    n, p = deviations.shape
    difference = np.add.reduce(deviations, axis=0) / n
    centred = deviations - difference
    # A second pass takes away what rounding left in the first mean.
    correction = np.add.reduce(centred, axis=0) / n
    centred -= correction
    difference += correction
    if n == 1:
        nothing = TooFewUnitsError("One unit has no sample covariance.")
        return Moments(deviations, difference, centred, np.full((p, p), math.nan), None, None, None, nothing)
    scatter = centred.T @ centred / (n - 1)
    covariance, obstacle = _factored(scatter, n, x[0])
    whitened = None if covariance is None else covariance.whiten(centred)
    squared = None if whitened is None else squared_lengths(whitened)
    return Moments(deviations, difference, centred, scatter, covariance, whitened, squared, obstacle)


def _factored(scatter: Matrix, n: int, unit: Vector) -> tuple[Covariance | None, Obstacle | None]:
    p = scatter.shape[0]
    if n <= p:
        return None, TooFewUnitsError(
            f"The sample covariance of {p} characteristics needs at least {p + 1} units; the batch has {n}."
        )
    # What is left of a constant after rounding, as in means of replicates, is no spread.
    constant = np.sqrt(np.diagonal(scatter)) <= _ROUNDING * np.abs(unit)
    if constant.any():
        j = int(constant.argmax())
        return None, NotPositiveDefiniteError(
            f"The sample covariance cannot be used. Characteristic {j + 1} is constant in this batch."
        )
    try:
        return factor_covariance(scatter, n - 1.0), None
    except (NotPositiveDefiniteError, IllConditionedError) as error:
        return None, type(error)(f"The sample covariance cannot be used. {error.detail}")
