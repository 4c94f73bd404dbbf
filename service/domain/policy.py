"""The decision rule: what is computed, in which order, and what follows from it.

`evaluate` is pure: the same batch and specification give the same answer in a
decision, an evaluation without record, a recomputation and a verification.

Order of the rule:

1. Values are matched to the specification; what does not fit is an error, not an outcome.
2. Where cells are missing and the specification says ``hold``, the lot is held without a test.
3. The mean test and the screens are made.  Where a joint screen throws doubt on normality, the sign-flip
   law of the same statistic stands beside it.
4. The question is answered: agree, differ, or undecided.  Sign flips answer the difference question where
   the failed screens leave it to them.  An acceptance without the required power is undecided.
5. A screen that throws doubt on the test itself holds the lot, whatever the test said.  Units outlying
   against the specification do not throw doubt on a rejection (a shifted mean carries its units with
   it), so they hold only a lot that would otherwise be accepted.
"""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

from service.domain import documents, findings
from service.domain.batch import Batch
from service.domain.matching import matched_rows
from service.domain.reasons import Reason, reason
from service.domain.screening import Evidence, Finding, screen_all, screen_completeness
from service.domain.specification import JOINT_NORMALITY, Specification
from service.domain.verdict import Verdict, answer
from service.errors import IllConditionedError, NotPositiveDefiniteError, TooFewUnitsError
from service.stats.location import LocationResult, chi_square_test, hotelling_test, pooled_test, reference_test
from service.stats.moments import Moments, sample_moments
from service.stats.null_laws import NullLaws
from service.stats.screen import ScreenStatistic, not_applicable
from service.stats.sign_flip import batch_sign_flip, pooled_sign_flip, reference_sign_flip

POLICY_VERSION = "1"
"""Version of this decision rule; a change of any outcome or number changes it."""

Outcome = Literal["accepted", "rejected", "held"]


@dataclass(frozen=True, slots=True)
class Evaluation:
    """An outcome with every number behind it.

    Parameters
    ----------
    outcome : {"accepted", "rejected", "held"}
        The result.
    reasons : tuple of Reason
        Why, the deciding ones first.
    numbers : mapping
        The members ``test``, ``mean``, ``follow_up``, ``screens``, ``power`` of a record.
    assumptions, cautions : tuple of str
        What the numbers rest on, and what to be careful about.
    """

    outcome: Outcome
    reasons: tuple[Reason, ...]
    numbers: Mapping[str, Any]
    assumptions: tuple[str, ...]
    cautions: tuple[str, ...]

    def to_dict(self) -> dict[str, Any]:
        """Return the members of a record that the evaluation decides."""
        return {
            "outcome": self.outcome,
            "reasons": [item.to_dict() for item in self.reasons],
            **self.numbers,
            "assumptions": list(self.assumptions),
            "cautions": list(self.cautions),
        }


def evaluate(batch: Batch, specification: Specification, null_laws: NullLaws, *, registered: bool = True) -> Evaluation:
    """Judge a batch by a specification.

    Parameters
    ----------
    batch : Batch
        What was measured.
    specification : Specification
        The rule.
    null_laws : NullLaws
        Provider of exact null laws; the same tables for the same (n, p), always.
    registered : bool, optional
        Whether the specification is an approved version, not one that came with the batch.

    Returns
    -------
    Evaluation
        Outcome, reasons and numbers.

    Raises
    ------
    InvalidContentError
        Where the batch does not fit the specification.
    TooFewUnitsError, NotPositiveDefiniteError, IllConditionedError
        Where the test that the specification asks for cannot be made of this batch.
    """
    rows = matched_rows(batch, specification)
    assumptions = documents.assumptions(specification, registered=registered)
    if batch.missing:
        return _without_values(batch, specification, assumptions)
    moments = sample_moments(rows, specification.target)
    try:
        test = mean_test_of(specification, moments)
    except (TooFewUnitsError, NotPositiveDefiniteError, IllConditionedError) as error:
        raise error.at("/rows") from error
    screens = screen_all(Evidence(batch, specification, rows, moments, null_laws.get(moments.units, moments.dimension)))
    follow_up = documents.follow_up(specification, test)
    signs = sign_flips(specification, moments, screens)
    verdict = answer(specification, test, moments.units, follow_up, signs)
    outcome, reasons = conclude(verdict, screens, batch)
    numbers = {
        "test": documents.test(specification, test, verdict),
        "mean": (specification.target + test.difference).tolist(),
        "follow_up": follow_up,
        "screens": [finding.to_dict() for finding in screens],
        "power": documents.power(specification, test, verdict),
    }
    cautions = documents.cautions(specification, batch, test, screens)
    return Evaluation(outcome, reasons, numbers, assumptions, cautions)


def mean_test_of(specification: Specification, moments: Moments) -> LocationResult:
    """Return the mean test that the specification's kind of covariance calls for."""
    alpha, m = specification.significance_level, specification.target_units
    if specification.sigma0 is None:
        return hotelling_test(moments, alpha)
    if specification.covariance_kind == "known":
        return chi_square_test(moments, specification.sigma0, alpha)
    test = pooled_test if specification.covariance_kind == "pooled" else reference_test
    return test(moments, specification.sigma0, alpha, target_units=m)


def sign_flips(specification: Specification, moments: Moments, screens: tuple[Finding, ...]) -> ScreenStatistic | None:
    """Return the sign-flip check of the mean test, where a joint screen throws doubt on normality; else None."""
    doubted = any(finding.state == "not-met" and finding.name in JOINT_NORMALITY for finding in screens)
    if not doubted:
        return None
    if math.isfinite(specification.target_units):
        return not_applicable("an estimated target breaks the symmetry that sign flips rest on")
    if specification.sigma0 is None:
        return batch_sign_flip(moments)
    if specification.covariance_kind == "pooled":
        return pooled_sign_flip(moments, specification.sigma0)
    return reference_sign_flip(moments, specification.sigma0)


def conclude(verdict: Verdict, screens: tuple[Finding, ...], batch: Batch) -> tuple[Outcome, tuple[Reason, ...]]:
    """Return the outcome that follows from verdict and screens, and its reasons in order of weight.

    Parameters
    ----------
    verdict : Verdict
        The answer to the question about the mean.
    screens : tuple of Finding
        Every screen.
    batch : Batch
        For the labels of its units.
    """
    holding = [finding for finding in screens if finding.holds(signs_decide=verdict.by_signs)]
    doubts = [finding for finding in holding if finding.name not in findings.OF_UNITS]
    outlying = [finding for finding in holding if finding.name in findings.OF_UNITS]
    stated = findings.reasons(doubts + outlying, screens, batch)
    if doubts or (outlying and verdict.outcome != "rejected"):
        return "held", (*stated, *verdict.reasons)
    return verdict.outcome, (*verdict.reasons, *stated)


def _without_values(batch: Batch, specification: Specification, assumptions: tuple[str, ...]) -> Evaluation:
    """Return the hold of a batch whose missing cells leave nothing to test."""
    finding = screen_completeness(batch, specification)
    numbers = {"test": None, "mean": None, "follow_up": None, "screens": [finding.to_dict()], "power": None}
    why = reason("missing-values", "/screens/0", count=len(batch.missing))
    return Evaluation("held", (why,), numbers, assumptions, ("no test was made",))
