"""A Prefect server of the tests' own, and the environment that commands get."""

from __future__ import annotations

import os
import socket
import subprocess
import sys
import time
import urllib.error
import urllib.request
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

PATIENCE = 120


def clean_environment(**more: str) -> dict[str, str]:
    """This process's environment without Prefect's settings; byte code may be written, or each start compiles anew."""
    dropped = ("PREFECT_", "PYTHONDONTWRITEBYTECODE")
    return {name: value for name, value in os.environ.items() if not name.startswith(dropped)} | more


@contextmanager
def running_server(home: Path) -> Iterator[str]:
    """The API address of a server on a free port, with its files under `home`."""
    with socket.create_server(("127.0.0.1", 0)) as free:
        port = free.getsockname()[1]
    url = f"http://127.0.0.1:{port}/api"
    command = [sys.executable, "-m", "prefect", "server", "start", "--host", "127.0.0.1", "--port", str(port)]
    settings = clean_environment(
        PREFECT_HOME=str(home),
        PREFECT_SERVER_ANALYTICS_ENABLED="false",
        DO_NOT_TRACK="1",
        PREFECT_SERVER_UI_API_URL=url,
    )
    quiet = subprocess.DEVNULL
    with subprocess.Popen(command, env=settings, stdout=quiet, stderr=quiet) as process:
        try:
            _wait_for(f"{url}/health")
            yield url
        finally:
            process.terminate()


def _wait_for(url: str) -> None:
    deadline = time.monotonic() + PATIENCE
    while time.monotonic() < deadline:
        try:
            urllib.request.urlopen(url, timeout=5).close()
        except (urllib.error.URLError, OSError):
            time.sleep(0.2)
        else:
            return
    raise TimeoutError(f"no Prefect server at {url}")
