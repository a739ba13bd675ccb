"""Rows that arrived more than once -> one bar a contract and session.

Belongs here: which of several rows stands, and what became of the others. Does not belong here: reading rows
(`intake.py`), what is said about it in the quality log (`checks/arrived.py`).
"""

from dataclasses import dataclass, replace
from enum import StrEnum

import numpy as np

from contracts.intake import FileRows, ParsedRows


class Meeting(StrEnum):
    """How two rows for one contract and session came to meet."""

    DUPLICATE = "the same values twice"
    CONFLICT = "other values in the same file"
    RESTATED = "other values in another file, or a later version of it"


@dataclass(frozen=True)
class Superseded:
    """A row that gave way to another: positions in the parsed rows."""

    row: int
    by: int
    meeting: Meeting


@dataclass(frozen=True)
class Bars(ParsedRows):
    """One bar a contract and session, sorted by both: parsed rows of which each pair has one left."""


@dataclass(frozen=True)
class Arrived:
    """The bars, the rows that gave way, and per file how many rows an earlier version had that the newest lacks."""

    bars: Bars
    superseded: tuple[Superseded, ...]
    lost: dict[int, int]

    def until(self, day: int) -> "Arrived":
        """The same without bars after a day, given as its number."""
        bars = self.bars
        kept = bars.session <= day
        parts = (bars.contract, bars.session, bars.values, bars.source, bars.line)
        return replace(self, bars=Bars(bars.contracts, *(part[kept] for part in parts)))


def settle_arrivals(rows: ParsedRows, files: list[FileRows], is_old: list[bool]) -> Arrived:
    """Let the newest row of each contract and session stand.

    Newest is the later intake, then the later path, then the later line. `is_old` marks files of which a
    newer version arrived under the same path: their rows never stand, and are only compared. Identical rows
    of an old version are what a cumulative file does every night and go unmentioned.
    """
    paths = sorted({file.raw.path for file in files})
    place = {path: index for index, path in enumerate(paths)}
    path_rank = np.array([place[file.raw.path] for file in files], dtype=np.int64)
    intake = np.array([file.raw.taken_in for file in files], dtype=np.int64)
    old = np.array(is_old, dtype=bool)
    if not len(rows.line):
        return Arrived(Bars(rows.contracts, *(np.empty(0, np.int64),) * 2, rows.values, rows.source, rows.line), (), {})
    source = rows.source
    order = np.lexsort((rows.line, path_rank[source], intake[source], ~old[source], rows.session, rows.contract))
    key = rows.contract[order] * (1 << 32) + rows.session[order] + (1 << 31)
    is_last = np.append(key[1:] != key[:-1], True)
    last_of = order[is_last]
    lost: dict[int, int] = {}
    stands = ~old[source[last_of]]
    for row in last_of[~stands]:
        lost[int(source[row])] = lost.get(int(source[row]), 0) + 1
    superseded: list[Superseded] = []
    if len(last_of) < len(order):
        group = np.concatenate(([0], np.cumsum(is_last)[:-1]))
        for position in np.flatnonzero(~is_last):
            row, by = int(order[position]), int(last_of[group[position]])
            if not stands[group[position]]:
                continue
            same = np.array_equal(rows.values[row], rows.values[by], equal_nan=True)
            if same and not old[source[row]]:
                superseded.append(Superseded(row, by, Meeting.DUPLICATE))
            elif not same:
                meeting = Meeting.CONFLICT if source[row] == source[by] else Meeting.RESTATED
                superseded.append(Superseded(row, by, meeting))
    kept = last_of[stands]
    bars = Bars(
        rows.contracts, rows.contract[kept], rows.session[kept], rows.values[kept], source[kept], rows.line[kept]
    )
    return Arrived(bars, tuple(superseded), lost)
