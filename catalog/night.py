"""The night without a scheduler, in three steps: begin, build one market, finish.

Belongs here: the order of a night's work on a store, and what it tells. Does not belong here: who calls the
steps (`flows/`), how a table is computed (`contracts/`) or written (`store.py`).
"""

import datetime
import json
import shutil
import time
from dataclasses import dataclass, replace
from pathlib import Path
from typing import Any, Final

import pyarrow as pa

from catalog.archive import Intake, keep_texts, read_register, register_digest, take_in
from catalog.assignment import (
    Assignment,
    FileOfMarket,
    assign_files,
    code_digest,
    gather_inputs,
    inputs_digest,
    package_versions,
    table_stamp,
)
from catalog.declarations import Desk, desk_from_texts, load_desk
from catalog.gates import judge_market, silent_sessions
from catalog.lateness import Overdue, SeenBars, find_overdue
from catalog.laying import lay_files
from catalog.manifest import HELD_BACK, PUBLISHED, Manifest, StoredFile, Verdict
from catalog.mending import damaged_owners
from catalog.places import DESK_WIDE, Places, store_errors, write_whole
from catalog.runs import Run, next_run, record_run, runs_table
from catalog.standing import current_snapshot, read_manifest
from catalog.store import clean_leftovers, open_staging, publish, write_table
from catalog.summary import Summary, summarise
from catalog.wishes import Wishes
from contracts.build import build_market
from contracts.errors import RopewalkError, StoreError, StoreUnsound, UsageError
from contracts.findings import Finding, Kind, Severity, findings_table
from contracts.tables import COVERAGE, FINDINGS, MARKET_TABLES, RUNS, make_table

WAIVED: Final = "gate waived by"
_ORDINARY: Final = Wishes()


@dataclass(frozen=True)
class Night:
    """One night, small enough to hand to any worker."""

    desk_path: str
    raw: str
    store: str
    staging: str
    command: str
    started_at: str
    markets: tuple[str, ...]
    unchanged: tuple[str, ...]
    nothing_new: bool
    workers: str
    dask_address: str
    files_taken_in: int
    intake: int
    wishes: Wishes = _ORDINARY
    # Markets that would have been built, had they been asked for.
    left: tuple[str, ...] = ()
    # By the markets' own clocks; it goes into the manifest's summary and into no table.
    overdue: tuple[Overdue, ...] = ()


def begin(
    desk_path: Path, raw: Path | None, store: Path | None, command: str, wishes: Wishes | None = None,
    now: datetime.datetime | None = None, seen: SeenBars | None = None,
) -> Night:  # fmt: skip
    """Load the desk, take in what arrived, and say which markets have to be built.

    Where every raw file is to be read again, markets whose published tables are damaged are built again. `now` is
    the moment by which files may be overdue; without it none is asked to be. The caller holds the store's write
    lock. Raises DeskError before anything is touched, UsageError for a raw folder that is not there while the
    archive is empty, and for wishes the desk or the store cannot grant.
    """
    started = _now()
    wishes, desk = wishes or Wishes(), load_desk(desk_path)
    raw_path, places = (raw or desk.raw).resolve(), Places((store or desk.store).resolve())
    clean_leftovers(places)
    last = _last_manifest(places)
    wishes.check(desk, last)
    if wishes.known is None:
        intake = take_in(raw_path, places, wishes.rehash)
    else:
        arrivals = read_register(places)
        intake = Intake(arrivals[-1].taken_in if arrivals else 0, 0, arrivals, ())
    if not intake.arrivals:
        raise UsageError(
            f"{raw_path}: no raw file there, and none in the archive of {places.store}; name another with --raw"
        )
    assignment = assign_files(desk, intake, places)
    digests = {code: inputs_digest(desk, code, files, wishes.until) for code, files in assignment.files.items()}
    damaged = damaged_owners(places, last) if wishes.rehash and last is not None else frozenset()
    unchanged = tuple(code for code in desk.markets if _is_unchanged(last, code, digests[code]) and code not in damaged)
    told = _desk_digest(assignment)
    nothing_new = (
        last is not None
        and not wishes.waived
        and not damaged
        and all(code in last.markets and last.markets[code].inputs == digests[code] for code in wishes.asked(desk))
        and (bool(wishes.markets) or (set(last.markets) == set(desk.markets) and _is_same_desk(last, desk, told)))
    )
    overdue: tuple[Overdue, ...] = ()
    if now is not None and wishes.until is None:
        overdue = find_overdue(desk, assignment.files, last, places, now, seen or SeenBars())
    staging = ""
    if not nothing_new:
        staging = str(open_staging(places))
        _remember(places, desk, assignment, digests, told)
    changed = () if nothing_new else tuple(code for code in desk.markets if code not in unchanged)
    building = tuple(code for code in changed if code in wishes.asked(desk))
    return Night(
        str(desk.path), str(raw_path), str(places.store), staging, command, started, building,
        unchanged if not nothing_new else tuple(desk.markets), nothing_new, str(desk.run.workers),
        desk.run.dask_address, intake.new, intake.number, wishes,
        tuple(code for code in changed if code not in building), overdue,
    )  # fmt: skip


def _is_same_desk(last: Manifest, desk: Desk, told: list[str]) -> bool:
    """Whether desk, code and the files of no market are those of the last snapshot."""
    return last.desk == desk.digest and last.code == code_digest() and last.summary.get("files_of_no_market") == told


def _last_manifest(places: Places) -> Manifest | None:
    name = current_snapshot(places)
    return read_manifest(places, name) if name is not None else None


def _is_unchanged(last: Manifest | None, market: str, digest: str) -> bool:
    """Whether the market's tables in the last snapshot are what a build would give again."""
    verdict = last.markets.get(market) if last is not None else None
    return verdict is not None and verdict.state == PUBLISHED and verdict.inputs == digest


def _desk_digest(assignment: Assignment) -> list[str]:
    """What is told of files that belong to no market."""
    return sorted(finding.identity for finding in assignment.findings)


def _memory(places: Places) -> Path:
    return places.intake / "night.json"


def _remember(places: Places, desk: Desk, assignment: Assignment, digests: dict[str, str], told: list[str]) -> None:
    """Leave desk and assignment where every worker can read them; the lock's holder alone writes it.

    The desk goes along as text, so that one edited in the middle of a night takes effect on the next.
    """
    content = {
        "desk": desk.texts,
        "files": {code: [list(vars(entry).values()) for entry in files] for code, files in assignment.files.items()},
        "findings": [[f.kind, f.severity, f.message, f.detail] for f in assignment.findings],
        "unclaimed": assignment.unclaimed,
        "digests": digests,
        "told": told,
    }
    with store_errors("the work of the night could not be written down"):
        places.intake.mkdir(parents=True, exist_ok=True)
        write_whole(_memory(places), json.dumps(content).encode())


def _recall(places: Places) -> dict[str, Any]:
    content: dict[str, Any] = json.loads(_memory(places).read_text(encoding="utf-8"))
    return content


def _desk_tonight(night: Night, memory: dict[str, Any]) -> Desk:
    return desk_from_texts(Path(night.desk_path), memory["desk"])


def build_one(night: Night, market: str) -> dict[str, Any]:
    """Build one market into the staging folder.

    Returns plain values: market, files (path below the snapshot -> sha256, rows, bytes), facts, worst
    (findings with the largest impact), error (None, or why the market cannot be built), rows, seconds, and
    is_unsound where a damaged archive is why. A market that cannot be built is an answer, not an exception; a
    store that cannot be written raises StoreError.
    """
    started = time.monotonic()
    places = Places(Path(night.store))
    memory = _recall(places)
    desk = _desk_tonight(night, memory)
    entries = tuple(FileOfMarket(*entry) for entry in memory["files"][market])
    result: dict[str, Any] = {"market": market, "files": {}, "facts": {}, "worst": [], "error": None, "rows": 0}
    try:
        if not entries:
            raise ValueError(f"{market}: no raw file is of this market")
        until = night.wishes.until
        built = build_market(replace(gather_inputs(desk, market, entries, places), until=until))
    except StoreUnsound as error:
        # One damaged raw file in the archive holds its market back, and no other.
        result["error"] = f"{error}; build --rehash writes it anew where the raw folder still has it"
        result["is_unsound"] = True
    except StoreError:
        raise
    except (RopewalkError, ValueError) as error:
        result["error"] = str(error)
    if result["error"] is not None:
        result["seconds"] = time.monotonic() - started
        return result
    metadata = table_stamp(desk, market, entries)
    for table in MARKET_TABLES:
        stored = write_table(Path(night.staging), table, market, built.tables[table.name], metadata)
        result["files"][stored.path] = stored.model_dump(exclude={"path"})
        result["rows"] += stored.rows
    result["facts"] = built.facts if until is None else {**built.facts, "until": until.isoformat()}
    result["worst"] = _worst(built.tables["findings"])
    result["seconds"] = time.monotonic() - started
    return result


def _worst(findings: pa.Table, count: int = 10) -> list[dict[str, Any]]:
    """The findings that would have turned the most scores, then the graver ones."""
    rank = {Severity.BLOCK: 0, Severity.REVIEW: 1, Severity.NOTE: 2}
    columns = ["market", "contract", "session", "kind", "severity", "action", "impact_sessions", "message"]
    rows: list[dict[str, Any]] = findings.select(columns).to_pylist()
    rows.sort(key=lambda row: (-row["impact_sessions"], rank[Severity(row["severity"])], str(row["session"])))
    return [{**row, "session": row["session"].isoformat() if row["session"] else None} for row in rows[:count]]


def abandon(night: Night) -> None:
    """Remove what a night has staged; what is published stays as it is."""
    if night.staging:
        shutil.rmtree(night.staging, ignore_errors=True)


def finish(night: Night, results: list[dict[str, Any]]) -> Summary:
    """Judge every market, link what did not change, publish, and say what happened.

    Raises StoreError where nothing can be published; the last snapshot then stands.
    """
    places = Places(Path(night.store))
    last = _last_manifest(places)
    if night.nothing_new:
        if last is None:
            raise StoreError(f"{places.store}: the snapshot this night was compared with is gone")
        run = Run(
            next_run(places),
            night.command,
            night.started_at,
            _now(),
            "nothing new",
            len(last.markets),
            0,
            0,
            intake=night.intake,
        )
        if not night.wishes.is_dry:
            record_run(places, run)
        return summarise(last, night.wishes.is_dry, False, [], overdue=night.overdue)
    memory = _recall(places)
    desk = _desk_tonight(night, memory)
    stood = last.markets if last is not None else {}
    stay = {code: stood[code].facts for code in (*night.unchanged, *night.left) if code in stood}
    facts = {code: fact for code, fact in stay.items() if "last_session" in fact}
    facts |= {result["market"]: result["facts"] for result in results if result["error"] is None}
    verdicts = _judge(desk, facts, results, memory["digests"], last, night)
    staging = Path(night.staging)
    notes: tuple[str, ...] = ()
    files: dict[str, StoredFile] = {}
    if not night.wishes.is_dry:
        laid = lay_files(places, staging, verdicts, results, last)
        files, verdicts, notes = laid.files, laid.verdicts, tuple(laid.notes)
    is_any_out = any(verdict.state == PUBLISHED for verdict in verdicts.values())
    held_files = last.files if night.wishes.is_dry and last is not None else files
    if not any(path.startswith("series/") for path in held_files) and not (night.wishes.is_dry and is_any_out):
        reasons = "; ".join(f"{code}: {verdict.reason}" for code, verdict in verdicts.items())
        raise StoreError(f"no market can be published, and nothing of one is there to be served: {reasons}")
    metadata = {"desk": desk.digest, "code": code_digest()}
    run = Run(
        next_run(places), night.command, night.started_at, _now(), "published", len(desk.markets),
        sum(verdict.state == PUBLISHED for verdict in verdicts.values()),
        sum(verdict.state == HELD_BACK for verdict in verdicts.values()), intake=night.intake,
    )  # fmt: skip
    late = late_markets(desk, verdicts)
    worst = sorted((row for result in results for row in result["worst"]), key=lambda row: -row["impact_sessions"])
    if night.wishes.is_dry:
        abandon(night)
        would = last.name if last is not None else ""
        told = {"unclaimed": memory["unclaimed"], "late": [f.market for f in late], **_told_of(night)}
        draft = Manifest(
            name=would, files={}, desk=desk.digest, code=code_digest(), packages={}, intake=night.intake,
            markets=verdicts, summary=told,
        )  # fmt: skip
        return summarise(draft, True, True, results, worst, night.overdue)
    desk_findings = [*_desk_findings(memory, desk, staging, files), *late]
    for table, market, data in (
        (FINDINGS, DESK_WIDE, findings_table(desk_findings)),
        (COVERAGE, DESK_WIDE, coverage_table(desk, verdicts)),
        (RUNS, DESK_WIDE, runs_table(places, run)),
    ):
        stored = write_table(staging, table, market, data, metadata)
        files[stored.path] = stored
    draft = Manifest(
        sequence=0, name="", parent=current_snapshot(places), files=files, desk=desk.digest,
        arrivals=register_digest(places, night.intake),
        desk_files=keep_texts(places, {name: text.encode() for name, text in desk.texts.items()}), code=code_digest(),
        packages=package_versions(), intake=night.intake, markets=verdicts,
        summary={
            "files_of_no_market": memory["told"],
            "unclaimed": memory["unclaimed"],
            "desk_findings": len(desk_findings),
            "late": [finding.market for finding in late],
            **_told_of(night),
        },
    )  # fmt: skip
    manifest = publish(places, staging, draft)
    try:
        record_run(places, replace(run, snapshot=manifest.name))
    except OSError as error:
        # The switch is done; that it is missing in the log of runs must not say otherwise.
        notes += (f"published, but the log of runs could not be written: {error.strerror} ({places.runs})",)
    return replace(summarise(manifest, False, True, results, worst, night.overdue), notes=notes)


def _told_of(night: Night) -> dict[str, Any]:
    """What the manifest says of the night itself."""
    told: dict[str, Any] = {"files_taken_in": night.files_taken_in}
    if night.overdue:
        told["overdue"] = [vars(overdue) | {"lacking": list(overdue.lacking)} for overdue in night.overdue]
    if night.left:
        told["not_asked_for"] = list(night.left)
    if night.wishes.until is not None:
        told["until"] = night.wishes.until.isoformat()
    if night.wishes.known is not None:
        told["known"] = night.wishes.known
    return told


def _now() -> str:
    return datetime.datetime.now(datetime.UTC).isoformat()


def _judge(
    desk: Desk, facts: dict[str, dict[str, Any]], results: list[dict[str, Any]], digests: dict[str, str],
    last: Manifest | None, night: Night,
) -> dict[str, Verdict]:  # fmt: skip
    """The verdict on every market of the desk."""
    waivers = {code: f"{WAIVED} {person}: {why}" for code, why, person in night.wishes.waived}
    errors = {result["market"]: result["error"] for result in results if result["error"] is not None}
    unsound = {result["market"] for result in results if result.get("is_unsound")}
    dates = [datetime.date.fromisoformat(fact["last_session"]) for fact in facts.values()]
    data_date = max(dates, default=datetime.date.min)
    verdicts = {}
    for code, market in desk.markets.items():
        if code in night.left:
            verdicts[code] = _stays(code, last)
            continue
        reasons = (errors[code],) if code in errors else judge_market(market, facts[code], desk.gates, data_date)
        before = last.markets.get(code) if last is not None else None
        # A market that cannot be built has nothing to publish, whoever waives what.
        if not reasons or (code in waivers and code not in errors):
            told = f"{waivers[code]} ({'; '.join(reasons)})" if reasons else ""
            verdicts[code] = Verdict(
                state=PUBLISHED, reason=told, inputs=digests[code], facts=facts[code], last_good_snapshot=None
            )
            continue
        good = before.last_good_snapshot if before is not None else None
        if before is not None and before.state == PUBLISHED and last is not None:
            good = last.name
        # The facts are those of the tables served; only the findings are tonight's.
        # Of what could not be read nothing is known; without inputs every night tries again.
        inputs = "" if code in unsound else digests[code]
        served = dict(before.facts) if before is not None else {}
        served["findings"] = facts.get(code, {}).get("findings", {})
        verdicts[code] = Verdict(
            state=HELD_BACK, reason="; ".join(reasons), inputs=inputs, facts=served, last_good_snapshot=good
        )
    return verdicts


def _stays(market: str, last: Manifest | None) -> Verdict:
    """The verdict on a market that was not asked for: its tables are those of the snapshot that made them."""
    before = last.markets.get(market) if last is not None else None
    if before is None or last is None:
        return Verdict(state=HELD_BACK, reason="not asked for, and never published", inputs="")
    if before.state == PUBLISHED and before.last_good_snapshot is None:
        return before.model_copy(update={"last_good_snapshot": last.name})
    return before


def _desk_findings(memory: dict[str, Any], desk: Desk, staging: Path, files: dict[str, StoredFile]) -> list[Finding]:
    """Findings that belong to no market: files nobody claims, and waivers by identifier that cover nothing."""
    found = [
        Finding(Kind(kind), Severity(severity), text, detail=detail)
        for kind, severity, text, detail in memory["findings"]
    ]
    by_identifier = [waiver for waiver in desk.waivers if waiver.finding is not None]
    if by_identifier:
        import pyarrow.parquet as pq

        known = {finding.identity for finding in found}
        for path in files:
            if path.startswith("findings/"):
                known |= set(pq.read_table(staging / path, columns=["finding"])["finding"].to_pylist())
        for waiver in by_identifier:
            if waiver.finding not in known:
                text = f"the waiver of {waiver.describe()} by {waiver.by} covers no finding; remove it"
                found.append(Finding(Kind.WAIVER_UNMATCHED, Severity.REVIEW, text, detail=waiver.describe()))
    return found


def late_markets(desk: Desk, verdicts: dict[str, Verdict]) -> list[Finding]:
    """Markets that lack the newest session of any market, by their own calendar and the data, not the clock."""
    dates = {
        code: datetime.date.fromisoformat(verdict.facts["last_session"])
        for code, verdict in verdicts.items()
        if "last_session" in verdict.facts
    }
    newest = max(dates.values(), default=datetime.date.min)
    found = []
    for code, last in dates.items():
        count = silent_sessions(desk.markets[code], last, newest)
        if count:
            plural = "s" if count > 1 else ""
            text = f"{code}, {newest}: its newest bar is of {last}, {count} session{plural} behind the newest market"
            found.append(
                Finding(
                    Kind.FILE_LATE, Severity.REVIEW, text, code, session=newest, score=float(count), detail="market"
                )
            )
    return found


def coverage_table(desk: Desk, verdicts: dict[str, Verdict]) -> pa.Table:
    """What is published of each market and plan, and what is not."""
    rows: list[dict[str, Any]] = []
    for code, verdict in verdicts.items():
        for plan in sorted(desk.markets[code].plans):
            fact = verdict.facts.get("plans", {}).get(plan, {}) if verdict.facts else {}
            rows.append(
                {
                    "market": code,
                    "plan": plan,
                    "first_session": _day(fact.get("first_session")),
                    "last_session": _day(fact.get("last_session")),
                    "sessions": fact.get("sessions"),
                    "expected": verdict.facts.get("expected") if verdict.facts else None,
                    "repaired": fact.get("repaired"),
                    "carried": fact.get("carried"),
                    "missing": fact.get("missing"),
                    "last_good_snapshot": verdict.last_good_snapshot,
                    "state": verdict.state,
                    "reason": verdict.reason or None,
                }
            )
    return make_table(COVERAGE, {column: [row[column] for row in rows] for column in COVERAGE.columns})


def _day(text: str | None) -> datetime.date | None:
    return datetime.date.fromisoformat(text) if text else None
