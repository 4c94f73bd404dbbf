"""What every use case stands on: store, key, names and clock, wired once."""

from __future__ import annotations

import secrets
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field
from datetime import UTC, datetime
from uuid import UUID

from service.domain.actor import Actor, Role
from service.domain.record import Heading, instant
from service.domain.specification import Specification
from service.errors import NotPermittedError, ServiceError
from service.signing.envelope import TrustedKeys
from service.signing.keys import Signer
from service.stats.null_laws import NullLaws
from service.storage.store import Store


@dataclass(frozen=True, slots=True)
class Site:
    """One laboratory's service, as its use cases see it.

    Parameters
    ----------
    store : Store
        Where records are kept.
    signer : Signer
        Signs every record.
    trusted : mapping
        Header segment to public key: every key that ever signed here.
    null_laws : NullLaws
        Exact null laws, kept in the store once made.
    issuer, origin : str
        Laboratory, and log that records belong to.
    inline_specifications : bool
        Whether a batch may bring its whole specification.
    clock : callable
        Returns the time now, in UTC.
    factored : dict
        Registered specifications by digest, their covariances factored; a version never changes.
    """

    store: Store
    signer: Signer
    trusted: TrustedKeys
    null_laws: NullLaws
    issuer: str
    origin: str
    inline_specifications: bool = True
    clock: Callable[[], datetime] = lambda: datetime.now(UTC)
    factored: dict[str, Specification] = field(default_factory=dict)

    def heading(self, actor: Actor, role: Role) -> Heading:
        """Return the heading of a record made now by `actor` in `role`.

        Raises
        ------
        NotPermittedError
            Where the actor does not have the role.
        """
        require(actor, role)
        now = self.clock()
        return Heading(record_id(now), instant(now), self.issuer, self.origin, actor.acting_as(role))


def require(actor: Actor, *roles: Role) -> Role:
    """Return the first of `roles` that the actor has.

    Raises
    ------
    NotPermittedError
        Where it has none of them.
    """
    for role in roles:
        if role in actor.roles:
            return role
    raise NotPermittedError(f"This needs the role {' or '.join(roles)}; {actor.subject} does not act in it.")


def record_id(now: datetime) -> str:
    """Return a UUID of version 7 (RFC 9562, section 5.7): milliseconds first, so that ids sort by time."""
    milliseconds = int(now.timestamp() * 1000)
    random = secrets.randbits(74)
    high, low = random >> 62, random & ((1 << 62) - 1)
    return str(UUID(int=(milliseconds << 80) | (7 << 76) | (high << 64) | (2 << 62) | low))


@contextmanager
def under(prefix: str) -> Iterator[None]:
    """Place faults found inside at `prefix` of the body that was sent."""
    try:
        yield
    except ServiceError as error:
        raise error.below(prefix) from error
