"""Run every screen of a specification on a batch, each under its own rule."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Any, Literal

from service.domain.batch import Batch
from service.domain.completeness import completeness
from service.domain.specification import MADE_WHEN_ASKED, SCREEN_NAMES, ScreenRule, Specification
from service.stats import dispersion, normality, ordering, outliers, resolution, robust, shapiro_wilk
from service.stats.arrays import Matrix, Vector
from service.stats.moments import Moments
from service.stats.null_laws import NullTable
from service.stats.robust_table import robust_table
from service.stats.screen import ScreenStatistic, not_applicable

State = Literal["met", "not-met", "not-applicable"]


@dataclass(frozen=True, slots=True, eq=False)
class Evidence:
    """What screens look at.

    Parameters
    ----------
    batch : Batch
        As posted.
    specification : Specification
        The rule.
    rows : ndarray, shape (n, p)
        Values in the specification's order.
    moments : Moments
        Of `rows` about the target.
    table : NullTable or None
        Exact null laws at this size, where there are any.
    """

    batch: Batch
    specification: Specification
    rows: Matrix
    moments: Moments
    table: NullTable | None

    @property
    def scale(self) -> Vector | None:
        """Standard deviations of a unit: the reference's, else the batch's own."""
        covariance = self.specification.sigma0 or self.moments.covariance
        return None if covariance is None else covariance.scale


@dataclass(frozen=True, slots=True)
class Finding:
    """One screen's result under its rule.

    Parameters
    ----------
    name : str
        Screen name.
    rule : ScreenRule
        Level, and what a failure does.
    result : ScreenStatistic
        What was computed.
    state : {"met", "not-met", "not-applicable"}
        One without a p-value is met where it found nothing.
    """

    name: str
    rule: ScreenRule
    result: ScreenStatistic
    state: State

    @classmethod
    def of(cls, name: str, rule: ScreenRule, result: ScreenStatistic) -> Finding:
        """Return the finding of a screen, its state by its rule."""
        if not result.applicable:
            return cls(name, rule, result, "not-applicable")
        failed = bool(result.statistic) if result.p_value is None else result.p_value <= rule.level
        return cls(name, rule, result, "not-met" if failed else "met")

    @property
    def expected(self) -> bool:
        """Whether the specification counts on the screen: all, but those that are made only when asked for."""
        return self.rule.listed or self.name not in MADE_WHEN_ASKED

    def holds(self, *, signs_decide: bool) -> bool:
        """Return whether this finding keeps the lot from being decided, where sign flips can decide or not."""
        if self.state == "not-applicable":
            return self.rule.required
        deferred = self.rule.on_failure == "sign-flip" and signs_decide
        return self.state == "not-met" and self.rule.on_failure != "note" and not deferred

    def to_dict(self) -> dict[str, Any]:
        """Return the member of a record's ``screens``."""
        result = self.result
        document: dict[str, Any] = {
            "name": self.name,
            "statistic": result.statistic,
            "p_value": result.p_value,
            "law": result.law,
            "level": self.rule.level,
            "state": self.state,
            "on_failure": self.rule.on_failure,
            "units": list(result.units),
            "detail": dict(result.detail),
        }
        if result.asymptotic_p_value is not None:
            document["asymptotic_p_value"] = result.asymptotic_p_value
        if not result.applicable:
            document["detail"]["why"] = result.why
        return document


def screen_all(evidence: Evidence) -> tuple[Finding, ...]:
    """Return the finding of every screen, in the order of `SCREEN_NAMES`."""
    rules = evidence.specification.screens
    return tuple(Finding.of(name, rules[name], _SCREENS[name](evidence, rules[name])) for name in SCREEN_NAMES)


def screen_completeness(batch: Batch, specification: Specification) -> Finding:
    """Return the finding of the one screen that can be made where values are missing."""
    rule = specification.screens["completeness"]
    return Finding.of("completeness", rule, completeness(batch, batch.rows, batch.names))


def _completeness(evidence: Evidence, rule: ScreenRule) -> ScreenStatistic:
    return completeness(evidence.batch, evidence.rows, evidence.specification.names)


def _against_specification(evidence: Evidence, rule: ScreenRule) -> ScreenStatistic:
    specification = evidence.specification
    if specification.sigma0 is None:
        return not_applicable("the specification has no reference covariance")
    return outliers.against_specification(
        evidence.moments, specification.sigma0, rule.level, specification.target_units
    )


def _within_batch(evidence: Evidence, rule: ScreenRule) -> ScreenStatistic:
    return outliers.within_batch(evidence.moments, evidence.table, rule.level)


def _resolution(evidence: Evidence, rule: ScreenRule) -> ScreenStatistic:
    scale = evidence.scale
    if scale is None:
        return not_applicable("there is no standard deviation to compare reporting steps with")
    return resolution.resolution(evidence.rows, scale, evidence.specification.names)


def _robust(evidence: Evidence, rule: ScreenRule) -> ScreenStatistic:
    if not rule.listed:
        return not_applicable("the specification does not ask for it")
    table = robust_table(evidence.moments.units, evidence.moments.dimension)
    return robust.outlying(evidence.moments, table, rule.level)


def _skewness(evidence: Evidence, rule: ScreenRule) -> ScreenStatistic:
    return normality.skewness(evidence.moments, evidence.table)


def _kurtosis(evidence: Evidence, rule: ScreenRule) -> ScreenStatistic:
    return normality.kurtosis(evidence.moments, evidence.table)


def _henze_zirkler(evidence: Evidence, rule: ScreenRule) -> ScreenStatistic:
    return normality.henze_zirkler(evidence.moments, evidence.table)


def _margins(evidence: Evidence, rule: ScreenRule) -> ScreenStatistic:
    return shapiro_wilk.margins(evidence.moments)


def _dispersion(evidence: Evidence, rule: ScreenRule) -> ScreenStatistic:
    sigma0 = evidence.specification.sigma0
    if sigma0 is None:
        return not_applicable("the specification has no reference covariance")
    return dispersion.against_reference(evidence.moments, sigma0, evidence.table, rule.level)


def _order(evidence: Evidence, rule: ScreenRule) -> ScreenStatistic:
    return ordering.order_dependence(evidence.moments, evidence.batch.sequence, evidence.table)


_SCREENS: Mapping[str, Callable[[Evidence, ScreenRule], ScreenStatistic]] = MappingProxyType(
    {
        "completeness": _completeness,
        "resolution": _resolution,
        "outlying-against-specification": _against_specification,
        "outlying-within-batch": _within_batch,
        "outlying-robust": _robust,
        "mardia-skewness": _skewness,
        "mardia-kurtosis": _kurtosis,
        "henze-zirkler": _henze_zirkler,
        "marginal-normality": _margins,
        "dispersion": _dispersion,
        "order-dependence": _order,
    }
)
