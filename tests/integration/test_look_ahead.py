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
import pyarrow as pa
import pyarrow.compute as pc
import pytest

from catalog.archive import Intake, read_register
from catalog.assignment import assign_files, gather_inputs
from catalog.declarations import SAMPLE_DESK, load_desk
from catalog.places import Places
from contracts.build import Inputs
from contracts.rolls import _Market
from tests.integration.known_by import WEIGHED_FOR, Compared, CutMarket, Known, build_known, compare_known

IS_LONG = os.environ.get("ROPEWALK_LONG") == "1"
MARKETS = ("NBND", "NCOC", "NCOP", "NEQX", "NGAS", "NKRN", "NOIL", "NVOL", "NWHT") if IS_LONG else ("NBND", "NWHT")
DAYS = 200 if IS_LONG else 2
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
    bars = known.tables["bars"]
    replaced = bars.filter(pc.field("status").isin(["repaired", "masked"]))["session"].unique().to_pylist()
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
    last, settled = then.sessions[-1], then.sessions[-1 - WEIGHED_FOR]
    held = then.tables["bars"].filter(pc.field("session") == pa.scalar(day, pa.date32()))["contract"][0].as_py()

    def altered(session: datetime.date, name: str, value: float) -> Compared:
        """Held against itself, with one value of the contract's bar moved."""
        rows = then.tables["bars"].to_pylist()
        for row in rows:
            if (row["contract"], row["session"]) == (held, session):
                row[name] = value
        bars = pa.Table.from_pylist(rows, then.tables["bars"].schema)
        return compare_known(code, day, then, replace(then, tables={**then.tables, "bars": bars}))

    whole = compare_known(code, day, then, then)
    assert (whole.wrong, whole.open_cells) == ([], 0)
    open_still = altered(last, "clean_settle", 1.0)
    assert (open_still.wrong, open_still.open_cells) == ([], 1)
    (told,) = altered(settled, "clean_settle", 1.0).wrong
    assert told.startswith(f"{code} cut at {day}: bar {held} {settled}: clean_settle ")
    (told,) = altered(last, "volume", 1).wrong
    assert told.startswith(f"{code} cut at {day}: bar {held} {last}: volume ")


def test_series_row_may_differ_only_where_a_price_of_its_contract_does(sample_store: Path) -> None:
    """A settle of the series moved by hand on its last session: told, unless the bar's own clean price moved too."""
    code, day = "NWHT", datetime.date(2016, 5, 20)
    then = build_known(CutMarket(inputs_of(sample_store, code)).until(day))
    rows = then.tables["series"].to_pylist()
    moved = next(row for row in rows if (row["plan"], row["nearby"], row["session"]) == ("by_open_interest", 1, day))
    moved["settle"] += 0.25
    series = pa.Table.from_pylist(rows, then.tables["series"].schema)
    other = replace(then, tables={**then.tables, "series": series})
    (told,) = compare_known(code, day, then, other).wrong
    assert told.startswith(f"{code} cut at {day}: series ('by_open_interest', 1, {day!r}): settle ")
    bars = then.tables["bars"].to_pylist()
    for row in bars:
        if (row["contract"], row["session"]) == (moved["contract"], day):
            row["clean_settle"] += 0.25
    both = {**other.tables, "bars": pa.Table.from_pylist(bars, then.tables["bars"].schema)}
    compared = compare_known(code, day, then, replace(then, tables=both))
    assert (compared.wrong, compared.open_cells, compared.open_rows) == ([], 1, 1)
