"""A batch: the measured values of n units on p characteristics of one lot."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from datetime import datetime
from typing import Any

import numpy as np

from service.domain.faults import refuse_any, repeated
from service.errors import Fault
from service.signing import canonical
from service.stats.arrays import Matrix, Vector, frozen


@dataclass(frozen=True, slots=True, eq=False)
class Batch:
    """What was posted: values, and everything that says what they are values of.

    Parameters
    ----------
    batch_id, lot : str
        Identifiers given by the laboratory.
    names, measurement_units : tuple of str
        One of each for every column.
    rows : ndarray, shape (n, p)
        Measured values, NaN where a cell is missing.
    units : tuple of str
        A label for every row.
    sequence : ndarray, shape (n,), or None
        Order of measurement: numbers, or seconds since 1970 of time stamps.
    runs : int
        How many distinct runs the batch names; 0 where it names none.
    missing : tuple of (int, int)
        Row and column, from 0, of every missing cell.
    document : mapping
        The batch as it stands in its canonical form.
    digest : str
        SHA-256, in hexadecimal, of the canonical form (RFC 8785).
    """

    batch_id: str
    lot: str
    names: tuple[str, ...]
    measurement_units: tuple[str, ...]
    rows: Matrix
    units: tuple[str, ...]
    sequence: Vector | None
    runs: int
    missing: tuple[tuple[int, int], ...]
    document: Mapping[str, Any]
    digest: str

    @classmethod
    def from_dict(cls, data: Mapping[str, Any]) -> Batch:
        """Make a batch of a document that has the right shape.

        Parameters
        ----------
        data : mapping
            As loaded by ``schemas.batch.BatchSchema``.

        Returns
        -------
        Batch
            With read-only values.

        Raises
        ------
        InvalidContentError
            Where names repeat, or a list does not have one entry for every row or column.
        """
        names = tuple(item["name"] for item in data["characteristics"])
        rows = frozen([[np.nan if cell is None else cell for cell in row] for row in data["rows"]])
        refuse_any(_faults(data, names, rows), "batch")
        n = rows.shape[0]
        return cls(
            batch_id=data["batch_id"],
            lot=data["lot"],
            names=names,
            measurement_units=tuple(item["measurement_unit"] for item in data["characteristics"]),
            rows=rows,
            units=tuple(data.get("units") or (str(i + 1) for i in range(n))),
            sequence=_order(data.get("sequence")),
            runs=len(set(data.get("runs") or ())),
            missing=tuple((int(i), int(j)) for i, j in np.argwhere(np.isnan(rows))),
            document=data,
            digest=canonical.digest(data),
        )


def _order(sequence: Sequence[float | str] | None) -> Vector | None:
    if sequence is None:
        return None
    return frozen([datetime.fromisoformat(at).timestamp() if isinstance(at, str) else at for at in sequence])


def _faults(data: Mapping[str, Any], names: Sequence[str], rows: Matrix) -> list[Fault]:
    n, p = rows.shape
    faults = repeated(names, "/characteristics/{}/name", "characteristic")
    if p != len(names):
        text = f"Each row has {p} values, but {len(names)} characteristics are named."
        faults.append(Fault("/rows/0", text, "column-count"))
    for member in ("units", "runs", "sequence"):
        entries = data.get(member)
        if entries is not None and len(entries) != n:
            text = f"{member!r} has {len(entries)} entries, but there are {n} rows: give one for each row."
            faults.append(Fault(f"/{member}", text, "entry-count"))
    sequence = data.get("sequence") or ()
    if len({isinstance(at, str) for at in sequence}) > 1:
        faults.append(Fault("/sequence", "Give either numbers or times for all rows, not both.", "mixed-sequence"))
    faults += [_replicate(fault) for fault in repeated(data.get("units") or (), "/units/{}", "unit")]
    return faults


def _replicate(fault: Fault) -> Fault:
    text = fault.detail + " Rows of one unit are replicates: post their mean, one row for each unit."
    return Fault(fault.pointer, text, "repeated-unit")
