"""Codes, severities, the findings table, waivers.

Belongs here: how a finding is written down, identified and waived. Does not belong here: how it is found
(`checks/`) or what is done about it (`repairs.py`).
"""

import datetime
import hashlib
from dataclasses import dataclass, replace
from enum import StrEnum
from typing import Annotated

import pyarrow as pa
from pydantic import BeforeValidator, Field, model_validator

from contracts.declared import CODE, Declared
from contracts.markets import Day
from contracts.tables import FINDINGS, make_table


class Severity(StrEnum):
    """How much a finding matters: a note is a fact, a review wants eyes, a block keeps a market back."""

    NOTE = "note"
    REVIEW = "review"
    BLOCK = "block"


class Action(StrEnum):
    """What was done about a finding."""

    KEPT = "kept"
    REPAIRED = "repaired"
    MASKED = "masked"
    REJECTED = "rejected"


class Kind(StrEnum):
    """What can be found; the value is the code in the table, the comment says what it means."""

    # the files
    UNCLAIMED_FILE = "unclaimed_file"  # no layout, or no market of the desk, claims the file
    UNREADABLE_FILE = "unreadable_file"  # no row of it can be read
    REFUSED_PATH = "refused_path"  # not a regular file, or a name nothing may be made of
    TORN_FILE = "torn_file"  # no line end at the end: the last row is held out
    SHRUNKEN_FILE = "shrunken_file"  # a later version lacks rows of an earlier one
    FILE_LATE = "file_late"  # a live contract, or a whole market, lacks the newest sessions
    UNREADABLE_ROWS = "unreadable_rows"  # rows of a file that could not be read
    # the rows
    DUPLICATE_ROWS = "duplicate_rows"  # the same row again
    CONFLICTING_ROWS = "conflicting_rows"  # two rows of one file disagree
    RESTATED = "restated"  # a later file changed a value
    OUTSIDE_LISTING = "outside_listing"  # a bar after the last trade, or years before any listing
    NOT_A_SESSION = "not_a_session"  # a bar on a closed day
    CALENDAR_DISAGREES = "calendar_disagrees"  # most contracts traded on a closed day
    OFF_TICK = "off_tick"  # a price between ticks
    RANGE_BROKEN = "range_broken"  # high below low, or open outside of both
    SETTLE_OUTSIDE_RANGE = "settle_outside_range"  # on a session with trade
    NOT_POSITIVE = "not_positive"  # zero or less where that cannot be
    LIMIT_EXCEEDED = "limit_exceeded"  # a change larger than the daily limit
    LIMIT_LOCKED = "limit_locked"  # the whole curve closed at its limit
    # the prices
    DECIMAL_SHIFT = "decimal_shift"  # a power of ten away from the curve
    REVERTING_SPIKE = "reverting_spike"  # stands alone for a session and comes back
    DIGITS_SWAPPED = "digits_swapped"  # two neighbouring digits changed about
    SIGN_FLIPPED = "sign_flipped"  # the price with the other sign
    NEIGHBOURS_PRICE = "neighbours_price"  # another contract's row under this one's name
    CURVE_KINKED = "curve_kinked"  # drifted off its neighbours without a jump
    CURVE_BREAK = "curve_break"  # stands alone against the curve, not (yet) seen to come back
    STALE_PRICE = "stale_price"  # unchanged while the rest of the curve moves
    SCALE_CHANGED = "scale_changed"  # on another power of ten from a session on, undeclared
    LONE_MOVE = "lone_move"  # stands alone, but its own range and volume bear it out
    MARKET_SHOCK = "market_shock"  # the whole curve moved far out of its ordinary size
    # the gaps
    SESSION_MISSING = "session_missing"  # no contract has a bar
    SESSIONS_MISSING = "sessions_missing"  # no contract has a bar on several sessions in a row
    MARKET_SILENT = "market_silent"  # no contract has a bar for more than ten sessions in a row
    CONTRACT_MISSING = "contract_missing"  # a contract lacks bars between bars
    ENDED_EARLY = "ended_early"  # a contract's bars stop well before its last trading session
    # the volumes
    VOLUME_IMPLAUSIBLE = "volume_implausible"  # many times its past, its open interest and its bar
    OPEN_INTEREST_IMPLAUSIBLE = "open_interest_implausible"  # stands alone between the sessions about it
    OPEN_INTEREST_LAG_WRONG = "open_interest_lag_wrong"  # changes with the volume of another session than its own
    # the rolls and the series
    ROLL_BY_DEADLINE = "roll_forced"  # the backstop came before the trigger
    ROLL_POSTPONED = "roll_postponed"  # waited for two usable settles
    ROLL_MEASURED_STALE = "roll_measured_stale"  # measured on an earlier session than it should be
    ROLL_UNMEASURED = "roll_unmeasured"  # no session has both settles: the series is cut
    ROLL_PENDING = "roll_pending"  # decided, takes effect after the data's end
    THIN_INCOMING = "thin_incoming"  # rolled into a contract that hardly trades
    AFTER_FIRST_NOTICE = "after_first_notice"  # held on sessions on which delivery may be called
    FORCE_UNUSED = "force_unused"  # a person's decision found nothing to decide
    RATIO_UNDEFINED = "ratio_undefined"  # a leg at or below zero
    PERCENT_OF_BACK_ADJUSTED_UNDEFINED = "percent_of_back_adjusted_undefined"  # at or below zero, the settle above
    # the declarations
    DECLARED_REPAIR = "declared_repair"  # a person's repair was made
    REPAIR_REFUSED = "repair_refused"  # the value it names does not stand
    WAIVER_EXPIRED = "waiver_expired"  # past its day
    WAIVER_UNMATCHED = "waiver_unmatched"  # covers no finding


# What is said of one settle that stands alone may change when tomorrow comes; it stays one finding.
_ONE_SETTLE = frozenset({
    Kind.DECIMAL_SHIFT, Kind.REVERTING_SPIKE, Kind.DIGITS_SWAPPED, Kind.SIGN_FLIPPED, Kind.NEIGHBOURS_PRICE,
    Kind.CURVE_BREAK, Kind.LONE_MOVE,
})  # fmt: skip


@dataclass(frozen=True)
class Finding:
    """One thing wrong or strange. Dates are dates, numbers are in the unit of `field`."""

    kind: Kind
    severity: Severity
    message: str
    market: str | None = None
    contract: str | None = None
    session: datetime.date | None = None
    field: str | None = None
    reported: float | None = None
    expected: float | None = None
    score: float | None = None
    threshold: float | None = None
    action: Action = Action.KEPT
    corrected: float | None = None
    impact_sessions: int = 0
    waived_until: datetime.date | None = None
    # Tells apart findings that agree in all that identifies them, e.g. the plan of a roll.
    detail: str = ""

    @property
    def identity(self) -> str:
        """Stable identifier: the same fault has it in every build, by whatever kind of wrong settle it is called."""
        kind = Kind.CURVE_BREAK if self.kind in _ONE_SETTLE else self.kind
        parts = (self.market, self.contract, self.session, kind, self.field, self.detail)
        text = "|".join("" if part is None else str(part) for part in parts)
        return hashlib.sha256(text.encode()).hexdigest()[:12]


class Waiver(Declared):
    """A person's dated, reasoned decision to accept a finding until a day."""

    finding: Annotated[str, Field(pattern="^[0-9a-f]{12}$")] | None = None
    market: Annotated[str, Field(pattern=f"^{CODE}$")] | None = None
    kind: Annotated[Kind, BeforeValidator(lambda value: _kind(value))] | None = None
    since: Day | None = Field(default=None, alias="from")
    to: Day | None = None
    reason: Annotated[str, Field(min_length=1)]
    by: Annotated[str, Field(min_length=1)]
    on: Day
    until: Day

    @model_validator(mode="after")
    def _names_something(self) -> "Waiver":
        by_place = (self.market, self.kind, self.since, self.to)
        if (self.finding is None) == all(part is None for part in by_place):
            raise ValueError("seen neither or both; expected either finding, or market, kind, from and to")
        if self.finding is None and any(part is None for part in by_place):
            raise ValueError("seen some of them; expected all of market, kind, from and to")
        return self

    def covers(self, found: Finding) -> bool:
        """Whether the waiver speaks of this finding."""
        if self.finding is not None:
            return found.identity == self.finding
        if found.market != self.market or found.kind is not self.kind or found.session is None:
            return False
        assert self.since is not None and self.to is not None
        return self.since <= found.session <= self.to

    def describe(self) -> str:
        """What it covers, in words."""
        if self.finding is not None:
            return f"finding {self.finding}"
        return f"{self.kind} of {self.market} from {self.since} to {self.to}"


def _kind(value: object) -> Kind:
    try:
        return Kind(str(value))
    except ValueError:
        raise ValueError(f"seen {value!r}; expected a kind of finding: {', '.join(Kind)}") from None


def waive(found: list[Finding], waivers: tuple[Waiver, ...], market: str, data_date: datetime.date) -> list[Finding]:
    """Mark the findings that waivers cover; add one for each waiver that is expired or covers nothing.

    A waiver's last day is counted by the market's own data, not by the clock.
    """
    result = list(found)
    known = {finding.identity for finding in found}
    for index, waiver in enumerate(waivers):
        is_ours = waiver.market == market or (waiver.finding is not None and waiver.finding in known)
        if not is_ours:
            continue
        covered = [place for place, finding in enumerate(result) if waiver.covers(finding)]
        text = f"the waiver of {waiver.describe()} by {waiver.by}"
        if waiver.until < data_date:
            message = f"{text} ended on {waiver.until} and no longer works; renew it or mend its cause"
            result.append(_about_waiver(Kind.WAIVER_EXPIRED, message, market, index, waiver))
        elif not covered:
            message = f"{text} covers no finding; remove it"
            result.append(_about_waiver(Kind.WAIVER_UNMATCHED, message, market, index, waiver))
        else:
            for place in covered:
                result[place] = replace(result[place], waived_until=waiver.until)
    return result


def _about_waiver(kind: Kind, message: str, market: str, index: int, waiver: Waiver) -> Finding:
    return Finding(kind, Severity.REVIEW, message, market, detail=f"{index} {waiver.describe()}")


def findings_table(found: list[Finding]) -> pa.Table:
    """The findings as a published table; findings that agree in what identifies them are counted apart."""
    seen: dict[str, int] = {}
    rows: list[Finding] = []
    for finding in found:
        count = seen.get(finding.identity, 0)
        seen[finding.identity] = count + 1
        rows.append(replace(finding, detail=f"{finding.detail}#{count}") if count else finding)
    columns: dict[str, object] = {"finding": [row.identity for row in rows]}
    for name in FINDINGS.columns[1:]:
        values = [getattr(row, name) for row in rows]
        columns[name] = [str(value) if isinstance(value, StrEnum) else value for value in values]
    return make_table(FINDINGS, columns)
