"""Seeded faults planted in a market.

Belongs here: what is done to which rows, and what a person would accept as having found it. Does not belong here:
drawing the market (`curves.py`), scoring (`score.py`).
"""

from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np

from tests.detectors.curves import HIGH, INTEREST, LOW, OPEN, SETTLE, Grown

# The kinds by which a wrong settle may reasonably be called.
WRONG_PRICE = frozenset({
    "decimal_shift", "reverting_spike", "digits_swapped", "sign_flipped", "curve_break", "neighbours_price",
    "curve_kinked", "not_positive", "limit_exceeded", "range_broken", "stale_price", "scale_changed",
})  # fmt: skip
# Each kind of fault, with the kinds of finding that name it; WRONG_PRICE counts besides for the first group.
PRICE_FAULTS: dict[str, frozenset[str]] = {
    "decimal_shift": frozenset({"decimal_shift"}),
    "reverting_spike": frozenset({"reverting_spike"}),
    "digits_swapped": frozenset({"digits_swapped"}),
    "sign_flipped": frozenset({"sign_flipped"}),
    "curve_break": frozenset({"curve_break", "reverting_spike"}),
    "neighbours_price": frozenset({"neighbours_price"}),
    "not_positive": frozenset({"not_positive"}),
    "limit_exceeded": frozenset({"limit_exceeded"}),
}
OTHER_FAULTS: dict[str, frozenset[str]] = {
    "stale_price": frozenset({"stale_price"}),
    "curve_kinked": frozenset({"curve_kinked"}),
    "volume_implausible": frozenset({"volume_implausible"}),
    "open_interest_implausible": frozenset({"open_interest_implausible"}),
    "session_missing": frozenset({"session_missing", "sessions_missing"}),
    "sessions_missing": frozenset({"sessions_missing"}),
    "market_silent": frozenset({"market_silent"}),
    "contract_missing": frozenset({"contract_missing"}),
    "ended_early": frozenset({"ended_early"}),
    "calendar_disagrees": frozenset({"calendar_disagrees"}),
    "off_tick": frozenset({"off_tick"}),
    "range_broken": frozenset({"range_broken", "not_positive"}),
    "settle_outside_range": frozenset({"settle_outside_range"}),
    "outside_listing": frozenset({"outside_listing"}),
    "not_a_session": frozenset({"not_a_session"}),
    "scale_changed": frozenset({"scale_changed"}),
    "open_interest_lag_wrong": frozenset({"open_interest_lag_wrong"}),
}
NAMES = {**PRICE_FAULTS, **OTHER_FAULTS}
_ACCEPTED: dict[str, frozenset[str]] = {
    **{kind: WRONG_PRICE for kind in PRICE_FAULTS},
    "stale_price": WRONG_PRICE,
    "curve_kinked": WRONG_PRICE,
    "scale_changed": WRONG_PRICE,
    "off_tick": WRONG_PRICE | {"off_tick"},
    "settle_outside_range": WRONG_PRICE | {"settle_outside_range"},
    "range_broken": WRONG_PRICE,
    "sessions_missing": frozenset({"session_missing", "market_silent"}),
    "market_silent": frozenset({"session_missing", "sessions_missing"}),
    "contract_missing": frozenset({"file_late"}),
    "ended_early": frozenset({"contract_missing", "file_late"}),
    "open_interest_lag_wrong": frozenset({"open_interest_implausible"}),
    "outside_listing": frozenset({"not_a_session"}),
}


def accepted(kind: str) -> frozenset[str]:
    """Kinds of finding that a person would take as having found a fault of this kind."""
    return NAMES[kind] | _ACCEPTED.get(kind, frozenset())


@dataclass(frozen=True)
class Fault:
    """One planted fault: contract (None for the whole market), day numbers it spans, field, form, and true settles."""

    kind: str
    form: str
    contract: str | None
    first: int
    last: int
    field: str = "settle"
    truth: tuple[float, ...] = ()
    size: float = 0.0


@dataclass(repr=False)
class Planted:
    """A market with faults in it: reported values (6, T, N), rows on other days, and what was done."""

    grown: Grown
    values: np.ndarray
    faults: list[Fault]
    # (contract's column, day number, values of the row)
    strays: list[tuple[int, int, np.ndarray]] = field(default_factory=list)
    # Days the declaration calls closed although the market trades.
    closed: list[int] = field(default_factory=list)
    lag: int = 0

    def cut(self, first: int, last: int) -> "Planted":
        """Only the sessions from one index to another, both included."""
        grown, days = self.grown, self.grown.days
        kept = slice(first, last + 1)
        live = np.isfinite(self.values[SETTLE, kept]).any(axis=0)
        low, high = days[first], days[last]
        columns = np.cumsum(live) - 1
        smaller = replace(
            grown, contracts=tuple(np.array(grown.contracts)[live]), days=days[kept],
            values=grown.values[:, kept, live], fair=grown.fair[kept, live], ends=grown.ends[live] - first, events=[],
        )  # fmt: skip
        strays = [(int(columns[c]), d, row) for c, d, row in self.strays if low <= d <= high and live[c]]
        faults = [fault for fault in self.faults if fault.first <= high and fault.last >= low]
        closed = [day for day in self.closed if low <= day <= high]
        values = self.values[:, kept, live].copy()
        if self.lag:
            values[INTEREST, -self.lag :] = np.nan
        return Planted(smaller, values, faults, strays, closed, self.lag)


class Planter:
    """Places faults of a market apart from each other and from its true events."""

    def __init__(self, grown: Grown, rng: np.random.Generator) -> None:
        self.grown, self.rng = grown, rng
        self.planted = Planted(grown, grown.values.copy(), [], lag=grown.terms.lag)
        self.taken = np.zeros(grown.values.shape[1:], dtype=bool)
        for event in grown.events:
            for contract in event.contracts:
                sessions = np.array(event.sessions)
                near = slice(max(0, sessions.min() - 4), sessions.max() + 6)
                if event.nature in ("squeeze", "lone move"):
                    self.taken[near, contract] = True

    @property
    def tick(self) -> float:
        return self.grown.terms.tick

    def truth(self, session: int, contract: int) -> float:
        return float(self.grown.values[SETTLE, session, contract])

    def left(self, session: int, contract: int) -> int:
        return int(self.grown.ends[contract] - session)

    def is_free(self, session: int, contract: int, length: int = 1) -> bool:
        """Whether a run of rows with prices, and three sessions around it, is untouched."""
        if session < 3 or session + length + 3 >= len(self.grown.days):
            return False
        around = slice(session - 3, session + length + 3)
        settles = self.grown.values[SETTLE, session - 1 : session + length, contract]
        return not self.taken[around, contract].any() and bool(np.isfinite(settles).all())

    def pick(self, session: int, least: int = 5, most: int = 100, length: int = 1) -> int | None:
        """A live contract that many sessions before its expiry; None where none is free."""
        columns = [
            c for c in range(len(self.grown.contracts))
            if least + length - 1 <= self.left(session, c) <= most and self.is_free(session, c, length)
        ]  # fmt: skip
        return int(self.rng.choice(columns)) if columns else None

    def note(
        self, kind: str, form: str, session: int, contract: int | None, length: int = 1, field: str = "settle",
        size: float = 0.0, day: int | None = None,
    ) -> None:  # fmt: skip
        """Record a fault and keep others away from it; `day` where it shows on another day than the session's."""
        days, last = self.grown.days, session + length - 1
        truth: tuple[float, ...] = ()
        if contract is None:
            self.taken[max(0, session - 3) : last + 4] = True
        else:
            self.taken[max(0, session - 3) : last + 4, contract] = True
            truth = tuple(self.grown.values[SETTLE, session : last + 1, contract].tolist())
        name = None if contract is None else self.grown.contracts[contract]
        first, end = (int(days[session]), int(days[last])) if day is None else (day, day)
        self.planted.faults.append(Fault(kind, form, name, first, end, field, truth, size))

    def on_tick(self, price: float) -> float:
        return float(np.round(np.round(price / self.tick) * self.tick, self.grown.decimals))

    def put(self, session: int, contract: int, settle: float, whole_bar: bool, factor: float | None = None) -> None:
        """Replace a settle, and with `whole_bar` move or scale the other prices alike."""
        values = self.planted.values
        old = self.truth(session, contract)
        values[SETTLE, session, contract] = settle
        if whole_bar:
            for place in (OPEN, HIGH, LOW):
                price = values[place, session, contract]
                moved = price * factor if factor is not None else self.on_tick(price + settle - old)
                values[place, session, contract] = round(moved, 8)


def price_jump(planter: Planter, session: int, contract: int) -> float:
    """A wrong distance of 4% to 15% of the price, or of the market's level where that may be nought."""
    terms = planter.grown.terms
    base = terms.level if terms.may_be_negative else abs(planter.truth(session, contract))
    return float(planter.rng.choice([-1, 1]) * planter.rng.uniform(0.04, 0.15)) * base


Plant = Callable[[Planter, int], bool]
