from __future__ import annotations

import math

import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import special, stats

from service.stats import noncentral, tails
from service.stats.laws import QuadraticLaw
from service.stats.noncentral import ShiftedLaw
from tests.unit.stats.by_mpmath import noncentral_chi_square, noncentral_f

LAWS = [QuadraticLaw(1, math.inf), QuadraticLaw(5, math.inf), QuadraticLaw(5, 29.0), QuadraticLaw(3, 3.0)]


@pytest.mark.parametrize("upper", [False, True])
@pytest.mark.parametrize(
    ("x", "dof", "noncentrality"), [(11.07, 5, 20), (0.02, 3, 4), (90, 3, 10), (30, 8, 100), (3.84, 1, 1e-3)]
)
def test_chi_square_tails_agree_with_the_integrated_density(
    x: float, dof: int, noncentrality: float, upper: bool
) -> None:
    tail = noncentral.chi_square_upper if upper else noncentral.chi_square_lower
    expected = noncentral_chi_square(x, dof, noncentrality, upper=upper)
    assert tail(x, dof, noncentrality) == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize("upper", [False, True])
@pytest.mark.parametrize(
    ("x", "dof1", "dof2", "noncentrality"),
    [(2.6, 5, 25, 12), (1e-3, 5, 25, 3), (6.2, 5, 1, 20), (1e4, 3, 2, 50), (60, 5, 495, 20), (1.1, 12, 400, 30)],
)
def test_f_tails_agree_with_mpmath(x: float, dof1: int, dof2: int, noncentrality: float, upper: bool) -> None:
    tail = noncentral.f_upper if upper else noncentral.f_lower
    expected = noncentral_f(x, dof1, dof2, noncentrality, upper=upper)
    assert tail(x, dof1, dof2, noncentrality) == pytest.approx(expected, rel=1e-12)


@given(
    law=st.sampled_from(LAWS),
    noncentrality=st.floats(-6, 7).map(lambda e: 10**e),
    statistic=st.floats(-3, 8).map(lambda e: 10**e),
)
def test_both_tails_sum_to_one(law: QuadraticLaw, noncentrality: float, statistic: float) -> None:
    shifted = ShiftedLaw(law, noncentrality)
    assert shifted.lower(statistic) + shifted.upper(statistic) == pytest.approx(1.0, abs=2e-11)


@pytest.mark.parametrize("law", LAWS)
def test_shifted_law_without_a_shift_is_the_null_law(law: QuadraticLaw) -> None:
    for statistic in (0.1, 3.0, 40.0):
        assert ShiftedLaw(law, 0.0).upper(statistic) == pytest.approx(law.tail(statistic).p_value, rel=1e-13)


@pytest.mark.parametrize("z", [-6.0, -2.0, 0.0, 2.0])
@pytest.mark.parametrize("noncentrality", [1e4, 9e4, 1e6, 1e9])
def test_far_law_in_one_dimension_is_that_of_a_shifted_square(noncentrality: float, z: float) -> None:
    delta = math.sqrt(noncentrality)
    root = delta + z
    expected = special.ndtr(root - delta) - special.ndtr(-root - delta)
    assert noncentral.chi_square_lower(root * root, 1, noncentrality) == pytest.approx(expected, rel=1e-11)


@pytest.mark.parametrize("dof", [2, 5, 12, 40])
@pytest.mark.parametrize("z", [-7.0, -2.0, 0.0, 2.0, 7.0])
def test_far_law_joins_the_mixture(dof: int, z: float, monkeypatch: pytest.MonkeyPatch) -> None:
    noncentrality = 1.5e5
    x = (math.sqrt(noncentrality + dof) + z) ** 2
    far = [f(x, dof, noncentrality) for f in (noncentral.chi_square_lower, noncentral.chi_square_upper)]
    monkeypatch.setattr(noncentral, "_FAR", math.inf)
    near = [f(x, dof, noncentrality) for f in (noncentral.chi_square_lower, noncentral.chi_square_upper)]
    assert far == pytest.approx(near, rel=1e-11)


def test_wide_mixtures_join_the_ones_summed_term_by_term(monkeypatch: pytest.MonkeyPatch) -> None:
    coarse = noncentral.f_lower(4100.0, 5, 60, 20_000.0)
    monkeypatch.setattr(noncentral, "_MOST_TERMS", 10**9)
    assert coarse == pytest.approx(noncentral.f_lower(4100.0, 5, 60, 20_000.0), rel=1e-13)


def test_tails_out_of_all_reach_are_zero_or_one_and_never_raise() -> None:
    assert noncentral.chi_square_lower(12.0, 5, 1e8) == 0.0
    assert noncentral.chi_square_upper(1e8, 5, 10.0) == 0.0
    assert noncentral.chi_square_upper(12.0, 5, 1e20) == pytest.approx(1.0, abs=1e-9)
    assert noncentral.f_lower(3.0, 5, 25, 1e12) == 0.0
    assert noncentral.f_lower(0.0, 5, 25, 1e20) == 0.0
    assert ShiftedLaw(LAWS[2], 1e20).lower(ShiftedLaw(LAWS[2], 1e20).quantile(0.3)) == pytest.approx(0.3, rel=1e-12)


@pytest.mark.parametrize("x", [0.3, 1.0, 2.0])
def test_law_with_a_fixed_numerator_joins_the_mixture(x: float, monkeypatch: pytest.MonkeyPatch) -> None:
    noncentrality = 2e12
    statistic = x * noncentrality / 5
    mixed = [f(statistic, 5, 25, noncentrality) for f in (noncentral.f_lower, noncentral.f_upper)]
    monkeypatch.setattr(noncentral, "_FIXED", 1e12)
    fixed = [f(statistic, 5, 25, noncentrality) for f in (noncentral.f_lower, noncentral.f_upper)]
    assert fixed == pytest.approx(mixed, rel=2e-10)


@pytest.mark.parametrize("law", LAWS)
@pytest.mark.parametrize("level", [1e-6, 0.05, 0.5, 0.95, 1 - 1e-6])
def test_quantile_gives_its_level_back(law: QuadraticLaw, level: float) -> None:
    shifted = ShiftedLaw(law, 7.3)
    statistic = shifted.quantile(level)
    assert shifted.lower(statistic) == pytest.approx(level, rel=1e-12)
    assert shifted.upper(statistic) == pytest.approx(1 - level, rel=1e-9)


def test_quantiles_agree_with_scipy_where_it_is_right() -> None:
    law = QuadraticLaw(5, 29.0)
    expected = stats.ncf.ppf(0.05, 5, 25, 12.0) / law.factor
    assert ShiftedLaw(law, 12.0).quantile(0.05) == pytest.approx(expected, rel=1e-10)
    assert ShiftedLaw(QuadraticLaw(5, math.inf), 12.0).quantile(0.95) == pytest.approx(
        stats.ncx2.ppf(0.95, 5, 12.0), rel=1e-10
    )


def test_median_of_the_central_law_is_the_critical_value_at_one_half() -> None:
    law = QuadraticLaw(4, 20.0)
    assert ShiftedLaw(law, 0.0).quantile(0.5) == pytest.approx(law.critical_value(0.5), rel=1e-13)
    assert tails.f_tail(law.critical_value(0.5) * law.factor, 4, 17).p_value == pytest.approx(0.5, rel=1e-13)
