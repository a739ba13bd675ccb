"""What happened to rows and files on their way in.

Belongs here: findings about files, rejected rows, rows that came twice, bars on strange days. Does not belong
here: anything that needs another contract's price.
"""

import numpy as np

from contracts.arrivals import Arrived, Meeting
from contracts.errors import IdentityError
from contracts.findings import Action, Finding, Kind, Severity
from contracts.intake import TORN, FileRows, ParsedRows
from contracts.layouts import BAR_FIELDS
from contracts.panel import Panel
from contracts.quality import Gates
from contracts.sessions import day_of


def check_files(market: str, files: list[FileRows], is_old: list[bool]) -> list[Finding]:
    """Torn files and unreadable rows, a finding a file."""
    found = []
    for rows, old in zip(files, is_old, strict=True):
        if old or not rows.rejects:
            continue
        torn = [reject for reject in rows.rejects if reject.reason == TORN]
        others = sorted((reject for reject in rows.rejects if reject.reason != TORN), key=lambda reject: reject.line)
        path, contract = rows.raw.path, rows.raw.claim.contract
        if torn:
            message = f"{path}:{torn[0].line}: {TORN}: {torn[0].text[:120]!r}"
            found.append(
                Finding(Kind.TORN_FILE, Severity.REVIEW, message, market, contract, action=Action.REJECTED, detail=path)
            )
        if others:
            count = f"{len(others)} of {rows.row_count} rows cannot be read"
            message = f"{path}: {count}; line {others[0].line}: {others[0].reason}"
            found.append(
                Finding(
                    Kind.UNREADABLE_ROWS,
                    Severity.REVIEW,
                    message,
                    market,
                    contract,
                    action=Action.REJECTED,
                    detail=path,
                )
            )
    return found


def account_for_rows(files: list[FileRows], is_old: list[bool], parsed: ParsedRows, arrived: Arrived) -> None:
    """Raise IdentityError unless every row of every newest file is kept, rejected, superseded, or another market's."""
    kept = np.bincount(arrived.bars.source, minlength=len(files))
    gone = np.bincount([parsed.source[meeting.row] for meeting in arrived.superseded] or [], minlength=len(files))
    for source, (rows, old) in enumerate(zip(files, is_old, strict=True)):
        if old:
            continue
        parts = {"kept": int(kept[source]), "rejected": len(rows.rejects), "superseded": int(gone[source])}
        parts["of other markets"] = rows.elsewhere
        if rows.row_count != sum(parts.values()):
            told = ", ".join(f"{count} {name}" for name, count in parts.items())
            raise IdentityError(f"{rows.raw.path}: {rows.row_count} rows came in; {told}")


def check_meetings(
    market: str, parsed: ParsedRows, arrived: Arrived, files: list[FileRows], gates: Gates
) -> list[Finding]:
    """Duplicated, conflicting and restated rows, and files that lost rows."""
    found: list[Finding] = []
    duplicates: dict[str, list[int]] = {}
    for meeting in arrived.superseded:
        if meeting.meeting is Meeting.DUPLICATE:
            duplicates.setdefault(parsed.contracts[parsed.contract[meeting.row]], []).append(meeting.row)
            continue
        row, by = meeting.row, meeting.by
        kind = Kind.CONFLICTING_ROWS if meeting.meeting is Meeting.CONFLICT else Kind.RESTATED
        severity = Severity.REVIEW if kind is Kind.CONFLICTING_ROWS else Severity.NOTE
        differs = [
            place for place in range(len(BAR_FIELDS)) if not _same(parsed.values[row, place], parsed.values[by, place])
        ]
        contract, day = parsed.contracts[parsed.contract[row]], day_of(parsed.session[row])
        old_place = f"{files[parsed.source[row]].raw.path}:{parsed.line[row]}"
        new_place = f"{files[parsed.source[by]].raw.path}:{parsed.line[by]}"
        for place in differs:
            before, after = (float(parsed.values[which, place]) for which in (row, by))
            values = f"{before:.10g} ({old_place}) gave way to {after:.10g} ({new_place})"
            message = f"{contract}, {day}: {BAR_FIELDS[place]} {values}"
            found.append(
                Finding(
                    kind, severity, message, market, contract, day, BAR_FIELDS[place], _real(before), _real(after),
                    action=Action.REJECTED, detail=f"{old_place}",
                )
            )  # fmt: skip
    for contract, places in sorted(duplicates.items()):
        first = min(places, key=lambda row: (parsed.session[row], parsed.line[row]))
        where = f"{files[parsed.source[first]].raw.path}:{parsed.line[first]}"
        message = f"{contract}: {len(places)} rows came twice with the same values, the first {where}"
        found.append(
            Finding(
                Kind.DUPLICATE_ROWS, Severity.NOTE, message, market, contract, day_of(parsed.session[first]),
                score=float(len(places)), action=Action.REJECTED,
            )
        )  # fmt: skip
    for source, count in sorted(arrived.lost.items()):
        raw = files[source].raw
        severity = Severity.BLOCK if count > gates.lost_rows else Severity.REVIEW
        message = (
            f"{raw.path}: {count} rows of its version of intake {raw.taken_in} are missing from the newest version"
        )
        found.append(
            Finding(
                Kind.SHRUNKEN_FILE, severity, message, market, raw.claim.contract, score=float(count),
                threshold=float(gates.lost_rows), detail=f"{raw.path} {raw.file}",
            )
        )  # fmt: skip
    return found


def check_days(panel: Panel, sessions_of_bars: "list[tuple[int, str, int]]") -> list[Finding]:
    """Bars on closed days, bars outside their contract's listing, and sessions the calendar calls closed.

    `sessions_of_bars` gives (bar, contract, day number) of the bars the panel left out.
    """
    market = panel.market.code
    outside = set(panel.outside.tolist())
    found = []
    for bar, contract, day in sessions_of_bars:
        if bar in outside:
            message = (
                f"{contract}, {day_of(day)}: a bar after the last trading day, or years before any listing; kept out"
            )
            kind, severity = Kind.OUTSIDE_LISTING, Severity.REVIEW
        else:
            message = f"{contract}, {day_of(day)}: a bar on a day the market is closed; kept out"
            kind, severity = Kind.NOT_A_SESSION, Severity.REVIEW
        found.append(Finding(kind, severity, message, market, contract, day_of(day), action=Action.REJECTED))
    for session in panel.disagreeing:
        date = day_of(panel.sessions[session])
        count = int((panel.bar[session] >= 0).sum())
        text = f"the calendar says closed, but {count} contracts, more than half, have a bar; taken as a session"
        message = f"{market}, {date}: {text}"
        found.append(Finding(Kind.CALENDAR_DISAGREES, Severity.NOTE, message, market, session=date, score=float(count)))
    return found


def _same(first: float, second: float) -> bool:
    return first == second or (first != first and second != second)


def _real(value: float) -> float | None:
    return None if value != value else value
