"""Sessions and bars that are not there.

Belongs here: gaps between bars, and bars that stop too soon. Does not belong here: files of a whole market that are
late (`catalog/`), series rows that carry a price over a gap (`splice.py`).

A contract that trades has a bar; one that does not has one only where its exchange prints idle rows. So a lacking bar
is a fault where the contract traded on nearly all of the twenty sessions before and the twenty after, and its volumes
leave a chance of at most three in a thousand that a session sees no trade: the mean of exp(-volume) over the ten
nearest sessions, which is that chance were trades Poisson about each volume. Elsewhere it is a fact, told once a
contract: common practice, no source.
"""

import numpy as np

from contracts.findings import Finding, Kind, Severity
from contracts.panel import Panel
from contracts.sessions import day_of

# More empty sessions in a row than these are a market that fell silent.
_LONGEST_RUN = 10
_AROUND = 20
_MOST_LIKELY = 0.003
_MOST_IDLE = 0.1
# Bars may stop so many sessions before the market's usual distance from the last trade.
_EARLY = 2
_LEAST_FINISHED = 4


def check_gaps(panel: Panel) -> list[Finding]:
    """Empty sessions, bars that contracts lack, contracts that are behind and contracts that ended early."""
    has_bar = panel.bar >= 0
    empty: np.ndarray = np.logical_not(has_bar.any(axis=1))
    trade = _Trade(panel, has_bar, empty)
    return [
        *_empty_sessions(panel, empty),
        *_lacking_bars(panel, trade),
        *_late_contracts(panel, trade),
        *_ended_early(panel, trade),
    ]


class _Trade:
    """Which contracts trade so regularly that a lacking bar is strange."""

    def __init__(self, panel: Panel, has_bar: np.ndarray, empty: np.ndarray) -> None:
        self.has_bar, self.rows = has_bar, np.flatnonzero(~empty)
        volume = panel.field("volume")
        # A market that reports no volume is judged by the presence of its rows alone.
        self.is_counted = bool((~np.isnan(volume)).any())
        self.volume = volume
        self.first = np.where(has_bar.any(axis=0), has_bar.argmax(axis=0), len(has_bar))
        self.last = np.where(has_bar.any(axis=0), len(has_bar) - 1 - has_bar[::-1].argmax(axis=0), -1)

    def is_regular(self, contract: int, first: int, last: int) -> bool:
        """Whether a contract traded regularly around the sessions `first` to `last`, which themselves do not count."""
        before = self.rows[(self.rows < first) & (self.rows >= self.first[contract])][-_AROUND:]
        after = self.rows[(self.rows > last) & (self.rows <= self.last[contract])][:_AROUND]
        around = np.concatenate((before, after))
        if not len(around):
            return False
        present = self.has_bar[around, contract]
        volume = self.volume[around, contract]
        idle = ~present | (volume <= 0)
        if idle.mean() > _MOST_IDLE:
            return False
        if not self.is_counted:
            return True
        # Trade grows and dies with the life of a contract, so its nearest sessions say most.
        near = np.concatenate((before[-_AROUND // 4 :], after[: _AROUND // 4]))
        known = np.where(self.has_bar[near, contract], self.volume[near, contract], 0.0)
        known = known[~np.isnan(known)]
        return len(known) > 0 and float(np.exp(-known).mean()) <= _MOST_LIKELY


def _empty_sessions(panel: Panel, empty: np.ndarray) -> list[Finding]:
    """Sessions on which no contract has a bar, told by the run."""
    market = panel.market.code
    found = []
    for first, last in _runs(empty):
        count = last - first + 1
        day, until = day_of(panel.sessions[first]), day_of(panel.sessions[last])
        if count == 1:
            kind, message = Kind.SESSION_MISSING, f"{market}, {day}: no contract has a bar on this session"
        else:
            is_silent = count > _LONGEST_RUN
            kind = Kind.MARKET_SILENT if is_silent else Kind.SESSIONS_MISSING
            message = f"{market}, {day} to {until}: no contract has a bar on {count} sessions in a row"
            message += "; is a file missing, or was the market closed?" if is_silent else ""
        found.append(
            Finding(
                kind, Severity.REVIEW, message, market, session=day, field="settle", score=float(count),
                threshold=float(_LONGEST_RUN + 1 if kind is Kind.MARKET_SILENT else 1),
            )
        )  # fmt: skip
    return found


def _lacking_bars(panel: Panel, trade: _Trade) -> list[Finding]:
    """Runs of sessions on which a contract lacks the bar that others have."""
    has_bar, market = trade.has_bar, panel.market.code
    sessions = np.arange(len(has_bar))
    is_row = np.zeros(len(has_bar), dtype=bool)
    is_row[trade.rows] = True
    found = []
    for contract in range(has_bar.shape[1]):
        inside = (sessions > trade.first[contract]) & (sessions < trade.last[contract])
        lacking = ~has_bar[:, contract] & is_row & inside
        label = panel.contracts[contract]
        idle: list[tuple[int, int]] = []
        for first, last in _runs(lacking):
            if not trade.is_regular(contract, first, last):
                idle.append((first, last - first + 1))
                continue
            count, day = last - first + 1, day_of(panel.sessions[first])
            days = f"{day}" if count == 1 else f"{day} to {day_of(panel.sessions[last])}"
            lacks = f"{count} session{'s' if count > 1 else ''} without a bar"
            message = f"{label}, {days}: {lacks}, though it trades and other contracts have theirs"
            found.append(
                Finding(
                    Kind.CONTRACT_MISSING, Severity.REVIEW, message, market, label, day, "settle",
                    score=float(count), threshold=1.0,
                )
            )  # fmt: skip
        if idle:
            count, day = sum(length for _, length in idle), day_of(panel.sessions[idle[0][0]])
            sessions_told = f"{count} session{'s' if count > 1 else ''}"
            message = f"{label}, from {day}: {sessions_told} without a bar while it hardly trades"
            found.append(
                Finding(
                    Kind.CONTRACT_MISSING, Severity.NOTE, message, market, label, day, "settle",
                    score=float(count), threshold=1.0, detail="idle",
                )
            )  # fmt: skip
    return found


def _late_contracts(panel: Panel, trade: _Trade) -> list[Finding]:
    """Contracts that still trade by the market's calendar and lack the newest sessions that others have."""
    newest = len(trade.has_bar) - 1
    found = []
    for contract in np.flatnonzero((trade.last >= 0) & (trade.last < newest) & (panel.last_trade > newest)).tolist():
        last = int(trade.last[contract])
        label, count = panel.contracts[contract], newest - last
        newest_day = day_of(panel.sessions[newest])
        is_regular = trade.is_regular(contract, last + 1, newest)
        message = (
            f"{label}, {newest_day}: its newest bar is of {day_of(panel.sessions[last])}, "
            f"{count} session{'s' if count > 1 else ''} behind the other contracts"
            f"{'' if is_regular else '; it hardly trades'}"
        )
        found.append(
            Finding(
                Kind.FILE_LATE, Severity.REVIEW if is_regular else Severity.NOTE, message, panel.market.code, label,
                newest_day, "settle", score=float(count), threshold=1.0,
            )
        )  # fmt: skip
    return found


def _ended_early(panel: Panel, trade: _Trade) -> list[Finding]:
    """Contracts whose bars stop before their last trading session while others go on.

    Some feeds leave contracts at first notice: what the market's finished contracts usually do is no fault of one
    of them, and is told once, because then the declared last trading day is not the data's.
    """
    newest, market = len(trade.has_bar) - 1, panel.market.code
    finished = np.flatnonzero((trade.last >= 0) & (panel.last_trade <= newest))
    if not len(finished):
        return []
    is_row = np.zeros(len(trade.has_bar), dtype=np.int64)
    is_row[trade.rows] = 1
    rows_until = np.cumsum(is_row)
    early = rows_until[panel.last_trade[finished]] - rows_until[trade.last[finished]]
    usual = int(np.median(early)) if len(finished) >= _LEAST_FINISHED else 0
    found = []
    if usual > _EARLY:
        day = day_of(panel.sessions[trade.last[finished[-1]]])
        message = (
            f"{market}: bars of its {len(finished)} finished contracts usually stop {usual} sessions before the "
            "declared last trading session; is [last_trade] right, or does the source leave them early?"
        )
        found.append(
            Finding(
                Kind.ENDED_EARLY, Severity.REVIEW, message, market, session=day, field="settle", score=float(usual),
                threshold=float(_EARLY + 1),
            )
        )  # fmt: skip
    for contract, count in zip(finished.tolist(), early.tolist(), strict=True):
        if count <= usual + _EARLY:
            continue
        last = int(trade.last[contract])
        label, day = panel.contracts[contract], day_of(panel.sessions[last])
        is_regular = trade.is_regular(contract, last + 1, newest)
        message = (
            f"{label}, {day}: its last bar, {count} sessions before its last trading session "
            f"{day_of(panel.sessions[panel.last_trade[contract]])}, while other contracts go on"
            f"{'' if is_regular else '; it hardly traded'}"
        )
        found.append(
            Finding(
                Kind.ENDED_EARLY, Severity.REVIEW if is_regular else Severity.NOTE, message, market, label, day,
                "settle", score=float(count), threshold=float(usual + _EARLY + 1),
            )
        )  # fmt: skip
    return found


def _runs(mask: np.ndarray) -> list[tuple[int, int]]:
    """First and last index of each run of true."""
    edges = np.flatnonzero(np.diff(np.concatenate(([0], mask.astype(np.int8), [0]))))
    return [(int(first), int(end) - 1) for first, end in zip(edges[::2], edges[1::2], strict=True)]
