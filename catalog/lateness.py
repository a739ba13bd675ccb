"""Which markets' files are overdue by the markets' own clocks.

Belongs here: holding what arrived against what is due at a moment that is handed in. Does not belong here: what
time it is and how long the night waits (`flows/`); lateness by the data alone (`night.late_markets`).
"""

import datetime
from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

from catalog.assignment import FileOfMarket, gather_inputs
from catalog.declarations import Desk
from catalog.manifest import Manifest
from catalog.places import Places
from contracts.deliveries import delivery_of
from contracts.due import due_moment, due_session
from contracts.errors import CalendarError, IntakeError
from contracts.intake import parse_rows, split_file
from contracts.layouts import claim_file
from contracts.markets import Market
from contracts.sessions import day_number, day_of, last_trade_day

_RECENT = datetime.timedelta(days=60)
_EARLY = datetime.timedelta(days=7)


@dataclass(frozen=True)
class Overdue:
    """A market whose files of a session are due and not all here.

    `due` is the moment, ISO 8601 with zone; `newest` the newest session that came; `lacking` the contracts that
    had a bar on the newest published session, still trade, and have none on this one; empty where nothing of
    the session came.
    """

    market: str
    session: str
    due: str
    newest: str | None
    lacking: tuple[str, ...] = ()

    def describe(self) -> str:
        """What is overdue, in words."""
        if self.lacking:
            more = f" and {len(self.lacking) - 3} more" if len(self.lacking) > 3 else ""
            what = f"no bar of {', '.join(self.lacking[:3])}{more} on {self.session}"
        else:
            newest = (
                f"the newest bar is of {self.newest}" if self.newest else f"nothing of the {_RECENT.days} days before"
            )
            what = f"nothing of {self.session}; {newest}"
        return f"{self.market}: {what}; due {self.due}"


@dataclass
class SeenBars:
    """What was read in files so far, so that looking again reads only what is new: contracts by session."""

    by_file: dict[tuple[str, str, datetime.date], dict[datetime.date, set[str]]] = field(default_factory=dict)


def find_overdue(
    desk: Desk, files: Mapping[str, tuple[FileOfMarket, ...]], last: Manifest | None, places: Places,
    now: datetime.datetime, seen: SeenBars,
) -> tuple[Overdue, ...]:  # fmt: skip
    """The markets that lack bars of the session due at `now`, a moment with a zone; none without a due time.

    Asked is whether the session came at all and, of a market that was published before, whether every contract
    with a bar on its newest session that still trades has one.
    """
    found = []
    for code, market in desk.markets.items():
        try:
            session = due_session(market, now)
        except CalendarError:
            # A calendar that ends before today cannot say what is due; the desk's own checks tell of it.
            continue
        if session is None:
            continue
        verdict = last.markets.get(code) if last is not None else None
        facts = dict(verdict.facts) if verdict is not None else {}
        since = last.intake if last is not None and "last_session" in facts else 0
        fresh = [entry for entry in files[code] if entry.taken_in > since and not entry.is_old]
        bars = _bars(desk, market, fresh, session, places, seen)
        if "last_session" in facts:
            published = datetime.date.fromisoformat(facts["last_session"])
            bars.setdefault(published, set()).update(facts.get("newest_contracts", ()))
        overdue = _judge(market, session, bars, facts)
        if overdue is not None:
            found.append(overdue)
    return tuple(found)


def _judge(
    market: Market, session: datetime.date, bars: dict[datetime.date, set[str]], facts: dict[str, Any]
) -> Overdue | None:
    due = due_moment(market, session)
    # A wrong year in a file is no sign that this session came.
    if due is None or any(session < day <= session + _EARLY for day in bars):
        return None
    there = bars.get(session, set())
    expected = {contract for contract in facts.get("newest_contracts", ()) if _still_trades(market, contract, session)}
    lacking = tuple(sorted(expected - there)) if there else ()
    if there and not lacking:
        return None
    newest = max(bars, default=None)
    return Overdue(market.code, session.isoformat(), due.isoformat(), newest.isoformat() if newest else None, lacking)


def _still_trades(market: Market, contract: str, session: datetime.date) -> bool:
    try:
        return last_trade_day(market, delivery_of(contract)) >= session
    except (CalendarError, ValueError):
        return False


def _bars(
    desk: Desk, market: Market, files: list[FileOfMarket], session: datetime.date, places: Places, seen: SeenBars
) -> dict[datetime.date, set[str]]:
    """Contracts by recent session of files' rows; of a file that cannot be read the build says why."""
    bars: dict[datetime.date, set[str]] = {}
    for entry in files:
        claim = claim_file(desk.layouts[entry.layout], entry.path)
        if claim is not None and claim.contract and not _still_trades(market, claim.contract, session):
            continue
        key = (market.code, entry.file, session)
        if key not in seen.by_file:
            seen.by_file[key] = _read(desk, market, entry, session, places)
        for day, contracts in seen.by_file[key].items():
            bars.setdefault(day, set()).update(contracts)
    return bars


def _read(
    desk: Desk, market: Market, entry: FileOfMarket, session: datetime.date, places: Places
) -> dict[datetime.date, set[str]]:
    try:
        rows = [split_file(raw) for raw in gather_inputs(desk, market.code, (entry,), places).files]
        parsed = parse_rows(rows, market)
    except IntakeError:
        return {}
    recent: dict[datetime.date, set[str]] = {}
    first, last = day_number(session - _RECENT), day_number(session + _EARLY)
    for contract, number in zip(parsed.contract.tolist(), parsed.session.tolist(), strict=True):
        if first <= number <= last:
            recent.setdefault(day_of(number), set()).add(parsed.contracts[contract])
    return recent


def is_due_anywhere(desk: Desk) -> bool:
    """Whether any market declares by when its files are due."""
    return any(market.due is not None for market in desk.markets.values())
