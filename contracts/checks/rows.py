"""Bars that contradict themselves or their market's terms.

Belongs here: what can be said of one bar alone, or of it and its limit. Does not belong here: comparing
contracts (`prices.py`).
"""

import numpy as np

from contracts.findings import Action, Finding, Kind, Severity
from contracts.layouts import PRICE_FIELDS
from contracts.panel import Panel
from contracts.sessions import day_of

# More off-tick prices than these in one field of a contract are told once, with their count.
_TOLD_ONE_BY_ONE = 3
_TICK_TOLERANCE = 1e-6
# Sessions within which a wrong price that was let stand comes back.
_LONGEST_WAY_BACK = 10


def check_rows(panel: Panel, clean_prices: np.ndarray, levels: np.ndarray, is_replaced: np.ndarray) -> list[Finding]:
    """All findings of this family; `clean_prices` (4, T, N) says which open, high and low were kept.

    `levels` (T, N) put prices on one scale where that changed undeclared; `is_replaced` (T, N) are settles that are
    estimates, against which no change is measured.
    """
    settle = np.where(is_replaced, np.nan, clean_prices[PRICE_FIELDS.index("settle")])
    # On which of two scales the limit was declared nobody can know.
    is_one_scale = bool((levels == 1.0).all())
    return [
        *_off_tick(panel, levels),
        *_broken_ranges(panel, clean_prices),
        *_outside_range(panel),
        *(_limits(panel, settle) if is_one_scale else ()),
    ]


def _off_tick(panel: Panel, levels: np.ndarray) -> list[Finding]:
    market, tick = panel.market, panel.market.tick_size
    found = []
    for name in PRICE_FIELDS:
        ticks = panel.field(name) * levels / tick
        with np.errstate(invalid="ignore"):
            off = np.abs(ticks - np.round(ticks)) > np.maximum(_TICK_TOLERANCE, 1e-12 * np.abs(ticks))
        for contract in np.flatnonzero(off.any(axis=0)):
            sessions = np.flatnonzero(off[:, contract])
            label = panel.contracts[contract]
            told = sessions if len(sessions) <= _TOLD_ONE_BY_ONE else sessions[:1]
            for session in told:
                price = float(panel.field(name)[session, contract])
                nearest = round(float(np.round(price / tick)) * tick, 10)
                day = day_of(panel.sessions[session])
                more = "" if len(told) == len(sessions) else f" (and {len(sessions) - 1} more of this contract)"
                message = f"{label}, {day}: {name} {price:.10g} lies between ticks of {tick:.10g}{more}"
                found.append(
                    Finding(
                        Kind.OFF_TICK, Severity.NOTE, message, market.code, label, day, name, price, nearest,
                        score=float(len(sessions)) if more else 1.0, threshold=1.0,
                    )
                )  # fmt: skip
    return found


def _broken_ranges(panel: Panel, clean_prices: np.ndarray) -> list[Finding]:
    found = []
    names = [name for name in PRICE_FIELDS if name != "settle"]
    low, high = panel.field("low"), panel.field("high")
    for name in names:
        reported = panel.field(name)
        dropped = ~np.isnan(reported) & np.isnan(clean_prices[PRICE_FIELDS.index(name)])
        for session, contract in np.argwhere(dropped):
            label, day = panel.contracts[contract], day_of(panel.sessions[session])
            price = float(reported[session, contract])
            span = f"low {low[session, contract]:.10g}, high {high[session, contract]:.10g}"
            message = f"{label}, {day}: {name} {price:.10g} does not fit its bar ({span}); left out of the clean bar"
            kind = Kind.NOT_POSITIVE if price <= 0 and not panel.market.may_be_negative else Kind.RANGE_BROKEN
            found.append(
                Finding(
                    kind, Severity.REVIEW, message, panel.market.code, label, day, name, price, action=Action.MASKED
                )
            )
    return found


def _outside_range(panel: Panel) -> list[Finding]:
    low, high, settle = panel.field("low"), panel.field("high"), panel.field("settle")
    half = 0.5 * panel.market.tick_size
    with np.errstate(invalid="ignore"):
        outside = (panel.field("volume") > 0) & (low <= high) & ((settle > high + half) | (settle < low - half))
    # Final settlement is set by rule or index, and may lie outside what traded.
    sessions = np.arange(len(settle))[:, None]
    outside &= sessions != panel.last_trade[None, :]
    found = []
    for session, contract in np.argwhere(outside):
        label, day = panel.contracts[contract], day_of(panel.sessions[session])
        price = float(settle[session, contract])
        nearest = float(np.clip(price, low[session, contract], high[session, contract]))
        span = f"{low[session, contract]:.10g} to {high[session, contract]:.10g}"
        message = f"{label}, {day}: settle {price:.10g} lies outside the session's range {span}"
        found.append(
            Finding(
                Kind.SETTLE_OUTSIDE_RANGE,
                Severity.NOTE,
                message,
                panel.market.code,
                label,
                day,
                "settle",
                price,
                nearest,
            )
        )
    return found


def _limits(panel: Panel, settle: np.ndarray) -> list[Finding]:
    """Changes beyond the daily limit, and sessions on which the whole curve closed at it or went beyond."""
    limit = panel.market.daily_limit
    if limit is None:
        return []
    market, half = panel.market.code, 0.5 * panel.market.tick_size
    change = np.full(settle.shape, np.nan)
    change[1:] = settle[1:] - settle[:-1]
    with np.errstate(invalid="ignore"):
        beyond = np.abs(change) > limit + half
        locked = np.abs(np.abs(change) - limit) <= half
    alive = (~np.isnan(change)).sum(axis=1)
    found = []
    # Exchanges widen or lift a limit; a curve that goes beyond it together says that the declared one is not in force.
    together = (alive >= 2) & (2 * beyond.sum(axis=1) > alive)
    for session in np.flatnonzero(together):
        day, count = day_of(panel.sessions[session]), int(beyond[session].sum())
        message = (
            f"{market}, {day}: {count} of {alive[session]} contracts moved more than the declared daily limit of "
            f"{limit:.10g}; a fact, kept; was the limit another?"
        )
        found.append(
            Finding(
                Kind.LIMIT_EXCEEDED, Severity.NOTE, message, market, session=day, score=float(count),
                threshold=0.5 * float(alive[session]),
            )
        )  # fmt: skip
    for session, contract in np.argwhere(beyond & ~together[:, None]):
        if _comes_late_or_back(panel, settle, change, beyond, int(session), int(contract)):
            continue
        label, day = panel.contracts[contract], day_of(panel.sessions[session])
        moved = float(change[session, contract])
        message = f"{label}, {day}: settle moved {moved:+.10g}, more than the daily limit of {limit:.10g}"
        found.append(
            Finding(
                Kind.LIMIT_EXCEEDED, Severity.REVIEW, message, market, label, day, "settle",
                float(settle[session, contract]), score=abs(moved), threshold=limit,
            )
        )  # fmt: skip
    at_limit = locked.sum(axis=1)
    for session in np.flatnonzero((alive >= 2) & (2 * at_limit > alive)):
        day = day_of(panel.sessions[session])
        count_told = f"{at_limit[session]} of {alive[session]} contracts"
        message = f"{market}, {day}: {count_told} settled at the daily limit of {limit:.10g}; a fact, kept"
        found.append(
            Finding(Kind.LIMIT_LOCKED, Severity.NOTE, message, market, session=day, score=float(at_limit[session]))
        )
    return found


def _comes_late_or_back(
    panel: Panel, settle: np.ndarray, change: np.ndarray, beyond: np.ndarray, session: int, contract: int
) -> bool:
    """Whether a change beyond the limit only makes up for sessions the settle stood still, or undoes another one.

    A wrong price that is let stand breaks the limit on its way back too; it is told on its way out. A contract that
    does not trade, or whose price was not updated (`stale_price`), comes after its curve in one move.
    """
    limit = float(panel.market.daily_limit or 0.0)
    moved = change[:, contract]
    stood = 0
    while session - stood - 1 >= 0 and moved[session - stood - 1] == 0.0:
        stood += 1
    if stood >= 2 and abs(moved[session]) <= (stood + 1) * limit:
        return True
    for before in range(session - 1, max(0, session - _LONGEST_WAY_BACK) - 1, -1):
        if beyond[before, contract] and moved[before] * moved[session] < 0:
            away = abs(settle[session, contract] - settle[before - 1, contract])
            return bool(away <= (session - before + 1) * limit)
    return False
