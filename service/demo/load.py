"""Read the demonstration's lots back as batches ready to post."""

from __future__ import annotations

import csv
import json
import re
from typing import Any

from service.demo.generate import FILES, HERE

_HEADING = re.compile(r"(?P<name>.+) \[(?P<unit>.+)\]")


def specification() -> dict[str, Any]:
    """Return the specification document that stands beside this file."""
    document: dict[str, Any] = json.loads((HERE / "specification.json").read_text(encoding="utf-8"))
    return document


def batches() -> list[dict[str, Any]]:
    """Return the six lots as batches, in the order of their file names."""
    return [_batch(name) for name in sorted(FILES.values())]


def _batch(file_name: str) -> dict[str, Any]:
    with (HERE / "lots" / file_name).open(newline="", encoding="utf-8") as file:
        heading, *rows = csv.reader(file)
    named = [match for column in heading[1:] if (match := _HEADING.fullmatch(column))]
    lot = file_name.removesuffix(".csv")
    return {
        "batch_id": f"{lot}-1",
        "lot": lot,
        "characteristics": [{"name": match["name"], "measurement_unit": match["unit"]} for match in named],
        "units": [row[0] for row in rows],
        "sequence": [float(row[0]) for row in rows],
        "rows": [[float(cell) for cell in row[1:]] for row in rows],
    }
