"""Old snapshots removed, and snapshots named so that they are not.

Belongs here: which snapshots may go, saying why each stays, and taking them away whole. Does not belong here:
making snapshots (`store.py`). The archive is never pruned: from it any of them can be made again.
"""

import datetime
import json
import os
import re
import shutil
from dataclasses import dataclass
from pathlib import Path

from catalog.places import Places, store_errors, write_lock, write_whole
from catalog.runs import read_runs
from catalog.standing import current_snapshot, find_snapshot, list_snapshots, named_snapshots, read_manifest
from contracts.errors import StoreUnsound, UsageError

LEAST_DAYS = 7
_NAME = re.compile(r"[a-z][a-z0-9_.-]{0,39}")


@dataclass(frozen=True)
class Judged:
    """One snapshot: whether it goes, why or why not, and the bytes that no other snapshot shares."""

    snapshot: str
    goes: bool
    why: str
    bytes: int


def judge_snapshots(places: Places, older_than_days: int, now: datetime.datetime) -> list[Judged]:
    """Every snapshot, oldest first, with whether it may go.

    Those that are current, named, younger than a week, or from which a kept snapshot serves a market that was
    held back, stay; so do those whose age or manifest cannot be read. Raises UsageError for less than a week.
    """
    if older_than_days < LEAST_DAYS:
        raise UsageError(f"seen {older_than_days} days; expected at least {LEAST_DAYS}: a reader may still be on them")
    current = current_snapshot(places)
    named = {snapshot: name for name, snapshot in named_snapshots(places).items()}
    ages = _ages(places, now)
    kept: dict[str, str] = {}
    names = list_snapshots(places)
    for name in names:
        age = ages.get(name)
        if name == current:
            kept[name] = "is the current one"
        elif name in named:
            kept[name] = f"is named {named[name]}"
        elif age is None:
            kept[name] = "its age is not known"
        elif age.days < older_than_days:
            kept[name] = f"is {max(age.days, 0)} days old"
    waiting = list(kept)
    while waiting:
        holder = waiting.pop()
        try:
            served = {verdict.last_good_snapshot for verdict in read_manifest(places, holder).markets.values()}
        except StoreUnsound:
            # What it leans on cannot be known, so that nothing may go.
            return [Judged(name, False, f"{holder} has no manifest that can be read", 0) for name in names]
        for name in sorted({good for good in served if good is not None} - set(kept)):
            if name in names:
                kept[name] = f"{holder} serves a market from it"
                waiting.append(name)
    return [
        Judged(name, name not in kept, kept.get(name, f"is {ages[name].days} days old") if name in ages else kept[name],
               _own_bytes(places.snapshot(name)))
        for name in names
    ]  # fmt: skip


def prune(places: Places, older_than_days: int, now: datetime.datetime) -> list[Judged]:
    """Remove what may go; returns every snapshot as judged. Takes the store's lock; raises StoreBusy, StoreError."""
    with write_lock(places):
        judged = judge_snapshots(places, older_than_days, now)
        for number, each in enumerate(each for each in judged if each.goes):
            with store_errors(f"snapshot {each.snapshot} could not be removed"):
                # Without its name it is no snapshot, however far the removal then comes; the next run sweeps it.
                doomed = places.snapshots / f".staging-{os.getpid()}-pruned-{number}"
                os.rename(places.snapshot(each.snapshot), doomed)
                shutil.rmtree(doomed)
    return judged


def name_snapshot(places: Places, name: str, snapshot: str) -> str:
    """Give a snapshot a name under which it is found and never pruned; returns the snapshot's own.

    Raises UsageError for a name of another form, one that is taken, or a snapshot that is not there.
    """
    if _NAME.fullmatch(name) is None:
        raise UsageError(f"seen the name {name!r}; expected small letters, digits, _ . or -, a letter first")
    with write_lock(places):
        found = find_snapshot(places, snapshot)
        names = named_snapshots(places)
        if names.get(name, found) != found:
            raise UsageError(f"{name} names {names[name]} already; forget it first")
        _write_names(places, {**names, name: found})
    return found


def forget_name(places: Places, name: str) -> str:
    """Take a name away; returns the snapshot it named. Raises UsageError where nothing is called so."""
    with write_lock(places):
        names = named_snapshots(places)
        if name not in names:
            raise UsageError(f"no snapshot is named {name!r}; there is {', '.join(sorted(names)) or 'none'}")
        snapshot = names.pop(name)
        _write_names(places, names)
    return snapshot


def _write_names(places: Places, names: dict[str, str]) -> None:
    with store_errors("the names could not be written"):
        write_whole(places.names, (json.dumps(names, sort_keys=True, indent=1) + "\n").encode())


def _ages(places: Places, now: datetime.datetime) -> dict[str, datetime.timedelta]:
    """Age of each snapshot by the younger of its run's end and its folder: a clock set back removes nothing."""
    ended = {
        run.snapshot: datetime.datetime.fromisoformat(run.finished_at) for run in read_runs(places) if run.snapshot
    }
    ages = {}
    for name in list_snapshots(places):
        try:
            stamp = places.snapshot(name).stat().st_mtime
        except OSError:
            continue
        made = datetime.datetime.fromtimestamp(stamp, datetime.UTC)
        ages[name] = now - max(made, ended.get(name, made))
    return ages


def _own_bytes(folder: Path) -> int:
    """Bytes of the files that no other snapshot links to."""
    total = 0
    for above, _, names in os.walk(folder):
        for name in names:
            status = os.lstat(os.path.join(above, name))
            total += status.st_size if status.st_nlink == 1 else 0
    return total
