"""A trace tells the sum, the rolls that follow, the repair, the file and the line, and the line is the file's."""

import datetime
import math
import os
import random
import re
import sys
import tomllib
from decimal import Decimal
from pathlib import Path
from typing import Any

import duckdb
import pyarrow.parquet as pq
import pytest

from catalog.archive import read_archived
from catalog.places import Places
from catalog.standing import read_manifest
from catalog.trace import Trace, Tracer, trace_price
from catalog.trace_text import trace_lines
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
    lines = trace_lines(trace(sample_store, "NCOC", "2022-05-17"))
    assert lines[0] == "NCOC, 2022-05-17, plan by_open_interest, nearby 1: repaired"
    assert "NCOC-2022-07 on 2022-05-17: reported 170100, used 1698 (repaired)" in lines
    found = (
        "  NCOC-2022-07, 2022-05-17: settle 170100 is 100 times too large; repaired to 1698 from its neighbours' moves"
    )
    assert f"{found}, within about 4.3" in lines
    assert "  soft/NCOC.zip/NCOC_2022_07.csv:353" in lines
    assert "  17/05/2022,169500,170400,168900,170100,33847,108132" in lines


def test_rolled_session_shows_the_roll_with_its_two_prices(sample_store: Path) -> None:
    lines = trace_lines(trace(sample_store, "NWHT", "2024-04-22"))
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


ROWS = 10_000 if os.environ.get("ROPEWALK_LONG") else 180
NUMBER = re.compile(r"-?\d+(?:\.\d+)?")


def test_random_rows_are_made_again_exactly_and_their_raw_lines_are_the_archives(sample_store: Path) -> None:
    """Every number of the row, to the last bit, from the trace's parts alone; and the sums it prints, in decimals."""
    places = Places(sample_store)
    manifest = read_manifest(places)
    chance = random.Random(11)
    drawn: list[tuple[str, tuple[str, int, datetime.date]]] = []
    for market in manifest.markets:
        series = pq.read_table(places.snapshot(manifest.name) / "series" / f"{market}.parquet")
        rows = list(zip(*(series[name].to_pylist() for name in ("plan", "nearby", "session")), strict=True))
        count = ROWS // len(manifest.markets) + 1
        drawn += [(market, row) for row in chance.sample(rows, min(count, len(rows)))]
    assert len(drawn) >= ROWS
    texts: dict[tuple[str, str], list[str]] = {}
    tracers = {market: Tracer(places, market) for market in manifest.markets}
    lines_held = 0
    for market, (plan, nearby, session) in drawn:
        told = tracers[market].trace(session, plan, nearby)
        check_sum(told)
        for leg in told.legs:
            if leg.path is None or leg.file is None or leg.line is None:
                continue
            key = (leg.path, leg.file)
            if key not in texts:
                data = unpack(read_archived(places, leg.file), leg.path)
                texts[key] = re.split(r"\r\n|\r|\n", decode(data))
            assert leg.text == texts[key][leg.line - 1], (told.market, session)
            lines_held += 1
    # Shown by pytest -s.
    sys.stdout.write(f"{len(drawn):,} rows made again, {lines_held:,} raw lines held against the archive\n")


def decode(data: bytes) -> str:
    for mark, codec in ((b"\xff\xfe", "utf-16"), (b"\xfe\xff", "utf-16"), (b"\xef\xbb\xbf", "utf-8-sig")):
        if data.startswith(mark):
            return data.decode(codec)
    try:
        return data.decode("utf-8")
    except UnicodeDecodeError:
        return data.decode("cp1252")


def check_sum(told: Trace) -> None:
    """The published row from legs and ledger: in binary to the last bit, and as printed in decimals."""
    row = told.row
    if row["settle"] is None:
        return
    settles = [leg.settle for leg in told.legs if leg.settle is not None]
    assert len(settles) == len(told.legs)
    mixed = settles[0] if len(settles) == 1 else sum(x * leg.weight for x, leg in zip(settles, told.legs, strict=True))
    assert mixed == row["settle"]
    gaps = [roll.gap for roll in told.later]
    if row["shift"] is not None:
        shift = math.fsum(gap for gap in gaps if gap is not None)
        assert None not in gaps and shift == row["shift"]
        assert row["settle"] + shift == row["back_adjusted"]
    if row["scale"] is not None:
        scale = 1.0
        for roll in reversed(told.later):
            assert roll.ratio is not None
            scale *= roll.ratio
        assert scale == row["scale"]
        assert row["settle"] * scale == row["ratio_adjusted"]
    lines = trace_lines(told)
    printed = [
        Decimal(NUMBER.findall(line.split(" = ")[1])[0]) for line in lines if re.match(r"  \d{4}-\d\d-\d\d  ", line)
    ]
    if row["shift"] is not None:
        (shift_line,) = [line for line in lines if line.startswith("  shift ")]
        (sum_line,) = [line for line in lines if line.startswith("  back_adjusted ")]
        assert sum(printed, Decimal(0)) == Decimal(NUMBER.findall(shift_line)[0])
        first, second, total = (Decimal(part) for part in NUMBER.findall(sum_line.removeprefix("  back_adjusted"))[:3])
        assert first + second == total


def test_rule_and_layout_are_named_with_file_and_line_of_the_desk(sample_store: Path) -> None:
    told = trace(sample_store, "NCOC", "2017-05-17")
    desk = Path(__file__).resolve().parents[2] / "catalog" / "desk"
    assert [(rule.file, rule.key) for rule in told.rules] == [
        ("markets/ncoc.toml", "plans.by_open_interest"),
        ("markets/ncoc.toml", "last_trade[0]"),
        ("markets/ncoc.toml", "last_trade[1]"),
        ("layouts/soft.toml", "columns"),
    ]
    for rule in told.rules:
        assert rule.line is not None
        line = (desk / rule.file).read_text().splitlines()[rule.line - 1]
        assert line.strip("[]") == rule.key.partition("[")[0]
    assert told.rules[0].says.startswith('trigger = "open interest", confirm = 2')


def test_declared_repair_is_named_with_its_place(sample_store: Path) -> None:
    desk = Path(__file__).resolve().parents[2] / "catalog" / "desk"
    file = next((desk / "repairs").glob("*.toml"))
    entry = next(e for e in tomllib.loads(file.read_text())["repair"] if e["field"] == "settle")
    market = entry["contract"][:-8]
    tracer = Tracer(Places(sample_store), market)
    leg = tracer._leg(entry["contract"], 1.0, entry["session"])
    assert leg.repair is not None and leg.repair.file == f"repairs/{file.name}"
    assert leg.repair.line is not None and file.read_text().splitlines()[leg.repair.line - 1] == "[[repair]]"
    assert leg.reported == entry["reported"]


@pytest.mark.parametrize(
    ("market", "plan", "nearby", "day"),
    [
        ("NWHT", "by_open_interest", 1, "2024-03-01"),
        ("NWHT", "by_open_interest", 2, "2024-03-01"),
        ("NCOC", "by_open_interest", 1, "2022-05-17"),
        ("NCOC", "in_fifths", 1, "2022-04-27"),
        ("NWHT", "by_open_interest", 1, "2022-10-18"),
    ],
)
def test_table_macro_tells_the_same_as_the_command(
    sample_store: Path, market: str, plan: str, nearby: int, day: str
) -> None:
    told = trace_price(Places(sample_store), market, datetime.date.fromisoformat(day), plan, nearby)
    with duckdb.connect(str(sample_store / "catalog.duckdb"), read_only=True) as connection:
        rows = connection.execute("from price_trace(?, ?, ?, ?)", [market, plan, nearby, day]).fetchall()
    by_part: dict[str, list[tuple[Any, ...]]] = {}
    for part, *rest in rows:
        by_part.setdefault(part, []).append(tuple(rest))
    legs = [(leg.session, leg.contract, leg.weight, leg.settle) for leg in told.legs]
    assert [row[:4] for row in by_part["leg"]] == legs
    assert [row[4] for row in by_part["reported settle"]] == [
        f"SHA-256 {leg.file}, line {leg.line}" for leg in told.legs
    ]
    assert [row[4] for row in by_part["raw file"]] == [leg.path for leg in told.legs]
    assert [(row[0], row[3], row[2]) for row in by_part.get("later roll", [])] == [
        (roll.effective_on, roll.gap, roll.ratio) for roll in told.later
    ]
    for name in ("settle", "shift", "scale", "back_adjusted", "ratio_adjusted"):
        assert by_part[name][0][3] == told.row[name]
    messages = {message for leg in told.legs for message in leg.findings}
    assert messages <= {row[4] for row in by_part.get("finding", [])}
    assert told.snapshot in by_part["snapshot"][0][4]
