"""Nothing that a market's files say later changes what was decided, or what was traded, before.

The raw files of the sample are cut at random days, every market is built from what is left, and every decision, every
ledger row in effect and every unadjusted price up to then has to be the whole build's. With ROPEWALK_LONG=1 in the
environment it is 200 days and all markets, and the sessions from each replaced settle to the third after it.

What was known and what is said later may honestly differ in one thing: a settle that stands alone is weighed by the
three sessions after it. Until they are there its repair may be made or withdrawn, and a roll that was to be measured
on it may wait. Those cells are counted, and anything that differs without one is a fault. A restated row is none of
this: the rows are cut by session, and say what they say in the newest files.
"""

import datetime
import os
import random
from dataclasses import replace
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from catalog.archive import Intake, read_register
from catalog.assignment import assign_files, gather_inputs
from catalog.declarations import SAMPLE_DESK, load_desk
from catalog.places import Places
from contracts.build import Inputs
from contracts.rolls import _Market
from tests.integration.known_by import WEIGHED_FOR, Compared, CutMarket, Known, build_known, compare_known

IS_LONG = os.environ.get("ROPEWALK_LONG") == "1"
MARKETS = ("NBND", "NCOC", "NCOP", "NEQX", "NGAS", "NKRN", "NOIL", "NVOL", "NWHT") if IS_LONG else ("NCOC", "NWHT")
DAYS = 200 if IS_LONG else 3
WEIGHED_DAYS = None if IS_LONG else 2
SEED = 20


def random_days(count: int, seed: int) -> list[datetime.date]:
    """Days from spring 2015 on, by when every market of the sample has a first roll behind it."""
    first, last = datetime.date(2015, 4, 1), datetime.date(2024, 12, 30)
    drawn = random.Random(seed).sample(range((last - first).days), count)
    return [first + datetime.timedelta(days=number) for number in sorted(drawn)]


def weighed_days(known: Known) -> list[datetime.date]:
    """Sessions with a replaced settle, and those after it that had a say in it."""
    places = {day: place for place, day in enumerate(known.sessions)}
    replaced = {session for (_, session), bar in known.bars.items() if bar["status"] in ("repaired", "masked")}
    return sorted({day for at in replaced for day in known.sessions[places[at] : places[at] + WEIGHED_FOR + 1]})


def inputs_of(store: Path, code: str) -> Inputs:
    desk, places = load_desk(SAMPLE_DESK), Places(store)
    assignment = assign_files(desk, Intake(1, 0, tuple(read_register(places)), ()), places)
    return gather_inputs(desk, code, assignment.files[code], places)


@pytest.mark.parametrize("code", MARKETS)
def test_what_was_known_on_a_day_stands_when_more_is_known(sample_store: Path, code: str) -> None:
    market = CutMarket(inputs_of(sample_store, code))
    now = build_known(market.inputs)
    total = Compared([], 0, 0, 0)
    days = random_days(DAYS, SEED) + weighed_days(now)[:WEIGHED_DAYS]
    for day in days:
        total += compare_known(code, day, build_known(market.until(day)), now)
    assert total.wrong == []
    assert total.rows > 1000 * len(days)
    # Verdicts that are still open are a handful of cells in tens of thousands of bars; more would hide a fault.
    assert total.open_cells <= len(days) // 20 + 1
    assert total.open_rows <= 10 * total.open_cells


def test_plan_that_looks_at_tomorrows_open_interest_is_found_out(
    sample_store: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    lay = _Market.__init__

    def peek(self: _Market, *arguments: Any) -> None:
        lay(self, *arguments)
        tomorrow = np.full_like(self.known_interest, np.nan)
        tomorrow[:-1] = self.known_interest[1:]
        self.known_interest = tomorrow

    monkeypatch.setattr(_Market, "__init__", peek)
    market = CutMarket(inputs_of(sample_store, "NWHT"))
    now = build_known(market.inputs)
    day, outgoing, incoming, trigger = now.decisions[("by_open_interest", 1)][3]
    assert trigger == "open interest"
    compared = compare_known("NWHT", day, build_known(market.until(day)), now)
    told = f"plan ('by_open_interest', 1): {(day, outgoing, incoming, trigger)} is decided only later"
    assert f"NWHT cut at {day}: {told}" in compared.wrong


def test_only_a_clean_price_of_the_last_three_sessions_may_still_change(sample_store: Path) -> None:
    """Held against a build whose prices were altered by hand, in one cell each time."""
    code, day = "NWHT", datetime.date(2016, 5, 20)
    market = CutMarket(inputs_of(sample_store, code))
    then = build_known(market.until(day))
    assert then.sessions[-1] == day
    held = then.series[("by_open_interest", 1, day)]["contract"]

    def altered(session: datetime.date, **values: Any) -> Known:
        """As known then, with a bar and the settle of every series that holds it moved."""
        bars = {**then.bars, (held, session): {**then.bars[(held, session)], **values}}
        series = {
            key: {**row, "settle": values.get("clean_settle", row["settle"])} if key[2] == session else row
            for key, row in then.series.items()
        }
        return replace(then, bars=bars, series=series)

    assert compare_known(code, day, then, then).wrong == []
    last, before = then.sessions[-1], then.sessions[-1 - WEIGHED_FOR]
    compared = compare_known(code, day, then, altered(last, clean_settle=1.0, status="repaired"))
    held_there = [key for key, row in then.series.items() if key[2] == last and row["contract"] == held]
    assert (compared.open_cells, compared.open_rows) == (1, len(held_there))
    others = [key for key in then.series if key[2] == last and key not in held_there]
    assert len(compared.wrong) == len(others) > 0
    compared = compare_known(code, day, then, altered(before, clean_settle=1.0, status="repaired"))
    assert any(f"bar {held} {before}: " in text for text in compared.wrong)
    compared = compare_known(code, day, then, altered(last, volume=1))
    assert f"{code} cut at {day}: bar {held} {last}: volume" in compared.wrong[0]
