"""What a night came to, once, for everybody who is told of it.

The terminal, the JSON in the store, Prefect's artifact and its events are all made from one `Outcome`, so that
they cannot say different things.

Belongs here: gathering it, and its forms as JSON, lines and Markdown. Does not belong here: deciding it
(`catalog/`), sending it (`flows/messages.py`).
"""

import html
import re
from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from catalog.places import Places
from contracts.errors import RopewalkError
from flows.clock import Clock
from flows.exits import MEANINGS, Exit, code_of_any

if TYPE_CHECKING:
    from catalog.summary import Summary


@dataclass(frozen=True)
class Outcome:
    """A night that ended: by what command and when, with which exit code, and its summary or its error."""

    command: str
    finished_at: str
    exit_code: int
    current: str | None
    summary: "Summary | None" = None
    error: str | None = None

    @property
    def word(self) -> str:
        """In one word: published, held back, nothing new, failed."""
        if self.summary is None:
            return "failed"
        if self.summary.nothing_new:
            return "nothing new"
        return "held back" if self.exit_code else "published"

    def as_json(self) -> dict[str, Any]:
        """As plain values: those of the summary, with command, finished_at, exit_code, outcome, current and
        error (null where the night ended well)."""
        values = self.summary.as_json() if self.summary is not None else {}
        return {
            **values, "command": self.command, "finished_at": self.finished_at, "exit_code": self.exit_code,
            "outcome": self.word, "current": self.current, "error": self.error,
        }  # fmt: skip

    def lines(self) -> list[str]:
        """As lines of text, a fact each."""
        if self.summary is not None:
            return self.summary.lines()
        stands = f"snapshot {self.current} stands" if self.current else "nothing was published before"
        return [f"nothing published: {self.error}; {stands}"]

    def as_markdown(self) -> str:
        """As a page, what needs a person first: held back, late, found by impact, published."""
        told = [f"**{_plain(self.lines()[0])}**", f"Exit code {self.exit_code}: {MEANINGS[Exit(self.exit_code)]}."]
        if self.summary is not None:
            told += _sections(self.summary)
        return "\n\n".join(told) + "\n"


def _sections(summary: "Summary") -> list[str]:
    parts: list[str] = []
    held = [f"- `{market}`: {_plain(reason)}" for market, reason in summary.held_back]
    waived = [f"- `{market}`: {_plain(reason)}" for market, reason in summary.waived]
    by_clock = {entry.market for entry in summary.overdue}
    late = [f"- {_plain(entry.describe())}" for entry in summary.overdue]
    late += [f"- `{market}`: behind the newest market" for market in summary.late if market not in by_clock]
    counts = ", ".join(f"{count:,} {severity}" for severity, count in sorted(summary.finding_counts.items()))
    for title, rows in (("Held back", held), ("Published all the same", waived), ("Late", late)):
        if rows:
            parts += [f"## {title}: {len(rows)}", "\n".join(rows)]
    parts.append(f"## Found: {counts or 'nothing'}")
    if summary.findings:
        head = "| sessions turned | market | kind | action | message |\n| ---: | --- | --- | --- | --- |"
        rows = [
            f"| {f.impact_sessions} | {_plain(f.market or '')} | {f.kind} | {f.action} | {_plain(f.message)} |"
            for f in summary.findings
        ]
        parts.append("\n".join([head, *rows]))
    if summary.unclaimed:
        parts.append(f"Files that belong to no market: {summary.unclaimed}.")
    parts.append(f"## Published: {len(summary.published)}")
    parts.append(", ".join(f"`{market}`" for market in summary.published) or "none")
    if summary.not_asked_for:
        parts.append(f"Not asked for, and as they were: {', '.join(summary.not_asked_for)}.")
    return parts


def _plain(text: str) -> str:
    """Text from a file or a desk, so that no character of it is markup."""
    one_line = html.escape(" ".join(text.split()), quote=False)
    return re.sub(r"([\\`*_{}\[\]()#!|~])", r"\\\1", one_line)


def outcome_of(summary: "Summary", command: str, clock: Clock) -> Outcome:
    """The outcome of a night that ended well."""
    return Outcome(command, clock.now().isoformat(), summary.exit_code, summary.current, summary)


def outcome_of_failure(places: Places, command: str, error: BaseException, clock: Clock) -> Outcome:
    """The outcome of a night that was stopped or could publish nothing."""
    from catalog.standing import current_snapshot

    code = code_of_any(error)
    said = str(error).splitlines()[0] if str(error) else type(error).__name__
    if code in (Exit.INTERRUPTED, Exit.TERMINATED):
        said = MEANINGS[code]
    try:
        current = current_snapshot(places)
    except (RopewalkError, OSError):
        current = None
    return Outcome(command, clock.now().isoformat(), int(code), current, None, said)


def keep_outcome(places: Places, outcome: Outcome, tell: Callable[[str], None]) -> None:
    """Leave the outcome in the store; where it cannot be written, say so: the night itself stands as it ended."""
    from catalog.last_night import write_last_night

    if not places.store.is_dir():
        return
    try:
        write_last_night(places, outcome.as_json())
    except RopewalkError as error:
        tell(str(error))
