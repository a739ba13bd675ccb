"""Past nights, one a session day, into a store of its own.

Belongs here: the order of the nights and how their ends are told. Does not belong here: what each of them knew
(`catalog/replay.py`), the night itself (`work.py`).
"""

import datetime
import os
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

from catalog.declarations import load_desk
from catalog.places import Places, write_lock
from catalog.replay import Known, check_target, copy_arrivals, known_on, session_days
from contracts.errors import UsageError
from flows.exits import Exit
from flows.render import complain, say, say_json
from flows.settings import Where
from flows.shell import Asked
from flows.work import check_usage


def replay(
    asked: Asked, span: tuple[datetime.date, datetime.date], archive: str | None, jobs: int | None,
    markets: tuple[str, ...],
) -> Exit:  # fmt: skip
    """Run the nights of a span of days; returns the gravest exit code of any.

    Nights that the store has already are passed over, so that a replay that was stopped goes on where it was.
    Raises UsageError where it would touch a store that has nights of its own, and what a night raises.
    """
    first, last = span
    if first > last:
        raise UsageError(f"--from {first} --to {last}: expected the first day not after the last")
    if asked.store is None:
        raise UsageError("--from and --to: expected --store too, a store of its own that the nights are replayed into")
    desk = load_desk(asked.desk_folder())
    for code in markets:
        if code not in desk.markets:
            raise UsageError(f"no market {code!r} to build; there is {', '.join(desk.markets)}")
    where = replace(asked.where(), markets=tuple(sorted(set(markets))), known="")
    check_usage(where)
    origin = Path(os.path.abspath(archive)) if archive is not None else replace(asked, store=None).where().store
    source, target = Places(origin), Places(where.store)
    done = check_target(source, target)
    days = [day for day in session_days(desk, first, last) if done is None or day > done]
    nights = known_on(source, days, desk.schedule.timezone)
    return _run(_lay_out(nights, source, target, where), jobs, asked.as_json, done)


def _lay_out(nights: list[Known], source: Places, target: Places, where: Where) -> Iterator[Where]:
    """Each night, once the archive it knew is there."""
    for known in nights:
        with write_lock(target):
            copy_arrivals(source, target, known.intake)
        yield replace(where, until=known.day.isoformat(), known=known.text)


def _run(nights: Iterator[Where], jobs: int | None, as_json: bool, done: datetime.date | None) -> Exit:
    from flows.nightly import watch_nights

    code, told_nights = Exit.DONE, []
    for told in watch_nights(nights, jobs):
        assert told.summary is not None
        code = max(code, Exit(told.summary.exit_code))
        told_nights.append(told.summary.as_json())
        if not as_json:
            say([f"{told.summary.until}: {told.summary.lines()[0]}; {told.summary.known}"])
            say(f"  held back: {market}: {reason}" for market, reason in told.summary.held_back)
        for note in told.notes:
            complain(note)
    if as_json:
        say_json({"nights": told_nights, "exit_code": int(code)})
    elif not told_nights:
        say([f"no night to replay; the store has them to {done}" if done else "no session day in the span"])
    return code
