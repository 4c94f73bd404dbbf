"""The command ``acceptance``.

Each command imports what it needs, so that ``verify`` needs neither Flask nor a store.
"""

from __future__ import annotations

import json
import os
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Any

import click

from service import __version__
from service.errors import ServiceError

if TYPE_CHECKING:
    from marshmallow import Schema

    from service.procedures.site import Site

HOLDS, REFUTED, CANNOT_CHECK = 0, 1, 2
"""Exit codes of ``verify``."""


class Commands(click.Group):
    """Commands that end with a sentence, not a traceback, where somebody must act."""

    def invoke(self, ctx: click.Context) -> object:
        """Run the command; turn an error meant for people into exit code 2 and its sentence."""
        try:
            return super().invoke(ctx)
        except ServiceError as error:
            click.echo(f"acceptance: {error.detail}", err=True)
            for fault in error.faults:
                click.echo(f"  {fault.pointer or '/'}: {fault.detail}", err=True)
            sys.exit(CANNOT_CHECK)


@click.group(cls=Commands, context_settings={"help_option_names": ["-h", "--help"]})
@click.version_option(__version__)
def main() -> None:
    """Decide laboratory lots against approved specifications, and keep signed records of why.

    Decision support: release stays with the laboratory's responsible person, its validated procedures and local
    rules.
    """


@main.command()
@click.option("--host", default="127.0.0.1", show_default=True, help="Address to listen on.")
@click.option("--port", default=8080, show_default=True, help="Port to listen on; 0 takes a free one.")
@click.option("--workers", default=1, show_default=True, help="Processes.")
def serve(host: str, port: int, workers: int) -> None:
    """Run the service until it is stopped.

    The store must have been made by `acceptance upgrade`. The signing key is made at the first start.
    """
    from service.http.server import run

    run(host, port, workers)


@main.command()
def upgrade() -> None:
    """Make the store, or bring it up to this version."""
    from service.config import Settings
    from service.storage.store import Store

    settings = Settings.from_environment(os.environ)
    settings.key_file.parent.mkdir(mode=0o700, parents=True, exist_ok=True)
    revision = Store.upgrade(settings.database_url)
    click.echo(f"The store is at revision {revision}.")


@main.group()
def token() -> None:
    """Issue, list and revoke tokens."""


@token.command("new")
@click.argument("name")
@click.option("--role", "roles", multiple=True, required=True, help="What the token may do; may be given again.")
@click.option("--days", type=click.IntRange(1), help="Days until it expires; never where left out.")
def token_new(name: str, roles: tuple[str, ...], days: int | None) -> None:
    """Issue a token for NAME, a person or machine, and print it once."""
    from service.procedures.tokens import OPERATOR, issue

    click.echo(issue(_site(), OPERATOR, name, roles, days))


@token.command("list")
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
def token_list(as_json: bool) -> None:
    """List tokens, without their secrets."""
    with _site().store.reading() as view:
        rows = view.tokens()
    if as_json:
        shown = ("token_id", "subject", "roles", "issued_at", "expires_at", "revoked_at")
        click.echo(json.dumps([{member: getattr(row, member) for member in shown} for row in rows], indent=2))
        return
    for row in rows:
        state = f"revoked {row.revoked_at}" if row.revoked_at else f"expires {row.expires_at or 'never'}"
        click.echo(f"{row.token_id}  {row.subject}  {','.join(row.roles)}  {state}")


@token.command("revoke")
@click.argument("token_id")
@click.option("--why", required=True, help="The reason, kept in the log.")
def token_revoke(token_id: str, why: str) -> None:
    """Revoke the token with this identifier."""
    from service.procedures.tokens import OPERATOR, revoke

    revoke(_site(), OPERATOR, token_id, why)
    click.echo(f"Token {token_id} is revoked.")


@main.command()
@click.argument("bundle", type=click.Path(exists=True, dir_okay=False, path_type=Path))
@click.option(
    "--key",
    "key_file",
    type=click.Path(exists=True, dir_okay=False, path_type=Path),
    required=True,
    help="Trusted public key: JWKS or PEM. Get it from the laboratory, not from the bundle.",
)
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
def verify(bundle: Path, key_file: Path, as_json: bool) -> None:
    """Verify a decision from its BUNDLE alone: signatures, digests, approval, and the numbers computed again.

    Exit code 0: holds. 1: refuted. 2: cannot be checked.
    """
    from service.errors import VerificationError
    from service.signing.canonical import strict_loads
    from service.signing.keys import read_trusted
    from service.stats.null_laws import NullLaws
    from service.verification import verify as verify_bundle

    try:
        verified = verify_bundle(strict_loads(bundle.read_bytes()), read_trusted(key_file), NullLaws())
    except VerificationError as error:
        faults = [fault.to_dict() for fault in error.faults]
        _print_verdict(as_json, {"verdict": "refuted", "why": error.detail, "faults": faults})
        sys.exit(REFUTED)
    decision = verified.decision
    _print_verdict(
        as_json,
        {
            "verdict": "holds",
            "record_id": decision["record_id"],
            "lot": decision["lot"],
            "outcome": decision["outcome"],
            "decided_at": decision["decided_at"],
            "shown": list(verified.shown),
            "not_shown": list(verified.not_shown),
        },
    )


def _print_verdict(as_json: bool, verdict: dict[str, object]) -> None:
    if as_json:
        click.echo(json.dumps(verdict, indent=2))
        return
    for member, value in verdict.items():
        if value == []:
            continue
        if isinstance(value, list):
            click.echo(f"{member.replace('_', ' ')}:")
            for item in value:
                click.echo(f"  - {item if isinstance(item, str) else item['pointer'] + ': ' + item['detail']}")
        else:
            click.echo(f"{member.replace('_', ' ')}: {value}")


@main.command()
@click.argument("specification", type=click.Path(exists=True, dir_okay=False, path_type=Path))
@click.option("--units", type=click.IntRange(1), required=True, help="Units in a batch.")
@click.option("--shift", type=click.FloatRange(0), help="Shift of the mean in Mahalanobis units.")
@click.option("--difference", "differences", multiple=True, metavar="NAME=VALUE", help="Shift of one characteristic.")
@click.option("--power", "wanted", type=click.FloatRange(0, 1, True, True), default=0.9, show_default=True)
@click.option("--json", "as_json", is_flag=True, help="Print JSON.")
def plan(
    specification: Path, *, units: int, shift: float | None, differences: tuple[str, ...], wanted: float, as_json: bool
) -> None:
    """Say what a SPECIFICATION, a JSON file, will and will not detect.

    The shift is one number in Mahalanobis units (--shift), or differences in units of measurement (--difference).
    """
    from schemas.specification import SpecificationSchema
    from service.domain.planning import Question
    from service.domain.planning import plan as plan_of
    from service.domain.specification import Specification
    from service.signing.canonical import strict_loads

    if (shift is None) == (not differences):
        raise click.UsageError("Give --shift, or one or more --difference, and not both.")
    rule = Specification.from_dict(_loaded(SpecificationSchema(), strict_loads(specification.read_bytes())))
    moved = shift if shift is not None else dict(_difference(text) for text in differences)
    document = plan_of(rule, Question(units, moved, wanted))
    click.echo(json.dumps(document, indent=2) if as_json else _in_lines(document))


def _loaded(schema: Schema, document: object) -> dict[str, Any]:
    """Load a file's document by its schema, or end with every fault and its place."""
    from marshmallow import ValidationError

    from service.http.problems import refused

    try:
        loaded: dict[str, Any] = schema.load(document)  # type: ignore[arg-type]
    except ValidationError as error:
        raise refused(error) from error
    return loaded


def _difference(text: str) -> tuple[str, float]:
    name, _, value = text.partition("=")
    try:
        return name, float(value)
    except ValueError as error:
        raise click.UsageError(f"--difference takes NAME=VALUE; {text!r} has no number.") from error


def _in_lines(document: dict[str, Any]) -> str:
    """Return a plan as lines of words and a small table."""
    curve = document.pop("operating_characteristic") or []
    lines = [f"{name.replace('_', ' ')}: {_short(value)}" for name, value in document.items()]
    lines += ["", "   shift   chance of acceptance"] if curve else []
    lines += [f"{point['shift']:8.3f}   {point['chance_of_acceptance']:.4f}" for point in curve[::4]]
    return "\n".join(lines)


def _short(value: object) -> str:
    if isinstance(value, float):
        return f"{value:.4g}"
    if isinstance(value, dict):
        return ", ".join(f"{name.replace('_', ' ')} {_short(inner)}" for name, inner in value.items())
    if isinstance(value, list):
        return "; ".join(map(_short, value))
    return "none" if value is None else str(value)


@main.command()
@click.option("--once", is_flag=True, help="Stop the service after the lots are decided.")
@click.option("--folder", type=click.Path(file_okay=False, path_type=Path), help="Where to keep the demonstration.")
def demo(once: bool, folder: Path | None) -> None:
    """Run everything once on an invented premix plant: key, tokens, specification, service, six lots."""
    from service.demo.run import run

    sys.exit(run(once=once, folder=folder))


def _site() -> Site:
    from service.config import Settings
    from service.procedures.opening import open_site

    return open_site(Settings.from_environment(os.environ))
