"""A desk of two small markets with their raw files, made in a folder, to be spoiled by tests."""

import datetime
from pathlib import Path

DESK = """
raw = "raw"
store = "published"
look_backs = [5, 10]
[gates]
rejected_share = 0.05
silent_sessions = 5
"""

MARKET = """
code = "{code}"
name = "Northmark {code}"
exchange = "XNMK"
currency = "EUR"
unit = "1 t"
point_value = 1.0
tick_size = 0.25
delivery_months = [3, 6, 9, 12]
open_interest_lag = 1
[last_trade]
rule = "FREQ=MONTHLY;BYMONTHDAY=15"
steps = [{{if_closed = "previous"}}]
[plans.by_volume]
trigger = "volume"
backstop = 3
"""

LAYOUT = """
files = '(?P<market>[A-Z0-9]+)_(?P<year>\\d{4})_(?P<month>\\d\\d)\\.csv'
[columns]
session = "date"
high = "high"
low = "low"
settle = "settle"
volume = "volume"
open_interest = "oi"
"""

HEADER = "date,high,low,settle,volume,oi\n"
MARKETS = ("TINA", "TINB")
DELIVERIES = ((2024, 3), (2024, 6), (2024, 9), (2024, 12))
FIRST = datetime.date(2023, 11, 1)


def sessions(count: int) -> list[datetime.date]:
    """Weekdays from the first session on."""
    days = (FIRST + datetime.timedelta(days=number) for number in range(count * 2))
    return [day for day in days if day.weekday() < 5][:count]


def rows_of(market: str, delivery: tuple[int, int], count: int) -> list[str]:
    """The contract's rows over the first `count` sessions; volume moves on a month before the 15th of delivery."""
    last = datetime.date(*delivery, 15)
    place = DELIVERIES.index(delivery)
    rows = []
    for number, day in enumerate(sessions(count)):
        if day > last:
            break
        wave = (number * 7 % 11) - (number * 3 % 5)
        settle = 200.0 + 10 * MARKETS.index(market) + 2.5 * place + 0.25 * (wave + number // 3)
        left = (last - day).days
        volume = 5000 if 30 < left <= 120 else 1000 - min(left, 900)
        rows.append(f"{day},{settle + 1:.2f},{settle - 1:.2f},{settle:.2f},{max(volume, 1)},{1000 + number}\n")
    return rows


def write_desk(folder: Path) -> Path:
    """Write the desk; returns its path."""
    desk = folder / "desk"
    for name in ("markets", "layouts"):
        (desk / name).mkdir(parents=True)
    (desk / "desk.toml").write_text(DESK)
    (desk / "layouts" / "plain.toml").write_text(LAYOUT)
    for code in MARKETS:
        (desk / "markets" / f"{code.lower()}.toml").write_text(MARKET.format(code=code))
    return desk


def write_raw(desk: Path, count: int, markets: tuple[str, ...] = MARKETS) -> Path:
    """Write every contract's cumulative file up to a session; returns the raw folder."""
    raw = desk / "raw"
    raw.mkdir(exist_ok=True)
    for market in markets:
        for delivery in DELIVERIES:
            year, month = delivery
            text = HEADER + "".join(rows_of(market, delivery, count))
            (raw / f"{market}_{year}_{month:02d}.csv").write_text(text)
    return raw


def run_night(desk: Path, store: Path, raw: Path | None = None, backwards: bool = False):  # type: ignore[no-untyped-def]
    """One night in this process; returns its summary."""
    from catalog.night import begin, build_one, finish
    from catalog.places import Places, write_lock

    with write_lock(Places(store)):
        night = begin(desk, raw, store, "build")
        markets = reversed(night.markets) if backwards else night.markets
        return finish(night, [build_one(night, market) for market in markets])
