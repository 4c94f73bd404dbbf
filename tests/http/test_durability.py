"""An answered decision is there after the service was killed without warning."""

from __future__ import annotations

import os
import signal
import threading
from pathlib import Path

import pytest
import requests

from service.domain.actor import Actor
from service.procedures import read
from service.procedures.opening import open_site
from tests.live import serving
from tests.plant import open_plant, request_for, settings_in


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    opened = open_plant(tmp_path).approved()
    opened.site.store.close()
    (tmp_path / "token").write_text(opened.tokens["pipeline"], encoding="ascii")
    return tmp_path


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

    with serving(folder, workers=2) as (address, group):
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
