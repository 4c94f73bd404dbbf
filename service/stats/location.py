"""Does the mean vector agree with its target?  Four tests, one quadratic form.

All four are ``T2 = k d' Sigma^-1 d`` and differ in the covariance, its degrees
of freedom, and the effective number k of units.

References
----------
.. [1] H. Hotelling, "The generalization of Student's ratio", Annals of
   Mathematical Statistics 2 (1931) 360-378.
.. [2] T. W. Anderson, An Introduction to Multivariate Statistical Analysis,
   3rd ed., Wiley 2003, sections 3.3, 5.2 and 5.3.
.. [3] R. A. Johnson and D. W. Wichern, Applied Multivariate Statistical
   Analysis, 6th ed., Prentice Hall 2007, section 5.2, equation 5-6.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np

from service.stats.arrays import Vector
from service.stats.covariance import Covariance, factor_covariance
from service.stats.laws import QuadraticLaw, quadratic_law
from service.stats.moments import Moments


@dataclass(frozen=True, slots=True, eq=False)
class LocationResult:
    """A test of H0: mu = mu0 against every alternative.

    Parameters
    ----------
    law : QuadraticLaw
        Null law of the statistic.
    covariance : Covariance
        The covariance that the test used.
    effective_units : float
        The factor k of the quadratic form.
    difference : ndarray, shape (p,)
        ``d = xbar - mu0``, in units of measurement.
    statistic, scaled_statistic : float
        ``T2`` (or chi-square), and its chi-square or F equivalent.
    critical_value : float
        In units of `statistic`, at the significance level asked for.
    p_value, log10_p_value : float
        Upper tail of the null law.
    mahalanobis_distance : float
        ``sqrt(d' Sigma^-1 d)``, in standard deviations of a single unit.
    direction : ndarray, shape (p,)
        Discriminant direction ``Sigma^-1 d``, scaled so that the linear
        combination has standard deviation 1; zero where d is.
    """

    law: QuadraticLaw
    covariance: Covariance
    effective_units: float
    difference: Vector
    statistic: float
    scaled_statistic: float
    critical_value: float
    p_value: float
    log10_p_value: float
    mahalanobis_distance: float
    direction: Vector


def mean_test(difference: Vector, covariance: Covariance, effective_units: float, alpha: float) -> LocationResult:
    """Return the test of a mean difference by its quadratic form.

    Parameters
    ----------
    difference : ndarray, shape (p,)
        ``d = xbar - mu0``, in units of measurement.
    covariance : Covariance
        Covariance of a single unit, with its degrees of freedom.
    effective_units : float
        k: n for a fixed target, ``n m/(n + m)`` for one estimated from m units.
    alpha : float
        Significance level, in (0, 1).

    Returns
    -------
    LocationResult
        Null law chi-square(p) where the covariance is known, else
        ``T2 (nu - p + 1)/(nu p) ~ F(p, nu - p + 1)``.

    Raises
    ------
    TooFewUnitsError
        Where the covariance has fewer than p degrees of freedom.
    """
    law = quadratic_law(covariance.dimension, covariance.degrees_of_freedom)
    whitened = covariance.whiten(difference)
    squared = float(whitened @ whitened)
    distance = math.sqrt(squared)
    direction = covariance.solve(difference) / distance if distance > 0 else np.zeros_like(difference)
    statistic = effective_units * squared
    tail = law.tail(statistic)
    return LocationResult(
        law=law,
        covariance=covariance,
        effective_units=effective_units,
        difference=difference,
        statistic=statistic,
        scaled_statistic=statistic * law.factor,
        critical_value=law.critical_value(alpha),
        p_value=tail.p_value,
        log10_p_value=tail.log10_p_value,
        mahalanobis_distance=distance,
        direction=direction,
    )


def effective_units(n: int, target_units: float = math.inf) -> float:
    """Return k = n for a fixed target, ``n m/(n + m)`` for one estimated from m = `target_units`.

    References
    ----------
    .. [1] Anderson 2003, section 5.3: two-sample T-squared.
    """
    return float(n) if math.isinf(target_units) else n * target_units / (n + target_units)


def chi_square_test(moments: Moments, sigma0: Covariance, alpha: float) -> LocationResult:
    """Test the mean where the covariance is known: ``Z2 = n d' Sigma0^-1 d ~ chi-square(p)``.

    Parameters
    ----------
    moments : Moments
        Of n >= 1 units.
    sigma0 : Covariance
        Known reference covariance.
    alpha : float
        Significance level.

    Returns
    -------
    LocationResult
        Anderson 2003, section 3.3.
    """
    return mean_test(moments.difference, sigma0, float(moments.units), alpha)


def hotelling_test(moments: Moments, alpha: float) -> LocationResult:
    """Test the mean with the batch's own covariance: ``T2 (n - p)/(p (n - 1)) ~ F(p, n - p)``.

    Parameters
    ----------
    moments : Moments
        Of n > p units.
    alpha : float
        Significance level.

    Returns
    -------
    LocationResult
        Johnson and Wichern 2007, equation 5-6.

    Raises
    ------
    TooFewUnitsError
        Where n <= p.
    NotPositiveDefiniteError, IllConditionedError
        Where a characteristic is constant or determined by the others.
    """
    return mean_test(moments.difference, moments.required_covariance(), float(moments.units), alpha)


def reference_test(
    moments: Moments, sigma0: Covariance, alpha: float, *, target_units: float = math.inf
) -> LocationResult:
    """Test the mean with a reference covariance estimated on nu degrees of freedom.

    Parameters
    ----------
    moments : Moments
        Of n >= 1 units.
    sigma0 : Covariance
        Reference covariance with its finite degrees of freedom nu >= p.
    alpha : float
        Significance level.
    target_units : float, optional
        Units m behind an estimated target; infinite for a fixed requirement.

    Returns
    -------
    LocationResult
        ``T2 (nu - p + 1)/(nu p) ~ F(p, nu - p + 1)``; Anderson 2003, sections 5.2-5.3.

    Raises
    ------
    TooFewUnitsError
        Where nu < p.
    """
    return mean_test(moments.difference, sigma0, effective_units(moments.units, target_units), alpha)


def pooled_test(
    moments: Moments, sigma0: Covariance, alpha: float, *, target_units: float = math.inf
) -> LocationResult:
    """Test the mean with batch and reference covariance pooled, on ``nu + n - 1`` degrees of freedom.

    Parameters
    ----------
    moments : Moments
        Of n >= 1 units.
    sigma0 : Covariance
        Reference covariance with its finite degrees of freedom nu.
    alpha : float
        Significance level.
    target_units : float, optional
        Units m behind an estimated target; infinite for a fixed requirement.

    Returns
    -------
    LocationResult
        As `reference_test`, with ``Sp = ((n - 1) S + nu Sigma0)/(n - 1 + nu)``.

    Raises
    ------
    TooFewUnitsError
        Where ``nu + n - 1 < p``.
    """
    k = effective_units(moments.units, target_units)
    return mean_test(moments.difference, pooled_covariance(moments, sigma0), k, alpha)


def pooled_covariance(moments: Moments, sigma0: Covariance) -> Covariance:
    """Return ``((n - 1) S + nu Sigma0)/(n - 1 + nu)``, factored.

    Raises
    ------
    NotPositiveDefiniteError, IllConditionedError
        Where the pooled matrix cannot be used.
    """
    nu, between = sigma0.degrees_of_freedom, moments.units - 1.0
    if between == 0:
        return sigma0
    pooled = (between * moments.scatter + nu * sigma0.matrix) / (between + nu)
    return factor_covariance(pooled, nu + between)
