"""How many planted faults were found, and how many findings are false.

Belongs here: matching findings to faults, over a whole history and on its last session. Does not belong here: running
the chain (`chain.py`), printing (`report.py`).

A fault is found by a finding on its contract and within its days (market-wide ones by a finding without contract, or on
any contract) whose severity is review or block and whose kind a person would accept for it, or, whatever its severity,
whose kind names it. Named means: by a kind that names it. A finding of severity review or block is right if it lies on a
fault in the same sense, whatever its kind; else it is a false alarm. Findings that tell of a roll, not of data, are left
out of both, and counted.
"""

from collections import Counter
from dataclasses import dataclass, field

import numpy as np

from tests.detectors.chain import Found, Outcome
from tests.detectors.faults import NAMES, Fault, Planted, accepted

# Findings about the plan's rolls and series.
ABOUT_ROLLS = frozenset({
    "roll_forced", "roll_postponed", "roll_measured_stale", "roll_unmeasured", "roll_pending", "force_unused",
    "ratio_undefined", "thin_incoming", "after_first_notice", "percent_of_back_adjusted_undefined",
})  # fmt: skip
SERIOUS = frozenset({"review", "block"})


@dataclass
class Tally:
    """Counts over any number of histories.

    planted, found, named: by kind of fault; right, false: serious findings by kind; false_rows: the false ones, each
    with its market; altered: true events whose settle was replaced; off_ticks, off_share: how far repaired settles
    lie from the truth; masked: planted wrong settles that were masked; left: wrong settles left standing.
    """

    planted: Counter[str] = field(default_factory=Counter)
    found: Counter[str] = field(default_factory=Counter)
    named: Counter[str] = field(default_factory=Counter)
    right: Counter[str] = field(default_factory=Counter)
    false: Counter[str] = field(default_factory=Counter)
    false_rows: list[tuple[str, Found]] = field(default_factory=list)
    missed: list[tuple[str, Fault]] = field(default_factory=list)
    altered: list[str] = field(default_factory=list)
    replaced_truths: int = 0
    off_ticks: list[float] = field(default_factory=list)
    off_share: list[float] = field(default_factory=list)
    masked: int = 0
    left: int = 0
    about_rolls: int = 0
    sessions: int = 0

    @property
    def recall(self) -> float:
        return sum(self.found.values()) / max(1, sum(self.planted.values()))

    def recall_of(self, kind: str) -> float:
        return self.found[kind] / max(1, self.planted[kind])

    @property
    def precision(self) -> float:
        right = sum(self.right.values())
        return right / max(1, right + sum(self.false.values()))

    def repair_errors(self) -> dict[str, float]:
        """Median and 95th percentile of how far repaired settles lie from the truth, in ticks and as a share."""
        ticks, share = self.off_ticks or [np.nan], self.off_share or [np.nan]
        # Within 3 ticks or 0.3%: whichever of the two is kinder to the market's tick.
        near = [min(t / 3, s / 0.003) for t, s in zip(ticks, share, strict=True)]
        return {
            "count": float(len(self.off_ticks)),
            "median_ticks": float(np.median(ticks)), "p95_ticks": float(np.quantile(ticks, 0.95)),
            "median_percent": 100 * float(np.median(share)), "p95_percent": 100 * float(np.quantile(share, 0.95)),
            "within_3_ticks_or_0.3_percent": float(np.mean(np.array(near) <= 1)),
        }  # fmt: skip


def lies_on(found: Found, fault: Fault) -> bool:
    """Whether a finding speaks of a fault's contract and days."""
    if found.kind == "unreadable_rows":
        # Told a file, not a row: the rows that cannot be read here are those with negative counts.
        return fault.form == "negative"
    if found.contract is not None and fault.contract is not None and found.contract != fault.contract:
        return False
    if found.contract is None and fault.contract is not None:
        return False
    return found.day is None or fault.first <= found.day <= fault.last


def finds(found: Found, fault: Fault) -> bool:
    """Whether a finding on a fault's place tells of it."""
    if found.kind in NAMES[fault.kind]:
        return True
    kinds = accepted(fault.kind) | (frozenset({"unreadable_rows"}) if fault.form == "negative" else frozenset())
    return found.severity in SERIOUS and found.kind in kinds


def tally_history(planted: Planted, outcome: Outcome, tally: Tally) -> None:
    """Add one whole history."""
    tally.sessions += len(planted.grown.days)
    _tally_faults(planted.faults, outcome.found, tally)
    for found in outcome.found:
        _tally_finding(planted, found, planted.faults, tally)
    _tally_repairs(planted, outcome, tally)


def tally_last(planted: Planted, outcome: Outcome, tally: Tally) -> None:
    """Add the last session of one history: only its faults, and what was found on it."""
    last = int(planted.grown.days[-1])
    tally.sessions += 1
    faults = [fault for fault in planted.faults if fault.first <= last <= fault.last]
    findings = [found for found in outcome.found if _is_of(found, last, faults)]
    _tally_faults(faults, findings, tally)
    for found in findings:
        _tally_finding(planted, found, faults, tally)


def _is_of(found: Found, last: int, faults: list[Fault]) -> bool:
    return found.day == last or (found.day is not None and any(lies_on(found, fault) for fault in faults))


def _tally_faults(faults: list[Fault], findings: list[Found], tally: Tally) -> None:
    for fault in faults:
        tally.planted[fault.kind] += 1
        on = [found for found in findings if lies_on(found, fault)]
        if any(finds(found, fault) for found in on):
            tally.found[fault.kind] += 1
        else:
            tally.missed.append((fault.contract or "", fault))
        if any(found.kind in NAMES[fault.kind] for found in on):
            tally.named[fault.kind] += 1


def _tally_finding(planted: Planted, found: Found, faults: list[Fault], tally: Tally) -> None:
    if found.kind in ABOUT_ROLLS:
        tally.about_rolls += 1
        return
    if found.severity not in SERIOUS:
        return
    if any(lies_on(found, fault) for fault in faults):
        tally.right[found.kind] += 1
    else:
        tally.false[found.kind] += 1
        tally.false_rows.append((planted.grown.terms.code, found))


def _tally_repairs(planted: Planted, outcome: Outcome, tally: Tally) -> None:
    grown = planted.grown
    truths: dict[tuple[str, int], float] = {}
    column = {name: place for place, name in enumerate(grown.contracts)}
    row = {int(day): place for place, day in enumerate(grown.days)}
    wrong = planted.values[3] != grown.values[3]
    for session, contract in np.argwhere(wrong & np.isfinite(planted.values[3])):
        truths[grown.contracts[contract], int(grown.days[session])] = float(grown.values[3, session, contract])
    events = {
        (grown.contracts[contract], int(grown.days[session])): event.nature
        for event in grown.events
        for session in event.sessions
        for contract in event.contracts
    }
    is_rescaled = any(fault.kind == "scale_changed" for fault in planted.faults)
    touched = {
        (fault.contract, day)
        for fault in planted.faults if fault.contract is not None
        for day in range(fault.first, fault.last + 1)
    }  # fmt: skip
    for cell, (clean, status) in outcome.clean.items():
        if is_rescaled:
            continue
        if cell in truths:
            if status == "masked":
                tally.masked += 1
            else:
                truth = truths[cell]
                base = grown.terms.level if grown.terms.may_be_negative else abs(truth)
                tally.off_ticks.append(abs(clean - truth) / grown.terms.tick)
                tally.off_share.append(abs(clean - truth) / base)
        elif cell[0] in column and cell[1] in row and cell not in touched:
            tally.replaced_truths += 1
            if cell in events:
                tally.altered.append(f"{events[cell]} {cell[0]} day {cell[1]}: {clean!r} {status}")
    if not is_rescaled:
        tally.left += sum(cell not in outcome.clean for cell in truths)
