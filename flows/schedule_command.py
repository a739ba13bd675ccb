"""The command that keeps the night on its schedule.

Belongs here: what is asked for. Does not belong here: keeping it (`schedule.py`).
"""

import click

from flows.exits import Exit
from flows.shell import Asked, command


def _schedule(asked: Asked, jobs: int | None, show: int) -> Exit:
    """Run the night on the desk's schedule until stopped.

    Keeps to [schedule] cron and timezone of desk.toml, against the Prefect API that Prefect's settings name, or
    an own server that runs as long as this does. Each night is a process of its own: one that fails, or dies,
    does not keep the next from its time. SIGTERM and Ctrl-C end it; the schedule stays in Prefect, and a night
    under way is stopped as one by itself would be. With --show, says when the next nights are, and ends.
    """
    from catalog.declarations import load_desk
    from flows.work import check_usage

    desk = load_desk(asked.desk_folder())
    where = asked.where()
    check_usage(where)
    if show:
        from flows.schedule import tell_times

        return tell_times(desk.schedule, show, asked.as_json)
    from flows.schedule import keep_schedule

    return keep_schedule(where, desk.schedule, jobs)


schedule = command(click.Group(), "schedule", "ropewalk schedule --desk /srv/desk")(
    click.option(
        "--jobs",
        type=click.IntRange(min=1),
        metavar="N",
        help="Number of workers.  [default: one a processor, at least 2]",
    )(
        click.option(
            "--show", type=click.IntRange(min=0), default=0, metavar="N", help="Only say when the next N nights are."
        )(_schedule)
    )
)
