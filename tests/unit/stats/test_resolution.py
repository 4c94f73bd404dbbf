from __future__ import annotations

import numpy as np
import pytest

from service.stats.resolution import reporting_step, resolution


@pytest.mark.parametrize("step", [0.01, 0.5, 0.05, 1.0, 2.0, 25.0, 100.0, 1e-6])
def test_step_is_inferred_from_the_digits(step: float) -> None:
    whole = np.random.default_rng(1).integers(2000, 2100, 20)
    values = np.array([float(f"{k * step:.10g}") for k in whole])
    assert reporting_step(values) == pytest.approx(step, rel=1e-12)


def test_common_multiple_of_few_values_is_not_taken_for_the_step() -> None:
    assert reporting_step(np.array([10.1, 10.7])) == pytest.approx(0.1)
    assert reporting_step(np.array([10.0, 10.5, 11.5, 11.0])) == pytest.approx(0.1)


def test_values_reported_in_halves_off_the_grid_have_step_one_half() -> None:
    assert reporting_step(np.array([0.3, 0.8, 1.3, 2.8, 1.8, 0.8, 3.3])) == pytest.approx(0.5)


@pytest.mark.parametrize("values", [[3.2, 3.2, 3.2], [1e17, 3e17, 7e17], [np.pi, np.e * 1e3], [1e-20, 3e-20]])
def test_values_that_show_no_step_have_none(values: list[float]) -> None:
    assert reporting_step(np.array(values)) is None


def test_coarse_characteristic_is_named_with_its_step() -> None:
    rng = np.random.default_rng(2)
    rows = np.column_stack([np.round(rng.normal(12.1, 0.4, 20)), np.round(rng.normal(7.0, 0.4, 20), 2)])
    found = resolution(rows, np.array([0.4, 0.4]), ["iron", "zinc"])
    assert found.statistic == 1.0
    assert found.detail == {
        "coarse_steps": [{"characteristic": "iron", "step": 1.0, "standard_deviations": pytest.approx(2.5)}]
    }
    assert (found.p_value, found.law) == (None, "none")


def test_values_closer_than_the_limit_are_fine_enough() -> None:
    rows = np.round(np.random.default_rng(3).normal(size=(20, 3)), 1)
    found = resolution(rows, np.ones(3), ["iron", "zinc", "calcium"])
    assert (found.statistic, found.detail) == (0.0, {})


@pytest.mark.parametrize(("scale", "count"), [(1.67, 0.0), (1.66, 1.0)])
def test_limit_is_six_tenths_of_a_standard_deviation(scale: float, count: float) -> None:
    rows = np.arange(12.0)[:, None] % 5
    assert resolution(rows, np.array([scale]), ["iron"]).statistic == count


def test_far_apart_values_with_fine_digits_are_fine_enough() -> None:
    rows = np.array([[10.01], [25.37], [44.92], [71.13]])
    assert resolution(rows, np.array([1.0]), ["iron"]).statistic == 0.0


def test_one_unit_shows_no_step() -> None:
    assert resolution(np.array([[10.0, 3.0]]), np.array([0.1, 0.1]), ["iron", "zinc"]).statistic == 0.0
