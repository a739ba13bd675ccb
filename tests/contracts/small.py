"""A small market and curve with literal values, for the tests of contracts/."""

import datetime

import numpy as np

from contracts.arrivals import Bars
from contracts.intake import RawFile
from contracts.layouts import Layout, claim_file, parse_layout
from contracts.markets import Market, parse_market
from contracts.panel import Panel, lay_panel
from contracts.sessions import day_number

MARKET = """
code = "NWHT"
name = "Northmark milling wheat"
exchange = "XNMK"
currency = "EUR"
unit = "50 t"
point_value = 50.0
tick_size = 0.25
delivery_months = [3, 5, 9, 12]
open_interest_lag = 1
{extra}
[last_trade]
rule = "FREQ=MONTHLY;BYMONTHDAY=15"
steps = [{{if_closed = "next"}}, {{business_days = -1}}]

[plans.by_volume]
trigger = "volume"
backstop = 5
"""

LAYOUT = """
files = '(?P<market>[A-Z0-9]+)_(?P<year>\\d{4})_(?P<month>\\d\\d)\\.csv'
thousands = " "
zero_is_missing = ["open", "high", "low"]
missing = ["", "NA"]
comment = "#"
[columns]
session = "date"
open = "open"
high = "high"
low = "low"
settle = "settle"
volume = "volume"
open_interest = "oi"
"""

HEADER = "date,open,high,low,settle,volume,oi\n"


def make_market(extra: str = "") -> Market:
    """The wheat market, with more keys if wanted."""
    return parse_market(MARKET.format(extra=extra), "markets/nwht.toml")


def make_layout() -> Layout:
    """The layout of the wheat market's files."""
    return parse_layout(LAYOUT, "layouts/plain.toml")


def make_raw(name: str, text: str | bytes, taken_in: int = 1, sha: str = "a" * 64) -> RawFile:
    """A raw file of the layout above."""
    layout = make_layout()
    claim = claim_file(layout, name)
    assert claim is not None
    data = text.encode() if isinstance(text, str) else text
    return RawFile(name, sha, data, "plain", layout, claim, taken_in, len(data))


def weekdays(first: str, count: int) -> list[int]:
    """Day numbers of `count` weekdays from a date on."""
    day = day_number(datetime.date.fromisoformat(first))
    days = []
    while len(days) < count:
        if (day + 3) % 7 < 5:
            days.append(day)
        day += 1
    return days


def make_panel(
    market: Market, contracts: tuple[str, ...], days: list[int], settle: np.ndarray, **fields: np.ndarray
) -> Panel:
    """A panel of settles (T, N), NaN for no bar, with other fields beside them."""
    cells = np.argwhere(~np.isnan(settle).T)
    contract, session = cells[:, 0], cells[:, 1]
    values = np.full((len(cells), 6), np.nan)
    values[:, 3] = settle[session, contract]
    for place, name in enumerate(("open", "high", "low", "settle", "volume", "open_interest")):
        if name in fields:
            values[:, place] = fields[name][session, contract]
    number = np.arange(len(cells))
    bars = Bars(contracts, contract, np.array(days)[session], values, np.zeros(len(cells), np.int64), number + 2)
    return lay_panel(market, bars)


def make_bars_of(panel: Panel) -> Bars:
    """Bars that a panel was laid from, for functions that want both."""
    sessions, contracts = np.nonzero(panel.bar >= 0)
    order = np.argsort(panel.bar[sessions, contracts])
    sessions, contracts = sessions[order], contracts[order]
    values = panel.values[:, sessions, contracts].T
    return Bars(panel.contracts, contracts, panel.sessions[sessions], values, np.zeros(len(order), np.int64), order + 2)
