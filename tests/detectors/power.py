"""Spikes of chosen sizes on chosen contracts: how small a wrong settle may be and still be found.

Belongs here: planting spikes by size. Does not belong here: the mix of all faults (`mix.py`).
"""

from dataclasses import dataclass

import numpy as np

from tests.detectors.chain import run_chain
from tests.detectors.curves import SETTLE, Grown
from tests.detectors.faults import Planter
from tests.detectors.score import Tally, finds, lies_on, tally_history

TICKS = (2, 5, 10, 20, 50, 100)
PERCENT = (0.5, 1.0, 2.0, 4.0, 8.0, 15.0)
SIZES: tuple[tuple[str, float], ...] = (*(("ticks", float(t)) for t in TICKS), *(("%", p) for p in PERCENT))
HELD, BACK, LAST = "held contract", "back month", "last session"
_APART = 9
_LOOK_BACK = 300
# The bench's plan leaves a contract five sessions before its last.
_LEAST_LEFT = 6


@dataclass
class Curve:
    """Spikes planted and found, by (role, unit, size, whether the whole bar moved)."""

    planted: dict[tuple[str, str, float, bool], int]
    found: dict[tuple[str, str, float, bool], int]
    tally: Tally

    def count(self, role: str, unit: str, size: float, whole: bool | None = None) -> tuple[int, int]:
        """Planted and found; with `whole` None, of both forms."""
        forms = (False, True) if whole is None else (whole,)
        keys = [(role, unit, size, form) for form in forms]
        return sum(self.planted.get(key, 0) for key in keys), sum(self.found.get(key, 0) for key in keys)


def measure_power(markets: list[Grown], seed: int, last_sessions: int) -> Curve:
    """Spikes on held contracts and back months of whole histories, and on the held one's last session.

    `last_sessions` cuts are drawn for each size.
    """
    rng = np.random.default_rng([seed, 4])
    curve = Curve({}, {}, Tally())
    for grown in markets:
        planter = Planter(grown, rng)
        marks: list[tuple[str, str, float, bool]] = []
        session = 70
        while session < len(grown.days) - 10:
            role = HELD if rng.random() < 0.5 else BACK
            mark = _plant(planter, session, role)
            if mark is not None:
                marks.append(mark)
            session += int(rng.integers(_APART - 3, _APART + 4))
        outcome = run_chain(planter.planted)
        tally_history(planter.planted, outcome, curve.tally)
        for mark, fault in zip(marks, planter.planted.faults, strict=True):
            _count(curve, mark, any(lies_on(f, fault) and finds(f, fault) for f in outcome.found))
    for size in SIZES:
        for _ in range(last_sessions):
            _measure_last(curve, markets[int(rng.integers(len(markets)))], rng, size)
    return curve


def _measure_last(curve: Curve, grown: Grown, rng: np.random.Generator, size: tuple[str, float]) -> None:
    session = int(rng.integers(_LOOK_BACK // 2, len(grown.days) - 8))
    planter = Planter(grown, rng)
    mark = _plant(planter, session, HELD, size)
    if mark is None:
        return
    cut = planter.planted.cut(max(0, session - _LOOK_BACK + 1), session)
    found = run_chain(cut).found
    fault = planter.planted.faults[0]
    _count(curve, (LAST, *mark[1:]), any(lies_on(f, fault) and finds(f, fault) for f in found))


def _count(curve: Curve, mark: tuple[str, str, float, bool], is_found: bool) -> None:
    curve.planted[mark] = curve.planted.get(mark, 0) + 1
    curve.found[mark] = curve.found.get(mark, 0) + is_found


def _plant(
    planter: Planter, session: int, role: str, wanted: tuple[str, float] | None = None
) -> tuple[str, str, float, bool] | None:
    grown, rng = planter.grown, planter.rng
    live = [
        c for c in range(len(grown.contracts))
        if np.isfinite(grown.values[SETTLE, session, c]) and grown.ends[c] - session >= _LEAST_LEFT
    ]  # fmt: skip
    if len(live) < 2:
        return None
    # A back month is one that is neither held nor next, where the market lists so many.
    contract = live[0] if role == HELD else int(rng.choice(live[2:] or live[1:]))
    if not planter.is_free(session, contract):
        return None
    unit, size = wanted if wanted is not None else SIZES[int(rng.integers(len(SIZES)))]
    truth = planter.truth(session, contract)
    base = grown.terms.level if grown.terms.may_be_negative else abs(truth)
    off = size * planter.tick if unit == "ticks" else size / 100 * base
    wrong = planter.on_tick(truth + float(rng.choice([-1, 1])) * off)
    if wrong == truth or (wrong <= 0 and not grown.terms.may_be_negative):
        return None
    whole = bool(rng.random() < 0.5)
    planter.put(session, contract, wrong, whole)
    planter.note("reverting_spike", f"{size:g} {unit}", session, contract, size=wrong - truth)
    return role, unit, size, whole
