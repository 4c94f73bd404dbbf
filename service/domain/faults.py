"""Gather every fault of a document before refusing it."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from service.errors import Fault, InvalidContentError


def refuse_any(faults: Sequence[Fault], what: str) -> None:
    """Raise one error that holds every fault, or return where there is none.

    Raises
    ------
    InvalidContentError
        With all of `faults`.
    """
    if faults:
        count = "one fault" if len(faults) == 1 else f"{len(faults)} faults"
        raise InvalidContentError(f"The {what} has {count}; nothing was decided and nothing was stored.", faults)


def repeated(names: Iterable[str], pointer: str, what: str) -> list[Fault]:
    """Return a fault for each name that stood before, pointing at its place in a list."""
    seen: dict[str, int] = {}
    faults = []
    for i, name in enumerate(names):
        if name in seen:
            text = f"The {what} {name!r} stands here and at position {seen[name] + 1}; each may stand once."
            faults.append(Fault(pointer.format(i), text, "repeated-name"))
        seen.setdefault(name, i)
    return faults
