"""The commands.

Belongs here: what each command asks for, which room it calls, and what it prints. Does not belong here: the
frame around a command (`shell.py`), any computation. Heavy modules are imported inside the commands.
"""

import datetime
import re
from collections.abc import Sized

import click

from contracts.errors import UsageError
from flows.changes import changes
from flows.exits import Exit
from flows.nights import build, nightly, read_day
from flows.propose import propose
from flows.prune import prune
from flows.render import say, say_json, say_table
from flows.rolls import rolls
from flows.schedule_command import schedule
from flows.shell import Asked, Ropewalk, command, show_version
from flows.study import study

# What a person reads of the quality log in one go; a machine gets all of it.
_FINDINGS_SHOWN = 50
_CONTRACT_COLUMNS = ("contract", "last_trade", "first_notice")


@click.group(cls=Ropewalk, context_settings={"max_content_width": 100})
@click.option("--version", is_flag=True, is_eager=True, expose_value=False, callback=show_version, help="The version.")
def main() -> None:
    """Lay raw per-expiry futures files into clean continuous series.

    Without options every command works on the sample desk that comes with the program, in ./published.
    """


@command(main, "desk", "ropewalk desk NWHT --years 2019:2026")
@click.argument("market", required=False)
@click.option("--years", metavar="FIRST:LAST", help="Delivery years.  [default: last year to next year]")
def desk(asked: Asked, market: str | None, years: str | None) -> Exit:
    """Validate the desk; with a MARKET, list its contracts.

    Every declaration is read, and every mistake told. A market's days are the last trading session, first
    notice, and each roll plan's deadline: the session from which the plan holds the next contract.
    """
    from catalog.declarations import load_desk

    first, last = _read_years(years, has_market=market is not None)
    declared = load_desk(asked.desk_folder())
    if market is None:
        if asked.as_json:
            say_json({"markets": list(declared.markets), "layouts": list(declared.layouts), "mistakes": []})
            return Exit.DONE
        kinds = ("market", "layout", "repair", "waiver")
        parts: tuple[Sized, ...] = (declared.markets, declared.layouts, declared.repairs, declared.waivers)
        counts = ", ".join(
            f"{len(part)} {kind}{'' if len(part) == 1 else 's'}" for kind, part in zip(kinds, parts, strict=True)
        )
        when = f"{declared.schedule.cron} {declared.schedule.timezone}"
        say([f"{declared.path}: {counts}; no mistakes", f"runs on cron {when}, by {declared.run.workers}", ""])
        rows = [(code, m.name, m.exchange, m.currency, ", ".join(m.plans)) for code, m in declared.markets.items()]
        say_table(("market", "name", "exchange", "currency", "plans"), rows)
        return Exit.DONE
    if market not in declared.markets:
        from catalog.listings import nearest

        raise UsageError(f"the desk declares no market {market!r}; {nearest(market, list(declared.markets))}")
    from contracts.calendar_table import contract_days

    contracts = contract_days(declared.markets[market], first, last)
    if asked.as_json:
        say_json({"contracts": contracts})
        return Exit.DONE
    plans = list(declared.markets[market].plans)
    rows = [
        (*(row[column] for column in _CONTRACT_COLUMNS), *(row["deadlines"].get(plan) for plan in plans))
        for row in contracts
    ]
    say_table((*_CONTRACT_COLUMNS, *(f"deadline of {plan}" for plan in plans)), rows)
    return Exit.DONE


def _read_years(text: str | None, has_market: bool) -> tuple[int, int]:
    if text is None:
        this = datetime.date.today().year
        return this - 1, this + 1
    if not has_market:
        raise UsageError("--years was given without a market; expected a market to list the contracts of")
    match = re.fullmatch(r"(\d{4})(?::(\d{4}))?", text)
    first, last = (int(match[1]), int(match[2] or match[1])) if match else (0, -1)
    if not 1900 <= first <= last <= 2099:
        expected = "years from 1900 to 2099, the first not after the last, as 2019:2026"
        raise UsageError(f"--years: seen {text!r}; expected {expected}")
    return first, last


@command(main, "trace", "ropewalk trace NWHT 2024-11-05 --plan by_open_interest")
@click.argument("market")
@click.argument("session")
@click.option("--plan", metavar="NAME", help="Roll plan.  [default: the first the market declares]")
@click.option("--nearby", type=click.IntRange(min=1), default=1, show_default=True, metavar="N", help="Which nearby.")
@click.option("--snapshot", metavar="NAME", help="Snapshot, by name or number.  [default: the newest]")
def trace(asked: Asked, market: str, session: str, plan: str | None, nearby: int, snapshot: str | None) -> Exit:
    """Tell where one published price comes from.

    The arithmetic, the rolls, the repair, the raw line. SESSION is a day written as 2024-11-05.
    """
    day = read_day(session, "SESSION")
    from catalog.places import Places
    from catalog.trace import trace_price
    from catalog.trace_text import trace_lines

    found = trace_price(Places(asked.where().store), market, day, plan, nearby, snapshot)
    if asked.as_json:
        say_json(found.as_json())
    else:
        say(trace_lines(found))
    return Exit.DONE


@command(main, "findings", "ropewalk findings NWHT --since 2024-11-01 --severity block")
@click.argument("market", required=False)
@click.option("--since", metavar="DATE", help="Only findings on sessions from this day on.")
@click.option("--kind", metavar="KIND", help="Only this kind of finding.")
@click.option("--severity", type=click.Choice(["note", "review", "block"]), help="Only this severity.")
@click.option(
    "--limit",
    type=click.IntRange(min=1),
    metavar="N",
    help=f"At most so many.  [default: {_FINDINGS_SHOWN}; all with --json]",
)
def findings(
    asked: Asked,
    market: str | None,
    since: str | None,
    kind: str | None,
    severity: str | None,
    limit: int | None,
) -> Exit:
    """Print the quality log, most harmful first.

    Each finding says what, where, why it is believed, what was done and what it would have cost. The order is
    by impact: the number of sessions whose trend-sign score would differ had the reported price stood. With a
    MARKET the log ends with what its score would have been without any cleaning.
    """
    day = None if since is None else read_day(since, "--since")
    from catalog.listings import list_findings, read_cleaning
    from catalog.places import Places
    from flows.notes import word_cleaning, word_findings

    places = Places(asked.where().store)
    shown = limit if limit is not None or asked.as_json else _FINDINGS_SHOWN
    columns, rows, total = list_findings(places, market, day, kind, severity, shown)
    cleaning = read_cleaning(places, market)
    told = [dict(zip(columns, row, strict=True)) for row in rows]
    if asked.as_json:
        say_json({"findings": told, "total": total, "cleaning": cleaning})
        return Exit.DONE
    say(word_findings(told) or ["no findings"])
    if total > len(rows):
        say(["", f"the first {len(rows):,} of {total:,}; --limit {total} shows all"])
    if market is not None and told:
        say(["", *word_cleaning(market, cleaning.get(market, {}))])
    return Exit.DONE


@command(main, "verify", "ropewalk verify --deep")
@click.option("--deep", is_flag=True, help="Also derive every published number again from archive, desk and code.")
@click.option("--repoint", is_flag=True, help="First make the catalog again, for a store that was moved or copied.")
@click.option(
    "--snapshot", "--from", metavar="NAME", help="Snapshot, by name, number or given name.  [default: the newest]"
)
def verify(asked: Asked, deep: bool, repoint: bool, snapshot: str | None) -> Exit:
    """Check what is published, to the last byte.

    Every hash, the archive behind it, and the soundness rules. Where CURRENT or the newest manifest is damaged,
    --repoint --from N goes back to snapshot N.
    """
    from catalog import verify as checks
    from catalog.places import Places
    from catalog.standing import find_snapshot

    where = asked.where()
    places = Places(where.store)
    if repoint:
        checks.repoint(places, snapshot)
    snapshot = None if snapshot is None else find_snapshot(places, snapshot)
    report = checks.verify_store(places, snapshot)
    problems = list(report.problems)
    if deep and report.snapshot is not None:
        from catalog.declarations import load_desk
        from catalog.deep import rederive

        # An older snapshot, or a store named alone, is held against the desk that made it.
        is_own = snapshot is None and (asked.desk is not None or asked.store is None)
        problems += rederive(places, load_desk(where.desk) if is_own else None, report.snapshot)
    if asked.as_json:
        say_json(
            {
                "snapshot": report.snapshot,
                "sound": not problems,
                "deep": deep,
                "files_checked": report.files_checked,
                "rules_run": report.rules_run,
                "problems": problems,
            }
        )
    else:
        also = ", every number derived again" if deep else ""
        done = f"{report.files_checked:,} files hashed, {report.rules_run} soundness rules run{also}"
        verdict = f"{len(problems):,} problems" if len(problems) != 1 else "1 problem"
        say([f"snapshot {report.snapshot}: {verdict if problems else 'sound'} ({done})"])
        say(f"  {problem}" for problem in problems)
    return Exit.UNSOUND if problems else Exit.DONE


@command(main, "sql", 'ropewalk sql "select market, plan, count(*) from series group by all order by all"')
@click.argument("query", required=False)
@click.option("--snapshot", metavar="NAME", help="Ask this one, by name, number or given name.  [default: the newest]")
def sql(asked: Asked, query: str | None, snapshot: str | None) -> Exit:
    """Run a QUERY on the catalog, or say how to open it.

    A query only reads. With none, says how any client opens the catalog. With --snapshot, it asks what an older
    snapshot published.
    """
    from catalog.places import Places
    from catalog.query import how_to_open, open_catalog, run_query
    from catalog.standing import find_snapshot

    places = Places(asked.where().store)
    if query is None:
        if snapshot is not None:
            raise UsageError("--snapshot was given without a query; expected a query to ask the snapshot")
        told = how_to_open(places)
        if asked.as_json:
            say_json({"catalog": str(places.catalog), "how_to_open": told})
        else:
            say(told.split("\n"))
        return Exit.DONE
    chosen = None if snapshot is None else find_snapshot(places, snapshot)
    with open_catalog(places, chosen) as connection:
        columns, rows = run_query(connection, query)
    if asked.as_json:
        say_json({"columns": columns, "rows": rows})
    else:
        say_table(columns, rows)
    return Exit.DONE


main.add_command(nightly)
main.add_command(build)
main.add_command(schedule)
main.add_command(propose)
main.add_command(prune)
main.add_command(rolls)
main.add_command(changes)
main.add_command(study)

if __name__ == "__main__":
    main()
