"""An answered decision is there after the service was killed without warning."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import pytest
import requests

from service.domain.actor import Actor
from service.procedures import read
from service.procedures.opening import open_site
from tests.plant import open_plant, request_for, settings_in


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    opened = open_plant(tmp_path).approved()
    opened.site.store.close()
    (tmp_path / "token").write_text(opened.tokens["pipeline"], encoding="ascii")
    return tmp_path


@contextmanager
def serving(folder: Path) -> Iterator[tuple[str, int]]:
    """Run the real service in a group of its own; yield its address and the group, which is killed at the end."""
    process = subprocess.Popen(
        [sys.executable, "-m", "service", "serve", "--port", "0", "--workers", "2"],
        env={**os.environ, "ACCEPTANCE_DATA": str(folder)},
        stdout=subprocess.PIPE,
        text=True,
        start_new_session=True,
    )
    assert process.stdout is not None
    try:
        address = process.stdout.readline().rsplit(" ", 1)[1].strip()
        with requests.Session() as session:
            retry = requests.adapters.Retry(total=40, connect=40, backoff_factor=0.1, backoff_max=0.5)
            session.mount("http://", requests.adapters.HTTPAdapter(max_retries=retry))
            assert session.get(f"{address}/readyz", timeout=20).ok
        yield address, process.pid
    finally:
        if process.poll() is None:
            os.killpg(process.pid, signal.SIGKILL)
        process.wait(20)
        process.stdout.close()


def test_no_answered_decision_is_lost_when_every_process_is_killed(folder: Path) -> None:
    token = (folder / "token").read_text(encoding="ascii")
    answered: list[str] = []
    enough = threading.Event()

    def post(address: str) -> None:
        with requests.Session() as session:
            session.headers["Authorization"] = f"Bearer {token}"
            for _ in range(500):
                try:
                    answer = session.post(f"{address}/v1/decisions", json=request_for("PX-2601"), timeout=10)
                except requests.RequestException:
                    return
                answered.append(answer.json()["record_id"])
                if len(answered) >= 40:
                    enough.set()

    with serving(folder) as (address, group):
        threads = [threading.Thread(target=post, args=(address,)) for _ in range(4)]
        for thread in threads:
            thread.start()
        assert enough.wait(60)
        os.killpg(group, signal.SIGKILL)
        for thread in threads:
            thread.join(30)
    assert len(set(answered)) == len(answered) >= 40
    _all_there_and_numbered(folder, answered)


def _all_there_and_numbered(folder: Path, answered: list[str]) -> None:
    """Open the store again: every answered record is there, and no two have the same attempt number."""
    site = open_site(settings_in(folder))
    reader = Actor("auditor", frozenset({"auditor"}), "test")
    attempts = {read.decision(site, reader, record_id).document["attempt"] for record_id in answered}
    with site.store.reading() as view:
        total = view.attempts("PX-2601", "premix-a")
    site.store.close()
    assert len(attempts) == len(answered) <= total
    assert attempts <= set(range(1, total + 1))
