"""How many planted faults were found, and how many findings are false.

Belongs here: matching findings to faults, over a whole history and on its last session. Does not belong here: running
the chain (`chain.py`), printing (`report.py`).

A finding lies on a fault if it speaks of its contract and of a day of its span; where the fault concerns the whole
market or lasts longer than five days, only kinds that a person would accept for it lie on it. A fault is found by a
finding on it of severity review or block whose kind a person would accept, or of any severity whose kind names it.
Precision is the share of review and block findings that lie on a fault; a fault counts there at most once a kind, so
that one fault told a thousand times does not hide false alarms, each of which counts. Findings that tell of a roll, not
of data, are left out, and counted.
"""

from collections import Counter
from dataclasses import dataclass, field

import numpy as np

from tests.detectors.chain import Found, Outcome
from tests.detectors.faults import NAMES, PRICE_FAULTS, Fault, Planted, accepted

# Findings about the plan's rolls and series.
ABOUT_ROLLS = frozenset({
    "roll_forced", "roll_postponed", "roll_measured_stale", "roll_unmeasured", "roll_pending", "force_unused",
    "ratio_undefined", "thin_incoming", "after_first_notice", "percent_of_back_adjusted_undefined",
})  # fmt: skip
SERIOUS = frozenset({"review", "block"})
_LONG_DAYS = 5
# Intake refuses a row with a negative count before any check sees it, and tells of it by file.
_REFUSED = "unreadable_rows"


@dataclass(repr=False)
class Tally:
    """Counts over any number of histories.

    planted, found, named: by kind of fault; right, false: serious findings by kind; false_rows, missed: the false ones
    and the faults not found; altered: settles of true events (shocks, limits, squeezes,
    lone moves, negative settles, contracts that do not trade) that were replaced; replaced_truths: all true settles
    that were; off_ticks, off_share: how far repaired settles lie from the truth; masked, left: wrong settles of price
    faults that were masked, and that were left standing.
    """

    planted: Counter[str] = field(default_factory=Counter)
    found: Counter[str] = field(default_factory=Counter)
    named: Counter[str] = field(default_factory=Counter)
    right: Counter[str] = field(default_factory=Counter)
    false: Counter[str] = field(default_factory=Counter)
    false_rows: list[Found] = field(default_factory=list)
    missed: list[Fault] = field(default_factory=list)
    altered: list[str] = field(default_factory=list)
    replaced_truths: int = 0
    off_ticks: list[float] = field(default_factory=list)
    off_share: list[float] = field(default_factory=list)
    masked: int = 0
    left: int = 0
    about_rolls: int = 0
    sessions: int = 0
    rows: int = 0

    def __repr__(self) -> str:
        return f"<recall {self.recall:.4f}, precision {self.precision:.4f}, false {dict(self.false)}>"

    @property
    def recall(self) -> float:
        """Share of all planted faults that were found."""
        return sum(self.found.values()) / max(1, sum(self.planted.values()))

    def recall_of(self, kind: str) -> float:
        return self.found[kind] / max(1, self.planted[kind])

    @property
    def precision(self) -> float:
        right = sum(self.right.values())
        return right / max(1, right + sum(self.false.values()))

    def repair_errors(self) -> dict[str, float]:
        """Median and 95th percentile of how far repaired settles lie from the truth, in ticks and percent."""
        ticks, share = self.off_ticks or [np.nan], self.off_share or [np.nan]
        near = [min(t / 3, s / 0.003) for t, s in zip(ticks, share, strict=True)]
        return {
            "count": float(len(self.off_ticks)),
            "median_ticks": float(np.median(ticks)), "p95_ticks": float(np.quantile(ticks, 0.95)),
            "median_percent": 100 * float(np.median(share)), "p95_percent": 100 * float(np.quantile(share, 0.95)),
            "within_3_ticks_or_0.3_percent": float(np.mean(np.array(near) <= 1)),
        }  # fmt: skip


def lies_on(found: Found, fault: Fault) -> bool:
    """Whether a finding speaks of a fault's contract and days."""
    if found.kind == _REFUSED:
        return fault.form == "negative"
    if fault.contract is not None and found.contract != fault.contract:
        return False
    if (fault.contract is None or fault.last - fault.first > _LONG_DAYS) and found.kind not in accepted(fault.kind):
        return False
    # What speaks of no day speaks of the whole history.
    return fault.first <= found.day <= fault.last if found.day is not None else True


def finds(found: Found, fault: Fault) -> bool:
    """Whether a finding that lies on a fault tells of it."""
    if found.kind in NAMES[fault.kind]:
        return True
    return found.severity in SERIOUS and (found.kind in accepted(fault.kind) or found.kind == _REFUSED)


def tally_history(planted: Planted, outcome: Outcome, tally: Tally) -> None:
    """Add one whole history."""
    tally.sessions += len(planted.grown.days)
    tally.rows += int(np.isfinite(planted.values[3]).sum())
    for fault in planted.faults:
        _tally_fault(fault, outcome.found, tally)
    _tally_findings(outcome.found, planted.faults, tally)
    _tally_repairs(planted, outcome, tally)


def tally_last(planted: Planted, outcome: Outcome, fault: Fault | None, tally: Tally) -> None:
    """Add the last session of a history: the fault on it, if any, and what was found on that session."""
    last = int(planted.grown.days[-1])
    tally.sessions += 1
    here = [fault] if fault is not None else []
    findings = [found for found in outcome.found if found.day == last or any(lies_on(found, one) for one in here)]
    if fault is not None:
        _tally_fault(fault, findings, tally)
    # A finding on some other fault that reaches into the last session is right too.
    _tally_findings(findings, here + planted.faults, tally)


def _tally_fault(fault: Fault, findings: list[Found], tally: Tally) -> None:
    tally.planted[fault.kind] += 1
    on = [found for found in findings if lies_on(found, fault)]
    if any(finds(found, fault) for found in on):
        tally.found[fault.kind] += 1
    else:
        tally.missed.append(fault)
    tally.named[fault.kind] += any(found.kind in NAMES[fault.kind] for found in on)


def _tally_findings(findings: list[Found], faults: list[Fault], tally: Tally) -> None:
    told: set[tuple[int, str]] = set()
    for found in findings:
        if found.kind in ABOUT_ROLLS:
            tally.about_rolls += 1
        elif found.severity in SERIOUS:
            place = next((number for number, fault in enumerate(faults) if lies_on(found, fault)), None)
            if place is None:
                tally.false[found.kind] += 1
                tally.false_rows.append(found)
            elif (place, found.kind) not in told:
                told.add((place, found.kind))
                tally.right[found.kind] += 1


def _tally_repairs(planted: Planted, outcome: Outcome, tally: Tally) -> None:
    if any(fault.kind == "scale_changed" for fault in planted.faults):
        # There is no true settle to come back to: every price is right on its own scale.
        return
    grown = planted.grown
    row = {int(day): place for place, day in enumerate(grown.days)}
    column = {name: place for place, name in enumerate(grown.contracts)}
    natures = {
        (contract, session): event.nature
        for event in grown.events for session in event.sessions for contract in event.contracts
    }  # fmt: skip
    for (name, day), (clean, status) in outcome.clean.items():
        if name not in column or day not in row:
            continue
        session, contract = row[day], column[name]
        truth = float(grown.values[3, session, contract])
        if planted.values[3, session, contract] == truth:
            tally.replaced_truths += 1
            if truth <= 0:
                natures.setdefault((contract, session), "negative settle")
            elif not grown.values[4, session, contract] > 0:
                natures.setdefault((contract, session), "idle contract")
            if (contract, session) in natures:
                tally.altered.append(f"{natures[contract, session]}: {name} day {day}: {truth!r} became {clean!r}")
        elif status == "masked":
            tally.masked += 1
        else:
            base = grown.terms.level if grown.terms.may_be_negative else abs(truth)
            tally.off_ticks.append(abs(clean - truth) / grown.terms.tick)
            tally.off_share.append(abs(clean - truth) / base)
    for fault in planted.faults:
        if fault.kind in PRICE_FAULTS and fault.contract is not None:
            days = [day for day in grown.days.tolist() if fault.first <= day <= fault.last]
            tally.left += sum((fault.contract, day) not in outcome.clean for day in days)
