"""One night without Prefect: lock the store, begin, build every market on a pool of workers, finish.

Belongs here: the order of the steps, and threads, processes and Dask. Does not belong here: what a step does
(`catalog/night.py`), Prefect (`nightly.py`).
"""

import datetime
import importlib.util
import multiprocessing
import os
import signal
from collections.abc import Callable, Iterator
from concurrent.futures import (
    BrokenExecutor,
    Executor,
    Future,
    ProcessPoolExecutor,
    ThreadPoolExecutor,
    as_completed,
)
from contextlib import ExitStack, contextmanager, suppress
from typing import TYPE_CHECKING, Any

from catalog.places import Places, write_lock
from contracts.errors import DeskError, UsageError
from flows.clock import WALL, Clock
from flows.outcome import Outcome, keep_outcome, outcome_of, outcome_of_failure
from flows.progress import Tick, show_progress
from flows.render import complain
from flows.settings import Where
from flows.waiting import wait_for_files

if TYPE_CHECKING:
    from catalog.night import Night
    from catalog.summary import Summary

Result = dict[str, Any]
Builder = Callable[["Night", Tick], list[Result]]
Tell = Callable[[str], None]


def run_night(
    where: Where, command: str, build: Builder, clock: Clock = WALL, tell: Tell = complain,
    on_end: Callable[[Outcome], None] = lambda _outcome: None,
) -> "Summary":  # fmt: skip
    """Wait for what is overdue as the desk allows, take in what is new, build the markets it concerns, publish.

    `build` is handed the night and a function to call with each market that is done; it returns the result of
    every market of the night, in any order. `tell` is called with one line for what the night waits for,
    `on_end` with what it came to, also where that is then raised. The store's write lock is held throughout.
    Whatever goes wrong, or stops the run, the staging folder is removed and the last snapshot stands. What the
    night came to is left in the store as JSON.

    Raises DeskError, UsageError, StoreBusy, StoreError.
    """
    check_usage(where)
    places = Places(where.store)
    with write_lock(places):
        try:
            summary = _work(where, command, build, clock, tell)
            outcome = outcome_of(summary, command, clock)
        except BaseException as error:
            outcome = outcome_of_failure(places, command, error, clock)
            # Where nothing was touched, this file is not either.
            if not where.is_dry and not isinstance(error, DeskError | UsageError):
                keep_outcome(places, outcome, tell)
            on_end(outcome)
            raise
        if not where.is_dry:
            keep_outcome(places, outcome, tell)
        on_end(outcome)
        return summary


def _work(where: Where, command: str, build: Builder, clock: Clock, tell: Tell) -> "Summary":
    from catalog.lateness import SeenBars
    from catalog.night import abandon, begin, finish
    from catalog.wishes import Wishes

    until = None if where.until is None else datetime.date.fromisoformat(where.until)
    wishes = Wishes(where.rehash, where.waived, where.markets, until, where.is_dry, where.known)
    seen = SeenBars()
    wait_for_files(where, clock, seen, tell)
    night = begin(where.desk, where.raw, where.store, command, wishes, clock.now(), seen)
    try:
        results: list[Result] = []
        if night.markets:
            with show_progress(len(night.markets), "building") as tick:
                results = build(night, tick)
        return finish(night, sorted(results, key=lambda result: str(result["market"])))
    except BaseException:
        abandon(night)
        raise


def check_usage(where: Where) -> None:
    """What can be known to be wrong before a lock is taken, and with it a folder made, or a server started.

    Raises DeskError with every mistake of the desk, UsageError for a raw folder that is not there while
    nothing was ever taken in, and for Dask that is asked for and not installed.
    """
    from catalog.declarations import load_desk

    desk = load_desk(where.desk)
    raw = where.raw or desk.raw
    if where.known is None and not raw.is_dir() and not Places(where.store).archive.is_dir():
        raise UsageError(f"{raw}: no such folder, and no archive in {where.store}; name the raw files with --raw")
    if desk.run.workers == "dask" and not all(map(importlib.util.find_spec, ("distributed", "prefect_dask"))):
        raise UsageError(
            'the desk says workers = "dask", and Dask is not installed; install ropewalk[dask], '
            'or say workers = "threads" or "processes" under [run] in desk.toml'
        )


def pool_builder(jobs: int | None) -> Builder:
    """The builder that shares a night's markets among the workers the desk names; `jobs` is their number."""

    def build(night: "Night", tick: Tick) -> list[Result]:
        if night.workers == "dask":
            return _build_on_dask(night, jobs, tick)
        if night.workers == "processes":
            return _build_in_processes(night, jobs, tick)
        with _interruptible(ThreadPoolExecutor(count_workers(jobs, len(night.markets)))) as pool:
            return [_ticked(future.result(), tick) for future in _submit(pool, night, night.markets)]

    return build


def count_workers(jobs: int | None, markets: int) -> int:
    """How many workers: `jobs`, else one a usable processor and at least 2; never more than markets."""
    if jobs is None:
        # A container may be given fewer processors than the machine has.
        usable = len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1
        jobs = max(2, usable)
    return max(1, min(jobs, markets))


def process_context() -> multiprocessing.context.BaseContext:
    """How worker processes start: never by a plain fork, because Arrow's threads do not survive one."""
    methods = multiprocessing.get_all_start_methods()
    context = multiprocessing.get_context("forkserver" if "forkserver" in methods else "spawn")
    if "forkserver" in methods:
        context.set_forkserver_preload(["catalog.night"])
    return context


def ignore_interrupt() -> None:
    """In a worker process: leave Ctrl-C, which reaches the whole group, to the one that holds the lock."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)


def build_missing(night: "Night", results: list[Result], tick: Tick) -> list[Result]:
    """Build each market of the night that has no result yet, in a process of its own.

    A worker that dies (memory, a fault in a library) takes others with it. This way only the market that
    kills its worker is held back: its result says that its process died.
    """
    there = {result["market"] for result in results}
    return [_ticked(_build_alone(night, market), tick) for market in night.markets if market not in there]


def death_errors(night: "Night") -> tuple[type[Exception], ...]:
    """What is raised for a market whose worker died."""
    if night.workers == "dask":
        from distributed import KilledWorker

        return (BrokenExecutor, KilledWorker)
    return (BrokenExecutor,)


def _build_alone(night: "Night", market: str) -> Result:
    try:
        with _process_pool(1) as pool:
            return next(_submit(pool, night, (market,))).result()
    except BrokenExecutor:
        reason = "the process that built it died; perhaps too little memory"
        return {
            "market": market,
            "files": {},
            "facts": {},
            "worst": [],
            "error": reason,
            "rows": 0,
            "seconds": 0.0,
        }


def _submit(pool: Executor, night: "Night", markets: tuple[str, ...]) -> Iterator[Future[Result]]:
    from catalog.night import build_one

    yield from as_completed([pool.submit(build_one, night, market) for market in markets])


def _ticked(result: Result, tick: Tick) -> Result:
    tick(str(result["market"]), int(result["rows"]))
    return result


@contextmanager
def _interruptible(pool: Executor) -> Iterator[Executor]:
    """The pool; when the run is stopped, markets not begun are dropped and those begun are waited for, so
    that no worker writes into a staging folder that is being removed."""
    try:
        yield pool
    except BaseException:
        pool.shutdown(wait=True, cancel_futures=True)
        raise
    pool.shutdown(wait=True)


def _build_in_processes(night: "Night", jobs: int | None, tick: Tick) -> list[Result]:
    results: list[Result] = []
    try:
        with _process_pool(count_workers(jobs, len(night.markets))) as pool:
            for future in _submit(pool, night, night.markets):
                results.append(_ticked(future.result(), tick))
    except BrokenExecutor:
        results += build_missing(night, results, tick)
    return results


def _process_pool(workers: int) -> Any:
    return _interruptible(ProcessPoolExecutor(workers, process_context(), ignore_interrupt))


def _build_on_dask(night: "Night", jobs: int | None, tick: Tick) -> list[Result]:
    from distributed import Client, LocalCluster
    from distributed import as_completed as dask_completed

    from catalog.night import build_one

    results: list[Result] = []
    with ExitStack() as stack:
        address: Any = night.dask_address
        if not address:
            workers = count_workers(jobs, len(night.markets))
            cluster = LocalCluster(n_workers=workers, threads_per_worker=1, dashboard_address=None)
            address = stack.enter_context(cluster)
        client = stack.enter_context(_dask_client(Client, address))
        waiting = [client.submit(build_one, night, market, pure=False) for market in night.markets]
        for future in dask_completed(waiting):
            with suppress(*death_errors(night)):
                results.append(_ticked(future.result(), tick))
    return results + build_missing(night, results, tick)


def _dask_client(client: Any, address: Any) -> Any:
    try:
        return client(address, timeout="30s")
    except (OSError, ValueError) as error:
        raise UsageError(unreachable_dask(str(address), error)) from None


def unreachable_dask(address: str, error: Exception) -> str:
    """What to say where the desk names a Dask scheduler that does not answer."""
    place = address or "a cluster of its own"
    return f"Dask at {place} cannot be reached: {error}; see dask_address in desk.toml"
