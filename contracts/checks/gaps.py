"""Sessions and bars that are not there.

Belongs here: gaps between bars. Does not belong here: files that are late (`catalog/`), series rows
that carry a price over a gap (`splice.py`).
"""

import numpy as np

from contracts.findings import Finding, Kind, Severity
from contracts.panel import Panel
from contracts.sessions import day_of


def check_gaps(panel: Panel) -> list[Finding]:
    """Sessions without any bar, and runs of sessions on which a contract lacks the bar that others have."""
    market = panel.market.code
    has_bar = panel.bar >= 0
    found = []
    empty = ~has_bar.any(axis=1)
    for session in np.flatnonzero(empty):
        day = day_of(panel.sessions[session])
        message = f"{market}, {day}: no contract has a bar on this session"
        found.append(Finding(Kind.SESSION_MISSING, Severity.REVIEW, message, market, session=day, field="settle"))
    sessions = np.arange(len(has_bar))
    volume = panel.field("volume")
    for contract in range(has_bar.shape[1]):
        bars = np.flatnonzero(has_bar[:, contract])
        if not len(bars):
            continue
        lacking = ~has_bar[:, contract] & ~empty & (sessions > bars[0]) & (sessions < bars[-1])
        for first, last in _runs(lacking):
            label = panel.contracts[contract]
            count = int(lacking[first : last + 1].sum())
            traded = bool((volume[max(0, first - 5) : first, contract] > 0).any())
            severity = Severity.REVIEW if traded else Severity.NOTE
            days = f"{day_of(panel.sessions[first])}"
            if last > first:
                days += f" to {day_of(panel.sessions[last])}"
            lacks = f"{count} session{'s' if count > 1 else ''} without a bar"
            message = f"{label}, {days}: {lacks}, while other contracts have theirs"
            found.append(
                Finding(
                    Kind.CONTRACT_MISSING, severity, message, market, label, day_of(panel.sessions[first]), "settle",
                    score=float(count), threshold=1.0,
                )
            )  # fmt: skip
    return found + _late_contracts(panel)


def _late_contracts(panel: Panel) -> list[Finding]:
    """Contracts that still trade by the market's calendar and lack the newest sessions that others have."""
    has_bar = panel.bar >= 0
    newest = len(has_bar) - 1
    found = []
    for contract in np.flatnonzero(has_bar.any(axis=0) & (panel.last_trade > newest)):
        last = int(np.flatnonzero(has_bar[:, contract])[-1])
        if last == newest:
            continue
        label, count = panel.contracts[contract], newest - last
        newest_day = day_of(panel.sessions[newest])
        message = (
            f"{label}, {newest_day}: its newest bar is of {day_of(panel.sessions[last])}, "
            f"{count} session{'s' if count > 1 else ''} behind the other contracts"
        )
        found.append(
            Finding(
                Kind.FILE_LATE, Severity.REVIEW, message, panel.market.code, label, newest_day, "settle",
                score=float(count), threshold=1.0,
            )
        )  # fmt: skip
    return found


def _runs(mask: np.ndarray) -> list[tuple[int, int]]:
    """First and last index of each run of true."""
    edges = np.flatnonzero(np.diff(np.concatenate(([0], mask.astype(np.int8), [0]))))
    return [(int(first), int(end) - 1) for first, end in zip(edges[::2], edges[1::2], strict=True)]
