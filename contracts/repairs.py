"""Declared and automatic repairs -> clean panel, every change logged.

Belongs here: what is put in the place of a refuted price, and that the reported one stays beside it. Does not
belong here: the evidence against it (`checks/`). Nothing reported is ever overwritten.
"""

import math
from dataclasses import dataclass, replace
from typing import Annotated

import numpy as np
from pydantic import AfterValidator, Field

from contracts.arrivals import Bars
from contracts.checks.prices import Ruling, Verdict, judge_settles
from contracts.declared import Declared
from contracts.findings import Action, Finding, Kind, Severity
from contracts.intake import scale_prices
from contracts.layouts import BAR_FIELDS, PRICE_FIELDS
from contracts.markets import Day, Number
from contracts.panel import Panel
from contracts.quality import Quality
from contracts.sessions import day_number, day_of

_SETTLE = BAR_FIELDS.index("settle")
# A price of a bar nine tenths of a decade away from its own settle and from the last one is a slip of the pen.
_DECADES_AWAY = 0.9


def _bar_field(value: str) -> str:
    if value not in BAR_FIELDS:
        raise ValueError(f"seen {value!r}; expected one of {', '.join(BAR_FIELDS)}")
    return value


class DeclaredRepair(Declared):
    """A person's correction of one reported value; both values are on the scale the row arrived in."""

    contract: Annotated[str, Field(pattern=r"^[A-Z0-9]{1,12}-\d{4}-\d{2}$")]
    session: Day
    field: Annotated[str, AfterValidator(_bar_field)]
    reported: Number
    corrected: Number
    reason: Annotated[str, Field(min_length=1)]
    by: Annotated[str, Field(min_length=1)]
    on: Day


@dataclass(frozen=True, eq=False)
class Clean:
    """The panel after repairs.

    prices: (4, T, N) in the order of PRICE_FIELDS, NaN where absent or masked; volume, open_interest: (T, N);
    is_repaired, is_masked: (T, N) of the settle; usable: (T, N), where a settle may measure a roll.
    """

    prices: np.ndarray
    volume: np.ndarray
    open_interest: np.ndarray
    is_repaired: np.ndarray
    is_masked: np.ndarray
    usable: np.ndarray
    verdicts: tuple[Verdict, ...]
    findings: tuple[Finding, ...]

    @property
    def settle(self) -> np.ndarray:
        """Clean settles, (T, N)."""
        values: np.ndarray = self.prices[PRICE_FIELDS.index("settle")]
        return values

    def traded(self, panel: Panel) -> Panel:
        """The panel with these values in it: what a plan's triggers look at."""
        values = np.concatenate([self.prices, self.volume[None], self.open_interest[None]])
        return replace(panel, values=values)


def clean_panel(panel: Panel, bars: Bars, repairs: tuple[DeclaredRepair, ...], quality: Quality) -> Clean:
    """Make the declared repairs, then replace or mask what the checks refute."""
    values = panel.values.copy()
    declared, findings = _make_declared(panel, bars, values, repairs)
    settle = values[_SETTLE]
    verdicts = judge_settles(panel, settle, declared, quality)
    is_repaired, is_masked = declared.copy(), np.zeros(panel.shape, dtype=bool)
    for verdict in verdicts:
        findings.append(_tell(panel, settle, verdict))
        if verdict.ruling is not Ruling.REFUTED:
            continue
        at = (verdict.session, verdict.contract)
        if verdict.power:
            _shift_back(values, at, settle[at], verdict.power)
    for verdict in verdicts:
        if verdict.ruling is Ruling.REFUTED:
            at = (verdict.session, verdict.contract)
            settle[at] = verdict.expected
            is_repaired[at] = not math.isnan(verdict.expected)
            is_masked[at] = math.isnan(verdict.expected)
    prices = values[: len(PRICE_FIELDS)]
    _drop_misfits(prices, panel.market.may_be_negative, panel.market.tick_size)
    usable = ~np.isnan(panel.field("settle")) & ~is_masked & (~is_repaired | declared)
    return Clean(
        prices, values[BAR_FIELDS.index("volume")], values[BAR_FIELDS.index("open_interest")],
        is_repaired, is_masked, usable, tuple(verdicts), tuple(findings),
    )  # fmt: skip


def _make_declared(
    panel: Panel, bars: Bars, values: np.ndarray, repairs: tuple[DeclaredRepair, ...]
) -> tuple[np.ndarray, list[Finding]]:
    """Put declared corrections into the values; returns the cells whose settle a person spoke for."""
    spoken = np.zeros(panel.shape, dtype=bool)
    found: list[Finding] = []
    market = panel.market
    for repair in repairs:
        label, day = repair.contract, repair.session
        place = BAR_FIELDS.index(repair.field)
        at = _cell(panel, label, day_number(day))
        bar = int(panel.bar[at]) if at is not None else -1
        seen = float(bars.values[bar, place]) if bar >= 0 else math.nan
        what = f"{label}, {day}: {repair.field}"
        if seen != repair.reported or at is None:
            now = "no such bar" if bar < 0 else f"{seen:.10g}"
            expects = f"the repair by {repair.by} expects {repair.reported:.10g} as reported"
            message = f"{what}: {expects}, seen {now}; remove or renew it"
            found.append(
                Finding(
                    Kind.REPAIR_REFUSED, Severity.BLOCK, message, market.code, label, None, repair.field,
                    None if math.isnan(seen) else seen, repair.reported, detail=str(day),
                )
            )  # fmt: skip
            continue
        corrected = repair.corrected
        if repair.field in PRICE_FIELDS:
            for change in market.rescaled:
                if day < change.before:
                    corrected = float(scale_prices(np.array([corrected]), change.multiply)[0])
        values[place][at] = corrected
        spoken[at] |= repair.field == "settle"
        message = (
            f"{what} {seen:.10g} corrected to {repair.corrected:.10g} by {repair.by} on {repair.on}: {repair.reason}"
        )
        found.append(
            Finding(
                Kind.DECLARED_REPAIR, Severity.NOTE, message, market.code, label, day, repair.field, seen,
                repair.corrected, action=Action.REPAIRED, corrected=corrected,
            )
        )  # fmt: skip
    return spoken, found


def _cell(panel: Panel, contract: str, day: int) -> tuple[int, int] | None:
    session = int(np.searchsorted(panel.sessions, day))
    if contract not in panel.contracts or session >= len(panel.sessions) or panel.sessions[session] != day:
        return None
    return session, panel.contracts.index(contract)


def _shift_back(values: np.ndarray, at: tuple[int, int], settle: float, power: int) -> None:
    """Move the decimal point of those prices of a bar that were shifted with its settle."""
    for name in ("open", "high", "low"):
        price = float(values[BAR_FIELDS.index(name)][at])
        if price * settle > 0 and abs(math.log10(price / settle)) < 0.5:
            values[BAR_FIELDS.index(name)][at] = round(price / 10.0**power, 10)


def _drop_misfits(prices: np.ndarray, may_be_negative: bool, tick: float) -> None:
    """Leave out opens, highs and lows that cannot belong to their bar; settles stay as they are."""
    open_, high, low, settle = (prices[PRICE_FIELDS.index(name)] for name in ("open", "high", "low", "settle"))
    before = np.full(settle.shape, np.nan)
    before[1:] = settle[:-1]
    for part in (open_, high, low):
        with np.errstate(invalid="ignore", divide="ignore"):
            away = np.minimum(np.abs(np.log10(part / settle)), np.abs(np.log10(part / before)))
            wrong = (away > _DECADES_AWAY) & (np.abs(part - settle) > 20 * tick)
            if not may_be_negative:
                wrong |= part <= 0
        part[wrong] = np.nan
    with np.errstate(invalid="ignore"):
        broken = high < low
        high[broken] = np.nan
        low[broken] = np.nan
        open_[(open_ > high + 0.5 * tick) | (open_ < low - 0.5 * tick)] = np.nan


_SAYS = {
    Kind.REVERTING_SPIKE: "stands {distance:+.10g} from where the curve puts it and comes back",
    Kind.CURVE_BREAK: "stands {distance:+.10g} from where the curve puts it",
    Kind.LONE_MOVE: "moved {distance:+.10g} against the curve, borne out by its own range and volume",
    Kind.NOT_POSITIVE: "is not above zero, which this market's price cannot be",
}


def _tell(panel: Panel, settle: np.ndarray, verdict: Verdict) -> Finding:
    """The finding of one verdict, in words that can stand alone."""
    at = (verdict.session, verdict.contract)
    label, day = panel.contracts[verdict.contract], day_of(panel.sessions[verdict.session])
    price = float(settle[at])
    is_known = not math.isnan(verdict.expected)
    if verdict.kind is Kind.DECIMAL_SHIFT:
        size = f"{10 ** abs(verdict.power)}"
        says = f"is {size} times too large" if verdict.power > 0 else f"is 1/{size} of what it should be"
    elif verdict.kind is Kind.LONE_MOVE and price <= 0:
        says = "lies at or below zero, as this market's price may"
    else:
        says = _SAYS[verdict.kind].format(distance=round(price - verdict.expected, 10))
    if verdict.ruling is Ruling.KEPT:
        action, done = Action.KEPT, "kept"
        severity = Severity.NOTE if verdict.kind is Kind.LONE_MOVE else Severity.REVIEW
    elif is_known:
        action, done, severity = Action.REPAIRED, f"repaired to {verdict.expected:.10g}", Severity.REVIEW
    else:
        why = "its bar traded down to it: see whether may_be_negative is right" if verdict.is_borne_out else ""
        action, severity = Action.MASKED, Severity.REVIEW
        done = f"masked, for {why or 'the curve cannot say'}"
    return Finding(
        verdict.kind, severity, f"{label}, {day}: settle {price:.10g} {says}; {done}", panel.market.code, label, day,
        "settle", price, verdict.expected if is_known else None,
        None if math.isnan(verdict.score) else verdict.score, None, action,
        verdict.expected if action is Action.REPAIRED else None,
    )  # fmt: skip
