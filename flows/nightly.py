"""One night as a Prefect flow.

Belongs here: what Prefect is told of a night, and what happens when Prefect cannot be told. Does not belong
here: the steps of a night (`work.py`), where a Prefect API comes from (`watched.py`).
"""

import sys
from collections.abc import Iterable, Iterator
from contextvars import ContextVar
from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any
from uuid import UUID

# Before Prefect: it sets how that starts.
from flows.watched import Api, Unreachable, count_recorded, drain, is_lost, note_loss, reach_api

# isort: split
from contextlib import ExitStack, suppress

from prefect import flow
from prefect.client.orchestration import get_client
from prefect.client.schemas.objects import State
from prefect.context import FlowRunContext
from prefect.futures import as_completed
from prefect.states import Completed, Failed
from prefect.task_runners import ProcessPoolTaskRunner, ThreadPoolTaskRunner

from catalog.places import Places
from contracts.errors import RopewalkError, UsageError
from flows.clock import WALL, Clock
from flows.messages import send_outcome
from flows.outcome import Outcome, outcome_of_failure
from flows.progress import Tick
from flows.render import complain, say
from flows.settings import Where
from flows.tasks import build_market
from flows.work import (
    Builder,
    Result,
    build_missing,
    count_workers,
    death_errors,
    ignore_interrupt,
    pool_builder,
    run_night,
    unreachable_dask,
)

if TYPE_CHECKING:
    from catalog.night import Night
    from catalog.summary import Summary


# A supervisor that asked for an end does not wait long.
STOPPED_SECONDS = 4.0


class Lost(Exception):
    """Prefect failed in the middle of a night; the night's own work is not to blame."""


@dataclass
class Told:
    """What came of a night that Prefect watched: the work's own outcome, and what Prefect keeps of it."""

    clock: Clock = WALL
    summary: "Summary | None" = None
    outcome: Outcome | None = None
    error: BaseException | None = None
    run: UUID | None = None
    expected: int = 0
    recorded: int = 0
    is_lost: bool = False
    is_alone: bool = False
    notes: list[str] = field(default_factory=list)

    def end(self, outcome: Outcome) -> None:
        """Remember what the night came to."""
        self.outcome = outcome


# A flow hands back a state, and where Prefect is lost not even that; this is how its caller learns the
# outcome.
_TOLD: ContextVar[Told | None] = ContextVar("told", default=None)


def run_watched(where: Where, jobs: int | None = None, clock: Clock = WALL) -> Told:
    """Run one night under Prefect; where Prefect cannot be reached, or is lost on the way, without it.

    Returns the summary, and notes on what Prefect kept. Raises what the night itself raises: DeskError,
    UsageError, StoreBusy, StoreError.
    """
    (told,) = watch_nights([where], jobs, clock)
    return told


def watch_nights(nights: Iterable[Where], jobs: int | None = None, clock: Clock = WALL) -> Iterator[Told]:
    """Run nights one after the other against one Prefect API, each as `run_watched` does."""
    with ExitStack() as stack:
        api, why = None, ""
        try:
            api = stack.enter_context(reach_api())
        except Unreachable as error:
            why = f"{error}; the night runs unwatched"
        for where in nights:
            yield _run_one(where, jobs, Told(clock), None if is_lost() else api, why)


def _run_one(where: Where, jobs: int | None, told: Told, api: Api | None, why: str) -> Told:
    if api is None and why:
        told.notes.append(why)
    elif api is not None:
        token = _TOLD.set(told)
        try:
            _run_flow(where, jobs, told)
        except BaseException:
            drain(STOPPED_SECONDS)
            raise
        finally:
            _TOLD.reset(token)
        if not told.is_lost:
            drain()
            _count(told, api)
    if told.error is not None:
        raise told.error
    if told.summary is None:
        told.summary = run_night(where, "nightly", pool_builder(jobs), told.clock)
    return told


def _run_flow(where: Where, jobs: int | None, told: Told) -> None:
    try:
        # Typed as if it were awaited; a flow without async gives the state itself.
        state: State[Any] = night(**night_parameters(where, jobs), return_state=True)  # type: ignore[assignment]
        failure = state.message or str(state.name)
    except Exception as error:  # Prefect's own: what the night itself raises stands in `told` already
        failure = _in_short(error)
        _note_loss(told, failure)
    if told.error is None and told.summary is None:
        _note_loss(told, failure)


def night_parameters(where: Where, jobs: int | None) -> dict[str, Any]:
    """A night's folders and wishes as the flow's parameters."""
    return {
        "desk": str(where.desk), "raw": None if where.raw is None else str(where.raw), "store": str(where.store),
        "jobs": jobs, "rehash": where.rehash, "waived": [*map(list, where.waived)], "markets": [*where.markets],
        "as_of": where.until, "dry_run": where.is_dry, "known": where.known,
    }  # fmt: skip


def _count(told: Told, api: Api) -> None:
    if told.run is None or told.error is not None:
        return
    try:
        told.recorded = count_recorded(api, told.run, told.expected)
    except Exception as error:
        note_loss()
        told.notes.append(f"Prefect was lost after the night ({_in_short(error)})")
        return
    if told.recorded < told.expected:
        told.notes.append(f"Prefect keeps {told.recorded} of {told.expected} task runs; the night itself is complete")


def _note_loss(told: Told, why: str) -> None:
    if not told.is_lost:
        told.is_lost = True
        note_loss()
        told.notes.append(f"Prefect was lost during the night ({why}); its record is not complete")


def _in_short(error: BaseException) -> str:
    return (str(error) or type(error).__name__).splitlines()[0]


def _run_id() -> UUID | None:
    context = FlowRunContext.get()
    return None if context is None or context.flow_run is None else context.flow_run.id


def _current() -> Told | None:
    """Where the run under way tells its outcome. The flow may not name the variable itself: Prefect hands the
    flow's function with all it names to worker processes, and a ContextVar cannot go there."""
    return _TOLD.get()


@flow(
    name="nightly",
    flow_run_name="nothing new",
    retries=0,
    persist_result=False,
    validate_parameters=False,
    log_prints=False,
)
def night(
    desk: str, raw: str | None, store: str, jobs: int | None = None, rehash: bool = False,
    waived: list[list[str]] | None = None, markets: list[str] | None = None, as_of: str | None = None,
    dry_run: bool = False, known: str | None = None,
) -> Any:  # fmt: skip
    """Take in what is new, build each market as a task, publish; paths are absolute.

    `waived`: market, reason and person of gates waived; `markets`: only these; `as_of`: a session, as
    2024-03-28, after which bars are left out; `dry_run`: publish nothing; `known`: from the archive alone, and
    this is said of what was known.
    """
    told = _current()
    if told is None:
        # Started by Prefect itself: nobody else tells the terminal.
        told = Told(is_alone=True)
    told.run = _run_id()
    gates = tuple((market, why, person) for market, why, person in waived or ())
    where = Where(
        Path(desk), None if raw is None else Path(raw), Path(store), rehash, gates, tuple(markets or ()), as_of,
        dry_run, known,
    )  # fmt: skip
    try:
        told.summary = run_night(where, "nightly", _task_builder(jobs, told), told.clock, on_end=told.end)
    except Lost:
        raise
    except RopewalkError as error:
        told.error = error
        # One that never got the lock, or whose desk is wrong, has no outcome in the store.
        told.outcome = told.outcome or outcome_of_failure(Places(where.store), "nightly", error, told.clock)
        _send(told, where)
        return Failed(message=str(error))
    except BaseException as error:
        told.error = error
        _send(told, where)
        raise
    _send(told, where)
    summary = told.summary
    held_back = "; ".join(f"{market}: {reason}" for market, reason in summary.held_back)
    if summary.is_dry:
        return Completed(name="Dry run", message=summary.lines()[0])
    if summary.nothing_new:
        message = f"nothing new, snapshot {summary.current} stands"
    else:
        parts = [f"snapshot {summary.snapshot}", *summary.notes]
        message = "; ".join([*parts, f"held back {held_back}"] if held_back else parts)
    return Completed(name="Held back" if summary.exit_code else "Completed", message=message)


def _send(told: Told, where: Where) -> None:
    if told.outcome is not None and told.run is not None and not told.is_lost:
        told.notes += send_outcome(told.outcome, where.store)
    if told.outcome is not None and told.is_alone:
        say(told.outcome.lines())
        sys.stdout.flush()
        for note in told.notes:
            complain(note)


def _task_builder(jobs: int | None, told: Told) -> Builder:
    """The builder that makes a Prefect task of each market."""

    def build(night: "Night", tick: Tick) -> list[Result]:
        told.expected = len(night.markets)
        _name_run(told, _count_markets(night))
        # Prefect notes as dependency of a task whatever it is handed that a result holds too, such as codes.
        handed = replace(night, markets=(), unchanged=())
        results: list[Result] = []
        with ExitStack() as stack:
            try:
                runner = stack.enter_context(_task_runner(night, jobs))
            except (OSError, ValueError) as error:
                if night.workers != "dask":
                    raise
                raise UsageError(unreachable_dask(night.dask_address, error)) from None
            try:
                futures = {
                    runner.submit(build_market, {"night": handed, "market": market}): market for market in night.markets
                }
            except Exception as error:
                raise Lost(_in_short(error)) from error
            for future in as_completed(list(futures)):
                # A market whose worker died has no result; it is built again below.
                with suppress(*death_errors(night)):
                    result = future.result()
                    results.append(result)
                    tick(futures[future], int(result["rows"]))
        if len(results) < len(night.markets):
            told.notes.append("a worker died; the markets it left were built again, unwatched, one by one")
        results += build_missing(night, results, tick)
        _name_run(told, f"{_count_markets(night)}, data to {_data_date(results)}")
        return results

    return build


def _task_runner(night: "Night", jobs: int | None) -> Any:
    workers = count_workers(jobs, len(night.markets))
    if night.workers == "processes":
        return ProcessPoolTaskRunner(workers, initializer=ignore_interrupt)
    if night.workers == "dask":
        from prefect_dask import DaskTaskRunner

        if night.dask_address:
            return DaskTaskRunner(address=night.dask_address)
        return DaskTaskRunner(cluster_kwargs={"n_workers": workers, "threads_per_worker": 1, "dashboard_address": None})
    return ThreadPoolTaskRunner(workers)


def _count_markets(night: "Night") -> str:
    built = len(night.markets)
    all_of_them = built + len(night.unchanged) + len(night.left)
    dry = "dry run, " if night.wishes.is_dry else ""
    return f"{dry}{built} of {all_of_them} markets"


def _data_date(results: list[Result]) -> str:
    """The newest session of any market built."""
    return max(
        (str(r["facts"]["last_session"]) for r in results if r["facts"].get("last_session")),
        default="no session",
    )


def _name_run(told: Told, name: str) -> None:
    """Name the run by what it does, since a list of runs is read by their names."""
    if told.run is None or told.is_lost:
        return
    try:
        with get_client(sync_client=True) as client:
            client.update_flow_run(told.run, name=name)
    except Exception as error:
        _note_loss(told, _in_short(error))
