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
from contracts.checks.kinks import Kink, find_kinks
from contracts.checks.prices import Judgment, Ruling, Verdict, judge_settles
from contracts.checks.scale import check_scale, find_scale_changes, lay_levels, put_on_one_scale
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
    levels: np.ndarray
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
    changes = find_scale_changes(panel, values[_SETTLE])
    findings += check_scale(panel, changes)
    # One contract off the curve's scale is a misplaced decimal; a whole market's scale is for a person to say.
    own = lay_levels(panel.shape, [change for change in changes if change.contract is not None])
    levels = lay_levels(panel.shape, [change for change in changes if change.contract is None])
    is_moved = (own != 1.0) & ~np.isnan(values[_SETTLE])
    values = put_on_one_scale(values, own)
    settle = values[_SETTLE]
    judged = _judge(panel, values, levels, declared, quality)
    verdicts = judged.verdicts
    is_repaired, is_masked = declared | is_moved, np.zeros(panel.shape, dtype=bool)
    for verdict in verdicts:
        findings.append(_tell(panel, settle, verdict))
        if verdict.ruling is not Ruling.REFUTED:
            continue
        at = (verdict.session, verdict.contract)
        if verdict.power:
            _shift_back(values, at, settle[at], verdict.power)
    for kink in find_kinks(judged.curve, judged.refuted, judged.kept, quality):
        findings.append(_tell_kink(panel, settle, kink))
    for verdict in verdicts:
        if verdict.ruling is Ruling.REFUTED:
            at = (verdict.session, verdict.contract)
            settle[at] = verdict.expected
            is_repaired[at] = not math.isnan(verdict.expected)
            is_masked[at] = math.isnan(verdict.expected)
    prices = values[: len(PRICE_FIELDS)]
    level = put_on_one_scale(values, levels)[: len(PRICE_FIELDS)]
    _drop_misfits(level, panel.market.may_be_negative, panel.market.tick_size)
    prices[np.isnan(level)] = np.nan
    usable = ~np.isnan(panel.field("settle")) & ~is_masked & (~is_repaired | declared)
    return Clean(
        prices, values[BAR_FIELDS.index("volume")], values[BAR_FIELDS.index("open_interest")],
        is_repaired, is_masked, usable, levels, verdicts, tuple(findings),
    )  # fmt: skip


def _judge(panel: Panel, values: np.ndarray, levels: np.ndarray, declared: np.ndarray, quality: Quality) -> Judgment:
    """The verdicts on settles, judged on one scale and told on the scale they were reported on."""
    level = put_on_one_scale(values, levels)
    judged = judge_settles(replace(panel, values=level), level[_SETTLE], declared, quality)
    at = [levels[verdict.session, verdict.contract] for verdict in judged.verdicts]
    verdicts = tuple(
        verdict if one == 1.0 else replace(verdict, expected=round(verdict.expected / one, 10))
        for verdict, one in zip(judged.verdicts, at, strict=True)
    )
    return replace(judged, verdicts=verdicts)


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
    Kind.LONE_MOVE: "moved {distance:+.10g} against the curve",
    Kind.NOT_POSITIVE: "is not above zero, which this market's price cannot be",
    Kind.SIGN_FLIPPED: "has the wrong sign",
    Kind.DIGITS_SWAPPED: "has two digits changed about, {distance:+.10g} from where the curve puts it",
}


def _say(panel: Panel, verdict: Verdict, price: float) -> str:
    """What is said against the settle, or for it."""
    if verdict.kind is Kind.DECIMAL_SHIFT:
        size = f"{10 ** abs(verdict.power)}"
        return f"is {size} times too large" if verdict.power > 0 else f"is 1/{size} of what it should be"
    if verdict.kind is Kind.NEIGHBOURS_PRICE:
        return f"and its whole row are those of {panel.contracts[verdict.other]}"
    says = _SAYS[verdict.kind].format(distance=round(price - verdict.expected, 10))
    return f"{says}, {verdict.why_kept}" if verdict.why_kept else says


def _tell(panel: Panel, settle: np.ndarray, verdict: Verdict) -> Finding:
    """The finding of one verdict, in words that can stand alone."""
    at = (verdict.session, verdict.contract)
    label, day = panel.contracts[verdict.contract], day_of(panel.sessions[verdict.session])
    price = float(settle[at])
    is_known = not math.isnan(verdict.expected)
    says = _say(panel, verdict, price)
    if verdict.ruling is Ruling.KEPT:
        action, done = Action.KEPT, "kept"
        severity = Severity.NOTE if verdict.kind is Kind.LONE_MOVE else Severity.REVIEW
    elif is_known:
        action, severity = Action.REPAIRED, Severity.REVIEW
        done = f"repaired to {verdict.expected:.10g} from its neighbours' moves, within about {2 * verdict.error:.2g}"
    else:
        why = "its bar traded down to it: see whether may_be_negative is right" if verdict.is_borne_out else ""
        action, severity = Action.MASKED, Severity.REVIEW
        done = f"masked, for {why or 'the curve cannot say'}"
    return Finding(
        verdict.kind, severity, f"{label}, {day}: settle {price:.10g} {says}; {done}", panel.market.code, label, day,
        "settle", price, verdict.expected if is_known else None, _known(verdict.score), _known(verdict.threshold),
        action, verdict.expected if action is Action.REPAIRED else None,
    )  # fmt: skip


def _tell_kink(panel: Panel, settle: np.ndarray, kink: Kink) -> Finding:
    """A drift, for a person to look at; no session of it is wrong by itself."""
    label, day = panel.contracts[kink.contract], day_of(panel.sessions[kink.session])
    price, drift = float(settle[kink.session, kink.contract]), round(kink.drift, 6)
    message = f"{label}, {day}: settle {price:.10g} has drifted {drift:+.6g} off its neighbours without a leap; kept"
    return Finding(
        Kind.CURVE_KINKED, Severity.REVIEW if kink.is_plain else Severity.NOTE, message, panel.market.code, label, day,
        "settle", price, round(price - drift, 10), kink.score, kink.threshold,
    )  # fmt: skip


def _known(value: float) -> float | None:
    return None if math.isnan(value) else value
