"""One text for one document."""

from __future__ import annotations

import json
import math
import struct
import tomllib
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given
from hypothesis import strategies as st

from service.errors import MalformedRequestError, VerificationError
from service.signing import canonical

VECTORS = tomllib.loads((Path(__file__).parents[2] / "vectors/rfc8785.toml").read_text(encoding="utf-8"))


@pytest.mark.parametrize(("bits", "text"), VECTORS["numbers"])
def test_a_number_has_the_text_of_the_standard(bits: str, text: str) -> None:
    (number,) = struct.unpack(">d", bytes.fromhex(bits))
    assert canonical.encode(number) == text.encode()


@pytest.mark.parametrize("number", [math.nan, math.inf, -math.inf, 2**53, -(2**53), "\ud800"])
def test_what_has_no_canonical_text_is_refused(number: object) -> None:
    with pytest.raises(VerificationError):
        canonical.encode({"a": number})


scalars = (
    st.none()
    | st.booleans()
    | st.integers(-(2**53) + 1, 2**53 - 1)
    | st.floats(allow_nan=False, allow_infinity=False)
    | st.text(st.characters(exclude_categories=["Cs"]))
)
documents = st.recursive(
    scalars, lambda inner: st.lists(inner) | st.dictionaries(st.text(st.characters(exclude_categories=["Cs"])), inner)
)


@given(documents)
def test_canonical_text_read_again_is_the_same_text(document: Any) -> None:
    text = canonical.encode(document)
    assert canonical.encode(canonical.strict_loads(text)) == text


@given(documents)
def test_canonical_text_means_the_same_to_any_parser(document: Any) -> None:
    assert canonical.encode(json.loads(canonical.encode(document), parse_int=float)) == canonical.encode(document)


def test_names_are_ordered_by_utf16_code_units() -> None:
    assert canonical.encode({"\ufb33": 1, "\U0001f602": 2, "1": 3}) == '{"1":3,"\U0001f602":2,"\ufb33":1}'.encode()


def test_whole_numbers_have_one_text_however_they_are_written() -> None:
    assert canonical.digest({"a": 5}) == canonical.digest({"a": 5.0})
    assert canonical.digest({"a": -0.0}) == canonical.digest({"a": 0})


@pytest.mark.parametrize(
    ("text", "word"),
    [
        (b'{"a":1,"a":2}', "stands twice"),
        (b'[{"b":{"a":1,"a":1}}]', "stands twice"),
        (b"[NaN]", "NaN"),
        (b"[Infinity]", "Infinity"),
        (b"[1e400]", "larger than a double"),
        (b"[-" + b"9" * 400 + b"]", "larger than a double"),
        (b"\xef\xbb\xbf[]", "byte order mark"),
        (b"[] []", "Extra data"),
        (b"[1,]", "one JSON document"),
        (b"'a'", "one JSON document"),
        (b"\xff", "UTF-8"),
        (b'["\\ud83d"]', "surrogate"),
        (b'{"\\ude00": 1}', "surrogate"),
        (b"[" * 33 + b"]" * 33, "nested deeper"),
        (b"", "one JSON document"),
    ],
)
def test_what_is_ambiguous_or_not_json_is_refused(text: bytes, word: str) -> None:
    with pytest.raises(MalformedRequestError, match=word):
        canonical.strict_loads(text)


@pytest.mark.parametrize(
    "text", [b'["[[[[[[[[[[[[[[[[[[[[[[[[[[[[[[[[[["]', b"[" * 32 + b"]" * 32, b'["\\ud83d\\ude00"]']
)
def test_what_only_looks_ambiguous_is_taken(text: bytes) -> None:
    assert canonical.strict_loads(text) == json.loads(text)


@pytest.mark.parametrize(
    "literal", ["0.1", "1e20", "100000000000000000000", "123456789012345", "5e-324", "1.50000000000000000"]
)
def test_a_number_that_a_double_keeps_is_taken(literal: str) -> None:
    assert canonical.inexact_numbers(f"[{literal}]".encode()) == []


@pytest.mark.parametrize("literal", ["0.10000000000000001", "9007199254740993", "123456789012345678", "1e-400"])
def test_a_number_that_a_double_does_not_keep_is_named_with_its_place(literal: str) -> None:
    [fault] = canonical.inexact_numbers(f'{{"a/b": [0, {literal}]}}'.encode())
    assert (fault.pointer, fault.code) == ("/a~1b/1", "number-not-exact")
    assert literal in fault.detail


def test_an_open_string_full_of_escaped_quotes_is_refused_in_one_pass() -> None:
    with pytest.raises(MalformedRequestError, match="Unterminated string"):
        canonical.strict_loads(b'["' + b'\\"' * 1_000_000)


def test_a_name_repeated_after_very_many_others_is_found_in_one_pass() -> None:
    members = ",".join(f'"{i}":1' for i in range(300_000))
    with pytest.raises(MalformedRequestError, match="'299999' stands twice"):
        canonical.strict_loads(f'{{{members},"299999":2}}'.encode())


def test_brackets_inside_strings_are_not_nesting() -> None:
    text = ["[" * 100, '\\"' + "{" * 100, "]"]
    assert canonical.strict_loads(json.dumps(text).encode()) == text


@pytest.mark.parametrize(("literal", "kept"), [("1e-99999999999999999999", False), ("0e-99999999999999999999", True)])
def test_an_exponent_beyond_any_arithmetic_is_judged_by_its_digits(literal: str, kept: bool) -> None:
    assert (canonical.inexact_numbers(f"[{literal}]".encode()) == []) is kept


def test_a_refused_number_is_shown_shortened() -> None:
    [fault] = canonical.inexact_numbers(b"[0." + b"1" * 10_000 + b"]")
    assert len(fault.detail) < 200
