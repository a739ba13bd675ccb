"""Where two tellings of one chain differ.

Belongs here: comparing rows, exactly for days and names, to 1e-9 for numbers that may carry rounding. Does not belong
here: any rule.
"""

from dataclasses import dataclass
from typing import Any

from tests.reference.plain_market import PlainMarket, PlainPlan
from tests.reference.plain_rolls import Laid, lay_plain
from tests.reference.plain_splice import splice_plain
from tests.reference.real import lay_real

TINY = 1e-9
EXACT_SUMS = (
    "weight_before", "weight_after", "outgoing_settle", "incoming_settle", "gap", "incoming_weight", "settle", "shift",
    "back_adjusted", "change",
)  # fmt: skip
Row = dict[str, Any]


def is_near(one: float, other: float) -> bool:
    """Equal to 1e-9, absolute below one and relative beyond."""
    return abs(one - other) <= TINY * max(1.0, abs(one), abs(other))


def is_same(one: Any, other: Any) -> bool:
    """Equal, or two numbers near each other; None equals only None."""
    if isinstance(one, float) and isinstance(other, float):
        return is_near(one, other)
    return bool(one == other)


def row_differences(expected: list[Row], found: list[Row], label: str, exact: tuple[str, ...] = ()) -> list[str]:
    """Differences of two lists of rows, over the columns of the found ones; `exact` columns equal to the last bit."""
    if len(expected) != len(found):
        return [f"{label}: {len(expected)} rows expected, {len(found)} found: {expected} {found}"]
    differences = []
    for number, (one, other) in enumerate(zip(expected, found, strict=True)):
        for name, value in other.items():
            if not (one[name] == value if name in exact else is_same(one[name], value)):
                differences.append(f"{label} row {number}: {name} expected {one[name]!r}, found {value!r}")
    return differences


@dataclass(frozen=True)
class Compared:
    """The plain telling of a plan, its series by nearby, and everything in which the real one differs."""

    laid: Laid
    series: dict[int, list[Row]]
    differences: list[str]


def compare(market: PlainMarket, plan: PlainPlan) -> Compared:
    """Tell a plan twice and hold the two against each other."""
    laid, real = lay_plain(market, plan), lay_real(market, plan)
    series = {nearby: splice_plain(market, chain) for nearby, chain in laid.chains.items()}
    found: list[str] = []
    unused = sorted(contract for chain in real.values() for contract in chain.unused)
    if sorted(contract for contract, _ in laid.unused_force) != unused:
        found.append(f"unused forces expected {laid.unused_force}, found {unused}")
    # Prices in eighths moved in halves and quarters have no rounding in sums, and none is allowed for.
    exact = EXACT_SUMS if plan.steps in (1, 2, 4) else ()
    for nearby, chain in laid.chains.items():
        other, label = real[nearby], f"nearby {nearby}"
        if chain.start != other.start:
            found.append(f"{label}: start expected {chain.start}, found {other.start}")
        decisions = [(d.decided, d.outgoing, d.incoming, d.trigger) for d in chain.decisions]
        if decisions != other.decisions:
            found.append(f"{label}: decisions expected {decisions}, found {other.decisions}")
        if bool(chain.waiting) != other.is_pending:
            found.append(f"{label}: waiting expected {chain.waiting}, pending found {other.is_pending}")
        found += row_differences(chain.rows, other.rows, f"{label} ledger", exact)
        found += row_differences(series[nearby], other.series, f"{label} series", exact)
        if other.identity_error:
            found.append(f"{label}: {other.identity_error}")
    return Compared(laid, series, found)


def differences(market: PlainMarket, plan: PlainPlan) -> list[str]:
    """Everything in which the plain and the real telling of a plan differ."""
    return compare(market, plan).differences
