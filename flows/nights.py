"""The commands that run nights: `nightly` and `build`.

Belongs here: what is asked of a night and how its end is told. Does not belong here: the night (`work.py`),
Prefect (`nightly.py`), replaying past nights (`replay.py`).
"""

import datetime
import os
import re
from collections.abc import Callable
from dataclasses import replace
from typing import TYPE_CHECKING, Any

import click

from contracts.errors import UsageError
from flows.exits import Exit
from flows.render import complain, say, say_json
from flows.settings import Where
from flows.shell import Asked, command

if TYPE_CHECKING:
    from catalog.summary import Summary
    from flows.nightly import Told

_OPTIONS = (
    click.option(
        "--jobs",
        type=click.IntRange(min=1),
        metavar="N",
        help="Number of workers.  [default: one a processor, at least 2]",
    ),
    click.option("--rehash", is_flag=True, help="Read every raw file and published table again; mend what is damaged."),
    click.option(
        "--waive-gate",
        nargs=2,
        multiple=True,
        metavar="MARKET REASON",
        help="Publish MARKET tonight though its gate would hold it back; reason and person are recorded.",
    ),
    click.option(
        "--market",
        "markets",
        multiple=True,
        metavar="CODE",
        help="Build only this market, more than once for several; the others are published as they are.",
    ),
    click.option(
        "--as-of",
        metavar="DATE",
        help="Leave out bars of later sessions. Refused where the snapshot that stands ends later.",
    ),
    click.option(
        "--dry-run",
        is_flag=True,
        help="Say what would be rebuilt and held back, and publish nothing. New raw files do go into the archive.",
    ),
)


def _night_options(function: Callable[..., Exit]) -> Callable[..., Exit]:
    for option in reversed(_OPTIONS):
        function = option(function)
    return function


def read_day(text: str, name: str) -> datetime.date:
    """A day as it is written on the command line; raises UsageError."""
    try:
        if re.fullmatch(r"\d{4}-\d{2}-\d{2}", text):
            return datetime.date.fromisoformat(text)
    except ValueError:
        pass
    raise UsageError(f"{name}: seen {text!r}; expected a day, as 2024-11-05")


def _where(asked: Asked, asks: dict[str, Any]) -> Where:
    """The folders to work on and what is asked, once all that can be wrong with them was told."""
    from catalog.declarations import load_desk
    from flows.work import check_usage

    # First the desk as a whole: all its mistakes, and not only that it names no store.
    desk = load_desk(asked.desk_folder())
    if any(not why.strip() for _, why in asks["waive_gate"]):
        raise UsageError("--waive-gate: seen an empty reason; expected why the market may go out")
    for code in asks["markets"]:
        if code not in desk.markets:
            from catalog.listings import nearest

            raise UsageError(f"--market: the desk declares no market {code!r}; {nearest(code, list(desk.markets))}")
    until = None if asks["as_of"] is None else read_day(asks["as_of"], "--as-of").isoformat()
    where = replace(
        asked.where(),
        rehash=asks["rehash"],
        waived=tuple((market, why, _person()) for market, why in asks["waive_gate"]),
        markets=tuple(sorted(set(asks["markets"]))),
        until=until,
        is_dry=asks["dry_run"],
    )
    check_usage(where)
    return where


def _person() -> str:
    import getpass

    try:
        return getpass.getuser()
    except (OSError, KeyError):
        # A container may run under a number that has no name.
        return f"user {os.getuid()}"


def _nightly(
    asked: Asked, first: str | None, last: str | None, archive: str | None, jobs: int | None, **asks: Any
) -> Exit:
    """Run one night under Prefect: take in, build, check, publish.

    Reports to the Prefect API that Prefect's settings name. Where none is named, an own server is started for
    the length of the run; its records stay in Prefect's home folder. Where the API cannot be reached, the
    same work is done unwatched. Files that are overdue by their market's own clock are waited for as long as
    desk.toml says ([run] wait_minutes).

    With --from and --to, past nights are replayed instead, one a session day, into a store of its own: each
    with the raw files the replayed store had published from by the end of that day, or, for days before its
    first run, with those of that first run; and without bars of later sessions. Desk and code are today's.
    """
    if (first is None) != (last is None) or (archive is not None and first is None):
        raise UsageError("--from, --to and --archive: expected --from and --to together, --archive only with them")
    if first is not None and last is not None:
        from flows.replay import replay

        days = read_day(first, "--from"), read_day(last, "--to")
        if asks["as_of"] is not None or asks["dry_run"] or asks["rehash"] or asked.raw is not None:
            raise UsageError("--as-of, --dry-run, --rehash, --raw: none of them goes with --from and --to")
        return replay(asked, days, archive, jobs, asks["markets"])
    where = _where(asked, asks)
    from flows.nightly import run_watched

    return tell_night(run_watched(where, jobs), asked.as_json)


def tell_night(told: "Told", as_json: bool) -> Exit:
    """Print what a night came to and what Prefect keeps of it; returns the exit code."""
    assert told.summary is not None
    code = _tell_summary(told.summary, as_json)
    if not as_json and not told.notes:
        kept = f"{told.recorded} of {told.expected} task runs" if told.expected else "the run"
        say([f"  Prefect keeps {kept}"])
    for note in told.notes:
        complain(note)
    return code


def _build(asked: Asked, jobs: int | None, **asks: Any) -> Exit:
    """Do the work of one night without a scheduler.

    Takes in, builds, checks, publishes. What carries the markets is declared in desk.toml: [run] workers =
    "threads", "processes" or "dask".
    """
    where = _where(asked, asks)
    from flows.work import pool_builder, run_night

    return _tell_summary(run_night(where, "build", pool_builder(jobs)), asked.as_json)


def _tell_summary(summary: "Summary", as_json: bool) -> Exit:
    if as_json:
        say_json(summary.as_json())
    else:
        say(summary.lines())
    return Exit(summary.exit_code)


nightly = command(click.Group(), "nightly", "ropewalk nightly --desk /srv/desk")(
    _night_options(
        click.option("--from", "first", metavar="DATE", help="Replay past nights from this day on.")(
            click.option("--to", "last", metavar="DATE", help="The last day to replay.")(
                click.option(
                    "--archive",
                    metavar="STORE",
                    help="The store whose nights are replayed.  [default: the one desk.toml names]",
                )(_nightly)
            )
        )
    )
)
build = command(click.Group(), "build", "ropewalk build --desk /srv/desk --jobs 4")(_night_options(_build))
