"""A desk whose layouts are the proposals alone reads every row."""

import datetime
import gzip
import shutil
from collections.abc import Callable
from pathlib import Path

import duckdb
import pytest

from catalog.declarations import SAMPLE_DESK, load_desk
from contracts.proposal import propose_layouts
from tests.integration.tiny import DELIVERIES, DESK, MARKET, rows_of, run_night

Row = tuple[datetime.date, tuple[int, int], str, str, str, int, int]
CODES = "FGHJKMNQUVXZ"
NAMES = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")


def ask(store: Path, query: str) -> list[tuple]:  # type: ignore[type-arg]
    with duckdb.connect(str(store / "catalog.duckdb"), read_only=True) as connection:
        return connection.sql(query).fetchall()


def test_proposals_for_the_whole_sample_build_the_sample_s_bars(sample_store: Path, tmp_path: Path) -> None:
    raw = load_desk(SAMPLE_DESK).raw
    strays = {"notes/readme_desk.txt", "grains/positions_2021.csv"}
    paths = sorted(path for path in raw.rglob("*") if path.is_file())
    files = [(path.relative_to(raw).as_posix(), path.read_bytes()) for path in paths]
    proposals = [p for p in propose_layouts([file for file in files if file[0] not in strays]) if p.layout_toml]
    desk = tmp_path / "desk"
    shutil.copytree(SAMPLE_DESK, desk)
    for layout in (desk / "layouts").iterdir():
        layout.unlink()
    for number, proposal in enumerate(proposals):
        (desk / "layouts" / f"{number}_{proposal.name}.toml").write_text(proposal.layout_toml, encoding="utf-8")
    run_night(desk, tmp_path / "published", raw)
    query = """select market, count(*), round(sum(settle), 6), round(sum(high), 6), sum(volume), sum(open_interest)
               from bars group by all order by all"""
    assert ask(tmp_path / "published", query) == ask(sample_store, query)
    query = "select path from files where layout is not null order by path"
    assert len(ask(tmp_path / "published", query)) == len(ask(sample_store, query))


def table() -> list[Row]:
    """Sixty sessions of four contracts of the market TINA: session, delivery, high, low, settle, volume, interest."""
    made = []
    for delivery in DELIVERIES:
        for line in rows_of("TINA", delivery, 60):
            day, high, low, settle, volume, interest = line.strip().split(",")
            made.append((datetime.date.fromisoformat(day), delivery, high, low, settle, int(volume), int(interest)))
    return made


def by_contract(
    name: Callable[[int, int], str], head: str, line: Callable[[Row], str], tail: str = "", encoding: str = "utf-8"
) -> dict[str, bytes]:
    """One file a contract."""
    files = {}
    for delivery in DELIVERIES:
        text = head + "".join(line(row) for row in table() if row[1] == delivery) + tail
        files[name(*delivery)] = text.encode(encoding)
    return files


def by_session(head: str, line: Callable[[Row], str]) -> dict[str, bytes]:
    """One file a session."""
    days = sorted({row[0] for row in table()})
    return {
        f"daily/{day}.csv": (head + "".join(line(row) for row in table() if row[0] == day)).encode() for day in days
    }


def comma(text: str) -> str:
    return text.replace(".", ",")


SHAPES: dict[str, dict[str, bytes]] = {
    "semicolons, decimal comma, German headers": by_contract(
        lambda year, month: f"TINA_{CODES[month - 1]}{year % 100:02d}.csv",
        "Datum;Hoch;Tief;Abrechnung;Umsatz;Offene Positionen\n",
        lambda r: f"{r[0]:%d.%m.%Y};{comma(r[2])};{comma(r[3])};{comma(r[4])};{r[5]};{r[6]}\n",
    ),
    "tabs, month first": by_contract(
        lambda year, month: f"TINA-{year}-{month:02d}.txt",
        "Trade Date\tHigh\tLow\tSettlement\tVol\tOI\n",
        lambda r: f"{r[0]:%m/%d/%Y}\t{r[2]}\t{r[3]}\t{r[4]}\t{r[5]}\t{r[6]}\n",
    ),
    "pipes, compact dates, title and total": by_contract(
        lambda year, month: f"TINA{year}{month:02d}.csv",
        "Northmark daily report\nsession|high|low|settle|volume|open interest\n",
        lambda r: f"{r[0]:%Y%m%d}|{r[2]}|{r[3]}|{r[4]}|{r[5]}|{r[6]}\n",
        "Total|||||\n",
    ),
    "UTF-16": by_contract(
        lambda year, month: f"TINA_{year}_{month:02d}.csv",
        "date,high,low,settle,volume,open_interest\n",
        lambda r: f"{r[0]},{r[2]},{r[3]},{r[4]},{r[5]},{r[6]}\n",
        encoding="utf-16",
    ),
    "quoted thousands": by_contract(
        lambda year, month: f"TINA_{year}_{month:02d}.csv",
        "date,high,low,settle,volume,open_interest\n",
        lambda r: f'{r[0]},{r[2]},{r[3]},{r[4]},"{r[5]:,}","{r[6]:,}"\n',
    ),
    "packed": {
        f"{name}.gz": gzip.compress(text, mtime=0)
        for name, text in by_contract(
            lambda year, month: f"TINA_{year}_{month:02d}.csv",
            "Date,High,Low,Settle,Volume,Open Interest\n",
            lambda r: f"{r[0]},{r[2]},{r[3]},{r[4]},{r[5]},{r[6]}\n",
        ).items()
    },
    "marks for missing": by_contract(
        lambda year, month: f"TINA_{year}_{month:02d}.csv",
        "date,open,high,low,settle,volume,oi\n",
        lambda r: f"{r[0]},n.a.,{r[2]},{r[3]},{r[4]},{r[5]},{r[6]}\n",
    ),
    "a file a session with columns for the contract": by_session(
        "date,market,year,month,high,low,settle,volume,oi\n",
        lambda r: f"{r[0]},TINA,{r[1][0]},{r[1][1]},{r[2]},{r[3]},{r[4]},{r[5]},{r[6]}\n",
    ),
    "a file a session with a contract's code": by_session(
        "date;contract;high;low;settle;volume;oi\n",
        lambda r: f"{r[0]};TINA{CODES[r[1][1] - 1]}{r[1][0] % 100:02d};{r[2]};{r[3]};{r[4]};{r[5]};{r[6]}\n",
    ),
    "month names in a code": by_session(
        "date;market;contract;high;low;settle;volume;oi\n",
        lambda r: f"{r[0]};TINA;{NAMES[r[1][1] - 1].upper()}-{r[1][0] % 100:02d};{r[2]};{r[3]};{r[4]};{r[5]};{r[6]}\n",
    ),
}


@pytest.mark.parametrize("shape", SHAPES)
def test_proposal_for_a_file_of_another_shape_builds_every_row(shape: str, tmp_path: Path) -> None:
    files = SHAPES[shape]
    proposals = propose_layouts(list(files.items()))
    assert [bool(proposal.layout_toml) for proposal in proposals] == [True]
    desk = tmp_path / "desk"
    for name in ("markets", "layouts"):
        (desk / name).mkdir(parents=True)
    (desk / "desk.toml").write_text(DESK)
    (desk / "markets" / "tina.toml").write_text(MARKET.format(code="TINA"))
    (desk / "layouts" / "proposed.toml").write_text(proposals[0].layout_toml, encoding="utf-8")
    for path, data in files.items():
        (desk / "raw" / path).parent.mkdir(parents=True, exist_ok=True)
        (desk / "raw" / path).write_bytes(data)
    run_night(desk, tmp_path / "published")
    found = ask(
        tmp_path / "published",
        "select session, contract, high, low, settle, volume, open_interest from bars order by contract, session",
    )
    assert found == [
        (day, f"TINA-{year}-{month:02d}", float(high), float(low), float(settle), volume, interest)
        for day, (year, month), high, low, settle, volume, interest in table()
    ]
    assert ask(tmp_path / "published", "select count(*) from rejects") == [(0,)]
