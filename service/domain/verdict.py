"""The answer to the question about the mean, before any screen has been looked at."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

from service.domain.reasons import Reason, reason, significant
from service.domain.specification import Specification
from service.stats.equivalence import BoxResult, Conclusion, EllipsoidResult, box_equivalence, ellipsoid_equivalence
from service.stats.equivalence_power import units_to_settle
from service.stats.location import LocationResult
from service.stats.power import Plan, power

Outcome = Literal["accepted", "rejected", "held"]


@dataclass(frozen=True, slots=True, eq=False)
class Verdict:
    """What the mean alone leads to.

    Parameters
    ----------
    outcome : {"accepted", "rejected", "held"}
        Held where the question stays open, or an acceptance would have too little power.
    reasons : tuple of Reason
        Why.
    equivalence : EllipsoidResult, BoxResult or None
        The equivalence test, where the question has that form.
    units_to_settle : int or None
        Inconclusive: how many more units would be likely to settle it.
    power_at_required_shift : float or None
        Where the specification requires a power.
    """

    outcome: Outcome
    reasons: tuple[Reason, ...]
    equivalence: EllipsoidResult | BoxResult | None = None
    units_to_settle: int | None = None
    power_at_required_shift: float | None = None


def answer(specification: Specification, test: LocationResult, n: int, follow_up: Mapping[str, Any]) -> Verdict:
    """Answer the specification's question.

    Parameters
    ----------
    specification : Specification
        The rule.
    test : LocationResult
        The mean test.
    n : int
        Units in the batch.
    follow_up : mapping
        What moved, as the record states it.
    """
    if specification.question.form == "equivalence":
        return _equivalence(specification, test, n)
    return _difference(specification, test, follow_up)


def _difference(specification: Specification, test: LocationResult, follow_up: Mapping[str, Any]) -> Verdict:
    alpha, question = specification.significance_level, specification.question
    words = {"test": in_words(test), "p": in_words_p(test), "level": significant(alpha)}
    reached = None
    if question.required_shift is not None and question.required_power is not None:
        reached = power(test.law, alpha, test.effective_units * question.required_shift**2)
    if test.p_value <= alpha:
        why = reason("mean-differs", "/test", moved=moved(follow_up), **words)
        return Verdict("rejected", (why,), power_at_required_shift=reached)
    agrees = reason("mean-agrees", "/test", **words)
    if reached is not None and question.required_power is not None and reached < question.required_power:
        why = reason(
            "too-few-units-for-power",
            "/power",
            shift=significant(question.required_shift or 0.0),
            power=significant(reached),
            wanted=significant(question.required_power),
        )
        return Verdict("held", (why, agrees), power_at_required_shift=reached)
    return Verdict("accepted", (agrees,), power_at_required_shift=reached)


def _equivalence(specification: Specification, test: LocationResult, n: int) -> Verdict:
    alpha, delta = specification.significance_level, specification.question.delta
    result: EllipsoidResult | BoxResult
    if delta is not None:
        result = ellipsoid_equivalence(test, delta, alpha)
    else:
        assert specification.tolerances is not None
        result = box_equivalence(test, specification.tolerances, alpha)
    if result.conclusion is Conclusion.CLOSE:
        return Verdict("accepted", (reason("closeness-shown", "/test/equivalence"),), result)
    if result.conclusion is Conclusion.DEPARTED:
        return Verdict("rejected", (reason("departure-shown", "/test/equivalence"),), result)
    more = None if delta is None else units_to_settle(plan_of(specification), n, delta, test.mahalanobis_distance)
    code = "inconclusive" if more is None else "inconclusive-for-now"
    return Verdict("held", (reason(code, "/test/equivalence", units=more),), result, units_to_settle=more)


def plan_of(specification: Specification) -> Plan:
    """Return the specification's mean test as a plan, before any data."""
    sigma0 = specification.sigma0
    return Plan(
        covariance=specification.covariance_kind,
        dimension=specification.dimension,
        alpha=specification.significance_level,
        target_units=specification.target_units,
        **({} if sigma0 is None else {"degrees_of_freedom": sigma0.degrees_of_freedom}),
    )


def in_words(test: LocationResult) -> str:
    """Return the statistic with its law, for a sentence."""
    name = "chi-square" if test.law.is_chi_square else "T-squared"
    dof = " and ".join(f"{parameter:g}" for parameter in test.law.parameters)
    limit = f"against {significant(test.critical_value)}"
    return f"{name} {significant(test.statistic)} {limit} ({dof} degrees of freedom)"


def in_words_p(test: LocationResult) -> str:
    """Return the p-value for a sentence, as a power of ten where it is too small for a double."""
    return significant(test.p_value) if test.p_value > 0 else f"1e{test.log10_p_value:.0f}"


def moved(follow_up: Mapping[str, Any]) -> str:
    """Return what moved, and whether checking each characteristic by itself would have seen it, as a sentence."""
    sets = [" with ".join(members) + (" together" if len(members) > 1 else "") for members in follow_up["minimal_sets"]]
    said = f" What moved: {', or '.join(sets)}." if sets else ""
    if not follow_up["one_at_a_time"]["rejected"]:
        said += " Taken one at a time, none would have been rejected."
    return said
