"""The quality log as a colleague would write it: what, where, why it is believed, what was done, what it cost.

Belongs here: wording findings and the effect of cleaning for a person. Does not belong here: which findings are shown
(`catalog/listings.py`), how text reaches the terminal (`render.py`).
"""

import shutil
import textwrap
from collections.abc import Mapping, Sequence
from typing import Any

from contracts.findings import Action, Kind, Severity

_WIDEST = 110
_INDENT = "    "
_FROM_CURVE = "it stands {score} times its usual distance from what the curve says"
# What a score counts, by kind; a kind that is not here is fully told by its message.
_BECAUSE = {
    Kind.DECIMAL_SHIFT: _FROM_CURVE,
    Kind.REVERTING_SPIKE: _FROM_CURVE,
    Kind.CURVE_BREAK: _FROM_CURVE,
    Kind.LONE_MOVE: _FROM_CURVE,
    Kind.NOT_POSITIVE: _FROM_CURVE,
    Kind.MARKET_SHOCK: "it is {score} times the curve's ordinary move of the year before",
    Kind.STALE_PRICE: "it traded through {score} sessions without a new settle",
    Kind.LIMIT_EXCEEDED: "a move of {score}",
    Kind.VOLUME_IMPLAUSIBLE: "{score} times too large for its past, its next sessions, its open interest and its bar",
    Kind.OPEN_INTEREST_IMPLAUSIBLE: "it stands {score} times its usual change away",
    Kind.OPEN_INTEREST_LAG_WRONG: "the score is {score}",
    Kind.THIN_INCOMING: "a share of {score}",
    Kind.CONTRACT_MISSING: "it lacks {score} of the rows that others have",
    Kind.ENDED_EARLY: "it ends {score} sessions early",
    Kind.FILE_LATE: "it is {score} sessions behind",
}


def word_findings(rows: Sequence[Mapping[str, Any]], width: int | None = None) -> list[str]:
    """A short paragraph for each finding, as lines no longer than the terminal is wide; an empty line between two."""
    columns = width if width is not None else shutil.get_terminal_size((100, 24)).columns
    told: list[str] = []
    for row in rows:
        told += _wrap(str(row["message"]), columns, "", _INDENT)
        told += _wrap(_evidence(row), columns, _INDENT, _INDENT)
        told.append(f"{_INDENT}{row['severity']} {row['kind']} {row['finding']}")
        told.append("")
    return told[:-1]


def word_cleaning(market: str, cleaning: Mapping[str, Mapping[str, Any]], width: int | None = None) -> list[str]:
    """What the sign score of each plan's nearby 1 would have been without the cleaning, a line a plan."""
    columns = width if width is not None else shutil.get_terminal_size((100, 24)).columns
    lines = []
    for plan, one in cleaning.items():
        lines += _wrap(f"{market}, plan {plan}: {_without_cleaning(one)}", columns, "", _INDENT)
    return lines


def _without_cleaning(one: Mapping[str, Any]) -> str:
    places = f"{one['replaced']:,} held settle{'s' if one['replaced'] != 1 else ''} replaced"
    if not one["turned"]:
        return f"{places}; without cleaning no trend score would differ"
    text = (
        f"{places}; without cleaning the trend score would differ on {one['turned']:,} of {one['sessions']:,} sessions"
    )
    worst = one["worst"]
    if worst is not None:
        text += f", worst on {worst['session']}: {worst['reported']:+d} in place of {worst['clean']:+d}"
    return text


def _evidence(row: Mapping[str, Any]) -> str:
    """Why, done and cost, as far as the message does not say them itself."""
    message, parts = str(row["message"]), []
    because = _BECAUSE.get(Kind(row["kind"]))
    why = []
    if because is not None and row["score"] is not None:
        limit = f" (told from {_number(row['threshold'])})" if row["threshold"] is not None else ""
        why.append(f"{because.format(score=_number(row['score']))}{limit}")
    if row["expected"] is not None and f"{row['expected']:.10g}" not in message:
        why.append(f"expected {row['expected']:.10g}")
    if why:
        parts.append(f"Why: {', '.join(why)}")
    done = _done(row)
    if done and done.split(",")[0] not in message:
        parts.append(f"Done: {done}")
    cost = _cost(row)
    if cost:
        parts.append(f"Cost: {cost}")
    if row["waived_until"] is not None:
        parts.append(f"Waived until {row['waived_until']}")
    return ". ".join(parts) + "." if parts else ""


def _done(row: Mapping[str, Any]) -> str:
    action = Action(row["action"])
    if action is Action.REPAIRED:
        return f"repaired to {row['corrected']:.10g}"
    if action is Action.KEPT:
        return "kept, it stands as reported" if row["reported"] is not None else ""
    return "masked, left out of the clean prices" if action is Action.MASKED else "kept out of the panel"


def _cost(row: Mapping[str, Any]) -> str:
    impact = int(row["impact_sessions"])
    if row["severity"] == Severity.NOTE or row["reported"] is None or row["field"] != "settle":
        return ""
    if not impact:
        return "no trend score"
    sessions = f"{impact} session{'s' if impact != 1 else ''}"
    if row["action"] == Action.KEPT:
        return f"on {sessions} the trend score is another than with what was expected"
    return f"had it stood, the trend score would be another on {sessions}"


def _number(value: float) -> str:
    return f"{value:,.0f}" if abs(value) >= 100 or float(value).is_integer() else f"{value:.3g}"


def _wrap(text: str, columns: int, first: str, later: str) -> list[str]:
    return textwrap.wrap(
        text, max(40, min(columns, _WIDEST)), initial_indent=first, subsequent_indent=later, break_long_words=False,
        break_on_hyphens=False,
    )  # fmt: skip
