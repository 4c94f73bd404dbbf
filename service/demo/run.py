"""The main job in one go: store, key, tokens, an approved specification, the service, six lots over HTTP."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import textwrap
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import click
import requests

from service.demo import load

WAIT = 30.0
PEOPLE = {"pipeline": "submitter", "statistician": "author", "quality-manager": "approver", "auditor": "auditor"}
"""Who acts in the demonstration, and in which role."""


@dataclass(frozen=True, slots=True)
class Demonstration:
    """A demonstration in its folder.

    Parameters
    ----------
    folder : Path
        Holds store, key and tokens; not a place for anything real.
    """

    folder: Path

    @property
    def environment(self) -> dict[str, str]:
        """Settings under which its commands run."""
        settings = {
            "ACCEPTANCE_DATA": str(self.folder),
            "ACCEPTANCE_ISSUER": "Larkmoor Premix, test laboratory (invented)",
            "ACCEPTANCE_ORIGIN": "larkmoor.example/acceptance",
        }
        kept = {name: value for name, value in os.environ.items() if not name.startswith("ACCEPTANCE_")}
        return kept | settings

    def command(self, *arguments: str) -> str:
        """Run one ``acceptance`` command and return what it prints."""
        made = subprocess.run(  # noqa: S603 - this program itself
            [sys.executable, "-m", "service", *arguments],
            env=self.environment,
            capture_output=True,
            text=True,
            check=False,
        )
        if made.returncode != 0:
            raise click.ClickException(f"acceptance {' '.join(arguments)}: {made.stderr.strip()}")
        return made.stdout.strip()

    def token_of(self, name: str) -> str:
        """Return the token of one of `PEOPLE`, issued at the first asking and kept in the folder."""
        path = self.folder / f"token-{name}"
        if not path.exists():
            path.touch(mode=0o600)
            path.write_text(self.command("token", "new", name, "--role", PEOPLE[name]) + "\n", encoding="ascii")
        return path.read_text(encoding="ascii").strip()

    @contextmanager
    def service(self) -> Iterator[str]:
        """Run the service on a free port and yield its address; stop it by its process on the way out."""
        process = subprocess.Popen(
            [sys.executable, "-m", "service", "serve", "--port", "0"],
            env=self.environment,
            stdout=subprocess.PIPE,
            text=True,
        )
        try:
            yield _address(process)
        finally:
            process.send_signal(signal.SIGTERM)
            process.wait(WAIT)
            assert process.stdout is not None
            process.stdout.close()


def _address(process: subprocess.Popen[str]) -> str:
    """Wait until the service answers, and return its address."""
    assert process.stdout is not None
    line = process.stdout.readline()
    if "http://" not in line:
        raise click.ClickException("the service did not start; its message stands above")
    address = line.rsplit(" ", 1)[1].strip()
    retry = requests.adapters.Retry(total=60, connect=60, backoff_factor=0.1, backoff_max=0.5)
    with requests.Session() as session:
        session.mount("http://", requests.adapters.HTTPAdapter(max_retries=retry))
        session.get(f"{address}/readyz", timeout=WAIT).raise_for_status()
    return address


def run(*, once: bool, folder: Path | None) -> int:
    """Run the demonstration.

    Parameters
    ----------
    once : bool
        Stop the service after the lots, instead of waiting for Ctrl-C.
    folder : Path or None
        Where to keep it; ``acceptance-demo`` where left out.

    Returns
    -------
    int
        Exit code: 0 where every lot was answered as the demonstration says.
    """
    demonstration = Demonstration((folder or Path("acceptance-demo")).resolve())
    try:
        with run_lots(demonstration, say=click.echo) as address:
            click.echo(_onward(address, demonstration.folder))
            if not once:
                _wait()
    except SurprisingLotError as error:
        click.echo(str(error), err=True)
        return 1
    return 0


class SurprisingLotError(Exception):
    """A lot of the demonstration was not answered as it is made to be."""


@contextmanager
def run_lots(demonstration: Demonstration, say: Callable[[str], None]) -> Iterator[str]:
    """Set up, serve, decide the six lots; yield the address of the service, which runs until the end.

    Parameters
    ----------
    demonstration : Demonstration
        Where to keep everything.
    say : callable
        Takes each line of progress.

    Raises
    ------
    SurprisingLotError
        Where a lot was not answered as expected.
    """
    say(f"Store, key and tokens in {demonstration.folder}")
    demonstration.command("upgrade")
    tokens = {name: demonstration.token_of(name) for name in PEOPLE}
    with demonstration.service() as address:
        say(f"The service runs at {address}")
        if _approve_specification(address, tokens):
            say("Specification premix-a, version 1: drafted by statistician, approved by quality-manager\n")
        surprises = _decide_lots(address, tokens["pipeline"], say)
        if surprises:
            raise SurprisingLotError(f"not answered as expected: {', '.join(surprises)}")
        yield address


def _post(address: str, path: str, token: str, body: Mapping[str, Any]) -> requests.Response:
    return requests.post(f"{address}{path}", json=body, headers={"Authorization": f"Bearer {token}"}, timeout=WAIT)


def _approve_specification(address: str, tokens: Mapping[str, str]) -> bool:
    """Register the specification as one person and approve it as another; return False where it was done before."""
    seen = requests.get(
        f"{address}/v1/specifications/premix-a/versions/1",
        headers={"Authorization": f"Bearer {tokens['auditor']}"},
        timeout=WAIT,
    )
    if seen.ok:
        return False
    drafted = _post(address, "/v1/specifications", tokens["statistician"], load.specification())
    drafted.raise_for_status()
    path = "/v1/specifications/premix-a/versions/1/approval"
    approved = requests.post(
        address + path,
        json={"reason": "Reference data of 2026 reviewed"},
        headers={"Authorization": f"Bearer {tokens['quality-manager']}", "If-Match": drafted.headers["ETag"]},
        timeout=WAIT,
    )
    approved.raise_for_status()
    return True


EXPECTED = {
    "PX-2601": "accepted",
    "PX-2602": "rejected",
    "PX-2603": "rejected",
    "PX-2604": "held",
    "PX-2605": "held",
    "PX-2606": "422",
}
"""What each lot of the demonstration is made to show."""


def _decide_lots(address: str, token: str, say: Callable[[str], None]) -> list[str]:
    """Post each lot, say a line for it, and return the lots that were not answered as expected."""
    surprises = []
    say(f"{'lot':<9} {'outcome':<9} main reason")
    for batch in load.batches():
        answer = _post(address, "/v1/decisions", token, {"batch": batch, "specification": {"code": "premix-a"}})
        outcome, reason = _read(answer)
        lines = textwrap.wrap(reason, 96)
        say(f"{batch['lot']:<9} {outcome:<9} {lines[0]}")
        for line in lines[1:]:
            say(f"{'':<19} {line}")
        if outcome != EXPECTED[batch["lot"]]:
            surprises.append(batch["lot"])
    return surprises


def _read(answer: requests.Response) -> tuple[str, str]:
    document = answer.json()
    if answer.status_code == 201:
        return document["outcome"], document["reasons"][0]["text"]
    faults = document.get("errors") or [{"pointer": "", "detail": document.get("detail", "")}]
    return str(answer.status_code), f"{faults[0]['pointer']}: {faults[0]['detail']}"


def _onward(address: str, folder: Path) -> str:
    return f"""
Go on with curl (tokens are files in the folder):
  curl -s {address}/v1/decisions?outcome=held -H "Authorization: Bearer $(cat {folder}/token-auditor)"
  curl -s {address}/v1/specifications/premix-a/versions/1 -H "Authorization: Bearer $(cat {folder}/token-auditor)"
  curl -s {address}/.well-known/jwks.json
The interface is described at {address}/docs"""


def _wait() -> None:
    click.echo("\nThe service keeps running. Ctrl-C stops it.")
    try:
        signal.pause()
    except KeyboardInterrupt:
        click.echo("\nStopping.")
