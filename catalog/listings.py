"""The quality log and the roll ledger of the newest snapshot, as a person asks for them.

Belongs here: the two questions, as literal SQL with bound values. Does not belong here: printing them
(`flows/`), opening a snapshot (`query.py`).
"""

import datetime
import difflib
from typing import TYPE_CHECKING, Any

from catalog.places import Places
from catalog.query import open_catalog, run_query
from catalog.standing import read_manifest
from contracts.errors import UsageError
from contracts.findings import Kind

if TYPE_CHECKING:
    import duckdb

Rows = list[tuple[Any, ...]]

_MARKETS = "select distinct market from terms order by market"
_PLANS = "select distinct plan from coverage where market = ? order by plan"

_WANTED = """
from findings
where (?::varchar is null or market = ?)
  and (?::date is null or session >= ?)
  and (?::varchar is null or kind = ?)
  and (?::varchar is null or severity = ?)
"""
_COUNT_FINDINGS = f"select count(*) {_WANTED}"
_LIST_FINDINGS = f"""
select * {_WANTED}
order by
    impact_sessions desc,
    case severity when 'block' then 0 when 'review' then 1 else 2 end,
    session desc nulls last,
    finding
limit ?
"""

_LIST_ROLLS = """
select * from rolls
where market = ?
  and (?::varchar is null or plan = ?)
  and (?::integer is null or nearby = ?)
order by plan, nearby, effective_on, step
"""


def list_findings(
    places: Places,
    market: str | None = None,
    since: datetime.date | None = None,
    kind: str | None = None,
    severity: str | None = None,
    limit: int | None = None,
) -> tuple[list[str], Rows, int]:
    """Findings, most harmful first: by impact in sessions, then severity, then the newest.

    Returns the columns of the table `findings`, the rows (at most `limit`), and how many there are without a
    limit. `since` leaves out findings that are about no session. Raises UsageError for a market or kind that
    is not there, or where nothing is published; StoreUnsound where the catalog cannot be read.
    """
    if kind is not None and kind not in set(Kind):
        raise UsageError(f"no kind of finding is called {kind!r}; {nearest(kind, [str(known) for known in Kind])}")
    values = [part for wanted in (market, since, kind, severity) for part in (wanted, wanted)]
    with open_catalog(places) as connection:
        if market is not None:
            _check_market(connection, market)
        total = int(run_query(connection, _COUNT_FINDINGS, values)[1][0][0])
        columns, rows = run_query(connection, _LIST_FINDINGS, [*values, total if limit is None else limit])
    return columns, rows, total


def read_cleaning(places: Places, market: str | None = None) -> dict[str, dict[str, Any]]:
    """By market and plan, what cleaning did to the sign score (`contracts.impact.tell_cleaning`), of one market or all.

    Raises UsageError where nothing is published, StoreUnsound where the manifest cannot be read.
    """
    verdicts = read_manifest(places).markets
    return {
        code: verdict.facts["cleaning"]
        for code, verdict in verdicts.items()
        if market in (None, code) and "cleaning" in verdict.facts
    }


def list_rolls(
    places: Places, market: str, plan: str | None = None, nearby: int | None = None
) -> tuple[list[str], Rows]:
    """The roll ledger of a market in the order of plan, nearby, day: columns of the table `rolls`, and rows.

    Raises UsageError for a market or plan that is not there, or where nothing is published; StoreUnsound
    where the catalog cannot be read.
    """
    with open_catalog(places) as connection:
        _check_market(connection, market)
        if plan is not None:
            plans = [row[0] for row in run_query(connection, _PLANS, [market])[1]]
            if plan not in plans:
                raise UsageError(f"{market} has no plan {plan!r}; {nearest(plan, plans)}")
        return run_query(connection, _LIST_ROLLS, [market, plan, plan, nearby, nearby])


def _check_market(connection: "duckdb.DuckDBPyConnection", market: str) -> None:
    known = [row[0] for row in run_query(connection, _MARKETS)[1]]
    if market not in known:
        raise UsageError(f"no market {market!r} is published; {nearest(market, known)}")


def nearest(asked: str, known: list[str]) -> str:
    """What was perhaps meant, else what there is."""
    close = difflib.get_close_matches(asked, known, n=3, cutoff=0.5) or difflib.get_close_matches(
        asked.upper(), known, n=3, cutoff=0.5
    )
    if close:
        return f"did you mean {' or '.join(close)}?"
    return f"there is {', '.join(known[:30]) or 'none'}{', ...' if len(known) > 30 else ''}"
