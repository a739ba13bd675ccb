"""One market, the whole chain, as one pure function.

Belongs here: the order of the rooms. Does not belong here: what happens in any of them, and anything that
reads or writes a file.
"""

import datetime
from dataclasses import dataclass, field
from typing import Any

import numpy as np
import pyarrow as pa

from contracts.arrivals import Arrived, settle_arrivals
from contracts.checks.arrived import account_for_rows, check_days, check_files, check_meetings
from contracts.checks.gaps import check_gaps
from contracts.checks.lag import check_lag
from contracts.checks.rolled import check_back_adjusted, check_rolls
from contracts.checks.rows import check_rows
from contracts.checks.shocks import check_shocks
from contracts.checks.stale import StaleRun, find_stale_runs
from contracts.checks.volumes import check_volumes
from contracts.deliveries import delivery_of
from contracts.errors import IntakeError
from contracts.findings import Finding, Kind, Severity, Waiver, findings_table, waive
from contracts.impact import Laid, tell_cleaning, weigh_findings, weight_of
from contracts.intake import FileRows, ParsedRows, RawFile, parse_rows, split_file
from contracts.markets import Market
from contracts.panel import Panel, lay_panel
from contracts.quality import Gates, Quality
from contracts.repairs import Clean, DeclaredRepair, clean_panel
from contracts.rolls import NEVER, lay_rolls
from contracts.sessions import day_number, day_of, last_trade_day
from contracts.splice import carry_forward, check_identities, splice
from contracts.trend import impact_of_gap
from contracts.written import (
    bars_table,
    files_table,
    rejects_table,
    rolls_table,
    series_table,
    terms_table,
)

# Gates look back so many sessions.
RECENT_SESSIONS = 60


# Path, contract (None where its rows say it) and message of a file of which nothing can be read.
Failure = tuple[str, str | None, str]


@dataclass(frozen=True)
class Inputs:
    """All that decides a market's tables: the same inputs give the same bytes.

    `files` are in any order; `is_old` marks those with a newer version under the same path; `failures` are
    of files that could not even be unpacked. With `until`, bars of later sessions are left out.
    """

    market: Market
    files: tuple[RawFile, ...]
    is_old: tuple[bool, ...]
    failures: tuple[Failure, ...] = ()
    repairs: tuple[DeclaredRepair, ...] = ()
    waivers: tuple[Waiver, ...] = ()
    quality: Quality = field(default_factory=Quality)
    gates: Gates = field(default_factory=Gates)
    look_backs: tuple[int, ...] = (5, 10, 21, 42)
    until: datetime.date | None = None


@dataclass(frozen=True, eq=False)
class Built:
    """A market's tables by name, and the facts its gates are judged by."""

    tables: dict[str, pa.Table]
    facts: dict[str, Any]


@dataclass(frozen=True, eq=False)
class Prepared:
    """A market's raw text carried to a clean panel: what every roll plan starts from.

    `files`, `is_old` and `failures` say what could be read, `parsed` and `arrived` which rows came and which
    stand, `data_date` is the last session.
    """

    files: list[FileRows]
    is_old: list[bool]
    failures: list[Failure]
    parsed: ParsedRows
    arrived: Arrived
    panel: Panel
    clean: Clean
    data_date: datetime.date


def prepare_market(inputs: Inputs) -> Prepared:
    """Read, settle and clean a market's raw text, without plans and without tables.

    Raises ValueError where no usable bar arrived, CalendarError where a day rule fails.
    """
    market = inputs.market
    files, is_old, failures = _read(inputs)
    parsed = parse_rows(files, market)
    arrived = settle_arrivals(parsed, files, is_old)
    account_for_rows(files, is_old, parsed, arrived)
    if inputs.until is not None:
        arrived = arrived.until(day_number(inputs.until))
    if not len(arrived.bars.line):
        first = f"; {failures[0][2]}" if failures else ""
        raise ValueError(f"{market.code}: no row of its {len(inputs.files)} files can be read{first}")
    panel = lay_panel(market, arrived.bars)
    clean = clean_panel(panel, arrived.bars, inputs.repairs, inputs.quality)
    return Prepared(files, is_old, failures, parsed, arrived, panel, clean, day_of(panel.sessions[-1]))


def build_market(inputs: Inputs) -> Built:
    """Carry one market from raw text to tables.

    Raises ValueError where no usable bar arrived, CalendarError where a day rule fails, IdentityError where
    the result does not hold together.
    """
    market = inputs.market
    made = prepare_market(inputs)
    files, is_old, parsed, arrived = made.files, made.is_old, made.parsed, made.arrived
    panel, clean, data_date = made.panel, made.clean, made.data_date
    findings = _tell_failures(market, made.failures, data_date)
    findings += check_files(market.code, files, is_old)
    findings += check_meetings(market.code, parsed, arrived, files, inputs.gates)
    findings += check_days(panel, _left_out(panel, arrived))
    findings += check_rows(panel, clean.prices, clean.levels, clean.is_repaired & ~clean.usable)
    findings += clean.findings
    stale = find_stale_runs(panel, panel.field("settle"), inputs.quality)
    findings += _tell_stale(panel, stale, inputs.quality)
    findings += check_shocks(panel, clean.settle * clean.levels)
    findings += check_gaps(panel)
    findings += check_volumes(panel)
    findings += check_lag(panel)
    traded = clean.traded(panel)
    laid = lay_plans(traded, clean)
    for one in laid:
        findings += check_rolls(panel, one.name, market.plans[one.name], one.held)
        if one.series is not None:
            findings += check_back_adjusted(panel, one.name, one.held, one.series.settle, one.series.back_adjusted)
    findings = weigh_findings(findings, panel, clean, laid, stale, inputs.look_backs)
    findings = waive(findings, inputs.waivers, market.code, data_date)
    counts = _counts(findings)
    impacts = [_gap_impacts(one, inputs.look_backs) for one in laid]
    tables = {
        "bars": bars_table(panel, arrived, files, clean),
        "series": series_table(panel, clean, [(o.name, o.held, o.series) for o in laid], counts),
        "rolls": rolls_table(traded, [(o.name, o.held, i) for o, i in zip(laid, impacts, strict=True)]),
        "findings": findings_table(findings),
        "rejects": rejects_table(market.code, files, is_old),
        "files": files_table(market.code, files, parsed),
        "terms": terms_table(panel),
    }
    facts = _facts(findings, panel, files, is_old, laid)
    facts["cleaning"] = tell_cleaning(laid, panel, clean, inputs.look_backs)
    return Built(tables, facts)


def _read(inputs: Inputs) -> tuple[list[FileRows], list[bool], list[Failure]]:
    """Split every file into rows, in order of intake and path; a newest version without a usable header fails."""
    failures = list(inputs.failures)
    files: list[FileRows] = []
    is_old: list[bool] = []
    order = sorted(
        zip(inputs.files, inputs.is_old, strict=True), key=lambda pair: (pair[0].taken_in, pair[0].path, pair[0].file)
    )
    for raw, old in order:
        try:
            files.append(split_file(raw))
            is_old.append(old)
        except IntakeError as error:
            if not old:
                failures.append((raw.path, raw.claim.contract, str(error)))
    return files, is_old, failures


def _tell_failures(market: Market, failures: list[Failure], data_date: datetime.date) -> list[Finding]:
    """Files of which no row can be read. Without a live contract no roll can be trusted; a dead one leaves a hole."""
    found = []
    for path, contract, message in failures:
        is_dead = contract is not None and last_trade_day(market, delivery_of(contract)) < data_date
        severity = Severity.REVIEW if is_dead else Severity.BLOCK
        found.append(Finding(Kind.UNREADABLE_FILE, severity, message, market.code, contract, detail=path))
    return found


def _left_out(panel: Panel, arrived: Arrived) -> list[tuple[int, str, int]]:
    bars = arrived.bars
    places = sorted({*panel.off_session.tolist(), *panel.outside.tolist()})
    return [(bar, bars.contracts[bars.contract[bar]], int(bars.session[bar])) for bar in places]


def _tell_stale(panel: Panel, runs: list[StaleRun], quality: Quality) -> list[Finding]:
    found = []
    for run in runs:
        label, first = panel.contracts[run.contract], day_of(panel.sessions[run.first])
        price = float(panel.field("settle")[run.first, run.contract])
        count = run.last - run.first + 1
        message = (
            f"{label}, {first} to {day_of(panel.sessions[run.last])}: settle stands at {price:.10g} "
            f"for {count} sessions while the curve moves {run.moved:+.10g}"
        )
        found.append(
            Finding(
                Kind.STALE_PRICE, Severity.REVIEW, message, panel.market.code, label, first, "settle", price,
                round(price + run.moved, 10), score=float(count), threshold=float(quality.stale_sessions),
            )
        )  # fmt: skip
    return found


def lay_plans(panel: Panel, clean: Clean) -> list[Laid]:
    """Every plan of the market and each of its nearbys, spliced and held to its identities."""
    carried, status = carry_forward(clean.settle, clean.is_repaired)
    laid = []
    for name in sorted(panel.market.plans):
        for held in lay_rolls(panel, clean.usable, clean.settle, panel.market.plans[name]):
            series = splice(held, carried, status) if held.start != NEVER else None
            if series is not None:
                check_identities(series, f"{panel.market.code}, plan {name}, nearby {held.nearby}")
            laid.append(Laid(name, held, series))
    return laid


def _gap_impacts(one: Laid, look_backs: tuple[int, ...]) -> list[int]:
    if one.series is None:
        return []
    back, start = one.series.back_adjusted, one.held.start
    return [
        0 if step.measured == NEVER else impact_of_gap(back, step.effective - start, step.gap, look_backs)
        for step in one.held.steps
    ]


def _counts(findings: list[Finding]) -> dict[tuple[str, Any], int]:
    """Number of findings by contract and session."""
    counts: dict[tuple[str, Any], int] = {}
    for finding in findings:
        if finding.contract is not None and finding.session is not None:
            key = (finding.contract, finding.session)
            counts[key] = counts.get(key, 0) + 1
    return counts


def _facts(
    findings: list[Finding], panel: Panel, files: list[FileRows], is_old: list[bool], laid: list[Laid]
) -> dict[str, Any]:
    """What the gates are judged by, as plain values."""
    current = [rows for rows, old in zip(files, is_old, strict=True) if not old]
    severities: dict[str, int] = {}
    for finding in findings:
        severities[finding.severity] = severities.get(finding.severity, 0) + 1
    plans: dict[str, Any] = {}
    for one in laid:
        if one.held.nearby != 1 or one.series is None:
            continue
        status = one.series.status
        plans[one.name] = {
            "first_session": day_of(panel.sessions[one.series.start]).isoformat(),
            "last_session": day_of(panel.sessions[-1]).isoformat(),
            "sessions": len(status),
            "repaired": int((status == 1).sum()),
            "carried": int((status == 2).sum()),
            "missing": int((status == 3).sum()),
            "recent_without_price": int((status[-RECENT_SESSIONS:] >= 2).sum()),
        }
    return {
        "rows": sum(rows.row_count - rows.elsewhere for rows in current),
        "rejected": sum(len(rows.rejects) for rows in current),
        "expected": len(panel.sessions),
        "first_session": day_of(panel.sessions[0]).isoformat(),
        "last_session": day_of(panel.sessions[-1]).isoformat(),
        "newest_contracts": [panel.contracts[at] for at in np.flatnonzero(panel.bar[-1] >= 0)],
        "findings": severities,
        "blocking": _blocking(findings, panel, laid),
        "first_plan": next(iter(panel.market.plans)),
        "plans": plans,
    }


def _blocking(findings: list[Finding], panel: Panel, laid: list[Laid]) -> list[str]:
    """Messages of unwaived block findings that are recent in a held contract, or belong to no session."""
    since = day_of(panel.sessions[max(0, len(panel.sessions) - RECENT_SESSIONS)])
    messages = []
    for finding in findings:
        if finding.severity is not Severity.BLOCK or finding.waived_until is not None:
            continue
        if finding.session is not None and finding.contract is not None:
            if finding.session < since or finding.contract not in panel.contracts:
                continue
            session = int(np.searchsorted(panel.sessions, day_number(finding.session)))
            contract = panel.contracts.index(finding.contract)
            around = range(max(0, session - 1), min(len(panel.sessions), session + 1))
            if not any(weight_of(one.held, at, contract) for one in laid for at in around):
                continue
        messages.append(finding.message)
    return messages
