"""Who acts: a person or a machine, known by its subject, with the roles it was given."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal, get_args

Role = Literal["submitter", "author", "approver", "reviewer", "auditor", "operator"]
ROLES: tuple[Role, ...] = get_args(Role)


@dataclass(frozen=True, slots=True)
class Actor:
    """A caller whose identity has been established.

    Parameters
    ----------
    subject : str
        Identifies the person or machine whatever token it uses; separation of
        duties compares subjects, never tokens.
    roles : frozenset of str
        Roles that the token carries.
    authentication : str
        How the identity was established, as records state it.
    """

    subject: str
    roles: frozenset[str]
    authentication: str

    def acting_as(self, role: Role) -> dict[str, str]:
        """Return the actor as a record states it, with the one role used."""
        return {"subject": self.subject, "role": role, "authentication": self.authentication}
