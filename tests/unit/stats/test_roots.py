from __future__ import annotations

import math

import pytest

from service.stats.roots import increasing_root, upper_bracket


@pytest.mark.parametrize(
    ("function", "root"),
    [
        (lambda x: x**3 - 2, 2 ** (1 / 3)),
        (lambda x: math.expm1(x - 1), 1.0),
        (lambda x: math.atan(1e6 * (x - 0.3)), 0.3),
        (lambda x: (x - 0.7) ** 9, 0.7),
    ],
)
def test_root_is_found_to_the_last_digits(function, root: float) -> None:
    # A root of order nine is flat: no method can place it better than by the ninth root of rounding.
    assert function(increasing_root(function, 0.0, 2.0)) == pytest.approx(0.0, abs=1e-9)
    assert increasing_root(function, 0.0, 2.0) == pytest.approx(root, rel=1e-9)


def test_simple_root_is_right_to_rounding() -> None:
    assert increasing_root(lambda x: x * x - 2, 0.0, 2.0) == pytest.approx(math.sqrt(2), rel=4e-16)


def test_end_nearest_to_a_crossing_outside_is_returned() -> None:
    assert increasing_root(lambda x: x + 1, 0.0, 2.0) == 0.0
    assert increasing_root(lambda x: x - 5, 0.0, 2.0) == 2.0


def test_bracket_doubles_until_the_function_is_not_negative() -> None:
    assert upper_bracket(lambda x: x - 20, 3.0) == 24.0
    assert upper_bracket(lambda x: -1.0, 1.0) == math.inf
