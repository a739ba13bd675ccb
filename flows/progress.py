"""How far a night has come, told on standard error.

A bar where standard error is a terminal, a line now and then elsewhere, so that a scheduler's log stays
short.

Belongs here: the bar and the lines. Does not belong here: what came of a night (`catalog/summary.py`).
"""

import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from dataclasses import dataclass, field

LINE_EVERY_SECONDS = 15.0

# Called with each market that is done and the rows that were built of it.
Tick = Callable[[str, int], None]


@dataclass
class Pace:
    """Markets done of all, rows built, and what follows for the time left."""

    total: int
    started: float = field(default_factory=time.monotonic)
    done: int = 0
    rows: int = 0

    def add(self, rows: int) -> None:
        """One more market is done."""
        self.done += 1
        self.rows += rows

    def describe(self, now: float) -> str:
        """Markets done, rows a second and the time left, as if the markets still to come took as long each."""
        seconds = now - self.started
        told = f"{self.done} of {self.total} markets"
        if not self.done or seconds <= 0:
            return told
        left = seconds / self.done * (self.total - self.done)
        return f"{told}, {self.rows / seconds:,.0f} rows a second, about {_show(left)} left"


def _show(seconds: float) -> str:
    whole = round(seconds)
    return f"{whole} s" if whole < 60 else f"{whole // 60} min {whole % 60:02d} s"


@contextmanager
def show_progress(total: int, label: str) -> Iterator[Tick]:
    """Give a function to call with each market that is done and its rows."""
    if sys.stderr.isatty():
        with _bar(total, label) as tick:
            yield tick
    else:
        with _lines(total, label) as tick:
            yield tick


@contextmanager
def _bar(total: int, label: str) -> Iterator[Tick]:
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn

    columns = (TextColumn(label, markup=False), BarColumn(), TextColumn("{task.fields[told]}", markup=False))
    pace = Pace(total)
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        job = bar.add_task(label, total=total, told=pace.describe(pace.started))

        def tick(market: str, rows: int) -> None:
            pace.add(rows)
            bar.update(job, advance=1, told=f"{pace.describe(time.monotonic())}  {market}")

        yield tick


@contextmanager
def _lines(total: int, label: str) -> Iterator[Tick]:
    pace = Pace(total)
    told = pace.started

    def tick(_market: str, rows: int) -> None:
        nonlocal told
        pace.add(rows)
        now = time.monotonic()
        if now - told >= LINE_EVERY_SECONDS and pace.done < total:
            told = now
            sys.stderr.write(f"{label}: {pace.describe(now)}\n")
            sys.stderr.flush()

    yield tick
