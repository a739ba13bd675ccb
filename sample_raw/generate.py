"""Write the sample exchange: raw files with real-life faults in them, and the answer key.

`python sample_raw/generate.py [OUT]` rewrites `northmark/` and `answer_key.csv` in OUT (by default beside this
file). The same bytes come out every time, but for the packed files, whose bytes are their packers'. What is declared
of a market (delivery months, closed days, tick, limit) is read from the sample desk; how it behaves from
`exchange.toml`. Nothing of the project's rooms is imported, so that they can be held against what is written here.
"""

import csv
import io
import shutil
import sys
import tomllib
from datetime import date
from decimal import Decimal
from pathlib import Path
from typing import Any

import planted
from answers import Book
from curves import MarketData, draw_factors, trade_market
from faults import note_events, plant, tear
from writers import Row, lay_lines, write_files

HERE = Path(__file__).resolve().parent
MARKETS = HERE.parent / "catalog" / "desk" / "markets"
CODES = ("NWHT", "NOIL", "NGAS", "NCOP", "NBND", "NEQX", "NKRN", "NCOC", "NVOL")
KEY_COLUMNS = (
    "id", "nature", "kind", "finding", "market", "contract", "session", "field", "reported", "truth", "file", "line",
    "text", "note",
)  # fmt: skip


def trade_all() -> tuple[dict[str, MarketData], dict[str, Decimal], list[dict[str, Any]]]:
    """The true history of every market, its tick, and the true events."""
    exchange = tomllib.loads((HERE / "exchange.toml").read_text("utf-8"))
    data: dict[str, MarketData] = {}
    ticks: dict[str, Decimal] = {}
    driver = None
    for number, code in enumerate(CODES):
        declared = tomllib.loads((MARKETS / f"{code.lower()}.toml").read_text("utf-8"), parse_float=Decimal)
        events = [event for event in exchange["events"] if event["market"] == code]
        # A volatility index goes against the equity index: common practice, no source.
        factors = draw_factors(number, exchange[code], events, driver if code == "NVOL" else None)
        driver = factors.chance if code == "NEQX" else driver
        extra = {date.fromisoformat(day) for market, day in planted.TRADED_CLOSED_DAYS if market == code}
        data[code] = trade_market(declared, exchange[code], events, factors, extra, number)
        ticks[code] = declared["tick_size"]
    return data, ticks, exchange["events"]


def delivery_order(book: Book) -> list[Row]:
    """All rows in the order in which their files have them: by contract and session, session files by session."""
    rows = [row for code in CODES for contract in book.rows[code] for row in contract]
    session_files = [row for row in rows if row.market in ("NEQX", "NKRN")]
    others = [row for row in rows if row.market not in ("NEQX", "NKRN")]
    return others + sorted(session_files, key=lambda row: (row.file_day or row.day, row.market, row.year, row.month))


def key_text(book: Book) -> str:
    """The answer key: one line a row that is wrong, or right though strange."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(KEY_COLUMNS)
    for e in book.key:
        path, line, text = (e.row.path, str(e.row.line), e.row.text) if e.row is not None else (e.path, "", "")
        letter = "F" if e.nature == "fault" else "E"
        writer.writerow(
            (f"{letter}{e.number:03d}", e.nature, e.kind, e.finding, e.market, e.contract, e.session, e.field,
             e.reported, e.truth, path, line, text, e.note)
        )  # fmt: skip
    return out.getvalue()


def generate(out: Path) -> dict[str, int]:
    """Rewrite the sample below `out`; returns rows by market."""
    data, ticks, events = trade_all()
    book = Book(data, ticks)
    note_events(book, events)
    plant(book)
    rows = delivery_order(book)
    texts = tear(book, lay_lines(rows)) | planted.STRAY_FILES
    raw = out / "northmark"
    if raw.exists():
        shutil.rmtree(raw)
    write_files(raw, texts)
    (out / "answer_key.csv").write_bytes(key_text(book).encode())
    return {code: sum(row.market == code for row in rows) for code in CODES}


if __name__ == "__main__":
    counts = generate(Path(sys.argv[1]) if len(sys.argv) > 1 else HERE)
    lines = [f"{code}  {count:>7,} rows" for code, count in counts.items()]
    sys.stdout.write("\n".join([*lines, f"all   {sum(counts.values()):>7,} rows"]) + "\n")
