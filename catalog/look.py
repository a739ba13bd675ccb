"""A look at what has arrived, before a night begins.

Belongs here: taking in and saying what a night could still wait for. Does not belong here: how long it waits
(`flows/waiting.py`), what a night then does (`night.py`).
"""

import datetime
from dataclasses import dataclass
from pathlib import Path

from catalog.archive import take_in
from catalog.assignment import assign_files
from catalog.declarations import load_desk
from catalog.lateness import Overdue, SeenBars, find_overdue
from catalog.places import Places
from catalog.standing import current_snapshot, read_manifest
from catalog.store import clean_leftovers


@dataclass(frozen=True)
class Look:
    """What is overdue, and the paths of files that were being written when they were read."""

    overdue: tuple[Overdue, ...]
    being_written: tuple[str, ...]

    @property
    def is_complete(self) -> bool:
        """Whether there is nothing to wait for."""
        return not self.overdue and not self.being_written


def look(desk_path: Path, raw: Path | None, store: Path, now: datetime.datetime, seen: SeenBars) -> Look:
    """Take in what is there and say what is not; the caller holds the store's write lock.

    Raises DeskError, StoreError.
    """
    desk, places = load_desk(desk_path), Places(store)
    clean_leftovers(places)
    intake = take_in((raw or desk.raw).resolve(), places)
    name = current_snapshot(places)
    last = read_manifest(places, name) if name is not None else None
    overdue = find_overdue(desk, assign_files(desk, intake, places).files, last, places, now, seen)
    return Look(overdue, tuple(problem.path for problem in intake.problems if problem.may_pass))
