"""A small desk of two markets, and the command line called in this process or in one of its own."""

import os
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from tests.integration.tiny import write_desk, write_raw

ROOT = Path(__file__).resolve().parent.parent.parent

Run = Callable[..., Result]
RunApart = Callable[..., subprocess.CompletedProcess[str]]


@pytest.fixture
def desk(tmp_path: Path) -> Path:
    """A desk of the markets TINA and TINB with the raw files of 80 sessions, and nothing published."""
    made = write_desk(tmp_path)
    write_raw(made, 80)
    return made


@pytest.fixture
def run() -> Run:
    """Call the command line in this process."""

    def call(*arguments: object) -> Result:
        from flows.commands import main

        return CliRunner().invoke(main, [str(argument) for argument in arguments])

    return call


@pytest.fixture
def run_apart(tmp_path: Path) -> RunApart:
    """Call the command line in a process of its own, with a home nobody has used yet."""
    home = tmp_path / "home"
    home.mkdir()

    def call(*arguments: object, code: str | None = None, **extra: str) -> subprocess.CompletedProcess[str]:
        kept = {name: value for name, value in os.environ.items() if not name.startswith("PREFECT")}
        environment = {**kept, "HOME": str(home), "PYTHONPATH": str(ROOT), **extra}
        start = ["-m", "flows.commands"] if code is None else ["-c", code]
        return subprocess.run(
            [sys.executable, *start, *map(str, arguments)],
            capture_output=True,
            text=True,
            env=environment,
            cwd=tmp_path,
            timeout=300,
            check=False,
        )

    return call
