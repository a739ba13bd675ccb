"""The measurements: whole histories, last sessions, the textbook filter.

Belongs here: which markets, seeds and samples are measured. Does not belong here: printing.

The seed "tuning" is the one thresholds may be chosen by, "reported" the one whose figures are published and floored in
`test_power.py`. They give different draws of markets and of faults, and nothing may be tuned on the reported one.
"""

from collections.abc import Iterable

import numpy as np

from tests.detectors.chain import run_chain
from tests.detectors.curves import grow
from tests.detectors.faults import PRICE_FAULTS, Fault, Planted
from tests.detectors.hampel import count_alarms
from tests.detectors.mix import plant_cells, plant_whole
from tests.detectors.score import Tally, tally_history, tally_last
from tests.detectors.terms import MARKETS, terms_of

SEEDS = {"tuning": 11, "reported": 2027}
ALL = tuple(terms.code for terms in MARKETS)
_LOOK_BACK = 300
# Kinds that show on the session they begin on; a stale price shows on its sixth.
AT_ONCE = frozenset(PRICE_FAULTS) | {
    "stale_price", "volume_implausible", "off_tick", "range_broken", "settle_outside_range", "contract_missing",
}  # fmt: skip
_SHOWS_AFTER = {"stale_price": 5}


def plant(codes: Iterable[str], seeds: str) -> list[Planted]:
    """The markets of these codes with their faults; `seeds` is a key of SEEDS."""
    return [plant_cells(grow(terms_of(code), SEEDS[seeds]), SEEDS[seeds]) for code in codes]


def measure_histories(markets: list[Planted], seeds: str) -> Tally:
    """Batch: every history as a whole, and beside it the faults that concern a market as a whole."""
    tally = Tally()
    for planted in markets:
        tally_history(planted, run_chain(planted), tally)
        for whole in plant_whole(planted.grown, SEEDS[seeds]):
            tally_history(whole, run_chain(whole), tally)
    return tally


def measure_last_sessions(markets: list[Planted], seeds: str, sample: int) -> tuple[Tally, Tally]:
    """Online: histories cut so that a fault lies in the last session, and as many whose last session has none.

    `sample` cuts are drawn of each sort, and a change of scale is added a market. Returns the tally of each sort.
    """
    rng = np.random.default_rng([SEEDS[seeds], 3])
    with_fault, without = Tally(), Tally()
    cuts: list[tuple[Planted, Fault, int]] = []
    for planted in markets:
        days = planted.grown.days
        for fault in planted.faults:
            first = int(np.searchsorted(days, fault.first))
            if fault.kind in AT_ONCE and first >= _LOOK_BACK // 3:
                cuts.append((planted, fault, first + _SHOWS_AFTER.get(fault.kind, 0)))
    drawn = [cuts[place] for place in rng.permutation(len(cuts))[:sample]]
    for planted in markets[: max(1, sample // 10)]:
        whole = plant_whole(planted.grown, SEEDS[seeds])[0]
        drawn.append((whole, whole.faults[0], int(np.searchsorted(whole.grown.days, whole.faults[0].first))))
    for planted, fault, last in drawn:
        cut = planted.cut(max(0, last - _LOOK_BACK + 1), last)
        tally_last(cut, run_chain(cut), fault, with_fault)
    for _ in range(sample):
        planted = markets[int(rng.integers(len(markets)))]
        days = planted.grown.days
        busy = np.zeros(len(days), dtype=bool)
        for fault in planted.faults:
            busy |= (days >= fault.first) & (days <= fault.last)
        last = int(rng.choice(np.flatnonzero(~busy[_LOOK_BACK // 2 :]) + _LOOK_BACK // 2))
        cut = planted.cut(max(0, last - _LOOK_BACK + 1), last)
        tally_last(cut, run_chain(cut), None, without)
    return with_fault, without


def online_precision(with_fault: Tally, without: Tally, histories: Tally) -> float:
    """Share of right findings on last sessions, at the density that faults have in the whole histories."""
    density = sum(count for kind, count in histories.planted.items() if kind in AT_ONCE) / max(1, histories.sessions)
    right = sum(with_fault.right.values()) / max(1, with_fault.sessions)
    beside = sum(with_fault.false.values()) / max(1, with_fault.sessions)
    false = sum(without.false.values()) / max(1, without.sessions)
    alarms = density * (right + beside) + (1 - density) * false
    return density * right / alarms if alarms else 1.0


def measure_textbook(markets: list[Planted], limit: float) -> dict[str, float]:
    """Recall and share of false alarms of the Hampel identifier."""
    counts = np.array([count_alarms(planted, limit) for planted in markets]).sum(axis=0)
    planted, seen, alarmed, false = (int(count) for count in counts)
    return {"recall": seen / max(1, planted), "false_alarms": false / max(1, alarmed), "alarms": float(alarmed)}
