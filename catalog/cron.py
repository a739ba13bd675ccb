"""Whether a cron runs once a night all year in its zone.

Belongs here: holding a cron's times against the days on which the zone's clocks change. Does not belong here:
carrying it out (`flows/schedule.py`).
"""

import datetime
import zoneinfo
from functools import lru_cache

_NAMES = ("minute", "hour", "day", "month", "weekday")
_BOUNDS = ((0, 59), (0, 23), (1, 31), (1, 12), (0, 7))
# Rules of a zone may change; these years hold what zones do today.
_FIRST, _LAST = 2024, 2033
# Hours in which most zones with summer time change their clocks.
_UNSAFE_HOURS = (1, 2)


def cron_mistake(cron: str, zone: str) -> str | None:
    """What keeps a cron from running once a night in a zone; None where nothing does. The zone is a known one."""
    try:
        fields = [
            _values(text, name, *bounds) for text, name, bounds in zip(cron.split(), _NAMES, _BOUNDS, strict=True)
        ]
    except ValueError as error:
        return str(error)
    changes = _changes(zone)
    if not changes:
        return None
    minutes, hours = fields[0], fields[1]
    unsafe = sorted(hours & set(_UNSAFE_HOURS))
    if unsafe:
        return f"{unsafe[0]:02d}:{min(minutes):02d} in {zone}, a zone with summer time, where clocks change about then"
    for day, first, last, is_skipped in changes:
        for hour in hours:
            for minute in minutes:
                if first <= 60 * hour + minute < last:
                    what = "does not come" if is_skipped else "comes twice"
                    return f"{hour:02d}:{minute:02d} in {zone}, which {what} on {day}"
    return None


def _values(text: str, name: str, low: int, high: int) -> set[int]:
    """The numbers a field stands for."""
    found: set[int] = set()
    for part in text.split(","):
        span, slash, every = part.partition("/")
        first, dash, last = span.partition("-")
        try:
            step = int(every) if slash else 1
            start, end = (low, high) if span == "*" else (int(first), int(last) if dash else int(first))
            if slash and span != "*" and not dash:
                end = high
        except ValueError:
            raise ValueError(f"{name} {text!r}, where {part!r} is no number, range or step") from None
        if not low <= start <= end <= high or step < 1:
            raise ValueError(f"{name} {text!r}, where {part!r} is not within {low} to {high}")
        found |= set(range(start, end + 1, step))
    return found


@lru_cache(maxsize=64)
def _changes(zone: str) -> tuple[tuple[datetime.date, int, int, bool], ...]:
    """Every change of a zone's clocks: the day, the minutes of the day from and to which the wall's time is
    skipped or comes twice, and whether it is skipped."""
    there = zoneinfo.ZoneInfo(zone)
    hour = datetime.timedelta(hours=1)
    moment = datetime.datetime(_FIRST, 1, 1, tzinfo=datetime.UTC)
    end = datetime.datetime(_LAST, 12, 31, tzinfo=datetime.UTC)
    found = []
    before = moment.astimezone(there).utcoffset()
    while moment < end:
        following = moment + 24 * hour
        if following.astimezone(there).utcoffset() != before:
            # Within the day, to the half hour: one zone changes by half an hour.
            while (moment + hour / 2).astimezone(there).utcoffset() == before:
                moment += hour / 2
            change = moment + hour / 2
            after = change.astimezone(there).utcoffset()
            wall = change.replace(tzinfo=None)
            one, other = sorted((wall + (before or _NO), wall + (after or _NO)))
            first = one.hour * 60 + one.minute
            found.append((one.date(), first, first + int((other - one).total_seconds() // 60), after > before))  # type: ignore[operator]
            before = after
            following = change
        moment = following
    return tuple(found)


_NO = datetime.timedelta(0)
