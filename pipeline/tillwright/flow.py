"""The Prefect flow: one task per step, no statistics.

With `PREFECT_API_URL` set, runs are recorded on that server.  Without it, Prefect's API runs in a
thread of this process, on a free loopback port and with a password of its own, so that a killed run
leaves no server behind.  Prefect is imported only here, and only once a flow runs.
"""

from __future__ import annotations

import gc
import importlib
import logging
import os
import re
import secrets
import socket
import threading
import time
from collections.abc import Iterator, Sequence
from contextlib import contextmanager, nullcontext, suppress
from contextvars import copy_context
from pathlib import Path
from typing import Any

from tillwright.errors import OrchestrationError
from tillwright.stages.keyed import StepResult
from tillwright.stages.sequence import Step

logger = logging.getLogger(__name__)
PATIENCE = 20.0  # seconds without one more task recorded before a run stops waiting
RETRIES = 2  # of steps that read deliveries, after an OSError: a network share may come back


def run_flow(title: str, steps: Sequence[Step], home: Path) -> list[StepResult]:
    """Results of the steps, run in order in this thread and recorded by Prefect as one run of the flow `title`.

    Prefect's files go under `home`. What a step raises comes out as it is.

    Raises
    ------
    OrchestrationError : Prefect failed, not a step.
    """
    results: list[StepResult] = []  # not handed through Prefect, which walks into what a task returns
    failures: list[BaseException] = []
    started: list[str] = []
    run_ids: list[str] = []
    with _prefect(home.resolve()):
        from prefect import flow, runtime, task

        def record(step: Step) -> None:
            @task(
                name=step.name,
                persist_result=False,
                retries=RETRIES if step.reads_files else 0,
                retry_delay_seconds=1,
                retry_condition_fn=lambda *_: isinstance(failures[-1], OSError),
            )
            def perform() -> None:
                try:
                    results.append(step.run())
                except BaseException as failure:
                    failures.append(failure)
                    raise

            started.append(step.name)
            perform()

        @flow(name=re.sub("[/%&<>]", "-", title), persist_result=False, validate_parameters=False)
        def perform_all() -> None:
            run_ids.append(str(runtime.flow_run.id))
            for step in steps:
                record(step)

        try:
            perform_all()
        except Exception as error:
            if any(error is failure for failure in failures):
                raise
            server = os.environ.get("PREFECT_API_URL")
            where = f"on the server of PREFECT_API_URL ({server})" if server else "within this command"
            raise OrchestrationError(
                f"Prefect, {where}, broke off {title!r} after {len(results)} of {len(steps)} steps: {error} "
                "Finished steps are kept. Run again, or with --direct to do without Prefect."
            ) from error
        finally:
            if run_ids:
                _wait_for_records(run_ids[0], len(started))
    return results


def _wait_for_records(run_id: str, expected: int) -> None:
    """Return when the ends of ``expected`` tasks are in Prefect's database, which it writes behind the flow's back."""
    from prefect.client.orchestration import get_client

    ended = {"state": {"type": {"any_": ["COMPLETED", "FAILED", "CRASHED", "CANCELLED"]}}}
    query = {"flow_runs": {"id": {"any_": [run_id]}}, "task_runs": ended}
    recorded, deadline = 0, time.monotonic() + PATIENCE
    with suppress(Exception), get_client(sync_client=True) as client:
        while recorded < expected and time.monotonic() < deadline:
            time.sleep(0.02)
            count = client.request("POST", "/task_runs/count", json=query).json()
            if count > recorded:
                recorded, deadline = count, time.monotonic() + PATIENCE
    if recorded < expected:
        logger.warning("Prefect recorded the end of %d of %d tasks of run %s", recorded, expected, run_id)


@contextmanager
def _prefect(home: Path) -> Iterator[None]:
    """Import Prefect, quiet and with its files under ``home``, and keep a server in reach."""
    home.mkdir(parents=True, exist_ok=True)
    os.environ |= {"PREFECT_HOME": str(home), "DO_NOT_TRACK": "1"}
    if "PREFECT_LOGGING_LEVEL" not in os.environ:
        os.environ["PREFECT_LOGGING_SETTINGS_PATH"] = str(Path(__file__).with_name("prefect_logging.yml"))
    embedded = not os.environ.get("PREFECT_API_URL")
    gc.disable()
    importlib.import_module("prefect.server.api.server" if embedded else "prefect.main")
    gc.enable()
    gc.freeze()  # with the pause one second less: half a million objects that live as long as the process
    with _embedded_server(home) if embedded else nullcontext():
        yield


@contextmanager
def _embedded_server(home: Path) -> Iterator[None]:
    import uvicorn
    from prefect.events.worker import EventsWorker
    from prefect.server.api.server import create_app
    from prefect.server.database.dependencies import temporary_database_interface
    from prefect.settings import temporary_settings

    bypass = os.environ.get("no_proxy") or os.environ.get("NO_PROXY") or ""
    os.environ["no_proxy"] = bypass if bypass == "*" else f"{bypass},127.0.0.1"
    database = home / "prefect.db"
    listener = socket.create_server(("127.0.0.1", 0))
    password = secrets.token_urlsafe()
    settings: dict[str, Any] = {
        "home": home,
        "api.url": f"http://127.0.0.1:{listener.getsockname()[1]}/api",
        "api.auth_string": password,
        "server.api.auth_string": password,
        "server.database.connection_url": f"sqlite+aiosqlite:///{database}",
        "server.analytics_enabled": False,
        "server.services.event_persister.enabled": False,
        "server.services.triggers.enabled": False,
        "logging.to_api.enabled": False,
        "flows.heartbeat_frequency": None,  # joining its thread takes up to a second
    }
    with listener, temporary_database_interface(), temporary_settings(settings):
        app = create_app(ephemeral=True, ignore_cache=True)
        server = uvicorn.Server(uvicorn.Config(app, log_config=None, lifespan="on", ws_ping_interval=None))
        thread = threading.Thread(target=copy_context().run, args=(server.run, [listener]), daemon=True)
        thread.start()
        try:
            while not server.started:
                if not thread.is_alive():
                    raise OrchestrationError(f"Prefect cannot use {database}; PREFECT_LOGGING_LEVEL=INFO says why")
                time.sleep(0.01)
            yield
        finally:
            EventsWorker.drain_all(timeout=PATIENCE)
            server.should_exit = True
            thread.join(PATIENCE)
