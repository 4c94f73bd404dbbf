"""Made-up lots of a mineral premix, and mean tests on them, for the follow-up's tests."""

from __future__ import annotations

import math

import numpy as np
from hypothesis import strategies as st

from service.stats.arrays import Matrix, Vector
from service.stats.covariance import Covariance, factor_covariance
from service.stats.location import LocationResult, mean_test

KINDS = st.sampled_from([math.inf, 29.0, 14.0])
"""Degrees of freedom: a known covariance, and two estimated ones."""


def covariance(p: int, seed: int, dof: float = math.inf) -> Covariance:
    """Return a covariance with clear correlations and standard deviations from 0.1 to 10."""
    rng = np.random.default_rng(seed)
    root = rng.normal(size=(p, p + 2))
    matrix = root @ root.T
    scale = 10.0 ** rng.uniform(-1, 1, p) / np.sqrt(np.diagonal(matrix))
    return factor_covariance(matrix * np.outer(scale, scale), dof)


def result(p: int, seed: int, dof: float = math.inf, size: float = 0.7) -> LocationResult:
    """Return a mean test of 20 units whose difference is about `size` standard deviations."""
    sigma = covariance(p, seed, dof)
    difference = np.random.default_rng(seed + 1000).normal(size=p) * sigma.scale * size
    return mean_test(difference, sigma, 20.0, 0.05)


def rescaled(of: LocationResult, factors: Vector) -> LocationResult:
    """Return the same test with each characteristic in another unit of measurement."""
    matrix: Matrix = of.covariance.matrix * np.outer(factors, factors)
    sigma = factor_covariance(matrix, of.covariance.degrees_of_freedom)
    return mean_test(of.difference * factors, sigma, of.effective_units, 0.05)


def permuted(of: LocationResult, order: Vector) -> LocationResult:
    """Return the same test with the characteristics in another order."""
    sigma = factor_covariance(of.covariance.matrix[np.ix_(order, order)], of.covariance.degrees_of_freedom)
    return mean_test(of.difference[order], sigma, of.effective_units, 0.05)
