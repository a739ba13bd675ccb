"""The exit codes, in one place, and the two ways a command is stopped from outside.

Belongs here: the codes and which error means which. Does not belong here: how an error is shown (`shell.py`).
"""

import errno
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


# The world, not the program: a full disk, a folder that may not be written, a broken drive.
_WORLD = frozenset({errno.ENOSPC, errno.EDQUOT, errno.EROFS, errno.EACCES, errno.EPERM, errno.EIO, errno.EMFILE})
# What DuckDB raises in the place of what a signal raised.
_CUT_QUERY = "Query interrupted"
# What is said where not even a library can be loaded or a thread started.
_SHORT_OF_MEMORY = ("failed to map segment", "annot allocate memory", "can't start new thread")


def is_short_of_memory(error: BaseException) -> bool:
    """Whether there was too little memory."""
    return isinstance(error, MemoryError) or any(sign in str(error) for sign in _SHORT_OF_MEMORY)


def code_of_any(error: BaseException) -> Exit:
    """The exit code of whatever ends a command."""
    if isinstance(error, RopewalkError):
        return code_of(error)
    if isinstance(error, KeyboardInterrupt):
        return Exit.INTERRUPTED
    if isinstance(error, Terminated):
        return Exit.TERMINATED
    if isinstance(error, RuntimeError) and str(error) == _CUT_QUERY:
        return Exit.TERMINATED if _ended else Exit.INTERRUPTED
    if is_short_of_memory(error) or (isinstance(error, OSError) and error.errno in _WORLD):
        return Exit.NOT_PUBLISHED
    return Exit.BUG


class Terminated(BaseException):
    """SIGTERM arrived. Like KeyboardInterrupt it passes every `except Exception` on its way out."""


_ended: list[int] = []


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
