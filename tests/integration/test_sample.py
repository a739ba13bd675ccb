"""The sample exchange is what its generator writes, and its answer key says the truth about its files."""

import ast
import csv
import datetime
import gzip
import importlib.util
import io
import subprocess
import sys
import tomllib
import zipfile
from functools import lru_cache
from pathlib import Path
from types import ModuleType

import pyarrow as pa
import pytest

from contracts.deliveries import Delivery
from contracts.layouts import Layout, claim_file, parse_layout
from contracts.markets import Market, parse_market
from contracts.sessions import day_of, first_notice_day, last_trade_day, market_days

ROOT = Path(__file__).resolve().parents[2]
SAMPLE, DESK = ROOT / "sample_raw", ROOT / "catalog" / "desk"
RAW = SAMPLE / "northmark"
CODES = ["NBND", "NCOC", "NCOP", "NEQX", "NGAS", "NKRN", "NOIL", "NVOL", "NWHT"]
FILES = {code: DESK / "markets" / f"{code.lower()}.toml" for code in CODES}


def texts_below(root: Path) -> dict[str, bytes]:
    """Every file below a folder by its path, unpacked; a zip's members each for itself."""
    texts: dict[str, bytes] = {}
    for file in sorted(root.rglob("*")):
        path, data = file.relative_to(root).as_posix(), file.read_bytes() if file.is_file() else b""
        if file.is_dir():
            continue
        if file.suffix == ".gz":
            texts[path] = gzip.decompress(data)
        elif file.suffix == ".zst":
            texts[path] = pa.CompressedInputStream(pa.BufferReader(data), "zstd").read()
        elif file.suffix == ".zip":
            with zipfile.ZipFile(io.BytesIO(data)) as archive:
                texts |= {f"{path}/{name}": archive.read(name) for name in archive.namelist()}
        else:
            texts[path] = data
    return texts


@lru_cache(maxsize=1)
def sample_texts() -> dict[str, bytes]:
    return texts_below(RAW)


@lru_cache(maxsize=1)
def answer_key() -> list[dict[str, str]]:
    with (SAMPLE / "answer_key.csv").open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


def lines_of(path: str) -> list[str]:
    return sample_texts()[path].decode("cp1252" if path.startswith("rates/") else "utf-8").split("\n")


def market(code: str) -> Market:
    return parse_market(FILES[code].read_text("utf-8"), FILES[code].name)


def layouts() -> dict[str, Layout]:
    files = sorted((DESK / "layouts").glob("*.toml"))
    return {file.stem: parse_layout(file.read_text("utf-8"), file.name) for file in files}


def plain_days() -> ModuleType:
    """The generator's own calendar, which knows nothing of the project's rooms."""
    spec = importlib.util.spec_from_file_location("sample_days", SAMPLE / "days.py")
    assert spec is not None and spec.loader is not None
    module = importlib.util.module_from_spec(spec)
    spec.loader.exec_module(module)
    return module


def test_generator_writes_the_tree_again(tmp_path: Path) -> None:
    """Every byte of every file and of the key; of packed files the unpacked bytes, since packers change by version."""
    subprocess.run([sys.executable, str(SAMPLE / "generate.py"), str(tmp_path)], check=True, capture_output=True)
    again = texts_below(tmp_path / "northmark")
    assert sorted(again) == sorted(sample_texts())
    assert [path for path in again if again[path] != sample_texts()[path]] == []
    assert (tmp_path / "answer_key.csv").read_bytes() == (SAMPLE / "answer_key.csv").read_bytes()


def test_packed_files_hold_no_clock() -> None:
    for file in RAW.rglob("*.gz"):
        assert file.read_bytes()[4:8] == b"\0\0\0\0"
    with zipfile.ZipFile(RAW / "soft" / "NCOC.zip") as archive:
        assert {info.date_time for info in archive.infolist()} == {(1980, 1, 1, 0, 0, 0)}


def test_generator_imports_nothing_of_the_rooms() -> None:
    for file in SAMPLE.glob("*.py"):
        for node in ast.walk(ast.parse(file.read_text("utf-8"))):
            names = [alias.name for alias in node.names] if isinstance(node, ast.Import) else []
            names += [node.module or ""] if isinstance(node, ast.ImportFrom) else []
            assert not {name.split(".")[0] for name in names} & {"contracts", "catalog", "flows"}, file.name


def test_sample_is_at_most_twelve_megabytes() -> None:
    files = [file for file in SAMPLE.rglob("*") if file.is_file() and "__pycache__" not in file.parts]
    assert 3_000_000 < sum(file.stat().st_size for file in files) <= 12_000_000


def test_sample_has_nine_markets_and_ten_years() -> None:
    assert sorted(file.stem.upper() for file in (DESK / "markets").glob("*.toml")) == CODES
    wheat = [path for path in sample_texts() if path.startswith("grains/NWHT")]
    days = [line[:10] for path in wheat for line in lines_of(path)[1:] if line]
    assert (min(days), max(days)) == ("2015-01-02", "2024-12-31")


def test_every_file_is_claimed_by_one_layout_but_for_the_two_strays() -> None:
    known = list(layouts().values())
    claims = {path: sum(claim_file(layout, path) is not None for layout in known) for path in sample_texts()}
    strays = {"notes/readme_desk.txt", "grains/positions_2021.csv"}
    assert {path for path, count in claims.items() if count != 1} == strays
    assert max(claims.values()) == 1


def test_lines_of_the_key_stand_in_the_files() -> None:
    rows = [row for row in answer_key() if row["line"]]
    assert len(rows) > 300
    assert [row["id"] for row in rows if lines_of(row["file"])[int(row["line"]) - 1] != row["text"]] == []


def test_missing_rows_of_the_key_stand_in_no_file() -> None:
    kinds = ("missing row", "missing block", "missing session", "early end")
    gone = [row for row in answer_key() if row["kind"] in kinds]
    assert len({row["id"] for row in gone}) >= 20
    for row in gone:
        day = datetime.date.fromisoformat(row["session"])
        written = {day.isoformat(), f"{day:%d.%m.%Y}", f"{day:%d/%m/%Y}", f"{day:%Y%m%d}"}
        lines = lines_of(row["file"]) if row["file"] in sample_texts() else []
        if row["file"].startswith("sessions/"):
            year, month = row["contract"][5:].split("-")
            assert not [line for line in lines if line.startswith(f"{row['market']},{year},{int(month)},")], row["id"]
        else:
            assert lines and not [line for line in lines if any(line.startswith(text) for text in written)], row["id"]


def test_torn_files_end_within_a_line_and_no_others_do() -> None:
    torn = {row["file"] for row in answer_key() if row["kind"] == "torn file"}
    assert len(torn) == 3
    assert {path for path, text in sample_texts().items() if not text.endswith(b"\n")} == torn


def test_a_fault_differs_from_the_truth_and_an_event_does_not() -> None:
    for row in answer_key():
        if row["nature"] == "event":
            assert row["reported"] == row["truth"] != "", row
        elif row["kind"] not in ("duplicated row", "stray file"):
            assert row["reported"] != row["truth"], row


def test_every_kind_of_fault_is_planted_in_several_markets() -> None:
    places: dict[str, set[str]] = {}
    for row in answer_key():
        if row["nature"] == "fault" and row["kind"] not in ("torn file", "stray file"):
            places.setdefault(row["kind"], set()).add(row["market"])
    few = {kind for kind, markets in places.items() if len(markets) < 4}
    # Restating takes a file a session, which two markets have; an early end shows where a plan holds to the end.
    assert few == {"restated row", "wrong year", "noughts for missing", "wrong by a few ticks", "early end"}
    assert len(places) == 19


def test_exactly_one_settle_is_below_zero() -> None:
    """In the files and in the truth: NOIL-2020-06 on its last session but one, with range and volume behind it."""
    oil = [path for path in sample_texts() if path.startswith("energy/NOIL")]
    lines = [(path, line) for path in oil for line in lines_of(path)[1:] if line]
    below = [(path, line) for path, line in lines if line.split(";")[4].startswith("-")]
    assert below == [("energy/NOIL_M20.csv.gz", "19.05.2020;17,31;17,31;-11,75;-8,62;100800;40674")]
    assert last_trade_day(market("NOIL"), Delivery(2020, 6)) == datetime.date(2020, 5, 20)
    negative = [row for row in answer_key() if row["truth"].startswith("-")]
    assert [(row["nature"], row["kind"], row["contract"], row["truth"]) for row in negative] == [
        ("event", "negative settle", "NOIL-2020-06", "-8.62")
    ]


def test_whole_curve_closes_at_its_limit_on_locked_days() -> None:
    """Open, high, low and settle are one price, 150 from the settle of the session before, on hardly any volume."""
    locked = [row for row in answer_key() if row["kind"] == "locked limit"]
    assert sorted({row["session"] for row in locked}) == ["2016-09-14", "2018-04-18", "2023-06-20", "2023-06-21"]
    for row in locked:
        lines = lines_of(row["file"])
        today, before = (lines[int(row["line"]) - n].split(",") for n in (1, 2))
        assert len(set(today[1:5])) == 1
        assert abs(int(today[4]) - int(before[4])) == 150
        assert int(today[5]) < 1000


@pytest.mark.parametrize("code", CODES)
def test_last_trading_days_agree_with_the_generators_own(code: str) -> None:
    """Last trading and first notice days of deliveries 2015 to 2026 and all sessions, by two sets of code."""
    own = plain_days().Calendar(tomllib.loads(FILES[code].read_text("utf-8")))
    declared = market(code)
    for year in range(2015, 2027):
        for month in declared.delivery_months:
            delivery = Delivery(year, month)
            assert last_trade_day(declared, delivery) == own.last_trade(year, month), delivery
            assert first_notice_day(declared, delivery) == own.first_notice(year, month), delivery
    sessions = [day_of(number) for number in market_days(declared, 2015, 2026).days]
    years = range(2015, 2027)
    assert [day for day in sessions if day.year in years] == [day for day in own.days if day.year in years]


def test_a_finished_contract_ends_on_its_last_trading_day() -> None:
    """But for contracts that the key says end early."""
    early = {row["contract"] for row in answer_key() if row["kind"] == "early end"}
    oil, energy, seen = market("NOIL"), layouts()["energy"], 0
    for path in sample_texts():
        claim = claim_file(energy, path)
        if claim is None or claim.market != "NOIL" or claim.contract in early:
            continue
        assert claim.year is not None and claim.month is not None
        last = last_trade_day(oil, Delivery(claim.year, claim.month))
        dates = [datetime.datetime.strptime(line[:10], "%d.%m.%Y").date() for line in lines_of(path)[1:] if line]
        # One row is dated a year late, and so after the last trade.
        assert [day for day in dates if day <= last][-1] == min(last, datetime.date(2024, 12, 31)), path
        seen += 1
    assert seen == 132


def test_plans_of_the_desk_use_every_way_to_roll() -> None:
    plans = [plan for code in CODES for plan in market(code).plans.values()]
    assert {next(iter(market(code).plans)) for code in CODES} == {"by_open_interest"}
    assert {str(plan.trigger) for plan in plans} == {"open interest", "volume", "both", "either", "calendar"}
    assert {str(plan.before) for plan in plans} == {"last trade", "first notice", "earlier"}
    assert {str(plan.incoming) for plan in plans} == {"next", "most active"}
    assert {plan.confirm for plan in plans} == {1, 2, 3}
    assert {plan.delay for plan in plans} == {1, 2}
    assert {plan.steps for plan in plans} == {1, 5}
    assert {plan.nearbys for plan in plans} == {(1,), (1, 2)}
    assert {plan.months for plan in plans} == {None, (3, 5, 7, 9, 12), (9, 12)}
    assert [force.outgoing for plan in plans for force in plan.force] == ["NWHT-2022-03"]


def test_layouts_of_the_desk_use_every_key() -> None:
    given = {name: tomllib.loads((DESK / "layouts" / f"{name}.toml").read_text("utf-8")) for name in layouts()}
    # No file of the sample holds a contract's code in a cell, or totals below its rows.
    assert {key for keys in given.values() for key in keys} == set(Layout.model_fields) - {"contract_code", "not_rows"}
