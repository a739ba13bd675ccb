"""Keeping the nightly flow on the desk's cron and zone.

Belongs here: handing the schedule to Prefect and staying to carry its nights out. Does not belong here: the night
(`nightly.py`), where an API comes from (`watched.py`), which crons a desk may name (`catalog/cron.py`).
"""

import asyncio
import datetime
import signal
import sys
import zoneinfo
from types import FrameType
from typing import Any

from flows.watched import Unreachable, reach_api

# isort: split
from prefect import Flow
from prefect.deployments.runner import EntrypointType  # type: ignore[attr-defined]
from prefect.runner import Runner
from prefect.schedules import Cron
from prefect.server.schemas.schedules import CronSchedule

from catalog.declarations import Schedule
from flows.clock import WALL
from flows.exits import Exit, Terminated
from flows.nightly import night, night_parameters
from flows.render import complain, say, say_json
from flows.settings import Where

_AGAIN_SECONDS = 30.0
_QUERY_SECONDS = 10.0


def night_times(schedule: Schedule, start: datetime.datetime, count: int) -> list[datetime.datetime]:
    """The next nights after a moment with a zone, as Prefect reckons them, in the schedule's zone."""
    cron = CronSchedule(cron=schedule.cron, timezone=schedule.timezone)
    zone = zoneinfo.ZoneInfo(schedule.timezone)
    dates = asyncio.run(cron.get_dates(n=count, start=start))
    return [date.astimezone(zone) for date in dates]


def tell_times(schedule: Schedule, count: int, as_json: bool) -> Exit:
    """Print when the next nights are."""
    times = night_times(schedule, datetime.datetime.now(datetime.UTC), count)
    if as_json:
        say_json({"cron": schedule.cron, "timezone": schedule.timezone, "nights": [t.isoformat() for t in times]})
    else:
        say([f"{schedule.cron} {schedule.timezone}", *(f"  {t:%a %Y-%m-%d %H:%M %Z}" for t in times)])
    return Exit.DONE


def keep_schedule(where: Where, schedule: Schedule, jobs: int | None) -> Exit:
    """Carry out the nights of a schedule until a signal ends it; comes back where there is no API at the start.

    Raises Terminated, KeyboardInterrupt.
    """
    try:
        with reach_api(is_lasting=True) as api:
            place = "an own Prefect server" if api.is_own else "the configured Prefect server"
            (following,) = night_times(schedule, datetime.datetime.now(datetime.UTC), 1)
            say(
                [f"on {schedule.cron} {schedule.timezone}, by {place}; the next night is {following:%a %Y-%m-%d %H:%M}"]
            )
            sys.stdout.flush()
            while True:
                _carry_out(where, schedule, jobs)
    except Unreachable as error:
        complain(f"{error}; no night was scheduled")
        return Exit.NOT_PUBLISHED


def _carry_out(where: Where, schedule: Schedule, jobs: int | None) -> None:
    """Carry out nights until a signal, or until Prefect gives up on its API; that is told and tried again."""
    try:
        asyncio.run(_serve(where, schedule, jobs))
    except Exception as error:  # whatever Prefect stumbles over, tomorrow's night is still due
        while isinstance(error, ExceptionGroup) and error.exceptions:
            error = error.exceptions[0]
        said = (str(error) or type(error).__name__).splitlines()[0]
        complain(f"the Prefect server was lost ({said}); trying again in {_AGAIN_SECONDS:.0f} s")
    # Prefect leaves its own handler for SIGTERM behind, which by now would end nothing.
    signal.signal(signal.SIGTERM, _stop)
    WALL.sleep(_AGAIN_SECONDS)


def _stop(_signal: int, _frame: FrameType | None) -> None:
    signal.signal(signal.SIGTERM, signal.SIG_DFL)
    raise Terminated


async def _serve(where: Where, schedule: Schedule, jobs: int | None) -> None:
    # One night at a time: those that were missed while nothing carried them out come one after the other.
    runner = Runner(name="ropewalk", query_seconds=_QUERY_SECONDS, limit=1, pause_on_shutdown=False)
    is_stopped = False
    let_go = runner.handle_sigterm

    def stop(*arguments: Any) -> None:
        nonlocal is_stopped
        is_stopped = True
        if not runner.started:
            raise Terminated
        let_go(*arguments)

    # Prefect's own handler ends the process with 0 where the signal comes before it is ready.
    runner.handle_sigterm = stop  # type: ignore[method-assign]
    deployment = await _deploy(night, where, schedule, jobs)
    await runner.aadd_deployment(deployment)
    await runner.start()
    if is_stopped:
        raise Terminated


async def _deploy(flow: Flow[Any, Any], where: Where, schedule: Schedule, jobs: int | None) -> Any:
    return await flow.ato_deployment(
        name=where.desk.name, parameters=night_parameters(where, jobs),
        schedule=Cron(schedule.cron, timezone=schedule.timezone),
        entrypoint_type=EntrypointType.MODULE_PATH, description=f"The nights of the desk {where.desk}.",
    )  # fmt: skip
