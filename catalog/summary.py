"""What a night has to say, for a person and for a machine.

Belongs here: gathering and wording the outcome. Does not belong here: deciding it (`night.py`, `gates.py`).
"""

from dataclasses import asdict, dataclass, field
from typing import Any

from catalog.lateness import Overdue
from catalog.manifest import Manifest, Verdict

_TOLD = 10


@dataclass(frozen=True)
class FindingLine:
    """One finding as the night tells it."""

    market: str | None
    contract: str | None
    session: str | None
    kind: str
    severity: str
    action: str
    impact_sessions: int
    message: str


@dataclass(frozen=True)
class Summary:
    """The outcome of a night. `snapshot` is None where nothing was published; `current` always stands.

    held_back: market and reason; served: market held back, the snapshot its prices are of and their last session,
    both None where nothing of it is served.
    """

    snapshot: str | None
    current: str | None
    nothing_new: bool
    published: tuple[str, ...]
    held_back: tuple[tuple[str, str], ...]
    waived: tuple[tuple[str, str], ...]
    findings: tuple[FindingLine, ...]
    finding_counts: dict[str, int]
    rows: int
    unclaimed: int
    # Markets that lack the newest session of any market, or files that are due by their own clock.
    late: tuple[str, ...]
    cleaning: dict[str, dict[str, Any]] = field(default_factory=dict)
    served: tuple[tuple[str, str | None, str | None], ...] = ()
    notes: tuple[str, ...] = ()
    overdue: tuple[Overdue, ...] = ()
    built: tuple[str, ...] = ()
    not_asked_for: tuple[str, ...] = ()
    files_taken_in: int = 0
    is_dry: bool = False
    until: str | None = None
    known: str | None = None

    @property
    def exit_code(self) -> int:
        """0 published or nothing to do; 3 published, some markets held back. A dry run has the code of the
        night it stands for."""
        return 3 if self.held_back and not self.nothing_new else 0

    def as_json(self) -> dict[str, Any]:
        """The summary as plain values."""
        values = asdict(self)
        values["held_back"] = dict(self.held_back)
        values["served"] = {market: {"snapshot": name, "to": day} for market, name, day in self.served}
        values["waived"] = dict(self.waived)
        values["exit_code"] = self.exit_code
        return values

    def lines(self) -> list[str]:
        """The summary as lines of text."""
        if self.nothing_new:
            told = [f"nothing new: snapshot {self.current} stands"]
        elif self.is_dry:
            stands = f"snapshot {self.current} stands" if self.current else "no snapshot stands"
            told = [f"dry run: nothing was published, {stands}; a night would publish {len(self.published)} markets"]
            told.append(f"  new files: {self.files_taken_in:,}, now in the archive")
            told.append(f"  would be rebuilt: {', '.join(self.built) or 'none'}")
        else:
            told = [f"published snapshot {self.snapshot}: {len(self.published)} markets, {self.rows:,} rows built"]
            told.append(f"  published: {', '.join(self.published) or 'none'}")
        told += [f"  {note}" for note in self.notes]
        served = {market: _tell_served(name, day) for market, name, day in self.served}
        told += [f"  held back: {market}: {reason}; {served[market]}" for market, reason in self.held_back]
        told += [f"  published all the same: {market}: {reason}" for market, reason in self.waived]
        by_clock = {overdue.market for overdue in self.overdue}
        told += [f"  late: {overdue.describe()}" for overdue in self.overdue]
        if behind := [market for market in self.late if market not in by_clock]:
            told.append(f"  late: {', '.join(behind)} (ropewalk findings --kind file_late)")
        if self.not_asked_for:
            told.append(f"  not asked for, and as they were: {', '.join(self.not_asked_for)}")
        if self.unclaimed:
            plural = "file belongs" if self.unclaimed == 1 else "files belong"
            told.append(
                f"  {self.unclaimed} {plural} to no market of the desk (ropewalk findings --kind unclaimed_file)"
            )
        if self.nothing_new:
            return told
        counts = ", ".join(f"{count} {severity}" for severity, count in sorted(self.finding_counts.items()))
        told.append(f"  found: {counts or 'nothing'}")
        turned = [finding for finding in self.findings if finding.impact_sessions]
        if turned:
            told.append("  worst by the sessions whose trend-sign score it would have turned:")
        told += [f"    {finding.impact_sessions:4d}  {finding.message}" for finding in turned]
        turned_markets = {market: _worst_plan(plans) for market, plans in self.cleaning.items()}
        if any(one["turned"] for _, one in turned_markets.values()):
            told.append("  without cleaning the trend-sign score of a first nearby would differ:")
        for market, (plan, one) in turned_markets.items():
            if one["turned"]:
                told.append(f"    {market}: {_without_cleaning(plan, one)}")
        return told


def _worst_plan(plans: dict[str, Any]) -> tuple[str, dict[str, Any]]:
    """The plan that cleaning did most for, the first of several."""
    name = max(plans, key=lambda plan: plans[plan]["turned"])
    return name, plans[name]


def _without_cleaning(plan: str, one: dict[str, Any]) -> str:
    text = f"on {one['turned']:,} of {one['sessions']:,} sessions (plan {plan})"
    worst = one["worst"]
    if worst is None:
        return text
    return f"{text}, worst on {worst['session']}: {worst['reported']:+d} in place of {worst['clean']:+d}"


def summarise(
    manifest: Manifest, is_dry: bool, is_new: bool, results: list[dict[str, Any]],
    worst: list[dict[str, Any]] | None = None, overdue: tuple[Overdue, ...] = (),
) -> Summary:  # fmt: skip
    """The summary of a night: `manifest` is what it published, or would have, or found to stand."""
    counts: dict[str, int] = {}
    for verdict in manifest.markets.values():
        for severity, count in verdict.facts.get("findings", {}).items():
            counts[severity] = counts.get(severity, 0) + count
    if manifest.summary.get("desk_findings"):
        counts["review"] = counts.get("review", 0) + int(manifest.summary["desk_findings"])
    held_back = {code: verdict for code, verdict in manifest.markets.items() if verdict.state != "published"}
    return Summary(
        snapshot=manifest.name if is_new and not is_dry else None,
        current=manifest.name or None,
        nothing_new=not is_new,
        published=tuple(code for code, verdict in manifest.markets.items() if verdict.state == "published"),
        held_back=tuple((c, v.reason) for c, v in held_back.items()),
        served=tuple((c, v.last_good_snapshot, _last_served(v)) for c, v in held_back.items()),
        waived=tuple((c, v.reason) for c, v in manifest.markets.items() if v.state == "published" and v.reason),
        findings=tuple(FindingLine(**row) for row in (worst or [])[:_TOLD]),
        finding_counts=counts,
        rows=sum(int(result["rows"]) for result in results),
        unclaimed=int(manifest.summary.get("unclaimed", 0)),
        cleaning={code: v.facts["cleaning"] for code, v in manifest.markets.items() if v.facts.get("cleaning")},
        late=tuple(sorted({*manifest.summary.get("late", ()), *(entry.market for entry in overdue)})),
        overdue=overdue,
        built=tuple(str(result["market"]) for result in results),
        not_asked_for=tuple(manifest.summary.get("not_asked_for", ())) if is_new else (),
        files_taken_in=int(manifest.summary.get("files_taken_in", 0)) if is_new else 0,
        is_dry=is_dry,
        until=manifest.summary.get("until"),
        known=manifest.summary.get("known"),
    )


def _tell_served(snapshot: str | None, last_session: str | None) -> str:
    return "nothing of it is served" if snapshot is None else f"served as of {snapshot}, to {last_session}"


def _last_served(verdict: Verdict) -> str | None:
    return verdict.facts.get("last_session") if verdict.last_good_snapshot is not None else None
