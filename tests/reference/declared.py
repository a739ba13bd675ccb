"""A market as a desk declares it, with its reported bars, told by both tellings down to the published rows.

Belongs here: the declaration as text, its plain meaning, and the two lists of rows to compare. Does not belong here:
any rule, randomness (`tests/property/`).
"""

import datetime
from dataclasses import dataclass, field
from typing import Any

import numpy as np

from contracts.arrivals import Bars
from contracts.build import lay_plans
from contracts.layouts import BAR_FIELDS, PRICE_FIELDS
from contracts.markets import Market, parse_market
from contracts.panel import lay_panel
from contracts.repairs import Clean
from contracts.sessions import day_number
from contracts.written import rolls_table, series_table
from tests.reference.agree import row_differences
from tests.reference.plain_days import WEEKDAY_NAMES, PlainCalendar, PlainRule, newest_rule, rule_day
from tests.reference.plain_market import Cell, PlainMarket, PlainPlan
from tests.reference.plain_rolls import lay_plain
from tests.reference.plain_splice import splice_plain

Row = dict[str, Any]
Day = datetime.date
Place = tuple[str, Day]


@dataclass(frozen=True)
class Case:
    """One market: its terms, reported bars by (contract, day), what became of settles, and its plans.

    A bar on a closed day is left out unless the day was a session after all.
    `contracts` stand in delivery order, also those of which no bar arrived. `rescaled` are (day, factor): prices
    reported before the day are multiplied by it. `masked` settles were taken out, `repaired` ones replaced by the value
    given (on the present scale), `corrected` ones replaced by a person. `forces` are (outgoing, effective day) by plan.
    """

    contracts: tuple[str, ...]
    delivery_months: tuple[int, ...]
    calendar: PlainCalendar
    last_trade: tuple[PlainRule, ...]
    first_notice: tuple[PlainRule, ...]
    open_interest_lag: int
    rescaled: tuple[tuple[Day, float], ...]
    bars: dict[Place, dict[str, float]]
    masked: frozenset[Place]
    repaired: dict[Place, float]
    corrected: dict[Place, float]
    plans: dict[str, PlainPlan] = field(default_factory=dict)
    forces: dict[str, tuple[tuple[str, Day], ...]] = field(default_factory=dict)


def delivery_of_name(contract: str) -> tuple[int, int]:
    """Year and month at the end of a contract's name."""
    return int(contract[-7:-3]), int(contract[-2:])


def last_trade_of(case: Case, contract: str) -> Day:
    """Last trading day by the newest rule that is for the delivery."""
    rule = newest_rule(case.last_trade, delivery_of_name(contract))
    if rule is None:
        raise ValueError(f"no rule is for {contract}")
    return rule_day(rule, case.calendar, delivery_of_name(contract))


def first_notice_of(case: Case, contract: str) -> Day | None:
    """First notice day; None where no rule is for the delivery."""
    rule = newest_rule(case.first_notice, delivery_of_name(contract))
    return None if rule is None else rule_day(rule, case.calendar, delivery_of_name(contract))


def surprises_of(case: Case) -> set[Day]:
    """Closed days on which more than half of the contracts that then live have a bar."""
    first: dict[str, Day] = {}
    on: dict[Day, int] = {}
    for contract, day in case.bars:
        first[contract] = min(day, first.get(contract, day))
        if not case.calendar.is_open(day):
            on[day] = on.get(day, 0) + 1
    ends = {contract: last_trade_of(case, contract) for contract in first}
    return {day for day, seen in on.items() if 2 * seen > sum(first[c] <= day <= ends[c] for c in first)}


def sessions_of(case: Case) -> list[Day]:
    """Open days, and those that were not to be, from the first bar on one of them to the last; none without a bar."""
    surprises = surprises_of(case)
    used = {day for _, day in case.bars if day in surprises or case.calendar.is_open(day)}
    return sorted({*case.calendar.open_days(min(used), max(used)), *surprises}) if used else []


def present_price(case: Case, day: Day, value: float) -> float:
    """A reported price on the present scale."""
    for before, factor in case.rescaled:
        if day < before:
            value = round(value * factor, 10)
    return value


def plain_market(case: Case) -> PlainMarket:
    """The case as the plain telling has it."""
    sessions = sessions_of(case)
    place = {day: at for at, day in enumerate(sessions)}
    unscheduled = {place[day] for day in surprises_of(case)}
    ends = {name: last_trade_of(case, name) for name in case.contracts}
    notices = {name: first_notice_of(case, name) or ends[name] for name in case.contracts}
    cells: dict[str, dict[Cell, float]] = {name: {} for name in BAR_FIELDS}
    market = PlainMarket(
        sessions, list(case.contracts), cells["settle"], cells["volume"], cells["open_interest"], set(), set(),
        {name: case.calendar.index(sessions, day) for name, day in ends.items()},
        {name: case.calendar.index(sessions, day) for name, day in notices.items()} if case.first_notice else None,
        case.open_interest_lag, {}, cells["open"], cells["high"], cells["low"], unscheduled=unscheduled,
    )  # fmt: skip
    for (contract, day), bar in case.bars.items():
        if day not in place:
            continue
        cell = (contract, place[day])
        market.bars.add(cell)
        for name, value in bar.items():
            cells[name][cell] = present_price(case, day, value) if name in PRICE_FIELDS else value
        if cell not in market.settle or (contract, day) in case.masked:
            continue
        market.prices[cell] = market.settle[cell]
        if (contract, day) in case.repaired:
            market.prices[cell] = case.repaired[(contract, day)]
            market.repaired.add(cell)
            continue
        market.usable.add(cell)
        if (contract, day) in case.corrected:
            market.prices[cell] = case.corrected[(contract, day)]
            market.repaired.add(cell)
    return market


def tell_plain(case: Case) -> tuple[list[Row], list[Row], dict[str, list[str]]]:
    """Ledger and series as they ought to be published, and each plan's forced rolls without effect."""
    market = plain_market(case)
    days = market.sessions
    ledger: list[Row] = []
    series: list[Row] = []
    unused: dict[str, list[str]] = {}
    for name in sorted(case.plans):
        forces = tuple((outgoing, case.calendar.index(days, day)) for outgoing, day in case.forces.get(name, ()))
        plan = PlainPlan(**{**case.plans[name].__dict__, "name": name, "force": forces})
        laid = lay_plain(market, plan)
        unused[name] = sorted(outgoing for outgoing, _ in laid.unused_force)
        for nearby in plan.nearbys:
            chain = laid.chains[nearby]
            for row in sorted(chain.rows, key=lambda row: (row["effective_on"], row["step"])):
                ended, noticed = last_trade_of(case, row["outgoing"]), first_notice_of(case, row["outgoing"])
                told = {**row, "plan": name, "last_trade": ended, "first_notice": noticed}
                for key in ("decided_on", "measured_on", "effective_on"):
                    told[key] = None if row[key] is None else days[row[key]]
                ledger.append(told)
            series += [{**row, "plan": name, "nearby": nearby, "session": days[row["session"]]}
                       for row in splice_plain(market, chain)]  # fmt: skip
    return ledger, series, unused


def _rule_text(table: str, rules: tuple[PlainRule, ...]) -> str:
    text = ""
    for rule in rules:
        if rule.month_day is not None:
            by = f"BYMONTHDAY={rule.month_day}"
        else:
            by = f"BYDAY={rule.nth}{WEEKDAY_NAMES[rule.weekday or 0]}"
        steps = ", ".join(
            f"{{{name} = " + (f'"{value}"' if isinstance(value, str) else str(value)) + "}"
            for name, value in rule.steps
        )
        text += f'\n[[{table}]]\nmonth_offset = {rule.month_offset}\nrule = "FREQ=MONTHLY;{by}"\nsteps = [{steps}]\n'
        if rule.since is not None:
            text += f'from = "{rule.since[0]:04d}-{rule.since[1]:02d}"\n'
    return text


def _plan_text(name: str, plan: PlainPlan, forces: tuple[tuple[str, Day], ...]) -> str:
    text = f"""
[plans.{name}]
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
    for outgoing, effective in forces:
        text += (
            f'[[plans.{name}.force]]\noutgoing = "{outgoing}"\neffective = {effective}\nreason = "drawn"\nby = "us"\n'
        )
    return text


def declare(case: Case) -> Market:
    """The case as a market file, read as a desk reads it."""
    closed = ", ".join(str(day) for day in sorted(case.calendar.closed))
    opened = ", ".join(str(day) for day in sorted(case.calendar.opened))
    text = f"""code = "XX"
name = "a market in a test"
exchange = "XTST"
currency = "EUR"
unit = "1 t"
point_value = 1.0
tick_size = 0.25
may_be_negative = true
delivery_months = {list(case.delivery_months)}
open_interest_lag = {case.open_interest_lag}
closed = [{closed}]
opened = [{opened}]
"""
    for before, factor in case.rescaled:
        text += f"\n[[rescaled]]\nbefore = {before}\nmultiply = {factor}\n"
    text += _rule_text("last_trade", case.last_trade) + _rule_text("first_notice", case.first_notice)
    for name, plan in case.plans.items():
        text += _plan_text(name, plan, case.forces.get(name, ()))
    return parse_market(text, "markets/xx.toml")


def tell_real(case: Case) -> tuple[list[Row], list[Row], dict[str, list[str]]]:
    """What the real code would publish, from bars as they are read from files."""
    market = declare(case)
    names = tuple(name for name in case.contracts if any(contract == name for contract, _ in case.bars))
    number = {name: at for at, name in enumerate(names)}
    order = sorted(case.bars, key=lambda key: (number[key[0]], key[1]))
    nothing = float("nan")
    values = np.array([[case.bars[key].get(name, nothing) for name in BAR_FIELDS] for key in order])
    bars = Bars(
        names, np.array([number[name] for name, _ in order]), np.array([day_number(day) for _, day in order]), values,
        np.zeros(len(order), dtype=np.int64), np.arange(len(order)) + 2,
    )  # fmt: skip
    panel = lay_panel(market, bars)
    prices = panel.values[: len(PRICE_FIELDS)].copy()
    is_repaired, is_masked = np.zeros(panel.shape, dtype=bool), np.zeros(panel.shape, dtype=bool)
    usable = ~np.isnan(panel.field("settle"))
    settle = prices[PRICE_FIELDS.index("settle")]

    def at(key: Place) -> tuple[int, int]:
        return int(np.searchsorted(panel.sessions, day_number(key[1]))), number[key[0]]

    for key in case.masked:
        settle[at(key)], is_masked[at(key)], usable[at(key)] = np.nan, True, False
    for key, value in case.repaired.items():
        settle[at(key)], is_repaired[at(key)], usable[at(key)] = value, True, False
    for key, value in case.corrected.items():
        settle[at(key)], is_repaired[at(key)] = value, True
    clean = Clean(prices, panel.field("volume"), panel.field("open_interest"), is_repaired, is_masked, usable, (), ())
    traded = clean.traded(panel)
    laid = lay_plans(traded, clean)
    ledger = rolls_table(traded, [(one.name, one.held, [0] * len(one.held.steps)) for one in laid]).to_pylist()
    series = series_table(panel, clean, [(one.name, one.held, one.series) for one in laid], {}).to_pylist()
    unused = {name: sorted({c for one in laid if one.name == name for c in one.held.unused}) for name in market.plans}
    not_told = {"market", "impact_sessions", "findings"}
    return (
        [{key: value for key, value in row.items() if key not in not_told} for row in ledger],
        [{key: value for key, value in row.items() if key not in not_told} for row in series],
        unused,
    )


def declared_differences(case: Case) -> list[str]:
    """Everything in which the two tellings of a declared market differ."""
    plain, real = tell_plain(case), tell_real(case)
    found = row_differences(plain[0], real[0], "ledger") + row_differences(plain[1], real[1], "series")
    if plain[2] != real[2]:
        found.append(f"unused forces expected {plain[2]}, found {real[2]}")
    return found
