"""The exit codes, in one place, and the two ways a command is stopped from outside.

Belongs here: the codes and which error means which. Does not belong here: how an error is shown (`shell.py`).
"""

import signal
import threading
from collections.abc import Iterator
from contextlib import contextmanager
from enum import IntEnum
from types import FrameType

from contracts.errors import DeskError, RopewalkError, StoreError, StoreUnsound, UsageError


class Exit(IntEnum):
    """What a command's end means to the scheduler that started it."""

    DONE = 0
    BUG = 1
    REFUSED = 2
    HELD_BACK = 3
    NOT_PUBLISHED = 4
    UNSOUND = 5
    INTERRUPTED = 130
    TERMINATED = 143


MEANINGS: dict[Exit, str] = {
    Exit.DONE: "published, or nothing to do; answered",
    Exit.BUG: "a bug in this program",
    Exit.REFUSED: "wrong usage or a wrong desk, nothing touched",
    Exit.HELD_BACK: "published, some markets held back",
    Exit.NOT_PUBLISHED: "nothing published, the last snapshot stands",
    Exit.UNSOUND: "the store does not verify",
    Exit.INTERRUPTED: "stopped by Ctrl-C, the last snapshot stands",
    Exit.TERMINATED: "stopped by SIGTERM, the last snapshot stands",
}


def exit_table() -> list[str]:
    """The codes and their meanings, one a line."""
    return [f"{code.value:>3}  {meaning}" for code, meaning in MEANINGS.items()]


def code_of(error: RopewalkError) -> Exit:
    """The exit code of an error that is raised on purpose."""
    if isinstance(error, DeskError | UsageError):
        return Exit.REFUSED
    if isinstance(error, StoreUnsound):
        return Exit.UNSOUND
    if isinstance(error, StoreError):
        return Exit.NOT_PUBLISHED
    return Exit.REFUSED


class Terminated(BaseException):
    """SIGTERM arrived. Like KeyboardInterrupt it passes every `except Exception` on its way out."""


_ended: list[int] = []


def was_terminated() -> bool:
    """Whether SIGTERM has arrived, for where what was raised on it got lost, as within a query of DuckDB."""
    return bool(_ended)


@contextmanager
def sigterm_raises() -> Iterator[None]:
    """Turn the first SIGTERM into Terminated, so that locks and staging folders are freed on the way out.

    A second one kills at once. Signals reach only the main thread; elsewhere this does nothing.
    """
    if threading.current_thread() is not threading.main_thread():
        yield
        return

    def stop(_signal: int, _frame: FrameType | None) -> None:
        signal.signal(signal.SIGTERM, signal.SIG_DFL)
        _ended.append(signal.SIGTERM)
        raise Terminated

    before = signal.signal(signal.SIGTERM, stop)
    _ended.clear()
    try:
        yield
    finally:
        signal.signal(signal.SIGTERM, before)
