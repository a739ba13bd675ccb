"""A Prefect API to report a night to: the configured one, or an own one for the length of the run.

Belongs here: what it takes to lose no record of a run and to print nothing that is not about the night. Does
not belong here: the night (`nightly.py`). Values below were measured with Prefect 3.9.1.
"""

import logging
import os
import signal
import subprocess
import sys
import threading
import time
from collections.abc import Iterator
from contextlib import ExitStack, contextmanager
from contextvars import copy_context
from dataclasses import dataclass
from typing import Any
from uuid import UUID

# These are read while Prefect is imported and by the server's own process. Without the first two a first run
# on a terminal sends a message out and prints a notice about it, and where there is no way out, error lines
# follow.
os.environ.setdefault("DO_NOT_TRACK", "1")
os.environ.setdefault("PREFECT_SERVER_ANALYTICS_ENABLED", "false")
# Prefect's lines about every market stay out of the terminal, also those of its server and of worker
# processes; the API still gets them. Where a person sets Prefect's logging level in the environment, that is
# what they get.
if "PREFECT_LOGGING_LEVEL" not in os.environ:
    os.environ.setdefault("PREFECT_LOGGING_HANDLERS_CONSOLE_LEVEL", "CRITICAL")
    os.environ.setdefault("PREFECT_LOGGING_HANDLERS_DEBUG_LEVEL", "CRITICAL")
    # Else the standard library prints a traceback for each log line that a lost API does not take.
    logging.raiseExceptions = False

from prefect.client.orchestration import get_client
from prefect.events.worker import EventsWorker
from prefect.logging.handlers import APILogWorker
from prefect.server.api.server import SubprocessASGIServer
from prefect.settings import (
    PREFECT_API_REQUEST_TIMEOUT,
    PREFECT_API_URL,
    PREFECT_CLIENT_MAX_RETRIES,
    PREFECT_FLOWS_HEARTBEAT_FREQUENCY,
    PREFECT_SERVER_SERVICES_TASK_RUN_RECORDER_BATCH_SIZE,
    PREFECT_SERVER_SERVICES_TASK_RUN_RECORDER_FLUSH_INTERVAL,
    PREFECT_SERVER_SERVICES_TASK_RUN_RECORDER_READ_BATCH_SIZE,
    get_current_settings,
    temporary_settings,
)

# A fresh home makes its database first: over 20 s on two cores, where the ordinary time-out is 20 s.
START_SECONDS = 120
DRAIN_SECONDS = 30.0
# An own server's recorder writes once a second, several batches side by side: the last of them may still be
# at work when every run is there.
SETTLE_SECONDS = 1.5
# A count that stands still for this long will not grow any more.
STABLE_SECONDS = 5.0
LONGEST_WAIT_SECONDS = 60.0


_lost = threading.Event()


def note_loss() -> None:
    """Remember that the API went away while it was being told things."""
    _lost.set()


def is_lost() -> bool:
    """Whether the API went away. Prefect then goes on trying for many minutes after the work is done, also
    when the interpreter ends, so that the process has to leave without waiting for it."""
    return _lost.is_set()


class Unreachable(Exception):
    """There is no Prefect API to report to; the message says which and why."""


@dataclass(frozen=True)
class Api:
    """The API of one run: its address, and whether it is our own and ends with the run."""

    url: str
    is_own: bool


@contextmanager
def reach_api(is_lasting: bool = False) -> Iterator[Api]:
    """The API that Prefect's settings name, else an own server that is stopped at the end.

    One that `is_lasting` also runs what keeps schedules, which one for a single night has no use for.

    Raises Unreachable where the configured one does not answer or an own one does not start.
    """
    with ExitStack() as stack:
        settings = get_current_settings()
        if "max_retries" not in settings.client.model_fields_set:
            # Prefect tries every call for a minute before it gives in; the night has several, and signals to
            # keep to.
            stack.enter_context(temporary_settings({PREFECT_CLIENT_MAX_RETRIES: 2}))
        if "heartbeat_frequency" not in settings.flows.model_fields_set:
            # Its thread alone makes an empty flow last a second longer.
            stack.enter_context(temporary_settings({PREFECT_FLOWS_HEARTBEAT_FREQUENCY: None}))
        configured = settings.api.url
        api = Api(configured, False) if configured else stack.enter_context(_own_server(is_lasting))
        _check(api)
        yield api


class _LastingServer(SubprocessASGIServer):
    """An own server with all its services; Prefect's one for a short time makes no run of any schedule."""

    def _run_uvicorn_command(self) -> "subprocess.Popen[Any]":
        app = ["--factory", "prefect.server.api.server:create_app", "--log-level", "error", "--lifespan", "on"]
        place = ["--host", "127.0.0.1", "--port", str(self.port)]
        settings = get_current_settings().to_environment_variables(exclude_unset=True)
        return subprocess.Popen(  # noqa: S603  our own interpreter, and no word of it from outside
            [sys.executable, "-m", "uvicorn", *app, *place],
            env={**os.environ, "PREFECT_UI_ENABLED": "0", "PREFECT__SERVER_FINAL": "1", **settings},
        )


@contextmanager
def _own_server(is_lasting: bool) -> Iterator[Api]:
    batches: dict[Any, Any] = {
        PREFECT_SERVER_SERVICES_TASK_RUN_RECORDER_BATCH_SIZE: 500,
        PREFECT_SERVER_SERVICES_TASK_RUN_RECORDER_READ_BATCH_SIZE: 500,
        PREFECT_SERVER_SERVICES_TASK_RUN_RECORDER_FLUSH_INTERVAL: 1,
    }
    with temporary_settings(batches):
        server = _LastingServer() if is_lasting else SubprocessASGIServer()
        try:
            _start_deaf(server)
            with temporary_settings({PREFECT_API_URL: server.api_url}):
                yield Api(server.api_url, True)
        finally:
            server.stop()


def _start_deaf(server: SubprocessASGIServer) -> None:
    """Start the server so that Ctrl-C, which reaches the whole process group, does not end it before it has
    been told how the run ended: a process inherits the blocked signals of the thread that starts it."""
    failures: list[Exception] = []

    def start() -> None:
        if hasattr(signal, "pthread_sigmask"):
            signal.pthread_sigmask(signal.SIG_BLOCK, {signal.SIGINT})
        try:
            server.start(timeout=START_SECONDS)
        except Exception as error:  # whatever keeps it from starting, the night goes on without it
            failures.append(error)

    thread = threading.Thread(target=copy_context().run, args=(start,), daemon=True)
    thread.start()
    thread.join()
    if failures:
        raise Unreachable(f"an own Prefect server did not start: {_first_line(failures[0])}") from failures[0]


def _check(api: Api) -> None:
    # One attempt: Prefect's own client would try again for a minute before the night could start.
    with temporary_settings({PREFECT_CLIENT_MAX_RETRIES: 0, PREFECT_API_REQUEST_TIMEOUT: 10.0}):
        try:
            with get_client(sync_client=True) as client:
                client.raise_for_api_version_mismatch()
        except Exception as error:  # refused, no such host, a page that is no API, another version: all the same
            cause = error.__cause__ or error
            raise Unreachable(f"the Prefect API at {_shown(api.url)} cannot be used: {_first_line(cause)}") from error


def _shown(url: str) -> str:
    """The address without a name and password that may stand in it."""
    scheme, _, rest = url.rpartition("://")
    return f"{scheme}://{rest.rpartition('@')[2]}" if scheme else rest


def _first_line(error: BaseException) -> str:
    return (str(error) or type(error).__name__).splitlines()[0]


def drain(seconds: float = DRAIN_SECONDS) -> None:
    """Send every event and log line that is still waiting in this process; gives up after so many seconds
    each."""
    for worker in (EventsWorker, APILogWorker):
        worker.drain_all(timeout=seconds, at_exit=False)


def count_recorded(api: Api, run: UUID, expected: int) -> int:
    """How many task runs of a flow run the API keeps as finished.

    They are recorded some time after they end: waits until all `expected` are there, or their number stands
    still for 5 s, or 60 s have passed.
    """
    started = grown = time.monotonic()
    most = 0
    asked = {
        "flow_runs": {"id": {"any_": [str(run)]}},
        "task_runs": {"state": {"type": {"any_": ["COMPLETED", "FAILED", "CRASHED", "CANCELLED"]}}},
    }
    with get_client(sync_client=True) as client:
        while True:
            finished = int(client.request("POST", "/task_runs/count", json=asked).json())
            now = time.monotonic()
            if finished > most:
                most, grown = finished, now
            if most >= expected or now - grown > STABLE_SECONDS or now - started > LONGEST_WAIT_SECONDS:
                break
            time.sleep(0.25)
    if api.is_own and expected:
        time.sleep(SETTLE_SECONDS)
    return most
