"""Simulated rejection rates of the four mean tests, with the service's own functions on every lot."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
from scipy import stats

from service.stats import randomisation
from service.stats.covariance import factor_covariance
from service.stats.location import chi_square_test, hotelling_test, pooled_test, reference_test
from service.stats.moments import sample_moments

TESTS = ("chi-square", "hotelling", "reference", "reference, target estimated", "pooled")


def p_values(n: int, p: int, lots: int) -> np.ndarray:
    """Return the p-value of every test on every lot whose mean agrees, shape (lots, tests).

    Reference material is drawn afresh for each lot, ``2 p + 1`` units of it, as
    the laws speak of the covariance and of the lot together.
    """
    m = 2 * p + 1
    known = factor_covariance(np.eye(p))
    rows = []
    for lot, reference in zip(_lots("lot", n, p, lots), _lots(f"reference {m}", m, p, lots), strict=True):
        beforehand = sample_moments(reference, np.zeros(p))
        estimated = beforehand.required_covariance()
        fixed, from_reference = sample_moments(lot, np.zeros(p)), sample_moments(lot, beforehand.difference)
        rows.append(
            (
                chi_square_test(fixed, known, 0.05).p_value,
                hotelling_test(fixed, 0.05).p_value,
                reference_test(fixed, estimated, 0.05).p_value,
                reference_test(from_reference, estimated, 0.05, target_units=m).p_value,
                pooled_test(fixed, estimated, 0.05).p_value,
            )
        )
    return np.array(rows)


def bounds(level: float, lots: int) -> tuple[int, int]:
    """Return the counts of rejections between which a test of this size falls in 99.9 % of simulations."""
    low, high = stats.binom.interval(0.999, lots, level)
    return int(low), int(high)


def as_if_known(n: int, p: int, lots: int, nu: int, alpha: float) -> float:
    """Return the share of lots rejected where a covariance on nu degrees of freedom is taken as known."""
    rejected = 0
    for lot, reference in zip(_lots("lot", n, p, lots), _lots("as if known", nu + 1, p, lots), strict=True):
        covariance = factor_covariance(sample_moments(reference, np.zeros(p)).scatter, math.inf)
        rejected += chi_square_test(sample_moments(lot, np.zeros(p)), covariance, alpha).p_value <= alpha
    return rejected / lots


def _lots(purpose: str, n: int, p: int, lots: int) -> Iterator[np.ndarray]:
    for chunk in randomisation.normal_batches(f"size of the mean tests: {purpose}, {n} by {p}", n, p, lots):
        yield from chunk
