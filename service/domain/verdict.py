"""The answer to the question about the mean, before any screen has been looked at."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, replace
from typing import Any, Literal

from service.domain.reasons import Reason, reason, significant
from service.domain.specification import JOINT_NORMALITY, Specification
from service.stats.equivalence import BoxResult, Conclusion, EllipsoidResult, box_equivalence, ellipsoid_equivalence
from service.stats.equivalence_power import units_to_settle
from service.stats.location import LocationResult
from service.stats.power import Plan, power
from service.stats.screen import ScreenStatistic

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
    signs : ScreenStatistic or None
        The sign-flip check, where normality is in doubt.
    by_signs : bool
        Whether sign flips can stand in for the law that normality would give.
    """

    outcome: Outcome
    reasons: tuple[Reason, ...]
    equivalence: EllipsoidResult | BoxResult | None = None
    units_to_settle: int | None = None
    power_at_required_shift: float | None = None
    signs: ScreenStatistic | None = None
    by_signs: bool = False


def answer(
    specification: Specification,
    test: LocationResult,
    n: int,
    follow_up: Mapping[str, Any],
    signs: ScreenStatistic | None = None,
) -> Verdict:
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
    signs : ScreenStatistic, optional
        The sign-flip check, where normality is in doubt.
    """
    if specification.question.form == "equivalence":
        return replace(_equivalence(specification, test, n), signs=signs)
    decides = signs is not None and _can_decide(specification, signs)
    verdict = _by_signs(specification, signs) if decides and signs else _difference(specification, test, follow_up)
    return _with_power(replace(verdict, signs=signs, by_signs=decides), specification, test)


def _can_decide(specification: Specification, signs: ScreenStatistic) -> bool:
    """Whether sign flips may decide: the specification says so, and so many units let them reject at all."""
    deferred = any(specification.screens[name].on_failure == "sign-flip" for name in JOINT_NORMALITY)
    smallest = signs.detail.get("smallest_p_value")
    return deferred and isinstance(smallest, float) and smallest <= specification.significance_level


def _difference(specification: Specification, test: LocationResult, follow_up: Mapping[str, Any]) -> Verdict:
    alpha = specification.significance_level
    words = {"test": in_words(test), "p": in_words_p(test), "level": significant(alpha)}
    if test.p_value <= alpha:
        return Verdict("rejected", (reason("mean-differs", "/test", moved=moved(follow_up), **words),))
    return Verdict("accepted", (reason("mean-agrees", "/test", **words),))


def _by_signs(specification: Specification, signs: ScreenStatistic) -> Verdict:
    alpha, p = specification.significance_level, signs.p_value
    assert p is not None
    words = {"p": significant(p), "level": significant(alpha)}
    if p <= alpha:
        return Verdict("rejected", (reason("mean-differs-by-signs", "/test/sign_flip", **words),))
    return Verdict("accepted", (reason("mean-agrees-by-signs", "/test/sign_flip", **words),))


def _with_power(verdict: Verdict, specification: Specification, test: LocationResult) -> Verdict:
    """Hold an acceptance that had less than the power required, where one is."""
    question = specification.question
    if question.required_shift is None or question.required_power is None:
        return verdict
    noncentrality = test.effective_units * question.required_shift**2
    reached = power(test.law, specification.significance_level, noncentrality)
    verdict = replace(verdict, power_at_required_shift=reached)
    if verdict.outcome != "accepted" or reached >= question.required_power:
        return verdict
    why = reason(
        "too-few-units-for-power",
        "/power",
        shift=significant(question.required_shift),
        power=significant(reached),
        wanted=significant(question.required_power),
    )
    return replace(verdict, outcome="held", reasons=(why, *verdict.reasons))


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
