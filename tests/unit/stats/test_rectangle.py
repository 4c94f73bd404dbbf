from __future__ import annotations

import math

import mpmath as mp
import numpy as np
import pytest
from scipy import stats

from service.stats.covariance import factor_covariance
from service.stats.lattice import POINTS, generating_vector
from service.stats.rectangle import family_wise_error, rectangle_probability
from tests.unit.stats import lots

Z = 1.959963984540054


def equicorrelated(p: int, rho: float) -> np.ndarray:
    return np.full((p, p), rho) + (1 - rho) * np.eye(p)


def by_one_integral(p: int, rho: float, a: float, b: float) -> float:
    # Given their common part the variables are independent.
    common, own = mp.sqrt(rho), mp.sqrt(1 - rho)

    def integrand(x: mp.mpf) -> mp.mpf:
        return mp.npdf(x) * (mp.ncdf((b - common * x) / own) - mp.ncdf((a - common * x) / own)) ** p

    return float(mp.quad(integrand, [-10, -5, -3, -2, -1, 0, 1, 2, 3, 5, 10]))


@pytest.mark.parametrize("p", [2, 3, 5, 8, 12, 20])
@pytest.mark.parametrize("rho", [0.3, 0.7, 0.95])
@pytest.mark.parametrize(("a", "b"), [(-Z, Z), (-1.0, 2.5)])
def test_equicorrelated_rectangle_agrees_with_one_integral(p: int, rho: float, a: float, b: float) -> None:
    computed = rectangle_probability(equicorrelated(p, rho), np.full(p, a), np.full(p, b))
    assert computed.error < {2: 1e-13, 3: 3e-6, 5: 1.2e-5, 8: 5e-5, 12: 1e-4, 20: 2e-4}[p]
    # The error is three standard errors; among 36 cases one may pass that, hardly four.
    assert computed.probability == pytest.approx(by_one_integral(p, rho, a, b), abs=computed.error * 4 / 3)


@pytest.mark.parametrize("rho", [-0.999999, -0.9, -0.2, 0.0, 0.5, 0.99, 0.99999999])
def test_two_dimensional_orthant_has_its_closed_form(rho: float) -> None:
    computed = rectangle_probability(np.array([[1, rho], [rho, 1]]), np.zeros(2), np.full(2, np.inf))
    assert computed.probability == pytest.approx(0.25 + math.asin(rho) / (2 * math.pi), abs=1e-14)


@pytest.mark.parametrize("rho", [-0.999, -0.5, 0.2, 0.9, 0.9999])
@pytest.mark.parametrize("limits", [(-Z, Z, -Z, Z), (-1, 2, -0.5, 1), (-3, 0.1, 0.2, 4), (-1, 1, 1.0000001, 2)])
def test_two_dimensional_rectangle_agrees_with_conditioning(rho: float, limits: tuple[float, ...]) -> None:
    a, b, c, d = limits
    own = mp.sqrt(1 - mp.mpf(rho) ** 2)
    steep = [q / rho + k * float(own) for q in (c, d) for k in (-8, -3, 0, 3, 8)]
    edges = sorted({a, b} | {x for x in steep if a < x < b})
    expected = mp.quad(lambda x: mp.npdf(x) * (mp.ncdf((d - rho * x) / own) - mp.ncdf((c - rho * x) / own)), edges)
    computed = rectangle_probability(np.array([[1, rho], [rho, 1]]), np.array([a, c]), np.array([b, d]))
    assert computed.probability == pytest.approx(float(expected), abs=1e-13)


def test_three_dimensional_orthant_has_its_closed_form() -> None:
    correlation = np.array([[1, 0.5, 0.3], [0.5, 1, -0.2], [0.3, -0.2, 1]])
    computed = rectangle_probability(correlation, np.zeros(3), np.full(3, np.inf))
    expected = 1 / 8 + (math.asin(0.5) + math.asin(0.3) + math.asin(-0.2)) / (4 * math.pi)
    assert computed.error < 5e-6
    assert computed.probability == pytest.approx(expected, abs=computed.error)


def test_unlike_correlations_and_limits_agree_with_scipy() -> None:
    correlation = lots.covariance(5, 3).correlation
    low, high = np.array([-1.0, -2.0, -np.inf, -0.3, -1.5]), np.array([2.0, 0.4, 1.0, np.inf, 1.5])
    expected = stats.multivariate_normal.cdf(
        high, cov=correlation, lower_limit=low, abseps=1e-8, releps=1e-8, maxpts=2_000_000, rng=1
    )
    computed = rectangle_probability(correlation, low, high)
    assert computed.error < 1e-4
    assert computed.probability == pytest.approx(expected, abs=computed.error + 2e-6)


def test_rectangle_is_the_same_to_the_last_bit_each_time() -> None:
    correlation, limit = lots.covariance(4, 1).correlation, np.full(4, Z)
    assert rectangle_probability(correlation, -limit, limit) == rectangle_probability(correlation, -limit, limit)


def test_rectangle_does_not_depend_on_the_order_beyond_its_error() -> None:
    correlation, high = lots.covariance(5, 6).correlation, np.array([0.5, 1.0, 2.0, 1.5, 0.1])
    order = np.array([3, 1, 4, 0, 2])
    here = rectangle_probability(correlation, -high, high)
    there = rectangle_probability(correlation[np.ix_(order, order)], -high[order], high[order])
    assert there.probability == pytest.approx(here.probability, abs=here.error + there.error)


@pytest.mark.parametrize("p", [1, 2, 5, 12])
def test_family_wise_error_of_independent_checks_is_the_textbook_one(p: int) -> None:
    error = family_wise_error(factor_covariance(np.diag(10.0 ** np.arange(p))), 0.05)
    assert error.probability == pytest.approx(1 - 0.95**p, rel=1e-13)


def test_family_wise_error_falls_with_correlation_to_that_of_one_check() -> None:
    errors = [family_wise_error(factor_covariance(equicorrelated(4, rho)), 0.05).probability for rho in (0.2, 0.6, 0.9)]
    assert errors == sorted(errors, reverse=True)
    nearly_one = family_wise_error(factor_covariance(equicorrelated(4, 1 - 1e-9)), 0.05)
    assert nearly_one.probability == pytest.approx(0.05, abs=2e-5)


def test_family_wise_error_agrees_with_simulated_checks() -> None:
    sigma = lots.covariance(4, 2)
    draws = np.random.default_rng(4).standard_normal((200_000, 4)) @ sigma.factor.T
    simulated = (np.abs(draws) > Z).any(axis=1).mean()
    assert family_wise_error(sigma, 0.05).probability == pytest.approx(simulated, abs=4 * math.sqrt(0.16 * 0.84 / 2e5))


def test_generating_vector_minimises_its_criterion_at_each_step() -> None:
    chosen = generating_vector(4)
    points = np.arange(POINTS)

    def kernel(z: int) -> np.ndarray:
        x = z * points % POINTS / POINTS
        return 2 * np.pi**2 * (x * x - x + 1 / 6)

    product = np.ones(POINTS)
    for s, z in enumerate(chosen):
        if s:
            best = min((c for c in range(1, POINTS // 2 + 1) if c not in chosen[:s]), key=lambda c: product @ kernel(c))
            assert product @ kernel(z) == pytest.approx(product @ kernel(best), rel=1e-9)
        product = product * (1 + kernel(z) / (s + 1) ** 2)
