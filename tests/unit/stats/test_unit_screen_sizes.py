"""Actual sizes of the screens of units and spread at laboratory sizes, by long simulation."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import stats

from service.stats import dispersion, outliers
from service.stats.covariance import factor_covariance
from tests.unit.stats import batches

pytestmark = pytest.mark.slow

DRAWS = 6000
SIZES = [(8, 3), (12, 5), (30, 5), (60, 10)]
LEVELS = [0.05, 0.01]


def _p_values(screen: str, n: int, p: int) -> np.ndarray:
    rng, known, table = np.random.default_rng(17), factor_covariance(np.eye(p)), batches.table(n, p)
    found = []
    for _ in range(DRAWS):
        reference = rng.normal(size=(31, p))
        moments = batches.moments(rng.normal(size=(n, p)))
        estimated = factor_covariance(np.cov(reference.T), 30.0)
        result = {
            "specification": lambda m=moments: outliers.against_specification(m, known, 0.05),
            "estimated-specification": lambda m=moments, e=estimated, r=reference: outliers.against_specification(
                batches.moments(m.deviations - r.mean(axis=0)), e, 0.05, 31.0
            ),
            "within": lambda m=moments: outliers.within_batch(m, table, 0.05),
            "dispersion": lambda m=moments: dispersion.against_reference(m, known, table, 0.05),
            "dispersion-box": lambda m=moments, e=estimated: dispersion.against_reference(m, e, None, 0.05),
        }[screen]()
        found.append(result.p_value)
    return np.array(found)


@pytest.mark.parametrize(("n", "p"), SIZES)
@pytest.mark.parametrize("screen", ["specification", "within", "dispersion"])
def test_exact_and_simulated_laws_have_the_size_that_they_say(screen: str, n: int, p: int) -> None:
    found = _p_values(screen, n, p)
    for level in LEVELS:
        assert stats.binomtest(int((found <= level).sum()), DRAWS, level).pvalue > 1e-3


@pytest.mark.parametrize(("n", "p"), SIZES)
@pytest.mark.parametrize(("screen", "most"), [("estimated-specification", 1.15), ("dispersion-box", 1.35)])
def test_bounds_and_approximations_stay_near_the_level(screen: str, most: float, n: int, p: int) -> None:
    found = _p_values(screen, n, p)
    for level in LEVELS:
        hits = int((found <= level).sum())
        assert stats.binomtest(hits, DRAWS, most * level, alternative="greater").pvalue > 1e-3
