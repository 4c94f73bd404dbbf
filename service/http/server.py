"""gunicorn, with the settings that matter and why."""

from __future__ import annotations

import os
import socket
from collections.abc import Mapping
from typing import TYPE_CHECKING, Any

from gunicorn.app.base import BaseApplication

if TYPE_CHECKING:
    from flask import Flask


def settings_for(workers: int) -> dict[str, Any]:
    """Return gunicorn's settings.

    Parameters
    ----------
    workers : int
        Processes; SQLite takes one writer at a time, so more help only with reading and computing.
    """
    return {
        "workers": workers,
        "worker_class": "gthread",
        "threads": 4,
        # gthread does not end a slow request; the limit is on a worker that stops answering its master.
        "timeout": 60,
        "graceful_timeout": 30,
        # A heartbeat file on a disk can block; memory cannot.
        "worker_tmp_dir": "/dev/shm" if os.path.isdir("/dev/shm") else None,  # noqa: S108, PTH112 - a mount point
        # A socket that can stop the server has no place in a release path.
        "control_socket_disable": True,
        "loglevel": "warning",
        "accesslog": None,
    }


class Server(BaseApplication):  # type: ignore[misc]
    """The service under gunicorn; each worker opens store and key for itself, after the fork."""

    def __init__(self, options: Mapping[str, Any]) -> None:
        self.options = options
        super().__init__()

    def load_config(self) -> None:
        """Hand the settings to gunicorn."""
        for name, value in self.options.items():
            self.cfg.set(name, value)

    def load(self) -> Flask:
        """Make the application, in the worker."""
        from service.http.app import create_app

        return create_app()


def run(host: str, port: int, workers: int) -> None:
    """Serve until stopped.

    Parameters
    ----------
    host : str
        Address to listen on.
    port : int
        Port; 0 takes a free one.
    workers : int
        Processes.

    Raises
    ------
    ServiceError
        Where the site cannot be opened; said before any worker starts.
    """
    # One BLAS thread a worker: matrices are small, and threads would only compete for cores.  It counts
    # only where it is said before numpy is loaded, which the next imports do.
    os.environ.setdefault("OPENBLAS_NUM_THREADS", "1")
    from service.config import Settings
    from service.procedures.opening import open_site

    site = open_site(Settings.from_environment(os.environ))
    site.store.close()
    port = port or _free_port(host)
    print(f"Listening on http://{host}:{port}", flush=True)  # noqa: T201 - the line that a starter waits for
    # Auditors pin this; it must reach them on another way than through the service.
    print(f"Record key {site.signer.kid}", flush=True)  # noqa: T201
    Server({"bind": f"{host}:{port}", **settings_for(workers)}).run()


def _free_port(host: str) -> int:
    with socket.create_server((host, 0)) as probe:
        return int(probe.getsockname()[1])
