"""The numbers of a record as plain documents, in the names of the wire."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict
from typing import Any

import numpy as np

from service.domain.batch import Batch
from service.domain.screening import Finding
from service.domain.specification import Specification
from service.domain.verdict import Verdict
from service.stats.closed_testing import ClosedTest, closed_test
from service.stats.covariance import WARNED_BELOW
from service.stats.ellipses import confidence_ellipses
from service.stats.follow_up import FollowUp, one_at_a_time
from service.stats.follow_up import follow_up as follow_up_of
from service.stats.location import LocationResult
from service.stats.power import smallest_shift
from service.stats.rectangle import family_wise_error

_POWERS = (0.80, 0.90)
_MOST_ELLIPSES = 66
"""Pairs of twelve characteristics; beyond, ellipses would swell a record more than they help."""


def test(specification: Specification, result: LocationResult, verdict: Verdict) -> dict[str, Any]:
    """Return the member ``test``: the mean test, with the equivalence test where there was one."""
    document = {
        "name": "chi-square" if result.law.is_chi_square else "t-squared",
        "question": specification.question.form,
        "covariance": specification.covariance_kind,
        "significance_level": specification.significance_level,
        "effective_units": result.effective_units,
        "statistic": result.statistic,
        "distribution": {
            "name": "chi-square" if result.law.is_chi_square else "f",
            "degrees_of_freedom": list(result.law.parameters),
        },
        "scaled_statistic": result.scaled_statistic,
        "critical_value": result.critical_value,
        "p_value": result.p_value,
        "log10_p_value": result.log10_p_value,
        "mahalanobis_distance": result.mahalanobis_distance,
        "direction": result.direction.tolist(),
    }
    if verdict.signs is not None:
        document["sign_flip"] = _sign_flip(verdict)
    if verdict.equivalence is not None:
        document["equivalence"] = {
            **_plain(asdict(verdict.equivalence)),
            "conclusion": str(verdict.equivalence.conclusion),
            "units_to_settle": verdict.units_to_settle,
        }
    return document


def _sign_flip(verdict: Verdict) -> dict[str, Any]:
    signs = verdict.signs
    assert signs is not None
    if not signs.applicable:
        return {"p_value": None, "law": "none", "decides": False, "why": signs.why}
    return {"p_value": signs.p_value, "law": signs.law, "decides": verdict.by_signs, **signs.detail}


def _plain(members: dict[str, Any]) -> dict[str, Any]:
    return {name: value.tolist() if isinstance(value, np.ndarray) else value for name, value in members.items()}


def follow_up(specification: Specification, result: LocationResult) -> dict[str, Any]:
    """Return the member ``follow_up``: what moved, also where the joint test did not reject."""
    alpha = specification.significance_level
    each = follow_up_of(result, alpha)
    closed = closed_test(result, alpha)
    names = specification.names
    return {
        "characteristics": _characteristics(specification, each, closed),
        "multiplicity": "closed testing" if closed else "Holm only: more than 12 characteristics",
        "minimal_sets": [[names[j] for j in members] for members in closed.minimal_sets] if closed else [],
        "one_at_a_time": _one_at_a_time(specification, each),
        "ellipses": _ellipses(specification, result),
    }


def _characteristics(specification: Specification, each: FollowUp, closed: ClosedTest | None) -> list[dict[str, Any]]:
    mean = specification.target + each.difference
    closed_p = [None] * len(specification.names) if closed is None else closed.adjusted_p_value.tolist()
    columns = {
        "name": specification.names,
        "mean": mean.tolist(),
        "difference": each.difference.tolist(),
        "standard_error": each.standard_error.tolist(),
        "statistic": each.ratio.tolist(),
        "p_value": each.p_value.tolist(),
        "holm_p_value": each.holm_p_value.tolist(),
        "closed_p_value": closed_p,
        "interval_t_squared": _intervals(mean.tolist(), each.t_squared_half_width.tolist()),
        "interval_bonferroni": _intervals(mean.tolist(), each.bonferroni_half_width.tolist()),
        "term_alone": each.term_alone.tolist(),
        "term_given_others": each.term_given_others.tolist(),
    }
    return [dict(zip(columns, values, strict=True)) for values in zip(*columns.values(), strict=True)]


def _intervals(mean: list[float], half_width: list[float]) -> list[list[float]]:
    return [[centre - width, centre + width] for centre, width in zip(mean, half_width, strict=True)]


def _one_at_a_time(specification: Specification, each: FollowUp) -> dict[str, Any]:
    """Return what separate tests would have concluded, and how often they would be wrong."""
    alpha, names = specification.significance_level, specification.names
    separate = one_at_a_time(each.p_value, alpha)
    return {
        "level": alpha,
        "rejected": [name for name, rejects in zip(names, separate.rejects.tolist(), strict=True) if rejects],
        "rejected_bonferroni": [
            name for name, rejects in zip(names, separate.rejects_bonferroni.tolist(), strict=True) if rejects
        ],
        "family_wise_error_independent": separate.family_wise_error,
        "family_wise_error_bonferroni_independent": separate.family_wise_error_bonferroni,
        "family_wise_error": _family_wise_error(specification, alpha),
        "family_wise_error_bonferroni": _family_wise_error(specification, alpha / len(names)),
    }


def _family_wise_error(specification: Specification, level: float) -> float | None:
    """Return the error under the specification's own correlations; None where it states none."""
    sigma0 = specification.sigma0
    return None if sigma0 is None else family_wise_error(sigma0, level).probability


def _ellipses(specification: Specification, result: LocationResult) -> list[dict[str, Any]]:
    found = confidence_ellipses(result, specification.significance_level)
    if found.pairs.shape[0] > _MOST_ELLIPSES:
        return []
    names, centres = specification.names, specification.target[found.pairs] + found.centre
    rows = zip(
        found.pairs.tolist(),
        centres.tolist(),
        found.half_lengths.tolist(),
        found.angle.tolist(),
        found.rectangle.tolist(),
        strict=True,
    )
    return [
        {
            "characteristics": [names[first], names[second]],
            "centre": centre,
            "half_lengths": half_lengths,
            "angle": angle,
            "rectangle": rectangle,
            "critical_value": found.critical_value,
        }
        for (first, second), centre, half_lengths, angle, rectangle in rows
    ]


def power(specification: Specification, result: LocationResult, verdict: Verdict) -> dict[str, Any]:
    """Return the member ``power``: which shifts this many units would have found."""
    alpha, question = specification.significance_level, specification.question
    document: dict[str, Any] = {
        "smallest_shift_found": [
            {"power": wanted, "shift": smallest_shift(result.law, alpha, result.effective_units, wanted)}
            for wanted in _POWERS
        ]
    }
    if question.required_shift is not None:
        document["required"] = {
            "shift": question.required_shift,
            "power": question.required_power,
            "reached": verdict.power_at_required_shift,
        }
    return document


_COVARIANCE = {
    "known": "covariance known exactly",
    "reference": "covariance estimated beforehand",
    "batch": "covariance estimated from the batch",
    "pooled": "covariance pooled from reference and batch",
}


def assumptions(specification: Specification, *, registered: bool) -> tuple[str, ...]:
    """Return what the numbers rest on, each in a fixed phrase."""
    stated = ["units independent", "units normally distributed", _COVARIANCE[specification.covariance_kind]]
    if specification.covariance_kind != "batch":
        stated.append("batch has the reference covariance")
    if not registered:
        stated.append("unregistered specification")
    return tuple(stated)


def cautions(
    specification: Specification, batch: Batch, result: LocationResult, screens: Sequence[Finding]
) -> tuple[str, ...]:
    """Return what to be careful about, each in a fixed phrase."""
    stated = []
    if result.covariance.reciprocal_condition < WARNED_BELOW:
        stated.append("covariance close to singular")
    if batch.runs:
        stated.append("runs are not taken into account")
    if any(finding.state == "not-applicable" and finding.expected for finding in screens):
        stated.append("some screens could not be made")
    if specification.question.form == "difference" and result.p_value > specification.significance_level:
        stated.append("no difference found is not conformity shown")
    return tuple(stated)
