"""One text for one document: strict JSON in, RFC 8785 out.

References
----------
.. [1] RFC 8785, JSON Canonicalization Scheme (JCS).
.. [2] RFC 8259, section 4: names within an object should be unique; here they must be.
"""

from __future__ import annotations

import hashlib
import json
import math
import re
from collections import Counter
from collections.abc import Iterator, Mapping
from decimal import Decimal, InvalidOperation
from typing import Any, NoReturn

import rfc8785

from service.errors import Fault, MalformedRequestError, VerificationError

LARGEST_EXACT = 2**53
"""From here on an integer no longer has a double of its own."""

MAXIMUM_DEPTH = 32

# A literal of 16 or more digits may not survive as a double; one with a large exponent may overflow or vanish.
_SUSPECT_NUMBER = re.compile(rb"[0-9][0-9.]{15,}|[eE][+-]?[0-9]{3,}")

# A string, or a bracket outside of strings.  Possessive, and with its last quote optional, so that no text is
# read twice: an open string full of escaped quotes would otherwise take quadratic time.
_STRING_OR_BRACKET = re.compile(r'(?s)"[^"\\]*+(?:\\.[^"\\]*+)*+"?|[\[\]{}]')


def encode(document: object) -> bytes:
    """Return the canonical bytes of a document (RFC 8785).

    Parameters
    ----------
    document : object
        Mappings, lists, tuples, strings, booleans, None, integers below 2**53 and finite floats.

    Raises
    ------
    VerificationError
        Where the document has no canonical form.
    """
    try:
        return rfc8785.dumps(_plain(document))
    except (rfc8785.CanonicalizationError, UnicodeEncodeError, RecursionError) as error:
        raise VerificationError(f"The document has no canonical form: {error}") from error


def _plain(document: object) -> Any:
    """Return mappings as dicts, and -0.0, which JSON does not keep, as 0.0."""
    if isinstance(document, Mapping):
        return {key: _plain(value) for key, value in document.items()}
    if isinstance(document, list | tuple):
        return [_plain(value) for value in document]
    return document + 0.0 if isinstance(document, float) else document


def digest(document: object) -> str:
    """Return the SHA-256, in hexadecimal, of a document's canonical bytes."""
    return hashlib.sha256(encode(document)).hexdigest()


def strict_loads(data: bytes) -> Any:
    """Parse one strict JSON document.

    Parameters
    ----------
    data : bytes
        UTF-8 without byte order mark.

    Returns
    -------
    object
        Integers of 2**53 and more as floats, so that canonical text is stable when read again.

    Raises
    ------
    MalformedRequestError
        Where it is not JSON, or ambiguous JSON: repeated member names, NaN or
        Infinity, numbers beyond a double, lone surrogates, nesting beyond 32.
    """
    try:
        text = data.decode("utf-8")
    except UnicodeDecodeError as error:
        raise MalformedRequestError(f"The text is not UTF-8: byte {error.start} cannot be read.") from error
    if text.startswith("\ufeff"):
        raise MalformedRequestError("The text begins with a byte order mark; leave it out.")
    _refuse_deep(text)
    try:
        document = json.loads(
            text, object_pairs_hook=_unique_names, parse_constant=_no_constant, parse_int=_integer, parse_float=_finite
        )
    except json.JSONDecodeError as error:
        place = f"line {error.lineno}, column {error.colno}"
        raise MalformedRequestError(f"The text is not one JSON document: {error.msg} at {place}.") from error
    if "\\u" in text:
        _refuse_surrogates(document)
    return document


def _refuse_deep(text: str) -> None:
    """Refuse deep nesting before the parser recurses into it; brackets inside strings do not count."""
    depth = 0
    for token in _STRING_OR_BRACKET.finditer(text):
        if token[0] in "[{":
            depth += 1
            if depth > MAXIMUM_DEPTH:
                raise MalformedRequestError(f"The text is nested deeper than {MAXIMUM_DEPTH} levels.")
        elif token[0] in "]}":
            depth -= 1


def _unique_names(pairs: list[tuple[str, Any]]) -> dict[str, Any]:
    members = dict(pairs)
    if len(members) != len(pairs):
        # Counted in one pass, as a body may hold a million names.
        twice = next(name for name, times in Counter(name for name, _ in pairs).items() if times > 1)
        raise MalformedRequestError(f"The member {twice!r} stands twice in one object; which one counts is not said.")
    return members


def _no_constant(text: str) -> NoReturn:
    raise MalformedRequestError(f"{text} is not a JSON number. Use null where there is no value.")


def _integer(text: str) -> int | float:
    if len(text) <= 15:
        return int(text)
    value = _finite(text)
    return value if abs(value) >= LARGEST_EXACT else int(text)


def _finite(text: str) -> float:
    value = float(text)
    if math.isinf(value):
        raise MalformedRequestError(f"The number {_shown(text)} is larger than a double can hold.")
    return value


def _shown(literal: str) -> str:
    return literal if len(literal) <= 30 else literal[:27] + "..."


def _refuse_surrogates(document: object) -> None:
    for text in _texts(document):
        try:
            text.encode("utf-8")
        except UnicodeEncodeError as error:
            raise MalformedRequestError("A text holds half of a surrogate pair, which is no character.") from error


def _texts(document: object) -> Iterator[str]:
    if isinstance(document, str):
        yield document
    elif isinstance(document, dict):
        yield from document
        for value in document.values():
            yield from _texts(value)
    elif isinstance(document, list):
        for value in document:
            yield from _texts(value)


def inexact_numbers(data: bytes) -> list[Fault]:
    """Return a fault for each number that a double cannot keep as it is written.

    Decimals of up to 15 significant digits always survive.  A longer one does
    where its value is that of the shortest text of its double.

    Parameters
    ----------
    data : bytes
        A document that `strict_loads` takes.

    Returns
    -------
    list of Fault
        With a JSON Pointer to each number; empty almost always, at the cost of one search.
    """
    if not _SUSPECT_NUMBER.search(data):
        return []
    document = json.loads(data, parse_float=_Literal, parse_int=_Literal)
    return [
        Fault(
            pointer,
            f"{_shown(literal)} has more digits than a double keeps; it would become {float(literal)!r}. "
            "Round it first.",
            "number-not-exact",
        )
        for pointer, literal in _literals(document, "")
        if not _is_kept(literal)
    ]


def _is_kept(literal: str) -> bool:
    """Return whether a number's double has the value that is written."""
    try:
        return Decimal(literal) == Decimal(repr(float(literal)))
    except InvalidOperation:
        # The exponent is beyond Decimal's own: the double is 0, which is right only where every digit is 0.
        return not re.search("[1-9]", re.split("[eE]", literal)[0])


class _Literal(str):
    """A number as it was written."""

    __slots__ = ()


def _literals(document: object, pointer: str) -> Iterator[tuple[str, _Literal]]:
    if isinstance(document, _Literal):
        yield pointer, document
    elif isinstance(document, dict):
        for name, value in document.items():
            yield from _literals(value, f"{pointer}/{name.replace('~', '~0').replace('/', '~1')}")
    elif isinstance(document, list):
        for i, value in enumerate(document):
            yield from _literals(value, f"{pointer}/{i}")
