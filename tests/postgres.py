"""A PostgreSQL of the tests' own: local server binaries, a socket in a temporary folder, stopped at the end."""

from __future__ import annotations

import os
import shutil
import subprocess
import tempfile
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path


def binaries() -> Path | None:
    """Return the folder of the newest server's programs on this machine, or None."""
    found = sorted(Path("/usr/lib/postgresql").glob("*/bin/initdb"), key=lambda path: int(path.parts[-3]))
    if found:
        return found[-1].parent
    local = shutil.which("initdb")
    return Path(local).parent if local else None


@contextmanager
def postgresql() -> Iterator[str]:
    """Yield the SQLAlchemy address of a new, empty server; its durability settings are the default ones."""
    programs = binaries()
    assert programs is not None
    folder = Path(tempfile.mkdtemp(prefix="pg-", dir="/tmp"))
    # The server refuses to run as root.
    account = ["setpriv", "--reuid=65534", "--regid=65534", "--clear-groups"] if os.geteuid() == 0 else []
    if account:
        os.chown(folder, 65534, 65534)

    def run(*command: str) -> None:
        subprocess.run([*account, *command], check=True, capture_output=True, cwd=folder, env={"LC_ALL": "C"})

    data = folder / "data"
    try:
        run(str(programs / "initdb"), "-D", str(data), "-U", "site", "-A", "trust", "-E", "UTF8")
        options = f"-c listen_addresses= -c unix_socket_directories={folder}"
        run(str(programs / "pg_ctl"), "-D", str(data), "-w", "-l", str(folder / "log"), "-o", options, "start")
        try:
            yield f"postgresql+psycopg://site@/postgres?host={folder}"
        finally:
            run(str(programs / "pg_ctl"), "-D", str(data), "-w", "-m", "immediate", "stop")
    finally:
        shutil.rmtree(folder, ignore_errors=True)
