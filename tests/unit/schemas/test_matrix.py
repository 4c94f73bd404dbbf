"""A table of numbers: taken whole, or every bad cell named with its row and column."""

from __future__ import annotations

import math
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from marshmallow import ValidationError

from schemas.fields import MAXIMUM_COLUMNS, MAXIMUM_ROWS, Matrix

CELLS = (
    st.floats()
    | st.integers(-(10**310), 10**310)
    | st.floats(-1e101, 1e101)
    | st.none()
    | st.booleans()
    | st.text(max_size=3)
)


def _faults(value: object, *, missing_allowed: bool = False) -> Any:
    with pytest.raises(ValidationError) as caught:
        Matrix(missing_allowed=missing_allowed).deserialize(value)
    return caught.value.messages


def _is_number(cell: object) -> bool:
    return isinstance(cell, int | float) and not isinstance(cell, bool) and abs(cell) <= 1e100


@given(st.integers(1, 4).flatmap(lambda p: st.lists(st.lists(CELLS, min_size=p, max_size=p), min_size=1, max_size=5)))
def test_exactly_the_bad_cells_are_named(table: list[list[Any]]) -> None:
    bad = {(i, j) for i, row in enumerate(table) for j, cell in enumerate(row) if not _is_number(cell)}
    if bad:
        assert {(i, j) for i, row in _faults(table).items() for j in row} == bad
    else:
        assert Matrix().deserialize(table) == table


@pytest.mark.parametrize("p", [1, 20])
def test_a_large_table_is_taken_as_floats(p: int) -> None:
    table = [[i + j for j in range(p)] for i in range(1000)]
    loaded = Matrix().deserialize(table)
    assert loaded == table
    assert {type(cell) for row in loaded for cell in row} == {float}


def test_cells_up_to_the_largest_size_are_taken_and_larger_ones_named() -> None:
    assert Matrix().deserialize([[1e100, -1e100]]) == [[1e100, -1e100]]
    assert set(_faults([[1.7e308, 1.0, 1.7e308], [-1.1e100, 0.0, 1.0]])) == {0, 1}


@pytest.mark.parametrize("row", [[1.0, math.nan], [math.nan, 1.0], [math.nan, 10**400], [1.0, -math.inf]])
def test_no_comparison_passes_over_what_is_no_number(row: list[float]) -> None:
    assert set(_faults([[1.0, 2.0], row])) == {1}


def test_minus_zero_becomes_zero_in_every_cell() -> None:
    for table in ([[-0.0, 1.0]], [[-0.0, 1e100, -1e100]]):
        assert math.copysign(1, Matrix().deserialize(table)[0][0]) == 1.0


@pytest.mark.parametrize("value", ["", 1, {}, [], [[]], [[], [1]], [1], ["12"], {"0": [1]}])
def test_what_is_no_list_of_rows_is_refused_whole(value: object) -> None:
    assert _faults(value) == ["Give a list of rows, each a list of numbers."]


def test_every_ragged_row_is_named_with_its_length() -> None:
    faults = _faults([[1, 2], [3], [4, 5, 6], "78", [9, "x"], None])
    assert {i: faults[i][0] for i in (1, 2, 3, 5)} == {
        1: "Row 2 has 1 values; the first row has 2 values.",
        2: "Row 3 has 3 values; the first row has 2 values.",
        3: "Row 4 has no list; the first row has 2 values.",
        5: "Row 6 has no list; the first row has 2 values.",
    }
    assert list(faults[4]) == [1]


@pytest.mark.parametrize("value", ["1.5", True, False, math.nan, math.inf, -math.inf, 10**400, [1], "NaN"])
def test_one_cell_that_is_no_number_is_found_among_good_ones(value: object) -> None:
    table: list[list[object]] = [[1.0, 2.0] for _ in range(50)]
    table[37][1] = value
    assert _faults(table) == {37: {1: ["Give a finite number of at most 1e100 in size, without quotes."]}}


def test_a_missing_cell_is_kept_only_where_allowed() -> None:
    assert Matrix(missing_allowed=True).deserialize([[1, None]]) == [[1.0, None]]
    assert _faults([[1, None]]) == {0: {1: ["Give a finite number of at most 1e100 in size, without quotes."]}}


@pytest.mark.parametrize("cell", [{"below": 0.5}, {"above": 9}, {}])
def test_a_result_beyond_a_limit_is_refused_in_clear_words(cell: object) -> None:
    faults = _faults([[1, cell]], missing_allowed=True)
    assert faults == {0: {1: ["Results below or above a limit are not taken here; give a number."]}}


def test_a_table_has_its_largest_size() -> None:
    assert len(Matrix().deserialize([[1.0]] * MAXIMUM_ROWS)) == MAXIMUM_ROWS
    assert f"at most {MAXIMUM_ROWS} rows" in _faults([[1.0]] * (MAXIMUM_ROWS + 1))[0]
    assert f"at most {MAXIMUM_COLUMNS} numbers" in _faults([[1.0] * (MAXIMUM_COLUMNS + 1)])[0].split("of ")[1]
