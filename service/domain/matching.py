"""Bring a batch's columns into the order of its specification, or say why they do not fit."""

from __future__ import annotations

import numpy as np

from service.domain.batch import Batch
from service.domain.faults import refuse_any
from service.domain.specification import Specification
from service.errors import Fault
from service.stats.arrays import Matrix, frozen


def matched_rows(batch: Batch, specification: Specification) -> Matrix:
    """Return the batch's values with columns in the specification's order.

    Parameters
    ----------
    batch : Batch
        Columns in any order.
    specification : Specification
        The rule that the batch is to be judged by.

    Returns
    -------
    ndarray, shape (n, p)
        In the specification's units of measurement; NaN where a cell is missing.

    Raises
    ------
    InvalidContentError
        With every fault: a characteristic missing or unknown, another unit of
        measurement, a value outside the declared bounds, a missing cell where
        the specification refuses them.
    """
    rows = batch.rows
    if batch.names != specification.names or batch.measurement_units != specification.measurement_units:
        refuse_any(_name_faults(batch, specification) + _unit_faults(batch, specification), "batch")
        rows = frozen(rows[:, [batch.names.index(name) for name in specification.names]])
    faults = _bound_faults(rows, batch, specification)
    if batch.missing and specification.missing == "refuse":
        faults += _missing_faults(batch)
    refuse_any(faults, "batch")
    return rows


def _name_faults(batch: Batch, specification: Specification) -> list[Fault]:
    faults = []
    for name in specification.names:
        if name not in batch.names:
            text = f"The specification asks for {name!r}, which the batch does not have."
            faults.append(Fault("/characteristics", text, "characteristic-missing"))
    for j, name in enumerate(batch.names):
        if name not in specification.names:
            text = f"{name!r} is not in the specification, which knows {', '.join(specification.names)}."
            faults.append(Fault(f"/characteristics/{j}/name", text, "characteristic-unknown"))
    return faults


def _unit_faults(batch: Batch, specification: Specification) -> list[Fault]:
    expected = dict(zip(specification.names, specification.measurement_units, strict=True))
    return [
        Fault(
            f"/characteristics/{j}/measurement_unit",
            f"{name} is posted in {unit!r}, but the specification is in {expected[name]!r}. Nothing is converted: "
            f"post the values in {expected[name]!r}.",
            "measurement-unit-mismatch",
        )
        for j, (name, unit) in enumerate(zip(batch.names, batch.measurement_units, strict=True))
        if expected.get(name, unit) != unit
    ]


def _bound_faults(rows: Matrix, batch: Batch, specification: Specification) -> list[Fault]:
    outside = (rows < specification.lower_bounds) | (rows > specification.upper_bounds)
    if not outside.any():
        return []
    faults = []
    for i, j in np.argwhere(outside):
        name, unit = specification.names[j], specification.measurement_units[j]
        text = (
            f"Unit {batch.units[i]!r} has {name} {rows[i, j]:g} {unit}, outside the physical bounds "
            f"{specification.lower_bounds[j]:g} to {specification.upper_bounds[j]:g}. Correct the value or its unit."
        )
        faults.append(Fault(f"/rows/{i}/{batch.names.index(name)}", text, "out-of-bounds"))
    return faults


def _missing_faults(batch: Batch) -> list[Fault]:
    return [
        Fault(
            f"/rows/{i}/{j}",
            f"Unit {batch.units[i]!r} has no value for {batch.names[j]}, and the specification refuses missing values.",
            "missing-value",
        )
        for i, j in batch.missing
    ]
