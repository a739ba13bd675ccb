"""Volumes and open interest that cannot be.

Belongs here: weighing a contract's counts against its own recent past, its next sessions, its bar and each other.
Does not belong here: whether open interest belongs to the session it stands on (`lag.py`), rows with negative counts
(refused by `intake.py`).

Volume: how many times it is its own median of ten rows, the largest of them, the open interest about it, and (where
known) the median of the next three rows, the last counted up to a hundred; trade that is real widens the bar, so the
square of how many times the bar's span is its own median is divided out. The score is the geometric mean of what is
known: common practice, no source. A tenfold volume is an ordinary day of news and is not told; a hundredfold is.

Open interest: each trade changes it by no more than its own quantity, and it stays from one session to the next. The
score is the distance from the median of three rows before and of three after, whichever is smaller, in scaled medians
of its own 20 past changes (at least 1% of it), where it stands three times above or below both. The newest value
has no next one; it must stand five times away, and farther than what was traded: common practice, no source.
"""

from dataclasses import dataclass

import numpy as np

from contracts.checks.robust import MAD_SCALE
from contracts.findings import Finding, Kind, Severity
from contracts.panel import Panel
from contracts.sessions import day_of

_PAST = 10
_LEAST_PAST = 5
_NEXT = 3
_LEAST_VOLUME = 30.0
# Where a contract hardly trades, its first block says nothing.
_LEAST_USUAL = 5.0
_MOST_OF_NEXT = 100.0
_VOLUME_SCORE = 10.0
_VOLUME_SCORE_ONLINE = 9.0
_LEAST_INTEREST = 100.0
_TIMES_AWAY = 3.0
_TIMES_AWAY_ONLINE = 5.0
_CHANGES = 20
_INTEREST_SCORE = 6.0
# Open interest may vanish in the last sessions of a contract.
_LAST_SESSIONS = 5


@dataclass(frozen=True)
class _Rows:
    """One contract's rows, in order: session, volume, open interest, and the span of its bar or move."""

    session: np.ndarray
    volume: np.ndarray
    interest: np.ndarray
    span: np.ndarray


def check_volumes(panel: Panel) -> list[Finding]:
    """Volumes and open interest that stand alone, a review each; values are kept as reported."""
    found = []
    for contract in range(panel.shape[1]):
        sessions = np.flatnonzero(panel.bar[:, contract] >= 0)
        settle = panel.field("settle")[sessions, contract]
        moved = np.abs(np.diff(settle, prepend=settle[:1]))
        range_ = (panel.field("high") - panel.field("low"))[sessions, contract]
        rows = _Rows(
            sessions, panel.field("volume")[sessions, contract], panel.field("open_interest")[sessions, contract],
            np.fmax(range_, moved),
        )  # fmt: skip
        found += _volumes(panel, contract, rows)
        found += _interests(panel, contract, rows)
    return found


def _volumes(panel: Panel, contract: int, rows: _Rows) -> list[Finding]:
    volume = rows.volume
    before = np.concatenate(([np.nan], volume[:-1]))
    with np.errstate(invalid="ignore"):
        # A cheap look first: nothing a few times the row before is a hundred times the rows before.
        far = (volume >= _LEAST_VOLUME) & (volume > 3.0 * np.fmax(before, 0.0))
    found = []
    for at in np.flatnonzero(far).tolist():
        past = volume[max(0, at - _PAST) : at]
        past = past[~np.isnan(past)]
        if len(past) < _LEAST_PAST:
            continue
        usual = float(np.median(past))
        if usual < _LEAST_USUAL or volume[at] < _VOLUME_SCORE * usual:
            continue
        score, is_online = _score_volume(panel, rows, at, past)
        threshold = _VOLUME_SCORE_ONLINE if is_online else _VOLUME_SCORE
        if score < threshold:
            continue
        value = float(volume[at])
        says = f"is {value / usual:,.0f} times its median of ten sessions, without a bar to match"
        found.append(_tell(panel, contract, rows, at, Kind.VOLUME_IMPLAUSIBLE, "volume", usual, score, threshold, says))
    return found


def _score_volume(panel: Panel, rows: _Rows, at: int, past: np.ndarray) -> tuple[float, bool]:
    """The score of one volume, and whether no later row bears on it yet."""
    value = float(rows.volume[at])
    parts = [value / max(float(np.median(past)), 1.0), value / max(float(past.max()), 1.0)]
    interest = rows.interest[max(0, at - 1) : at + 2]
    if (~np.isnan(interest)).any():
        parts.append(value / max(float(np.nanmax(interest)), 1.0))
    after = rows.volume[at + 1 : at + 1 + _NEXT]
    after = after[~np.isnan(after)]
    if len(after):
        parts.append(min(value / max(float(np.median(after)), 1.0), _MOST_OF_NEXT))
    spans = rows.span[max(0, at - _PAST) : at]
    spans = spans[~np.isnan(spans)]
    wide = 1.0
    if len(spans) and not np.isnan(rows.span[at]):
        wide = max(1.0, float(rows.span[at]) / max(float(np.median(spans)), panel.market.tick_size))
    return float((np.prod(parts) / wide**2) ** (1.0 / len(parts))), not len(after)


def _interests(panel: Panel, contract: int, rows: _Rows) -> list[Finding]:
    known = np.flatnonzero(~np.isnan(rows.interest))
    interest, volume = rows.interest[known], rows.volume[known]
    if len(interest) <= _LEAST_PAST:
        return []
    change = np.abs(np.diff(interest, prepend=interest[:1]))
    with np.errstate(invalid="ignore"):
        away = np.maximum(interest[1:], 1.0) / np.maximum(interest[:-1], 1.0)
        far = np.flatnonzero(np.maximum(away, 1.0 / away) >= 2.0) + 1
    left = panel.last_trade[contract] - rows.session[known]
    found = []
    for at in far[far >= _LEAST_PAST].tolist():
        value = float(interest[at])
        before = float(np.median(interest[at - 3 : at]))
        after = interest[at + 1 : at + 4]
        # The first value after a wrong one is as far from its past as the wrong one was.
        noise = MAD_SCALE * float(np.median(change[max(1, at - _CHANGES) : at]))
        if max(before, value) < _LEAST_INTEREST:
            continue
        if len(after):
            later = float(np.median(after))
            if (value - before) * (value - later) <= 0:
                continue
            nearer = min((before, later), key=lambda level: abs(value - level))
            expected, times = 0.5 * (before + later), _TIMES_AWAY
        else:
            traded = np.nanmax(np.append(volume[at - 1 : at + 1], 0.0))
            if left[at] <= _LAST_SESSIONS or abs(value - before) <= traded:
                continue
            nearer, expected, times = before, before, _TIMES_AWAY_ONLINE
        share = max(value, 1.0) / max(nearer, 1.0)
        score = abs(value - nearer) / max(noise, 0.01 * nearer, 1.0)
        if max(share, 1.0 / share) < times or score < _INTEREST_SCORE:
            continue
        size = f"{share:,.1f} times" if share > 1 else f"1/{1 / share:,.0f} of" if value else "none against"
        says = f"is {size} what stands about it ({nearer:.10g})"
        found.append(
            _tell(
                panel, contract, rows, int(known[at]), Kind.OPEN_INTEREST_IMPLAUSIBLE, "open_interest",
                round(expected), score, _INTEREST_SCORE, says,
            )
        )  # fmt: skip
    return found


def _tell(
    panel: Panel, contract: int, rows: _Rows, at: int, kind: Kind, field: str, expected: float, score: float,
    threshold: float, says: str,
) -> Finding:  # fmt: skip
    label, day = panel.contracts[contract], day_of(panel.sessions[rows.session[at]])
    value = float(getattr(rows, "volume" if field == "volume" else "interest")[at])
    name = field.replace("_", " ")
    message = f"{label}, {day}: {name} {value:.10g} {says}; kept"
    return Finding(
        kind, Severity.REVIEW, message, panel.market.code, label, day, field, value, float(expected), score=score,
        threshold=threshold,
    )  # fmt: skip
