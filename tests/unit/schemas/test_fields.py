"""A number is a number, a text is a text, and nothing that could pass for one."""

from __future__ import annotations

import math
from datetime import datetime
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st
from marshmallow import ValidationError, fields

from schemas.fields import Choice, Code, Count, Flag, Instant, Name, Number, Sequence, Text, Written

JSON_SCALARS = st.none() | st.booleans() | st.integers() | st.floats() | st.text(max_size=20)


def _refused(field: fields.Field[Any], value: object) -> str:
    with pytest.raises(ValidationError) as caught:
        field.deserialize(value)
    return str(caught.value.messages)


@given(st.integers(-(10**400), 10**400) | JSON_SCALARS | st.lists(JSON_SCALARS) | st.dictionaries(st.text(), st.text()))
def test_a_number_is_taken_exactly_where_json_has_a_finite_one(value: object) -> None:
    wanted = isinstance(value, int | float) and not isinstance(value, bool) and abs(value) <= 1.7976931348623157e308
    try:
        loaded = Number().deserialize(value)
    except ValidationError:
        assert not wanted
    else:
        assert wanted
        assert (loaded, type(loaded)) == (value, float)


@pytest.mark.parametrize("value", ["1.5", " 1 ", "1_0", "NaN", True, False, math.nan, math.inf, 10**400, [1], {}])
def test_what_is_no_number_is_refused_with_what_to_do(value: object) -> None:
    assert _refused(Number(), value) == "['Give a finite number of at most 1e100 in size, without quotes.']"


def test_minus_zero_becomes_zero() -> None:
    assert math.copysign(1, Number().deserialize(-0.0)) == 1.0


@pytest.mark.parametrize(
    ("bounds", "taken", "refused"),
    [
        ({"above": 0}, 5e-324, 0),
        ({"below": 1}, 1 - 2**-53, 1),
        ({"least": 0}, 0, -5e-324),
        ({"most": 0.5}, 0.5, 0.5000000000000001),
    ],
)
def test_a_bound_is_open_or_closed_as_declared(bounds: dict[str, float], taken: float, refused: float) -> None:
    assert Number(**bounds).deserialize(taken) == taken
    assert "Give a number" in _refused(Number(**bounds), refused)


@pytest.mark.parametrize("value", [1.0, 1.9, "1", True, None, [1]])
def test_a_count_is_written_as_a_whole_number(value: object) -> None:
    _refused(Count(), value)
    assert Count().deserialize(7) == 7


@pytest.mark.parametrize("value", ["true", "yes", "on", 1, 0, 1.0, None, [True]])
def test_a_flag_is_true_or_false_alone(value: object) -> None:
    _refused(Flag(), value)
    assert [Flag().deserialize(flag) for flag in (True, False)] == [True, False]


@pytest.mark.parametrize(
    ("value", "word"),
    [
        (1, "quotes"),
        (["a"], "quotes"),
        ("", "blank"),
        (" \u00a0 ", "blank"),
        ("a" * 201, "at most 200 characters; this text has 201"),
        ("a\x00b", "control"),
        ("a\nb", "control"),
        ("a\x7fb", "control"),
        ("a\x85b", "control"),
        ("a\u2028b", "control"),
        ("a\u2029b", "control"),
        ("a\u202eb", "control"),
        ("a\u2066b", "control"),
        ("a\ud800b", "control"),
    ],
)
def test_a_text_that_does_not_read_as_it_is_compared_is_refused(value: object, word: str) -> None:
    assert word in _refused(Text(), value)


@pytest.mark.parametrize(
    "value",
    ["a" * 200, "Müsli ½ µg/100 g", "프리믹스", "e\u0301", "\u0645\u06cc\u200c\u062e\u0648\u0627\u0647\u0645", "🍞"],
)
def test_a_text_of_any_writing_is_kept_as_it_is(value: str) -> None:
    assert Text().deserialize(value) == value


@pytest.mark.parametrize("value", [" PX-2601", "PX-2601 ", "PX-2601\u00a0", "\u3000PX-2601"])
def test_a_name_with_blanks_around_it_is_refused(value: str) -> None:
    assert "Leave out the blanks" in _refused(Name(), value)
    assert Name().deserialize("PX 2601") == "PX 2601"


@pytest.mark.parametrize("value", ["Premix", "-premix", ".premix", "", "premix a", "a" * 65, "préparation", "premix\n"])
def test_a_code_is_for_programs(value: str) -> None:
    _refused(Code(), value)
    assert Code().deserialize("premix-2.b_1") == "premix-2.b_1"


@pytest.mark.parametrize("value", ["Known", "", None, 1, ["known"], {"known": 1}])
def test_a_choice_is_one_of_its_words(value: object) -> None:
    _refused(Choice("known", "batch"), value)
    assert Choice("known", "batch").deserialize("batch") == "batch"


@pytest.mark.parametrize(
    ("text", "instant"),
    [
        ("2026-12-01T07:30:00Z", "2026-12-01T07:30:00.000000Z"),
        ("2026-12-01T07:30:00.25+01:00", "2026-12-01T06:30:00.250000Z"),
        ("2026-12-31T23:30:00-00:45", "2027-01-01T00:15:00.000000Z"),
        ("0999-01-01T00:00:00Z", "0999-01-01T00:00:00.000000Z"),
    ],
)
def test_an_instant_is_brought_to_utc(text: str, instant: str) -> None:
    assert Instant().deserialize(text) == instant


@given(st.datetimes(), st.datetimes())
def test_instants_are_ordered_as_their_texts(one: datetime, other: datetime) -> None:
    texts = [Instant().deserialize(f"{at.isoformat(timespec='microseconds')}Z") for at in (one, other)]
    assert (texts[0] < texts[1]) == (one < other)


@pytest.mark.parametrize(
    "value",
    [
        "2026-12-01",
        "2026-12-01T07:30:00",
        "2026-12-01 07:30:00Z",
        "2026-12-01T07:30Z",
        "2026-12-01T07:30:00+0100",
        "2026-02-30T07:30:00Z",
        "2026-12-01T24:30:00Z",
        "2026-12-01T07:30:00+24:00",
        "2026-12-01T07:30:00.1234567Z",
        "0001-01-01T00:00:00+01:00",
        "\u0662\u0660\u0662\u0666-12-01T07:30:00Z",
        "20261201T073000Z",
        1796110200,
    ],
)
def test_a_time_without_one_clear_meaning_is_refused(value: object) -> None:
    assert "RFC 3339" in _refused(Instant(), value)


@pytest.mark.parametrize("value", ["1_0", " 5", "+5", "-5", "5.0", "\u0663", "", "9" * 19, 5, None])
def test_a_written_number_is_plain_digits(value: object) -> None:
    _refused(Written(), value)
    assert Written().deserialize("0" * 17 + "5") == 5


def test_a_sequence_holds_numbers_or_times() -> None:
    assert Sequence().deserialize([1, 2.5]) == [1.0, 2.5]
    assert Sequence().deserialize(["2026-12-01T07:30:00Z"]) == ["2026-12-01T07:30:00Z"]


@pytest.mark.parametrize("value", [[], {}, "1", 1])
def test_a_sequence_is_a_list(value: object) -> None:
    assert "Give a list" in _refused(Sequence(), value)


def test_every_bad_entry_of_a_sequence_is_named() -> None:
    with pytest.raises(ValidationError) as caught:
        Sequence().deserialize([1, True, "noon", None, math.nan, 10**400, 7])
    assert sorted(caught.value.messages_dict) == [1, 2, 3, 4, 5]
