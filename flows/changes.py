"""The command that tells two snapshots apart.

Belongs here: how the changes are shown. Does not belong here: finding them and their causes (`catalog/`).
Heavy modules are imported inside the command.
"""

from itertools import islice
from typing import TYPE_CHECKING

import click

from flows.exits import Exit
from flows.render import say, say_json, say_table
from flows.shell import Asked, command

if TYPE_CHECKING:
    from catalog.changes import Changes, MarketChanges

_ROWS_SHOWN = 20


def _changes(asked: Asked, old: str | None, new: str | None, market: str | None, limit: int | None) -> Exit:
    """Tell what differs between two snapshots, and why.

    OLD and NEW are names or numbers of snapshots; without them the newest is compared with the one before it.
    Each published value that differs has one cause. What rewrites history other than by a plain shift comes
    first; a value whose cause cannot be told is an error, and the code is 5.
    """
    from catalog.changes import compare_snapshots
    from catalog.places import Places

    changes = compare_snapshots(Places(asked.where().store), old, new, market)
    shown = _ROWS_SHOWN if limit is None else limit
    if asked.as_json:
        say_json(_as_json(changes, limit))
    else:
        _show(changes, shown)
    return Exit.DONE if changes.is_explained else Exit.UNSOUND


def _as_json(changes: "Changes", limit: int | None) -> dict[str, object]:
    return {
        "old": changes.old,
        "new": changes.new,
        "explained": changes.is_explained,
        "states": list(changes.states),
        "counts": changes.counts,
        "groups": [vars(group) for group in changes.groups],
        "because": {market.market: market.because for market in changes.markets},
        "rows": [vars(row) for row in islice(changes.rows(), limit if limit is not None else _ROWS_SHOWN)],
    }


def _show(changes: "Changes", limit: int) -> None:
    from catalog.causes import REWRITES_HISTORY, Cause

    say([f"{changes.old} -> {changes.new}"])
    say(f"  {line}" for line in changes.states)
    if not changes.groups:
        say(["no published value differs"])
        return
    rewriting = [cause for cause in changes.counts if Cause(cause) in REWRITES_HISTORY]
    others = [cause for cause in changes.counts if cause not in rewriting]
    for title, causes in (("history rewritten", rewriting), ("shifted and added", others)):
        if not causes:
            continue
        say(["", f"{title}:"])
        for cause in causes:
            say([f"  {cause}: {changes.counts[cause]:,} values"])
            for market in changes.markets:
                say(_market_lines(market, cause))
    say([""])
    columns = ("cause", "market", "table", "key", "column", "old", "new")
    rows = list(islice(changes.rows(), limit))
    if rows:
        say_table(
            columns,
            [(r.cause, r.market, r.table, _key(r.key), r.column or "(row)", r.old, r.new) for r in rows],
        )
        total = sum(changes.counts.values())
        if total > len(rows):
            say(["", f"the first {len(rows):,} of {total:,}; --limit {total} shows all"])


def _market_lines(market: "MarketChanges", cause: str) -> list[str]:
    lines = []
    for group in market.groups:
        if group.cause != cause:
            continue
        place = f" {group.plan} {group.nearby}" if group.plan else ""
        days = f", {group.first_session} to {group.last_session}" if group.first_session else ""
        most = f", at most by {group.largest:.10g}" if group.largest is not None else ""
        columns = ", ".join(group.columns[:6]) + (", ..." if len(group.columns) > 6 else "")
        lines.append(f"    {market.market} {group.table}{place}: {group.rows:,} rows{days}{most} ({columns})")
    if lines:
        lines += [f"      {reason}" for reason in market.because.get(cause, ())]
    return lines


def _key(key: dict[str, object]) -> str:
    return " ".join(str(value) for name, value in key.items() if name != "market")


changes = command(click.Group(), "changes", "ropewalk changes 41 42 --market NWHT")(
    click.argument("old", required=False)(
        click.argument("new", required=False)(
            click.option("--market", metavar="CODE", help="Only this market.")(
                click.option(
                    "--limit", type=click.IntRange(min=0), metavar="N",
                    help=f"At most so many rows.  [default: {_ROWS_SHOWN}]",
                )(_changes)
            )
        )
    )
)  # fmt: skip
