"""From screens that are not met to the reasons that people read."""

from __future__ import annotations

from collections.abc import Callable, Iterable
from types import MappingProxyType

from service.domain.batch import Batch
from service.domain.reasons import Reason, reason, significant
from service.domain.screening import Finding

OF_UNITS = frozenset({"outlying-against-specification"})
"""Screens that speak of single units beside the specification, not of the validity of the mean test."""

_CODES = MappingProxyType(
    {
        "completeness": "suspected-data",
        "resolution": "suspected-data",
        "outlying-against-specification": "outlying-units",
        "outlying-within-batch": "outlying-units",
        "outlying-robust": "outlying-units",
        "mardia-skewness": "normality-in-doubt",
        "mardia-kurtosis": "normality-in-doubt",
        "henze-zirkler": "normality-in-doubt",
        "marginal-normality": "normality-in-doubt",
        "dispersion": "dispersion-differs",
        "order-dependence": "order-dependent",
    }
)

_LAWS = MappingProxyType(
    {
        "outlying-against-specification": "the specification",
        "outlying-within-batch": "the spread of the batch itself",
        "outlying-robust": "the bulk of the batch",
    }
)


def reasons(holding: Iterable[Finding], screens: tuple[Finding, ...], batch: Batch) -> tuple[Reason, ...]:
    """Return one reason for each code that the holding screens give, in their order.

    Parameters
    ----------
    holding : iterable of Finding
        Screens that hold the lot.
    screens : tuple of Finding
        Every screen, for the place of the evidence.
    batch : Batch
        For the labels of its units.
    """
    places = {finding.name: f"/screens/{i}" for i, finding in enumerate(screens)}
    grouped: dict[str, list[Finding]] = {}
    for finding in holding:
        code = "screen-not-computable" if finding.state == "not-applicable" else _CODES[finding.name]
        # Outlying units are one reason a screen: each screen names its own units.
        key = f"{code} {finding.name}" if code in ("outlying-units", "screen-not-computable") else code
        grouped.setdefault(key, []).append(finding)
    return tuple(_reason(key.split()[0], group, places[group[0].name], batch) for key, group in grouped.items())


def _reason(code: str, group: list[Finding], evidence: str, batch: Batch) -> Reason:
    first = group[0]
    words: dict[str, Callable[[], dict[str, object]]] = {
        "suspected-data": lambda: {"findings": ", ".join(_found(finding) for finding in group)},
        "outlying-units": lambda: {"units": _units(first, batch), "law": _LAWS[first.name]},
        "normality-in-doubt": lambda: {"screens": ", ".join(_with_p(finding) for finding in group)},
        "dispersion-differs": lambda: {
            "direction": first.result.detail.get("direction", "different"),
            "p": significant(first.result.p_value or 0.0, 2),
        },
        "order-dependent": lambda: {"p": significant(first.result.p_value or 0.0, 2)},
        "screen-not-computable": lambda: {"screen": first.name, "why": first.result.why},
    }
    return reason(code, evidence, **words[code]())


def _found(finding: Finding) -> str:
    return f"{finding.name} ({', '.join(sorted(finding.result.detail)).replace('_', ' ')})"


def _with_p(finding: Finding) -> str:
    p = finding.result.p_value
    return finding.name if p is None else f"{finding.name} p = {significant(p, 2)}"


def _units(finding: Finding, batch: Batch) -> str:
    labels = [batch.units[i] for i in finding.result.units]
    return f"Unit {labels[0]} lies" if len(labels) == 1 else f"Units {', '.join(labels)} lie"
