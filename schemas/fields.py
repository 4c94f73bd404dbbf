"""Strict fields: a number is a number, a text is a text, and every message says what to do."""

from __future__ import annotations

import math
import re
import unicodedata
from collections.abc import Mapping
from datetime import datetime, timezone
from typing import Any

from marshmallow import ValidationError, fields
from marshmallow.validate import Length

MAXIMUM_ROWS = 10_000
MAXIMUM_COLUMNS = 100

LARGEST = 1e100
"""No measured value is larger in size; squares of larger ones would leave the range of a double."""

_NO_NUMBER = "Give a finite number of at most 1e100 in size, without quotes."

_INSTANT = re.compile(r"\d{4}-\d\d-\d\dT\d\d:\d\d:\d\d(\.\d{1,6})?(Z|[+-]\d\d:\d\d)", re.ASCII)

# Categories of Unicode: control characters, halves of surrogate pairs, line and paragraph separators.
_UNREADABLE = frozenset({"Cc", "Cs", "Zl", "Zp"})
# Marks that turn the direction of writing: with them a text reads otherwise than it is compared.
_TURNING = frozenset("\u202a\u202b\u202c\u202d\u202e\u2066\u2067\u2068\u2069")


def entries(most: int) -> Length:
    """Return a validator of lists: at least one entry, and not too many."""
    return Length(1, most, error="Give {min} to {max} entries.")


class Number(fields.Field[float]):
    """A finite JSON number; never a text and never true or false.

    Parameters
    ----------
    above, below : float, optional
        Open bounds.
    least, most : float, optional
        Closed bounds.
    """

    def __init__(
        self,
        *,
        above: float | None = None,
        below: float | None = None,
        least: float | None = None,
        most: float | None = None,
        **options: Any,
    ) -> None:
        super().__init__(**options)
        self.above, self.below, self.least, self.most = above, below, least, most

    def _deserialize(self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any) -> float:
        number = as_number(value)
        if number is None:
            raise ValidationError(_NO_NUMBER)
        if self.above is not None and not number > self.above:
            raise ValidationError(f"Give a number greater than {self.above:g}.")
        if self.below is not None and not number < self.below:
            raise ValidationError(f"Give a number less than {self.below:g}.")
        if self.least is not None and not number >= self.least:
            raise ValidationError(f"Give a number of at least {self.least:g}.")
        if self.most is not None and not number <= self.most:
            raise ValidationError(f"Give a number of at most {self.most:g}.")
        return number


def as_number(value: object) -> float | None:
    """Return a finite float, with -0.0 as 0.0, or None where the value is not a JSON number."""
    # bool is an int to Python, but true is no number to JSON.
    if type(value) is not float and type(value) is not int:
        return None
    try:
        number = float(value) + 0.0
    except OverflowError:
        return None
    return number if abs(number) <= LARGEST else None


class Count(fields.Integer):
    """A whole number, written as one."""

    def __init__(self, **options: Any) -> None:
        super().__init__(strict=True, **options)

    def _deserialize(self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any) -> int:
        if type(value) is not int:
            raise ValidationError("Give a whole number, without quotes and without a decimal point.")
        return value


class Flag(fields.Boolean):
    """True or false, and nothing that could pass for one."""

    def _deserialize(self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any) -> bool:
        if not isinstance(value, bool):
            raise ValidationError("Give true or false, without quotes.")
        return value


class Text(fields.String):
    """A text of limited length, not blank, that reads as it is: no control characters, line breaks or turning marks.

    Parameters
    ----------
    longest : int
        Most characters allowed.
    """

    def __init__(self, *, longest: int = 200, **options: Any) -> None:
        super().__init__(**options)
        self.longest = longest

    def _deserialize(self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any) -> str:
        if not isinstance(value, str):
            raise ValidationError("Give a text in quotes.")
        if not value.strip():
            raise ValidationError("Give a text that is not blank.")
        if len(value) > self.longest:
            raise ValidationError(f"Give at most {self.longest} characters; this text has {len(value)}.")
        if any(unicodedata.category(character) in _UNREADABLE or character in _TURNING for character in value):
            raise ValidationError("Leave control characters, such as line breaks, out of the text.")
        return value


class Name(Text):
    """A text by which something is found again; blanks around it would make another name that looks the same."""

    def _deserialize(self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any) -> str:
        text = super()._deserialize(value, attr, data, **options)
        if text != text.strip():
            raise ValidationError("Leave out the blanks before and after the text.")
        return text


class Code(Text):
    """A name for programs: lower-case letters, digits, dot, dash and underscore."""

    PATTERN = re.compile(r"[a-z0-9][a-z0-9._-]{0,63}")

    def _deserialize(self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any) -> str:
        text = super()._deserialize(value, attr, data, **options)
        if not self.PATTERN.fullmatch(text):
            raise ValidationError("Use 1 to 64 lower-case letters, digits, dots, dashes or underscores.")
        return text


class Choice(fields.String):
    """One of a few words.

    Parameters
    ----------
    *words : str
        The words allowed.
    """

    def __init__(self, *words: str, **options: Any) -> None:
        super().__init__(**options)
        self.words = words

    def _deserialize(self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any) -> str:
        if value not in self.words or not isinstance(value, str):
            raise ValidationError(f"Give one of: {', '.join(self.words)}.")
        return value


class Written(fields.Integer):
    """A whole number written in plain digits, as query parameters are; it fits the columns of any store."""

    def _deserialize(self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any) -> int:
        if not isinstance(value, str) or not re.fullmatch("[0-9]{1,18}", value):
            raise ValidationError("Give a whole number in plain digits.")
        return int(value)


class Instant(fields.String):
    """A time with its offset (RFC 3339), brought to UTC with microseconds and ``Z``."""

    def _deserialize(self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any) -> str:
        at = as_instant(value)
        if at is None:
            raise ValidationError("Give a time with its offset, such as 2026-12-01T07:30:00Z (RFC 3339).")
        # Not strftime, which writes years before 1000 with fewer digits: times are compared as text.
        return at.replace(tzinfo=None).isoformat(timespec="microseconds") + "Z"


def as_instant(value: object) -> datetime | None:
    """Return the UTC time that an RFC 3339 text with offset means, or None."""
    if not isinstance(value, str) or not _INSTANT.fullmatch(value):
        return None
    try:
        return datetime.fromisoformat(value).astimezone(timezone.utc)  # noqa: UP017 - one name for both uses
    except (ValueError, OverflowError):
        return None


class Sequence(fields.Field[list[float | str]]):
    """Order of measurement: numbers, or times with offset."""

    def _deserialize(
        self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any
    ) -> list[float | str]:
        if not isinstance(value, list) or not value:
            raise ValidationError("Give a list with a number or a time for each row.")
        faults: dict[int, list[str]] = {}
        for i, entry in enumerate(value):
            if as_number(entry) is None and as_instant(entry) is None:
                faults[i] = ["Give a number, or a time with its offset (RFC 3339)."]
        if faults:
            raise ValidationError(faults)
        return [entry if isinstance(entry, str) else float(entry) for entry in value]


class Matrix(fields.Field[list[list[float | None]]]):
    """A table of numbers in one field: fast where all is well, and every bad cell named where it is not.

    Parameters
    ----------
    missing_allowed : bool
        Whether a cell may be null.
    """

    def __init__(self, *, missing_allowed: bool = False, **options: Any) -> None:
        super().__init__(**options)
        self.missing_allowed = missing_allowed

    def _deserialize(
        self, value: Any, attr: str | None, data: Mapping[str, Any] | None, **options: Any
    ) -> list[list[float | None]]:
        if not isinstance(value, list) or not value or not isinstance(value[0], list) or not value[0]:
            raise ValidationError("Give a list of rows, each a list of numbers.")
        if len(value) > MAXIMUM_ROWS or len(value[0]) > MAXIMUM_COLUMNS:
            raise ValidationError(f"Give at most {MAXIMUM_ROWS} rows of at most {MAXIMUM_COLUMNS} numbers.")
        width = len(value[0])
        plain = all(type(row) is list and len(row) == width and set(map(type, row)) <= {float, int} for row in value)
        return (_in_range(value) if plain else None) or self._cell_by_cell(value, width)

    def _cell_by_cell(self, value: list[Any], width: int) -> list[list[float | None]]:
        faults: dict[int, Any] = {}
        table = []
        for i, row in enumerate(value):
            if not isinstance(row, list) or len(row) != width:
                has = f"{len(row)} values" if isinstance(row, list) else "no list"
                faults[i] = [f"Row {i + 1} has {has}; the first row has {width} values."]
                continue
            cells = [self._cell(cell) for cell in row]
            bad = {j: [cell] for j, cell in enumerate(cells) if isinstance(cell, str)}
            if bad:
                faults[i] = bad
            table.append([cell for cell in cells if not isinstance(cell, str)])
        if faults:
            raise ValidationError(faults)
        return table

    def _cell(self, cell: object) -> float | str | None:
        """Return the number in a cell, None where it is missing, or what is wrong with it."""
        if cell is None and self.missing_allowed:
            return None
        if isinstance(cell, dict):
            return "Results below or above a limit are not taken here; give a number."
        number = as_number(cell)
        return _NO_NUMBER if number is None else number


def _in_range(table: list[list[float]]) -> list[Any] | None:
    """Return a table of numbers as floats, or None where each cell must be looked at."""
    try:
        floats = [[cell + 0.0 for cell in row] for row in table]
    except OverflowError:
        return None
    # A sum that is no number says that a cell is none, which comparisons would not.
    if math.isnan(sum(map(sum, floats))):
        return None
    return floats if min(map(min, floats)) >= -LARGEST and max(map(max, floats)) <= LARGEST else None
