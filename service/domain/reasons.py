"""The closed list of reasons that an outcome can have, each with its sentence.

A reason's ``code`` is for programs, its ``text`` for people; ``evidence`` is a
JSON Pointer to the numbers in the same record.
"""

from __future__ import annotations

from dataclasses import dataclass
from types import MappingProxyType

CATALOGUE = MappingProxyType(
    {
        "mean-agrees": "The mean vector agrees with the target: {test}, p = {p}, above the level {level}.",
        "mean-differs": "The mean vector differs from the target: {test}, p = {p}, at or below the level {level}."
        "{moved}",
        "closeness-shown": "The mean vector is shown to lie within the departure that does not matter.",
        "departure-shown": "The mean vector is shown to depart from the target by more than what does not matter.",
        "inconclusive": "Neither closeness nor departure is shown.",
        "inconclusive-for-now": "Neither closeness nor departure is shown; {units} more units would be likely to "
        "settle it.",
        "too-few-units-for-power": "A shift of {shift} would be found with power {power} only, less than the {wanted} "
        "that the specification requires.",
        "missing-values": "{count} values are missing, so the test cannot be made.",
        "suspected-data": "The data themselves need a look: {findings}.",
        "outlying-units": "{units} farther out than {law} allows.",
        "normality-in-doubt": "The units do not look like a normal sample: {screens}.",
        "dispersion-differs": "The spread of the units is not the reference's but {direction}: p = {p}.",
        "order-dependent": "Units measured one after another resemble each other: p = {p}.",
        "mean-agrees-by-signs": "Normality is in doubt; the sign-flip test, which needs symmetry only, finds no "
        "difference: p = {p}, above the level {level}.",
        "mean-differs-by-signs": "Normality is in doubt; the sign-flip test, which needs symmetry only, finds a "
        "difference: p = {p}, at or below the level {level}.",
        "screen-not-computable": "The screen {screen}, which the specification requires, cannot be computed: {why}",
    }
)
"""Reason code to the sentence that states it."""


@dataclass(frozen=True, slots=True)
class Reason:
    """One reason for an outcome.

    Parameters
    ----------
    code : str
        A key of `CATALOGUE`.
    text : str
        Its sentence, with the numbers of this record.
    evidence : str
        JSON Pointer into the record.
    """

    code: str
    text: str
    evidence: str

    def to_dict(self) -> dict[str, str]:
        """Return the member of a record's ``reasons``."""
        return {"code": self.code, "text": self.text, "evidence": self.evidence}


def reason(code: str, evidence: str, **words: object) -> Reason:
    """Return the reason `code`, its sentence filled with `words`."""
    return Reason(code, CATALOGUE[code].format(**words), evidence)


def significant(value: float, digits: int = 3) -> str:
    """Return a number as text to a few significant digits, for a sentence."""
    return f"{value:.{digits}g}"
