"""Read published values, and compare a computed number with a printed one.

A source file ``<source>.toml`` has ``text`` (the citation) and ``[[case]]``
tables with ``id``, ``page``, ``read_in`` (where the number was seen, "from
memory" where it is so), ``tier`` and ``calculation``; ``inputs``; ``printed``
(numbers as strings, as printed) and ``recomputed`` (full precision, by another
program).  A printed value that the source itself does not reproduce stands
under ``misprinted`` with the reason in ``note``, and is not asserted.
"""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from decimal import Decimal
from pathlib import Path
from typing import Any

import pytest

HERE = Path(__file__).parent


def cases(*calculations: str) -> list[dict[str, Any]]:
    """Return the cases of these calculations from every source file, each with its citation."""
    found = []
    for path in sorted(HERE.glob("*.toml")):
        source = tomllib.loads(path.read_text(encoding="utf-8"))
        found += [case | {"text": source["text"]} for case in source["case"] if case["calculation"] in calculations]
    return found


def numbers(case: dict[str, Any], table: str) -> list[tuple[str, Any]]:
    """Return (path, value) for each number in a table of the case, lists taken apart."""
    return list(_flat(case.get(table, {}), ""))


def checks(found: list[dict[str, Any]], table: str) -> list[Any]:
    """Return a parameter set (case, path, value) for each number in a table of the cases."""
    return [
        pytest.param(case, path, value, id=f"{case['id']}-{path}")
        for case in found
        for path, value in numbers(case, table)
    ]


def _flat(value: Any, path: str) -> Iterator[tuple[str, Any]]:
    if isinstance(value, dict):
        for key, item in value.items():
            yield from _flat(item, f"{path}.{key}" if path else key)
    elif isinstance(value, list):
        for i, item in enumerate(value):
            yield from _flat(item, f"{path}.{i}" if path else str(i))
    else:
        yield path, value


def at(result: Any, path: str) -> float:
    """Return the number at a dotted path of nested dicts and sequences."""
    for step in path.split("."):
        result = result[int(step)] if step.isdigit() else result[step]
    return float(result)


def last_digit(printed: str) -> float:
    """Return one unit of the last printed digit."""
    exponent = Decimal(printed).as_tuple().exponent
    assert isinstance(exponent, int)
    return float(Decimal(1).scaleb(exponent))
