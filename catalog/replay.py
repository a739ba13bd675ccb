"""What past nights knew, and the part of an archive they knew it from.

Belongs here: which raw files a store had published from by a day, and copying these into another store. Does not
belong here: running the nights (`flows/replay.py`).

Raw files carry the number of their intake and no clock. The runs carry both: by the end of a day a store had
published from every file up to the intake of its newest run. Before its first run nothing was known in this
sense; such days are replayed from the first run's files, cut at the day, so that what was restated before these
files came cannot be told apart.
"""

import datetime
import os
import shutil
import zoneinfo
from dataclasses import dataclass
from itertools import groupby
from pathlib import Path

from catalog.archive import append_register, parse_register
from catalog.declarations import Desk
from catalog.places import PART, Places, store_errors, sync_folder
from catalog.runs import read_runs
from catalog.standing import current_snapshot, read_manifest
from contracts.errors import StoreError, UsageError
from contracts.sessions import day_number, day_of, market_days


@dataclass(frozen=True)
class Known:
    """What a night of a day is replayed from: every file up to an intake, and that in words."""

    day: datetime.date
    intake: int
    text: str


def session_days(desk: Desk, first: datetime.date, last: datetime.date) -> list[datetime.date]:
    """The days from `first` to `last`, both included, that are a session of any market of the desk."""
    numbers: set[int] = set()
    for market in desk.markets.values():
        days = market_days(market, first.year, last.year)
        numbers |= set(days.between(day_number(first), day_number(last)).tolist())
    return [day_of(number) for number in sorted(numbers)]


def known_on(source: Places, days: list[datetime.date], zone: str) -> list[Known]:
    """What a store had published from by the end of each day in a time zone.

    Raises UsageError where the store has no archive.
    """
    arrivals, _ = parse_register(source)
    if not arrivals:
        raise UsageError(f"{source.store}: no raw file was ever taken in here; name the store to replay with --archive")
    there = zoneinfo.ZoneInfo(zone)
    ended = sorted(
        (datetime.datetime.fromisoformat(run.finished_at).astimezone(there).date(), run.intake)
        for run in read_runs(source)
        if run.intake
    )
    first = ended[0][1] if ended else arrivals[0].taken_in
    found = []
    for day in days:
        intakes = [intake for date, intake in ended if date <= day]
        if intakes:
            text = f"the raw files published from by {day}, to intake {max(intakes)}"
            found.append(Known(day, max(intakes), text))
        else:
            text = f"no run by {day}: the raw files of the first run, to intake {first}, cut at this session"
            found.append(Known(day, int(first or 1), text))
    return found


def check_target(source: Places, target: Places) -> datetime.date | None:
    """The day up to which nights were replayed into a store before; None where it is empty.

    Raises UsageError for a store that is the replayed one or has nights of its own.
    """
    if source.store.resolve() == target.store.resolve():
        raise UsageError(f"{target.store}: is the store to be replayed; name another with --store")
    name = current_snapshot(target)
    if name is None:
        if parse_register(target)[0]:
            raise UsageError(f"{target.store}: has an archive of its own; name an empty store with --store")
        return None
    summary = read_manifest(target, name).summary
    if "known" not in summary or "until" not in summary:
        raise UsageError(f"{target.store}: has nights of its own, which a replay would put back; name another --store")
    return datetime.date.fromisoformat(summary["until"])


def copy_arrivals(source: Places, target: Places, intake: int) -> int:
    """Bring a store's archive up to another's as of an intake, under the same numbers; returns how many files came.

    Bytes are shared by hard links where both lie on one disk. The caller holds the target's lock. Raises
    StoreError.
    """
    there, _ = parse_register(source)
    here, whole = parse_register(target)
    if here != there[: len(here)]:
        raise StoreError(f"{target.register}: does not begin as {source.register} does; replay into an empty store")
    fresh = [arrival for arrival in there[len(here) :] if arrival.taken_in <= intake]
    with store_errors("the archive could not be copied"):
        target.archive.mkdir(parents=True, exist_ok=True)
        for arrival in fresh:
            _share(source.archived(arrival.file), target.archived(arrival.file))
        for folder in sorted({target.archived(arrival.file).parent for arrival in fresh}):
            sync_folder(folder)
        sync_folder(target.archive)
        for _, arrivals in groupby(fresh, key=lambda arrival: arrival.taken_in):
            append_register(target, whole, list(arrivals))
            whole = target.register.stat().st_size
    return len(fresh)


def _share(source: Path, target: Path) -> None:
    if target.exists():
        return
    target.parent.mkdir(exist_ok=True)
    try:
        os.link(source, target)
    except OSError:
        # Another disk, or one without links; a missing source fails here too, and says so.
        part = target.with_name(f".{target.name}{PART}")
        shutil.copyfile(source, part)
        with part.open("rb") as copied:
            os.fsync(copied.fileno())
        os.replace(part, target)
