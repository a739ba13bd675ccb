"""The real roll and splice code, asked with plain markets and answering in plain rows.

Belongs here: translation both ways. Does not belong here: any rule.
"""

import math
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from contracts.errors import IdentityError
from contracts.layouts import BAR_FIELDS
from contracts.markets import Market, parse_market
from contracts.panel import Panel
from contracts.rolls import NEVER, Held, lay_rolls
from contracts.sessions import day_number, market_days
from contracts.splice import STATUS_NAMES, carry_forward, check_identities, splice
from tests.reference.plain_days import PlainCalendar
from tests.reference.plain_market import Cell, PlainMarket, PlainPlan

Row = dict[str, Any]


@dataclass
class RealChain:
    """What the real code lays for one nearby, in session indices and contract names."""

    start: int | None
    held: Held
    decisions: list[tuple[int, str, str, str]] = field(default_factory=list)
    rows: list[Row] = field(default_factory=list)
    series: list[Row] = field(default_factory=list)
    unused: list[str] = field(default_factory=list)
    is_pending: bool = False
    identity_error: str | None = None


def declare(market: PlainMarket, plan: PlainPlan) -> Market:
    """The market and plan as a declaration."""
    months = sorted({int(name[-2:]) for name in market.contracts})
    closed = [market.sessions[t].isoformat() for t in sorted(market.unscheduled)]
    notice = "" if market.first_notice is None else '[first_notice]\nrule = "FREQ=MONTHLY;BYMONTHDAY=1"'
    text = f"""code = "XX"
name = "a market in a test"
exchange = "XTST"
currency = "EUR"
unit = "1 t"
point_value = 1.0
tick_size = 0.25
may_be_negative = true
delivery_months = {months}
closed = [{", ".join(closed)}]
open_interest_lag = {market.open_interest_lag}

[last_trade]
rule = "FREQ=MONTHLY;BYMONTHDAY=15"

{notice}

[plans.{plan.name}]
trigger = "{plan.trigger}"
confirm = {plan.confirm}
delay = {plan.delay}
steps = {plan.steps}
backstop = {plan.backstop}
before = "{plan.before}"
incoming = "{plan.incoming}"
nearbys = {list(plan.nearbys)}
"""
    if plan.months is not None:
        text += f"months = {list(plan.months)}\n"
    for outgoing, effective in plan.force:
        text += f"""
[[plans.{plan.name}.force]]
outgoing = "{outgoing}"
effective = {PlainCalendar().shift(market.sessions[0], effective).isoformat()}
reason = "drawn"
by = "test"
"""
    return parse_market(text, "markets/xx.toml")


def _array(market: PlainMarket, cells: dict[Cell, float]) -> np.ndarray:
    values = np.full((len(market.sessions), len(market.contracts)), np.nan)
    for (contract, t), value in cells.items():
        values[t, market.contracts.index(contract)] = value
    return values


def lay_panel_of(market: PlainMarket, plan: PlainPlan) -> Panel:
    """The real panel of a plain market."""
    declared = declare(market, plan)
    shape = (len(market.sessions), len(market.contracts))
    by_name = {
        "open": market.open, "high": market.high, "low": market.low, "settle": market.settle,
        "volume": market.volume, "open_interest": market.open_interest,
    }  # fmt: skip
    bar = np.full(shape, -1, dtype=np.int64)
    for number, (contract, t) in enumerate(sorted(market.bars)):
        bar[t, market.contracts.index(contract)] = number
    last = np.array([market.last_trade[name] for name in market.contracts], dtype=np.int64)
    notice = last if market.first_notice is None else np.array([market.first_notice[name] for name in market.contracts])
    nothing = np.empty(0, dtype=np.int64)
    return Panel(
        market=declared,
        contracts=tuple(market.contracts),
        sessions=np.array([day_number(day) for day in market.sessions], dtype=np.int64),
        calendar=market_days(declared, market.sessions[0].year - 1, market.sessions[-1].year + 1),
        values=np.stack([_array(market, by_name[name]) for name in BAR_FIELDS]),
        bar=bar,
        last_trade=last,
        first_notice=notice,
        off_session=nothing,
        outside=nothing,
        disagreeing=np.array(sorted(market.unscheduled), dtype=np.int64),
    )


def _or_none(value: float) -> float | None:
    return None if math.isnan(value) else float(value)


def lay_real(market: PlainMarket, plan: PlainPlan) -> dict[int, RealChain]:
    """Lay and splice every nearby of the plan with the real code."""
    panel = lay_panel_of(market, plan)
    usable = np.zeros(panel.shape, dtype=bool)
    is_repaired = np.zeros(panel.shape, dtype=bool)
    for contract, t in market.usable:
        usable[t, market.contracts.index(contract)] = True
    for contract, t in market.repaired:
        is_repaired[t, market.contracts.index(contract)] = True
    settle = _array(market, market.prices)
    declared = panel.market.plans[plan.name]
    carried, status = carry_forward(settle, is_repaired)
    chains: dict[int, RealChain] = {}
    for held in lay_rolls(panel, usable, settle, declared):
        chain = RealChain(None if held.start == NEVER else held.start, held)
        names = market.contracts
        chain.decisions = [(d.decided, names[d.outgoing], names[d.incoming], d.trigger) for d in held.decisions]
        chain.rows = [
            {
                "step": s.step,
                "decided_on": s.decision.decided,
                "measured_on": None if s.measured == NEVER else s.measured,
                "effective_on": s.effective,
                "outgoing": names[s.decision.outgoing],
                "incoming": names[s.incoming],
                "weight_before": s.weight_before,
                "weight_after": s.weight_after,
                "outgoing_settle": _or_none(s.outgoing_settle),
                "incoming_settle": _or_none(s.incoming_settle),
                "gap": _or_none(s.gap),
                "ratio": _or_none(s.ratio),
                "trigger": s.decision.trigger,
                "is_stale": s.is_stale,
                "postponed": s.postponed,
            }
            for s in held.steps
        ]
        chain.unused = list(held.unused)
        chain.is_pending = held.pending is not None
        if held.start != NEVER:
            _splice(market, panel, held, carried, status, chain)
        chains[held.nearby] = chain
    return chains


def _splice(
    market: PlainMarket, panel: Panel, held: Held, carried: np.ndarray, status: np.ndarray, chain: RealChain
) -> None:
    series = splice(held, carried, status)
    names = market.contracts
    numbers = (
        "settle",
        "shift",
        "scale",
        "back_adjusted",
        "ratio_adjusted",
        "change",
        "simple_return",
        "growth",
    )
    for place in range(len(series.settle)):
        t = held.start + place
        incoming = int(held.incoming[t])
        row: Row = {name: _or_none(getattr(series, name)[place]) for name in numbers}
        row["session"] = t
        row["contract"] = names[int(held.contract[t])]
        row["incoming"] = None if incoming == NEVER else names[incoming]
        row["incoming_weight"] = float(held.weight[t])
        row["rolled"] = bool(series.rolled[place])
        row["status"] = str(STATUS_NAMES[series.status[place]])
        chain.series.append(row)
    try:
        check_identities(series, "XX")
    except IdentityError as error:
        chain.identity_error = str(error)
