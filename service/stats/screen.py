"""What every screen returns."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Literal, Protocol

from service.stats.moments import Moments

Law = Literal["exact", "monte-carlo", "asymptotic", "none"]


@dataclass(frozen=True, slots=True)
class ScreenStatistic:
    """A statistic with the law that its p-value comes from.

    Parameters
    ----------
    statistic : float or None
        The statistic; None where it cannot be computed.
    p_value : float or None
        Probability of a value at least as extreme in a sound normal sample.
    law : {"exact", "monte-carlo", "asymptotic", "none"}
        Where `p_value` comes from.
    asymptotic_p_value : float or None
        By the large-sample law, for comparison.
    units : tuple of int
        Units under suspicion, from 0.
    detail : mapping
        Further numbers, plain values only.
    applicable : bool
        Whether the statistic could be computed.
    why : str
        Why not.
    """

    statistic: float | None
    p_value: float | None
    law: Law
    asymptotic_p_value: float | None = None
    units: tuple[int, ...] = ()
    detail: Mapping[str, object] = field(default_factory=dict)
    applicable: bool = True
    why: str = ""


def not_applicable(why: str) -> ScreenStatistic:
    """Return the result of a screen that cannot be made of this batch."""
    return ScreenStatistic(None, None, "none", applicable=False, why=why)


class NullLaw(Protocol):
    """What a screen asks of the simulated null laws at one (n, p)."""

    def upper(self, name: str, observed: float) -> float:
        """Return the upper-tail p-value of the statistic `name`."""
        ...

    def two_sided(self, name: str, observed: float) -> float:
        """Return the two-sided p-value of the statistic `name`."""
        ...


def unjudgeable(moments: Moments) -> str:
    """Return why the whitened units of a batch say nothing about their law, or an empty text.

    At ``n = p + 1`` the whitened units are the corners of a regular simplex,
    whatever the data, and every statistic of their shape is a constant.
    """
    n, p = moments.units, moments.dimension
    if n <= p + 1:
        return f"{n} units of {p} characteristics say nothing about their law; at least {p + 2} are needed."
    return "" if moments.obstacle is None else moments.obstacle.detail
