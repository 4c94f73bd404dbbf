"""The real service under gunicorn, on a loopback port, stopped by its own process group."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import requests


@contextmanager
def serving(folder: Path, *, workers: int = 1, **settings: str) -> Iterator[tuple[str, int]]:
    """Yield the address and the process group of the service on a store in `folder`; kill the group at the end."""
    given = {f"ACCEPTANCE_{name}": value for name, value in settings.items()}
    process = subprocess.Popen(
        [sys.executable, "-m", "service", "serve", "--port", "0", "--workers", str(workers)],
        env={**os.environ, "ACCEPTANCE_DATA": str(folder), **given},
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
