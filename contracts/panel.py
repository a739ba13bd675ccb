"""Bars of one market -> dense arrays of sessions x contracts.

Belongs here: which days are sessions, which bars are in the panel, prices on the market's present scale.
Does not belong here: whether a bar is right (`checks/`).
"""

from dataclasses import dataclass

import numpy as np

from contracts.arrivals import Bars
from contracts.deliveries import delivery_of
from contracts.intake import scale_prices
from contracts.layouts import BAR_FIELDS, PRICE_FIELDS
from contracts.markets import Before, Market, Plan
from contracts.sessions import (
    OpenDays,
    day_number,
    day_of,
    first_notice_day,
    last_trade_day,
    market_days,
    session_index,
)

# Contracts are listed at most so long before delivery (energy contracts reach out furthest); an earlier bar is a slip.
LONGEST_LISTING_DAYS = 15 * 366
# A rule's day is looked for this many years around the years of the bars and deliveries.
_MARGIN_YEARS = 2


@dataclass(frozen=True, eq=False)
class Panel:
    """All bars of a market by session and contract.

    T sessions (day numbers, rising), N contracts (delivery order). `values` is (6, T, N) in the order of
    BAR_FIELDS, NaN where absent, prices on the present scale; `bar` (T, N) is the index into the bars, -1
    where there is none. `last_trade`, `first_notice` (N,) are session indices, which may lie outside 0..T-1;
    `first_notice` is the last trade where the market declares none. `off_session`, `outside` are indices of
    bars kept out of the panel; `disagreeing` the sessions the calendar calls closed.
    """

    market: Market
    contracts: tuple[str, ...]
    sessions: np.ndarray
    calendar: OpenDays
    values: np.ndarray
    bar: np.ndarray
    last_trade: np.ndarray
    first_notice: np.ndarray
    off_session: np.ndarray
    outside: np.ndarray
    disagreeing: np.ndarray

    @property
    def shape(self) -> tuple[int, int]:
        """Sessions and contracts."""
        return self.bar.shape[0], self.bar.shape[1]

    def field(self, name: str) -> np.ndarray:
        """One field of the bars, (T, N)."""
        values: np.ndarray = self.values[BAR_FIELDS.index(name)]
        return values


def lay_panel(market: Market, bars: Bars) -> Panel:
    """Lay bars out by session and contract; raises CalendarError where a day rule gives no day."""
    deliveries = [delivery_of(name) for name in bars.contracts]
    count = len(deliveries)
    last_days = np.array([day_number(last_trade_day(market, delivery)) for delivery in deliveries], dtype=np.int64)
    notices = [first_notice_day(market, delivery) for delivery in deliveries]
    last_of_bar = last_days[bars.contract] if len(bars.contract) else np.empty(0, np.int64)
    is_outside = (bars.session > last_of_bar) | (bars.session < last_of_bar - LONGEST_LISTING_DAYS)
    inside = np.flatnonzero(~is_outside)
    if not len(inside):
        raise ValueError(f"{market.code}: no bar within the listing of its contract")
    first, last = int(bars.session[inside].min()), int(bars.session[inside].max())
    latest = max(last, int(last_days.max()), *(day_number(day) for day in notices if day is not None))
    calendar = market_days(market, day_of(first).year - _MARGIN_YEARS, day_of(latest).year + _MARGIN_YEARS)
    regular = calendar.between(first, last)
    closed = inside[~np.isin(bars.session[inside], regular)]
    disagreeing = _disagreeing_days(bars, inside, closed, last_days, count)
    sessions = np.union1d(regular, disagreeing)
    used = inside[np.isin(bars.session[inside], sessions)]
    sessions = sessions[np.searchsorted(sessions, bars.session[used].min()) :]
    sessions = sessions[: np.searchsorted(sessions, bars.session[used].max(), side="right")]
    at = np.searchsorted(sessions, bars.session[used])
    bar = np.full((len(sessions), count), -1, dtype=np.int64)
    bar[at, bars.contract[used]] = used
    values = np.full((len(BAR_FIELDS), len(sessions), count), np.nan)
    values[:, at, bars.contract[used]] = rescale(market, bars)[used].T
    ends = np.array([session_index(sessions, calendar, day_of(day)) for day in last_days], dtype=np.int64)
    first_notice = np.array(
        [
            end if day is None else session_index(sessions, calendar, day)
            for day, end in zip(notices, ends, strict=True)
        ],
        dtype=np.int64,
    )
    return Panel(
        market, bars.contracts, sessions, calendar, values, bar, ends, first_notice,
        np.setdiff1d(inside, used), np.flatnonzero(is_outside), np.flatnonzero(np.isin(sessions, disagreeing)),
    )  # fmt: skip


def _disagreeing_days(
    bars: Bars, inside: np.ndarray, closed: np.ndarray, last_days: np.ndarray, count: int
) -> np.ndarray:
    """Closed days on which more than half of the live contracts have a bar.

    Live is a contract whose first bar is not later than the day and whose last trading day is not earlier.
    """
    first_bar = np.full(count, np.iinfo(np.int64).max)
    np.minimum.at(first_bar, bars.contract[inside], bars.session[inside])
    days, seen = np.unique(bars.session[closed], return_counts=True)
    live = ((first_bar <= days[:, None]) & (last_days >= days[:, None])).sum(axis=1)
    return days[2 * seen > live]


def rescale(market: Market, bars: Bars) -> np.ndarray:
    """The bars' values with prices on the market's present scale, (n, 6)."""
    values = bars.values
    prices = np.array([BAR_FIELDS.index(name) for name in PRICE_FIELDS])
    for change in market.rescaled:
        earlier = bars.session < day_number(change.before)
        if earlier.any():
            values = values.copy()
            values[np.ix_(earlier, prices)] = scale_prices(values[np.ix_(earlier, prices)], change.multiply)
    return values


def plan_ends(panel: Panel, plan: Plan) -> np.ndarray:
    """Session index of the day that a plan's backstop counts back from, for each contract, (N,)."""
    ends: np.ndarray = {
        Before.LAST_TRADE: panel.last_trade,
        Before.FIRST_NOTICE: panel.first_notice,
        Before.EARLIER: np.minimum(panel.last_trade, panel.first_notice),
    }[plan.before]
    return ends


def foreseen(panel: Panel, index: np.ndarray | int, at: np.ndarray | int) -> np.ndarray:
    """Indices of sessions as they were counted at the close of others; the two are broadcast.

    A closed day that trades all the same moves every later session on by one, and nobody knows of it before it comes.
    """
    surprises = panel.disagreeing
    between = np.searchsorted(surprises, index, side="right") - np.searchsorted(surprises, at, side="right")
    return np.asarray(index - np.maximum(between, 0))
