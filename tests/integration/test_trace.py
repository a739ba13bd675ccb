"""A trace tells the sum, the rolls that follow, the repair, the file and the line, and the line is the file's."""

import datetime
import re
from pathlib import Path

import pytest

from catalog.archive import read_archived
from catalog.places import Places
from catalog.trace import Trace, trace_price
from contracts.errors import UsageError
from contracts.unpack import unpack


def trace(store: Path, market: str, day: str, plan: str | None = None) -> Trace:
    return trace_price(Places(store), market, datetime.date.fromisoformat(day), plan)


def line_in_file(store: Path, told: Trace) -> str:
    (leg,) = told.legs
    assert leg.path is not None and leg.file is not None and leg.line is not None
    return unpack(read_archived(Places(store), leg.file), leg.path).decode("cp1252").splitlines()[leg.line - 1]


@pytest.mark.parametrize(
    ("market", "day"),
    [("NWHT", "2024-03-01"), ("NOIL", "2024-11-13"), ("NCOC", "2022-05-17"), ("NBND", "2020-02-11")],
)  # fmt: skip
def test_line_shown_is_the_line_in_the_file_and_the_sum_adds_up(sample_store: Path, market: str, day: str) -> None:
    told = trace(sample_store, market, day)
    assert told.legs[0].text == line_in_file(sample_store, told)
    shift = sum(roll.gap for roll in told.later if roll.gap is not None)
    assert told.row["shift"] == pytest.approx(shift, abs=1e-9)
    assert told.row["back_adjusted"] == told.row["settle"] + told.row["shift"]
    assert len(told.later) > 0


def test_repaired_session_shows_what_was_reported_and_why_it_was_replaced(sample_store: Path) -> None:
    lines = trace(sample_store, "NCOC", "2022-05-17").lines()
    assert lines[0] == "NCOC, 2022-05-17, plan by_open_interest, nearby 1: repaired"
    assert "NCOC-2022-07 on 2022-05-17: reported 170100, used 1697 (repaired)" in lines
    assert "  NCOC-2022-07, 2022-05-17: settle 170100 is 100 times too large; repaired to 1697" in lines
    assert "  soft/NCOC.zip/NCOC_2022_07.csv:353" in lines
    assert "  17/05/2022,169500,170400,168900,170100,33847,108132" in lines


def test_rolled_session_shows_the_roll_with_its_two_prices(sample_store: Path) -> None:
    lines = trace(sample_store, "NWHT", "2024-04-22").lines()
    assert "rolled on this session: NWHT-2024-05 -> NWHT-2024-09" in lines
    assert any(re.match(r"  gap 203\.5 - 212\.75 = -9\.25, ratio 0\.956521739", line) for line in lines)


def test_carried_session_shows_the_row_that_could_not_be_read(sample_store: Path) -> None:
    told = trace(sample_store, "NWHT", "2022-10-18")
    assert told.row["status"] == "carried"
    (rejected,) = told.legs[0].rejected
    assert rejected.startswith("grains/NWHT_2022_12.csv:358: settle: seen 'E32.75'")


@pytest.mark.parametrize(
    ("market", "day", "plan", "message"),
    [
        ("NWTH", "2024-03-01", None, "no market 'NWTH' in snapshot .*; nearest: NWHT"),
        ("NWHT", "2024-03-01", "by_volum", "NWHT has no plan 'by_volum'; nearest: by_volume"),
        ("NWHT", "2024-03-02", None, "no session of NWHT in this series; the nearest are 2024-03-01, 2024-03-04"),
    ],
)  # fmt: skip
def test_what_is_not_there_is_answered_with_the_nearest(
    sample_store: Path, market: str, day: str, plan: str | None, message: str
) -> None:
    with pytest.raises(UsageError, match=message):
        trace(sample_store, market, day, plan)
