"""The documented recipe, run for real: a Prefect server on PostgreSQL, and a night against it."""

import os
import shutil
import socket
import subprocess
import sys
import time
import urllib.request
from collections.abc import Iterator
from pathlib import Path

import pytest

from tests.flows.conftest import RunApart

pytestmark = pytest.mark.skipif(
    os.environ.get("ROPEWALK_POSTGRES") != "1", reason="needs Debian's postgresql; ROPEWALK_POSTGRES=1"
)


def free_port() -> int:
    with socket.socket() as found:
        found.bind(("127.0.0.1", 0))
        return int(found.getsockname()[1])


@pytest.fixture
def database(tmp_path_factory: pytest.TempPathFactory) -> Iterator[str]:
    """The address of a new PostgreSQL on loopback, with trust and nothing in it."""
    programs = sorted(Path("/usr/lib/postgresql").glob("*/bin"))
    assert programs, "no PostgreSQL from Debian's packages: apt-get install postgresql"
    # It refuses to run as root.
    as_other = ["runuser", "-u", "postgres", "--"] if os.getuid() == 0 else []
    folder = Path("/tmp") / f"ropewalk-postgres-{os.getpid()}"
    folder.mkdir()
    if as_other:
        shutil.chown(folder, "postgres")
    port, data = free_port(), folder / "data"

    def call(program: str, *words: str) -> None:
        subprocess.run([*as_other, str(programs[-1] / program), *words], check=True, cwd="/", stdout=subprocess.DEVNULL)

    try:
        call("initdb", "-D", str(data), "-U", "prefect", "--auth", "trust")
        options = f"-c listen_addresses=127.0.0.1 -c unix_socket_directories={folder} -p {port}"
        call("pg_ctl", "-D", str(data), "-w", "-l", str(folder / "log"), "-o", options, "start")
        try:
            call("createdb", "-h", "127.0.0.1", "-p", str(port), "-U", "prefect", "prefect")
            yield f"postgresql+asyncpg://prefect@127.0.0.1:{port}/prefect"
        finally:
            call("pg_ctl", "-D", str(data), "-w", "-m", "immediate", "stop")
    finally:
        shutil.rmtree(folder, ignore_errors=True)


def test_a_night_against_a_server_on_postgresql_keeps_every_task_run(
    desk: Path, tmp_path: Path, database: str, run_apart: RunApart
) -> None:
    port = free_port()
    environment = {**os.environ, "HOME": str(tmp_path), "PREFECT_SERVER_DATABASE_CONNECTION_URL": database,
                   "PREFECT_SERVER_ANALYTICS_ENABLED": "false", "PREFECT_UI_ENABLED": "0"}  # fmt: skip
    start = [sys.executable, "-m", "prefect", "server", "start", "--host", "127.0.0.1", "--port", str(port)]
    with (tmp_path / "server.log").open("w") as log:
        server = subprocess.Popen(start, env=environment, stdout=log, stderr=log)
    try:
        url = f"http://127.0.0.1:{port}/api"
        _wait_for(f"{url}/health", server)
        done = run_apart("nightly", "--desk", desk, PREFECT_API_URL=url)
        assert (done.returncode, done.stderr) == (0, ""), (tmp_path / "server.log").read_text()[-2000:]
        assert done.stdout.splitlines()[-1] == "  Prefect keeps 2 of 2 task runs"
    finally:
        server.terminate()
        server.wait(30)


def _wait_for(url: str, server: "subprocess.Popen[bytes]") -> None:
    end = time.monotonic() + 180
    while server.poll() is None and time.monotonic() < end:
        try:
            with urllib.request.urlopen(url, timeout=5) as answer:
                if answer.status == 200:
                    return
        except OSError:
            time.sleep(0.5)
    raise AssertionError("the server did not start")
