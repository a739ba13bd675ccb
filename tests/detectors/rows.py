"""How faults of rows, volumes, days and whole markets look.

Belongs here: one function a kind, as in `planting.py`. Does not belong here: wrong settles.
"""

import numpy as np

from tests.detectors.curves import HIGH, INTEREST, LOW, OPEN, SETTLE, VOLUME
from tests.detectors.faults import Planter


def off_tick(p: Planter, session: int) -> bool:
    """A settle a third of a tick away."""
    contract = p.pick(session, 3, 250)
    if contract is None:
        return False
    p.planted.values[SETTLE, session, contract] = round(p.truth(session, contract) + 0.3 * p.tick, 8)
    p.note("off_tick", "settle", session, contract)
    return True


def range_broken(p: Planter, session: int) -> bool:
    """High and low have changed places, or the open lies outside of both."""
    contract = p.pick(session, 3, 250)
    if contract is None:
        return False
    values = p.planted.values
    high, low = values[HIGH, session, contract], values[LOW, session, contract]
    if not high - low >= 4 * p.tick:
        return False
    if p.rng.random() < 0.5:
        values[HIGH, session, contract], values[LOW, session, contract] = low, high
        form = "high below low"
    else:
        values[OPEN, session, contract] = p.on_tick(high + 0.5 * (high - low))
        form = "open outside"
    p.note("range_broken", form, session, contract, field="range")
    return True


def settle_outside_range(p: Planter, session: int) -> bool:
    """A settle 3 to 6 ticks above the high or below the low of a session with trade."""
    contract = p.pick(session, 3, 100)
    if contract is None or p.planted.values[VOLUME, session, contract] < 500:
        return False
    high, low = (float(p.planted.values[place, session, contract]) for place in (HIGH, LOW))
    ticks = int(p.rng.integers(3, 7))
    wrong = high + ticks * p.tick if p.rng.random() < 0.5 else low - ticks * p.tick
    if abs(wrong - p.truth(session, contract)) > 0.04 * p.grown.terms.level:
        return False
    p.planted.values[SETTLE, session, contract] = p.on_tick(wrong)
    p.note("settle_outside_range", "settle", session, contract, size=wrong - p.truth(session, contract))
    return True


def volume_implausible(p: Planter, session: int) -> bool:
    """A hundred times too much, or negative, in a contract that trades."""
    contract = p.pick(session, 6, 250)
    if contract is None or p.planted.values[VOLUME, session, contract] < 50:
        return False
    form = str(p.rng.choice(["x100", "x100", "negative"]))
    p.planted.values[VOLUME, session, contract] *= 100 if form == "x100" else -1
    p.note("volume_implausible", form, session, contract, field="volume")
    return True


def open_interest_implausible(p: Planter, session: int) -> bool:
    """Ten or a hundred times too much, a hundredth, nought amid life, or negative."""
    contract = p.pick(session, 6, 250)
    if contract is None or not p.planted.values[INTEREST, session, contract] >= 500:
        return False
    around = p.grown.values[INTEREST, session - 2 : session + 3, contract]
    if not (around >= 300).all():
        return False
    form, factor = [("x10", 10.0), ("x100", 100.0), ("/100", 0.01), ("nought", 0.0), ("negative", -1.0)][
        int(p.rng.integers(5))
    ]
    p.planted.values[INTEREST, session, contract] = float(round(around[2] * factor))
    p.note("open_interest_implausible", form, session, contract, field="open_interest")
    return True


def session_missing(p: Planter, session: int) -> bool:
    """No contract has a row."""
    return _silence(p, session, 1, "session_missing")


def sessions_missing(p: Planter, session: int) -> bool:
    """No contract has a row for 3 to 6 sessions."""
    return _silence(p, session, int(p.rng.integers(3, 7)), "sessions_missing")


def market_silent(p: Planter, session: int) -> bool:
    """No contract has a row for 12 to 25 sessions."""
    return _silence(p, session, int(p.rng.integers(12, 26)), "market_silent")


def _silence(p: Planter, session: int, length: int, kind: str) -> bool:
    around = slice(session - 3, session + length + 3)
    if session < 5 or session + length + 5 >= len(p.grown.days) or p.taken[around].any():
        return False
    p.planted.values[:, session : session + length] = np.nan
    p.note(kind, f"{length} sessions", session, None, length)
    return True


def contract_missing(p: Planter, session: int) -> bool:
    """A traded contract lacks 1 to 5 rows that others have."""
    length = int(p.rng.integers(1, 6))
    contract = p.pick(session, 6, 100, length)
    if contract is None or (p.grown.values[VOLUME, session - 1 : session + length, contract] < 20).any():
        return False
    p.planted.values[:, session : session + length, contract] = np.nan
    p.note("contract_missing", f"{length} sessions", session, contract, length)
    return True


def ended_early(p: Planter, session: int) -> bool:
    """A contract's rows stop 8 to 40 sessions before its last trade."""
    contract = p.pick(session, 8, 40)
    if contract is None:
        return False
    end = int(p.grown.ends[contract])
    rows = slice(session, end + 1)
    if end + 3 >= len(p.grown.days) or p.taken[rows, contract].any() or p.grown.terms.idle == "absent":
        return False
    p.planted.values[:, rows, contract] = np.nan
    # Told on any day from the last row to the last trade.
    p.note("ended_early", f"{end + 1 - session} sessions", session - 1, contract, end + 2 - session)
    return True


def calendar_disagrees(p: Planter, session: int) -> bool:
    """The declaration calls a day closed on which the whole market traded."""
    # Where rows are absent, fewer than half of the contracts may show, which is no disagreement.
    if p.taken[session - 1 : session + 2].any() or p.grown.terms.idle == "absent":
        return False
    day = int(p.grown.days[session])
    ends = {int(end) for end in p.grown.ends}
    # A last trading day would move with the calendar.
    if session in ends or session + 1 in ends or session - 1 in ends:
        return False
    p.planted.closed.append(day)
    p.note("calendar_disagrees", "closed", session, None)
    return True


def not_a_session(p: Planter, session: int) -> bool:
    """One contract has a row on a Saturday."""
    contract = p.pick(session, 5, 250)
    if contract is None:
        return False
    days = p.grown.days
    day = int(days[session]) + (5 - (int(days[session]) + 3) % 7)
    if day in days or not any(d > day for d in days):
        return False
    p.planted.strays.append((contract, day, p.planted.values[:, session, contract].copy()))
    p.note("not_a_session", "Saturday", session, contract, day=day)
    return True


def outside_listing(p: Planter, session: int) -> bool:
    """A contract has a row after its last trading day, or sixteen years before it."""
    ends = p.grown.ends
    columns = np.flatnonzero((ends >= session) & (ends < session + 40) & (ends + 8 < len(p.grown.days)))
    if not len(columns):
        return False
    contract = int(columns[0])
    end = int(ends[contract])
    row = p.planted.values[:, end, contract].copy()
    if not np.isfinite(row[SETTLE]) or p.taken[end - 1 : end + 1, contract].any():
        return False
    is_early = bool(p.rng.random() < 0.25)
    day = int(p.grown.days[end]) - 16 * 366 if is_early else int(p.grown.days[end + int(p.rng.integers(1, 6))])
    p.planted.strays.append((contract, day, row))
    p.note("outside_listing", "years early" if is_early else "after last trade", end, contract, day=day)
    return True


def scale_changed(p: Planter, session: int) -> bool:
    """From a session on every price is ten or a hundred times larger or smaller, and nobody declared it."""
    factor = float(p.rng.choice([0.1, 10.0, 0.01, 100.0]))
    values = p.planted.values
    values[OPEN : SETTLE + 1, session:] = np.round(values[OPEN : SETTLE + 1, session:] * factor, 8)
    p.note("scale_changed", f"x{factor:g}", session, None, len(p.grown.days) - session, size=factor)
    return True


def open_interest_lag_wrong(p: Planter, session: int) -> bool:
    """Every row prints the open interest of a session further back than the declared lag says."""
    values = p.planted.values
    shift = p.planted.lag + 1
    true = p.grown.values[INTEREST]
    printed = np.full(true.shape, np.nan)
    printed[shift:] = true[:-shift]
    values[INTEREST] = np.where(np.isnan(values[SETTLE]), np.nan, printed)
    p.note("open_interest_lag_wrong", f"{shift} against {p.planted.lag}", 0, None, len(p.grown.days))
    return True
