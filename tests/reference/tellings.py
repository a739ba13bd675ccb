"""The plain and the real telling of one plan in the same words, so that one worked example holds both to account.

Belongs here: asking either and answering alike. Does not belong here: any rule.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

from contracts.written import rolls_table
from tests.reference.plain_market import PlainMarket, PlainPlan
from tests.reference.plain_rolls import lay_plain
from tests.reference.plain_splice import splice_plain
from tests.reference.real import lay_panel_of, lay_real

Row = dict[str, Any]
EVIDENCE = ("outgoing_volume", "incoming_volume", "outgoing_open_interest", "incoming_open_interest")


@dataclass(frozen=True)
class ToldChain:
    """One nearby: `start` in session indices, decisions as (decided, outgoing, incoming, trigger), ledger, series."""

    start: int | None
    first: str | None
    decisions: list[tuple[int, str, str, str]]
    rows: list[Row]
    series: list[Row]
    is_waiting: bool


@dataclass(frozen=True)
class Told:
    """All nearbys of a plan by number, and the outgoing contracts of forced rolls that had no effect."""

    chains: dict[int, ToldChain]
    unused_force: list[str]


Telling = Callable[[PlainMarket, PlainPlan], Told]


def tell_plain(market: PlainMarket, plan: PlainPlan) -> Told:
    """Lay a plan with the plain loops."""
    laid = lay_plain(market, plan)
    chains = {
        nearby: ToldChain(
            chain.start,
            chain.first,
            [(d.decided, d.outgoing, d.incoming, d.trigger) for d in chain.decisions],
            chain.rows,
            splice_plain(market, chain),
            bool(chain.waiting),
        )
        for nearby, chain in laid.chains.items()
    }
    return Told(chains, sorted(contract for contract, _ in laid.unused_force))


def tell_real(market: PlainMarket, plan: PlainPlan) -> Told:
    """Lay a plan with the real code; the ledger's evidence is what would be published."""
    real = lay_real(market, plan)
    panel = lay_panel_of(market, plan)
    chains = {}
    for nearby, chain in real.items():
        assert chain.identity_error is None
        published = rolls_table(panel, [(plan.name, chain.held, [0] * len(chain.rows))]).to_pylist()
        rows = [
            {**row, **{name: other[name] for name in EVIDENCE}}
            for row, other in zip(chain.rows, published, strict=True)
        ]
        first = chain.series[0]["contract"] if chain.series else None
        chains[nearby] = ToldChain(chain.start, first, chain.decisions, rows, chain.series, chain.is_pending)
    return Told(chains, sorted(real[min(real)].unused))


TELLINGS: dict[str, Telling] = {"plain": tell_plain, "real": tell_real}
