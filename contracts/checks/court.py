"""Where a settle stands against the curve and its own past, and what was decided so far.

Belongs here: the curve and the memory of what was refuted and kept before, as later settles are held against it. Does
not belong here: the judgment itself (`prices.py`).
"""

import math
from dataclasses import dataclass

import numpy as np

from contracts.checks.curve import Curve
from contracts.checks.forms import copy_of_twins, find_twins
from contracts.panel import Panel
from contracts.quality import Quality

_LONGEST_LOOK_AHEAD = 3
# A distance that shrinks to this share of itself has come back.
_CAME_BACK = 0.4
# A run needs a beginning of so many times the threshold.
_STRONG = 1.5
_LEAPT = 4.0
# A contract that stood still for so many sessions may catch up to anywhere.
_LATE = 3
_LONGEST_HELD_BACK = 30
_LONGEST_SHIFT = 60
_SOON = 10
# Scales and ticks from which a cell is looked at closely, as a share of the thresholds: the product of two factors.
_LOOKED_AT = 0.4


@dataclass(frozen=True)
class Standing:
    """Where a settle stands: distance from what is expected, the scale of it, and whether the curve knows at all."""

    since: int
    expected: float
    distance: float
    scale: float
    is_known: bool
    is_late: bool

    @property
    def off(self) -> float:
        """The distance in scales."""
        return abs(self.distance) / self.scale


class Court:
    """The curve and what was decided so far."""

    def __init__(self, panel: Panel, settle: np.ndarray, quality: Quality) -> None:
        self.curve = Curve(panel, settle, quality)
        self.panel, self.quality, self.tick = panel, quality, panel.market.tick_size
        # Cells that stand alone and were kept: what follows them may be their return.
        self.kept: set[tuple[int, int]] = set()
        # Cells that were refuted: a run of them is held against the last right settle.
        self.refuted: dict[tuple[int, int], float] = {}
        # How far each contract came to stand off by moves that were kept, and since when.
        self.shifts: dict[int, tuple[int, float]] = {}
        self.twins: dict[tuple[int, int], int] = {}

    def candidates(self) -> list[tuple[int, float, int]]:
        """Cells worth a closer look: (row, minus the distance in scales, contract)."""
        curve, quality = self.curve, self.quality
        size = np.abs(curve.distance)
        scale = np.maximum(curve.noise, 0.5 * self.tick) * curve.unrest[curve.row]
        with np.errstate(invalid="ignore", divide="ignore"):
            far = size > _LOOKED_AT * np.maximum(quality.refuted_ticks * self.tick, quality.refuted_score * scale)
            # A contract alone is held against itself, for powers of ten and signs only.
            ratio = np.abs(curve.price - size * np.sign(curve.distance)) / np.abs(curve.price)
            far &= ~curve.is_alone | (ratio < 0.5) | (ratio > 2.0)
        cells = np.flatnonzero(far)
        return [(int(curve.row[cell]), -float(size[cell] / scale[cell]), int(curve.column[cell])) for cell in cells]

    def find_copies(self) -> list[tuple[int, float, int]]:
        """Rows that are another contract's."""
        curve = self.curve
        found = []
        for session, *pair in find_twins(self.panel):
            row = int(np.searchsorted(curve.rows, session))
            off = tuple(self._off(row, contract) for contract in pair)
            copy = copy_of_twins(self.panel, session, (pair[0], pair[1]), (off[0], off[1]))
            self.twins[row, copy] = pair[0] if copy == pair[1] else pair[1]
            found.append((row, -math.inf, copy))
        return found

    def _off(self, row: int, contract: int) -> float:
        cell = self.curve.cell[row, contract]
        return abs(float(np.nan_to_num(self.curve.distance[cell]))) / max(float(self.curve.noise[cell]), self.tick)

    def stand(self, row: int, contract: int, since: int) -> Standing:
        """Where a settle stands, seen from the contract's last clean one.

        If that one stood still, was held by the limit, or stood alone and was kept, the settle may as well be where
        the curve puts it since the session before, or anywhere between.
        """
        curve = self.curve
        told = curve.foretell(row, contract, since)
        price, last = float(curve.reported[row, contract]), float(curve.clean[since, contract])
        expected = last + told.move
        right = since
        while (right, contract) in self.refuted and curve.last_clean(right, contract) >= 0:
            right = curve.last_clean(right, contract)
        distance, scale = price - expected, curve.scale(row, contract, right, told)
        if told.count == 1 and abs(price - last) < 0.5 * abs(told.move):
            # Of two contracts the one that leapt is the strange one.
            distance = 0.0
        # ... and where the other hardly moved it is known.
        is_known = told.count >= 2 or (told.count == 1 and abs(price - last) > _LEAPT * abs(told.move))
        anchor = self._anchor(since, contract)
        if anchor >= 0:
            other = curve.foretell(row, contract, anchor)
            seen = price - (float(curve.clean[anchor, contract]) + other.move)
            if other.count:
                if seen * distance <= 0:
                    distance = 0.0
                elif abs(seen) < abs(distance):
                    distance, scale = seen, curve.scale(row, contract, anchor, other)
        return Standing(since, expected, distance, scale, is_known, since - anchor >= _LATE and anchor >= 0)

    def goes_on(self, row: int, contract: int, standing: Standing) -> bool:
        """Whether the settle stands where the refuted one before it stood."""
        if self.refuted.get((standing.since, contract), 0.0) < _STRONG * self.quality.refuted_score:
            return False
        was = float(self.curve.reported[standing.since, contract] - self.curve.clean[standing.since, contract])
        return abs(standing.distance - was) <= _CAME_BACK * abs(was)

    def remember(self, row: int, contract: int, distance: float) -> None:
        """Remember a move that was kept; one in the same direction soon after adds to it."""
        last, so_far = self.shifts.get(contract, (-_LONGEST_SHIFT, 0.0))
        goes_on = row - last <= _SOON and so_far * distance > 0
        self.shifts[contract] = (row, distance + so_far if goes_on else distance)

    def is_return(self, row: int, contract: int, standing: Standing) -> bool:
        """Whether the settle only comes back: from the last, which stood off, or from a break that was kept."""
        row_before, distance = self.shifts.get(contract, (-_LONGEST_SHIFT, 0.0))
        if row - row_before <= _LONGEST_SHIFT and abs(standing.distance + distance) <= _CAME_BACK * abs(distance):
            return True
        before = self.curve.last_clean(standing.since, contract)
        if before < 0:
            return False
        told = self.curve.foretell(row, contract, before)
        off = float(self.curve.reported[row, contract]) - (float(self.curve.clean[before, contract]) + told.move)
        return abs(off) <= _CAME_BACK * abs(standing.distance)

    def _anchor(self, since: int, contract: int) -> int:
        """The row before what kept the contract from standing where the curve puts it; -1 where nothing did."""
        curve = self.curve
        before = since
        while (before, contract) in self.kept:
            before = curve.last_clean(before, contract)
        if before < 0:
            return -1
        cell = int(curve.cell[before, contract])
        if cell >= 0 and curve.clean[before, contract] == curve.reported[before, contract]:
            anchor = int(curve.row[curve.anchor[cell]])
            if since - anchor <= _LONGEST_HELD_BACK and not math.isnan(curve.clean[anchor, contract]):
                before = anchor
        return before if before != since else -1

    def comes_back(self, row: int, contract: int, standing: Standing) -> bool | None:
        """Whether the contract is back where the curve expects it within three sessions; None where none follows."""
        curve = self.curve
        follows: bool | None = None
        for later in range(row + 1, min(len(curve.rows), row + 1 + _LONGEST_LOOK_AHEAD)):
            price = float(curve.reported[later, contract])
            if math.isnan(price):
                continue
            told = curve.foretell(later, contract, standing.since)
            if told.count == 0:
                continue
            follows = False
            off = price - (float(curve.clean[standing.since, contract]) + told.move)
            if abs(off) <= _CAME_BACK * abs(standing.distance):
                return True
        return follows
