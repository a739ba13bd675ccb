"""Waiting for files that are overdue or still being written, up to the desk's limit.

Belongs here: when to look again and when to go on without them. Does not belong here: what is overdue
(`catalog/lateness.py`).
"""

import datetime
from collections.abc import Callable
from typing import TYPE_CHECKING

from flows.clock import Clock
from flows.settings import Where

if TYPE_CHECKING:
    from catalog.lateness import SeenBars
    from catalog.look import Look

LOOK_EVERY_SECONDS = 60.0
# Who writes a file is done with it soon.
LOOK_AGAIN_SECONDS = 10.0


def wait_for_files(where: Where, clock: Clock, seen: "SeenBars", tell: Callable[[str], None]) -> None:
    """Look at what arrives until nothing is overdue and no file is being written, or the desk's wait is over.

    `tell` is called with one line each time what is waited for changes. The caller holds the store's lock: a
    night that waits is a night under way. Raises DeskError, StoreError.
    """
    from catalog.declarations import load_desk
    from catalog.look import look

    minutes = load_desk(where.desk).run.wait_minutes
    if not minutes or where.until is not None or where.known is not None:
        return
    end = clock.now() + datetime.timedelta(minutes=minutes)
    told = ""
    while True:
        now = clock.now()
        found = look(where.desk, where.raw, where.store, now, seen)
        left = (end - now).total_seconds()
        if found.is_complete or left <= 0:
            return
        text = _describe(found)
        if text != told:
            tell(f"waiting until {end:%H:%M} UTC at the latest for {text}")
            told = text
        every = LOOK_EVERY_SECONDS if found.overdue else LOOK_AGAIN_SECONDS
        clock.sleep(min(every, left))


def _describe(found: "Look") -> str:
    parts = []
    if found.overdue:
        parts.append(f"files of {', '.join(entry.market for entry in found.overdue)}")
    if found.being_written:
        more = f" and {len(found.being_written) - 3} more" if len(found.being_written) > 3 else ""
        parts.append(f"{', '.join(found.being_written[:3])}{more}, still being written")
    return " and ".join(parts)
