"""What time it is, handed to whatever asks, so that tests can say so.

Belongs here: the clock of the machine. Does not belong here: what is due by it (`contracts/due.py`).
"""

import datetime
import time
from typing import Protocol


class Clock(Protocol):
    """Tells the time and lets it pass."""

    def now(self) -> datetime.datetime:
        """The moment, with a zone."""

    def sleep(self, seconds: float) -> None:
        """Come back after so many seconds."""


class WallClock:
    """The machine's own."""

    def now(self) -> datetime.datetime:
        """The moment, in UTC."""
        return datetime.datetime.now(datetime.UTC)

    def sleep(self, seconds: float) -> None:
        """Come back after so many seconds; a signal ends it by what its handler raises."""
        time.sleep(seconds)


WALL = WallClock()
