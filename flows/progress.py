"""How far a night has come, told on standard error.

A bar where standard error is a terminal, a line now and then elsewhere, so that a scheduler's log stays
short.

Belongs here: the bar and the lines. Does not belong here: what came of a night (`catalog/summary.py`).
"""

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager

LINE_EVERY_SECONDS = 15.0

Tick = Callable[[str], None]


@contextmanager
def show_progress(total: int, label: str) -> Iterator[Tick]:
    """Give a function to call with each market that is done."""
    if sys.stderr.isatty():
        with _bar(total, label) as tick:
            yield tick
    else:
        with _lines(total, label) as tick:
            yield tick


@contextmanager
def _bar(total: int, label: str) -> Iterator[Tick]:
    from rich.console import Console
    from rich.progress import BarColumn, MofNCompleteColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (
        TextColumn(label, markup=False),
        BarColumn(),
        MofNCompleteColumn(),
        TimeElapsedColumn(),
        TextColumn("{task.fields[market]}", markup=False),
    )
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        job = bar.add_task(label, total=total, market="")

        def tick(market: str) -> None:
            bar.update(job, advance=1, market=market)

        yield tick


@contextmanager
def _lines(total: int, label: str) -> Iterator[Tick]:
    done = 0
    told = started = time.monotonic()

    def tick(_market: str) -> None:
        nonlocal done, told
        done += 1
        now = time.monotonic()
        if now - told >= LINE_EVERY_SECONDS and done < total:
            told = now
            sys.stderr.write(f"{label}: {done} of {total} after {now - started:.0f} s\n")
            sys.stderr.flush()

    yield tick
