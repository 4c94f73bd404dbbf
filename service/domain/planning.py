"""What a specification will and will not detect, before any data."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np

from service.domain.faults import refuse_any
from service.domain.specification import Specification
from service.domain.verdict import plan_of
from service.errors import Fault, TooFewUnitsError
from service.stats.arrays import Vector
from service.stats.equivalence import equivalence_limits
from service.stats.equivalence_power import equivalence_curve, units_for_closeness
from service.stats.power import Plan, acceptance_curve, power, shift_of, smallest_shift, smallest_units
from service.stats.rectangle import family_wise_error

_POINTS = 41
_NO_BOX = "for equivalence by tolerances the chance of acceptance is not computed; state delta instead"


@dataclass(frozen=True, slots=True)
class Question:
    """What is asked of a specification.

    Parameters
    ----------
    units : int
        Units n that a batch will have.
    shift : float or mapping of str to float
        A shift of the mean: in Mahalanobis units, or as differences in units of
        measurement by characteristic (0 for one that is not named).
    wanted_power : float
        Power that the smallest number of units is to reach.
    """

    units: int
    shift: float | Mapping[str, float]
    wanted_power: float


def plan(specification: Specification, question: Question) -> dict[str, Any]:
    """Return power, number of units, smallest shift and operating characteristic.

    Parameters
    ----------
    specification : Specification
        The rule.
    question : Question
        Units, shift and power.

    Raises
    ------
    InvalidContentError
        Where the shift names an unknown characteristic, or cannot be measured without a reference covariance.
    TooFewUnitsError
        Where the test does not exist with so few units.
    """
    design = plan_of(specification)
    shift = _mahalanobis(specification, question.shift)
    try:
        law = design.law(question.units)
    except TooFewUnitsError as error:
        raise error.at("/units") from error
    document: dict[str, Any] = {
        "question": specification.question.form,
        "units": question.units,
        "shift": shift,
        "distribution": {
            "name": "chi-square" if law.is_chi_square else "f",
            "degrees_of_freedom": list(law.parameters),
        },
        "one_at_a_time": _one_at_a_time(specification),
    }
    answer = _difference if specification.question.form == "difference" else _equivalence
    return document | answer(specification, design, question, shift)


def _difference(specification: Specification, design: Plan, question: Question, shift: float) -> dict[str, Any]:
    alpha, n = specification.significance_level, question.units
    law, k = design.law(n), design.effective_units(n)
    found = {wanted: smallest_shift(law, alpha, k, wanted) for wanted in (0.80, 0.90)}
    shifts = _grid(max(shift, 1.5 * found[0.90]))
    return {
        "chance_of_rejection": power(law, alpha, k * shift * shift),
        "smallest_units": smallest_units(design, shift, question.wanted_power) if shift > 0 else None,
        "wanted_power": question.wanted_power,
        "smallest_shift_found": [{"power": wanted, "shift": value} for wanted, value in found.items()],
        "operating_characteristic": _curve(shifts, acceptance_curve(design, n, shifts)),
    }


def _equivalence(specification: Specification, design: Plan, question: Question, shift: float) -> dict[str, Any]:
    delta, n = specification.question.delta, question.units
    if delta is None:
        return {"operating_characteristic": None, "why": _NO_BOX}
    below, above = equivalence_limits(design.law(n), design.alpha, design.effective_units(n) * delta * delta)
    shifts = _grid(1.5 * max(shift, delta))
    return {
        "delta": delta,
        "accepted_up_to": below,
        "rejected_from": above,
        "chance_of_acceptance": float(equivalence_curve(design, n, delta, [shift])[0]),
        "smallest_units": units_for_closeness(design, delta, shift, question.wanted_power),
        "wanted_power": question.wanted_power,
        "operating_characteristic": _curve(shifts, equivalence_curve(design, n, delta, shifts)),
    }


def _grid(most: float) -> Vector:
    return np.linspace(0.0, most, _POINTS)


def _curve(shifts: Vector, accepted: Vector) -> list[dict[str, float]]:
    pairs = zip(shifts.tolist(), accepted.tolist(), strict=True)
    return [{"shift": shift, "chance_of_acceptance": chance} for shift, chance in pairs]


def _one_at_a_time(specification: Specification) -> dict[str, Any] | None:
    """Return how often separate tests in place of the joint one would reject a lot on target."""
    if specification.sigma0 is None:
        return None
    alpha, p = specification.significance_level, specification.dimension
    return {
        "false_alarms": family_wise_error(specification.sigma0, alpha).probability,
        "false_alarms_bonferroni": family_wise_error(specification.sigma0, alpha / p).probability,
    }


def _mahalanobis(specification: Specification, shift: float | Mapping[str, float]) -> float:
    if not isinstance(shift, Mapping):
        return shift
    faults = [
        Fault(f"/shift/{name}", f"{name!r} is not in the specification.", "characteristic-unknown")
        for name in shift
        if name not in specification.names
    ]
    if specification.sigma0 is None:
        text = "Without a reference covariance a shift is stated in Mahalanobis units, as one number."
        faults.append(Fault("/shift", text, "no-reference-covariance"))
    refuse_any(faults, "plan")
    assert specification.sigma0 is not None
    return shift_of(np.array([shift.get(name, 0.0) for name in specification.names]), specification.sigma0)
