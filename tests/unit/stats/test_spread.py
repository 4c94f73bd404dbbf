from __future__ import annotations

import math

import numpy as np
import pytest
from scipy import stats

from service.stats import dispersion, spread
from service.stats.arrays import Matrix
from service.stats.covariance import factor_covariance
from tests.unit.stats import batches

REFERENCE = np.array([[1.0, 0.8, 0.0], [0.8, 1.0, 0.0], [0.0, 0.0, 1.0]])


def _described(rows: Matrix, dof: float = math.inf) -> dict[str, object]:
    sigma = factor_covariance(REFERENCE, dof)
    return dict(dispersion.against_reference(batches.moments(rows), sigma, None, 1.0).detail)


def _drawn(n: int, matrix: Matrix, seed: int) -> Matrix:
    return batches.clean(n, 3, seed) @ np.linalg.cholesky(matrix).T


@pytest.mark.parametrize("dof", [math.inf, 40.0])
@pytest.mark.parametrize("seed", range(4))
def test_batch_three_times_as_spread_is_wider(seed: int, dof: float) -> None:
    found = _described(_drawn(30, 9 * REFERENCE, seed), dof)
    assert found["direction"] == "wider"
    assert found["log_volume_z"] > 3
    assert found["mean_variance_ratio"] > 4


@pytest.mark.parametrize("dof", [math.inf, 40.0])
@pytest.mark.parametrize("seed", range(4))
def test_batch_implausibly_alike_is_narrower(seed: int, dof: float) -> None:
    found = _described(_drawn(30, REFERENCE / 16, seed), dof)
    assert found["direction"] == "narrower"
    assert found["log_volume_z"] < -3


@pytest.mark.parametrize("dof", [math.inf, 40.0])
@pytest.mark.parametrize("seed", range(4))
def test_batch_with_the_relation_reversed_is_turned(seed: int, dof: float) -> None:
    turned = REFERENCE * np.array([[1, -1, 1], [-1, 1, 1], [1, 1, 1]])
    found = _described(_drawn(30, turned, seed), dof)
    assert found["direction"] == "turned"
    assert found["angle"] > 60
    assert max(found["standard_deviation_ratios"]) < 1.6


def test_one_characteristic_spread_more_makes_the_batch_wider_along_it() -> None:
    found = _described(_drawn(30, np.diag([1.0, 1.0, 25.0]) @ REFERENCE, 2))
    assert found["direction"] == "wider"
    widest = np.abs(found["widest"])
    assert int(widest.argmax()) == 2
    assert found["proportionality_p_value"] < 1e-6


def test_widest_and_narrowest_combinations_have_reference_variance_one_and_the_eigenvalue_in_the_batch() -> None:
    rows = _drawn(20, np.eye(3), 3)
    found, covariance = _described(rows), np.cov(rows.T)
    for name, eigenvalue in (("widest", found["eigenvalues"][-1]), ("narrowest", found["eigenvalues"][0])):
        a = np.array(found[name])
        assert a @ REFERENCE @ a == pytest.approx(1.0, rel=1e-10)
        assert a @ covariance @ a == pytest.approx(eigenvalue, rel=1e-9)


def test_as_many_units_as_characteristics_are_described_by_what_exists() -> None:
    found = _described(9 * _drawn(3, REFERENCE, 4))
    assert found["direction"] == "wider"
    assert (found["log_volume"], found["log_volume_z"], found["narrowest"]) == (None, None, None)
    assert found["proportionality_p_value"] is None


def test_few_units_all_alike_are_narrower() -> None:
    assert _described(_drawn(3, REFERENCE, 4) * 1e-3)["direction"] == "narrower"


def test_size_that_differs_evenly_is_no_evidence_against_proportionality() -> None:
    u, corrected = spread.proportionality(np.full(4, 2.5), 20.0)
    assert u == pytest.approx(1.0, rel=1e-12)
    assert corrected == pytest.approx(0.0, abs=1e-12)


@pytest.mark.parametrize(("p", "f1", "f2"), [(3, 7, math.inf), (5, 29, math.inf), (3, 7, 20), (5, 29, 30)])
def test_each_end_of_the_range_of_eigenvalues_is_passed_near_one_time_in_twenty(p: int, f1: int, f2: float) -> None:
    rng, draws = np.random.default_rng(6), 3000
    low, high = spread.eigenvalue_range(p, float(f1), float(f2))
    x = rng.normal(size=(draws, f1, p))
    s = x.transpose(0, 2, 1) @ x / f1
    if math.isfinite(f2):
        y = rng.normal(size=(draws, int(f2), p))
        factor = np.linalg.cholesky(y.transpose(0, 2, 1) @ y / f2)
        half = np.linalg.solve(factor, s)
        s = np.linalg.solve(factor, half.transpose(0, 2, 1))
    values = np.linalg.eigvalsh(s)
    assert (values[:, 0] < low).mean() == pytest.approx(0.05, abs=0.018)
    assert (values[:, -1] > high).mean() == pytest.approx(0.05, abs=0.018)


def test_log_volume_has_exact_mean_and_variance() -> None:
    mean, variance = spread._log_volume(1, 9.0)
    law = stats.loggamma(4.5)
    assert mean == pytest.approx(law.mean() + math.log(2 / 9), rel=1e-12)
    assert variance == pytest.approx(law.var(), rel=1e-10)


def test_one_characteristic_has_no_proportions() -> None:
    sigma, rows = factor_covariance(np.eye(1)), batches.clean(12, 1, 5) * 3
    found = dispersion.against_reference(batches.moments(rows), sigma, None, 1.0).detail
    assert found["proportionality_p_value"] is None
    assert (found["direction"], found["angle"]) == ("wider", 0.0)


@pytest.mark.parametrize("p", [1, 2, 5, 20])
@pytest.mark.parametrize("f2", [1.0, 4.9, 5.0, 5.0000001, 6.0, 118.0, 1e7, 1e9, math.inf])
@pytest.mark.parametrize("f1", [1.0, 2.0, 5.0, 6.0, 30.0, 9999.0])
def test_the_range_of_eigenvalues_exists_at_every_number_of_degrees_of_freedom(p: int, f1: float, f2: float) -> None:
    low, high = spread.eigenvalue_range(p, f1, f2)
    assert 0 <= low < high
    assert (low == 0) >= (f1 <= p)
    assert math.isinf(high) >= (f2 <= p)
