"""The command that removes old snapshots, and names those that stay.

Belongs here: what is asked for and how it is told. Does not belong here: which may go (`catalog/prune.py`).
"""

import datetime

import click

from contracts.errors import UsageError
from flows.exits import Exit
from flows.render import say, say_json
from flows.shell import Asked, command


def _prune(asked: Asked, older_than: int, dry_run: bool, name: tuple[str, str] | None, forget: str | None) -> Exit:
    """Remove old snapshots, after saying which.

    The current snapshot, those with a name, those younger than a week, and those from which a kept one serves
    a market that was held back always stay. The archive is not touched: every version of every raw file stays.
    """
    from catalog import prune as pruning
    from catalog.places import Places

    if name is not None and forget is not None:
        raise UsageError("seen --name and --forget; expected one of them")
    places = Places(asked.where().store)
    if name is not None or forget is not None:
        if name is not None:
            snapshot, done = pruning.name_snapshot(places, *name), f"{name[0]} names"
        else:
            snapshot, done = pruning.forget_name(places, str(forget)), f"{forget} no longer names"
        if asked.as_json:
            say_json({"name": name[0] if name else forget, "snapshot": snapshot, "named": name is not None})
        else:
            say([f"{done} snapshot {snapshot}"])
        return Exit.DONE
    now = datetime.datetime.now(datetime.UTC)
    judged = pruning.judge_snapshots(places, older_than, now)
    if not asked.as_json:
        for each in judged:
            fate = ("would go" if dry_run else "goes") if each.goes else "stays"
            say([f"{each.snapshot}  {fate}: {each.why}"])
    if not dry_run and any(each.goes for each in judged):
        judged = pruning.prune(places, older_than, now)
    gone = [each for each in judged if each.goes]
    freed = sum(each.bytes for each in gone)
    if asked.as_json:
        say_json({"snapshots": [vars(each) for each in judged], "dry_run": dry_run, "bytes": freed})
    else:
        say([f"{len(gone)} of {len(judged)} {'would go' if dry_run else 'removed'}, at least {freed / 1e6:,.1f} MB"])
    return Exit.DONE


prune = command(click.Group(), "prune", "ropewalk prune --name spring_backtest 42")(
    click.option(
        "--older-than", type=click.IntRange(min=1), default=7, show_default=True, metavar="DAYS", help="At least 7."
    )(
        click.option("--dry-run", is_flag=True, help="Only say which would go.")(
            click.option("--name", nargs=2, metavar="NAME SNAPSHOT", help="Name a snapshot, so that it stays.")(
                click.option("--forget", metavar="NAME", help="Take a name away.")(_prune)
            )
        )
    )
)
