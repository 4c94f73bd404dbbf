"""Issue, list, revoke and recognise bearer tokens.  Only a digest of the secret is kept."""

from __future__ import annotations

import hashlib
import hmac
import secrets
from collections.abc import Sequence
from datetime import timedelta

from service.domain import record
from service.domain.actor import ROLES, Actor
from service.domain.record import instant
from service.errors import ConfigurationError, NotFoundError, UnauthenticatedError
from service.procedures.site import Site
from service.signing.envelope import sign
from service.storage.store import Columns, TokenRow

PREFIX = "acceptance"

OPERATOR = Actor("operator at the console", frozenset({"operator"}), "account on the machine")
"""Whoever may read the key file can act as operator on the command line."""


def issue(site: Site, actor: Actor, subject: str, roles: Sequence[str], days: int | None = None) -> str:
    """Issue a token; the text returned is shown once and not kept.

    Parameters
    ----------
    site : Site
        The service.
    actor : Actor
        An operator.
    subject : str
        The person or machine that the token speaks for.
    roles : sequence of str
        What it may do.
    days : int, optional
        After how many days it expires; never where left out.

    Returns
    -------
    str
        ``acceptance_<id>_<secret>``.

    Raises
    ------
    ConfigurationError
        Where a role is unknown, or operator stands beside another role.
    """
    if not roles or not set(roles) <= set(ROLES):
        raise ConfigurationError(f"A token needs one or more of the roles {', '.join(ROLES)}.")
    if "operator" in roles and len(set(roles)) > 1:
        raise ConfigurationError("An operator keeps keys and tokens, and so acts in no other role. Issue two tokens.")
    heading = site.heading(actor, "operator")
    token_id, secret = secrets.token_hex(6), secrets.token_urlsafe(32)
    expires_at = None if days is None else instant(site.clock() + timedelta(days=days))
    token = {"token_id": token_id, "subject": subject, "roles": sorted(set(roles)), "expires_at": expires_at}
    envelope = sign(record.event(heading, "token-issued", token=token), site.signer)
    row = TokenRow(token_id, subject, _digest(secret), tuple(sorted(set(roles))), heading.at, expires_at, None)
    with site.store.transaction() as tx:
        tx.add_token(row, tx.add_record(envelope, _columns(heading, "token-issued")))
    return f"{PREFIX}_{token_id}_{secret}"


def revoke(site: Site, actor: Actor, token_id: str, why: str) -> None:
    """Revoke a token, from now on.

    Raises
    ------
    NotFoundError
        Where there is no such token, or it is revoked already.
    """
    heading = site.heading(actor, "operator")
    with site.store.transaction() as tx:
        row = tx.token(token_id)
        if row is None or row.revoked_at is not None:
            raise NotFoundError(f"There is no token {token_id!r} in force.")
        payload = record.event(heading, "token-revoked", token={"token_id": token_id, "subject": row.subject}, why=why)
        kept = tx.add_record(sign(payload, site.signer), _columns(heading, "token-revoked"))
        tx.revoke_token(token_id, heading.at, kept)


def recognise(site: Site, authorization: str | None) -> Actor:
    """Return the actor that an ``Authorization`` header speaks for.

    Raises
    ------
    UnauthenticatedError
        Where it is missing, unknown, expired or revoked; which of these is not said.
    """
    scheme, _, text = (authorization or "").partition(" ")
    if scheme.lower() != "bearer" or not text:
        raise UnauthenticatedError("Send the header Authorization: Bearer followed by a token.")
    prefix, _, rest = text.strip().partition("_")
    token_id, _, secret = rest.partition("_")
    with site.store.reading() as view:
        row = view.token(token_id) if prefix == PREFIX else None
    # The comparison is made also where there is no such token, so that its time tells nothing.
    same = hmac.compare_digest(_digest(secret), row.secret_sha256 if row else _digest(""))
    now = instant(site.clock())
    if row is None or not same or row.revoked_at is not None or (row.expires_at or now) < now:
        raise UnauthenticatedError("The token is not valid here: unknown, expired or revoked. Ask the operator.")
    return Actor(row.subject, frozenset(row.roles), f"token {row.token_id}")


def _digest(secret: str) -> str:
    return hashlib.sha256(secret.encode()).hexdigest()


def _columns(heading: record.Heading, record_type: str) -> Columns:
    return Columns(
        record_id=heading.record_id, record_type=record_type, recorded_at=heading.at, actor=heading.actor["subject"]
    )
