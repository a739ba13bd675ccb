"""What the rest of the curve says a settle should be, and how far it may stand from that.

Belongs here: the expected settle of a contract, from its neighbours' moves, and the scale of its ordinary distance
from it. Does not belong here: deciding whether a settle is wrong (`prices.py`).

The statistic. A contract's move is expected from each of the two nearest contracts on either side, and from the median
of all: their move times a sensitivity, the slope through nought of the contract's past 60 moves on theirs (in units of
the session's median move, so that no session outweighs the others, clipped, and drawn towards 1 by eight ordinary
sessions). So near months may move more than far ones (Samuelson 1965, from memory), and the new crop less than the
old. The five are averaged by the inverse square of how well each foretold so far, less those that stand off their
weighted median. The distance is the move less that. A contract that stood still, or that its daily limit held back,
catches up: it may lie anywhere between what the curve says since its last session and what it says since its last
free one. Clipping, inverse-variance weights and the scaled MAD are common practice, no source. All of it is past data,
so a night's answer does not change when the next comes.
"""

import bisect
import math
import statistics
from dataclasses import dataclass

import numpy as np

from contracts.checks.robust import MAD_SCALE, row_medians, weighted_median, weighted_medians
from contracts.panel import Panel
from contracts.quality import Quality

LONGEST_LOOK_BACK = 5
_OFFSETS = (-2, -1, 1, 2)
_REACH = 2
_WINDOW = 60
_CLIPPED_AT = 3.0
_LEAST_REACH = 0.5
# Ordinary sessions by which a sensitivity is drawn towards 1, and a predictor's error towards the curve's.
_PRIOR = 8.0
# A predictor this many of its errors from the median of all is left out.
_LEFT_OUT = 3.0
# Standard deviation of rounding to a tick, in ticks: 1 / sqrt(12).
_ROUNDING = 0.29
_LEAST_HISTORY = 20
_NEWLY_LISTED = 3.0
# Errors to expect of each witness before there is a past, in the curve's ordinary moves; the last is all contracts.
_GUESSES = np.array([0.3, 0.2, 0.2, 0.3, 0.5])
# Weight of a witness that did not move freely; and the most that one may weigh against all others together.
_HARDLY = 0.01
_MOST_OF_OTHERS = 0.8
_LONGEST_HELD_BACK = 30
_LEAST_FOR_COMMON = 4
_FEW_WITNESSES = 3
_MOST_UNREST = 4.0
_NEAR_EXPIRY = 15
_WIDER_NEAR_EXPIRY = 2.0
_OF_MOVE = 0.03
_OF_SPREAD = 0.7
_OF_FIRST_MOVES = 0.3
_FITS_WINDOW = 20
_FITS_SHARE = 0.2


@dataclass(frozen=True)
class Foretold:
    """A move foretold: its size, how far the predictors disagree, how many there were."""

    move: float
    spread: float
    count: int


class Curve:
    """Settles of the sessions that have any, and what the rest of the curve says of each.

    rows (R,): sessions that have a settle; reported, clean (R, N). The clean ones change as wrong ones are found.
    """

    def __init__(self, panel: Panel, settle: np.ndarray, quality: Quality) -> None:
        self.panel, self.quality, self.tick = panel, quality, panel.market.tick_size
        self.rows = np.flatnonzero(~np.isnan(settle).all(axis=1))
        self.reported = settle[self.rows]
        self.impossible = np.zeros(self.reported.shape, dtype=bool)
        if not panel.market.may_be_negative:
            with np.errstate(invalid="ignore"):
                self.impossible = self.reported <= 0
        self.clean = np.where(self.impossible, np.nan, self.reported)
        # Every settle as one cell, by row and then by contract: neighbours in delivery are neighbours here.
        self.row, self.column = np.nonzero(~np.isnan(self.clean))
        self.price = self.clean[self.row, self.column]
        self.cell = np.full(self.clean.shape, -1, dtype=np.int64)
        self.cell[self.row, self.column] = np.arange(len(self.row))
        self._order_by_contract()
        self._measure()

    def _order_by_contract(self) -> None:
        """Each cell's place among the cells of its contract, and the cell before it."""
        count = len(self.row)
        self.by_contract = np.argsort(self.column, kind="stable")
        self.place = np.empty(count, dtype=np.int64)
        self.place[self.by_contract] = np.arange(count)
        column, row = self.column[self.by_contract], self.row[self.by_contract]
        is_first = np.concatenate(([True], column[1:] != column[:-1])) if count else np.empty(0, bool)
        start = np.maximum.accumulate(np.where(is_first, np.arange(count), 0))
        self.start = np.empty(count, dtype=np.int64)
        self.start[self.by_contract] = start
        before = np.where(is_first, -1, np.concatenate(([-1], self.by_contract[:-1])) if count else 0)
        gap = row - self.row[before]
        self.before = np.empty(count, dtype=np.int64)
        self.before[self.by_contract] = np.where(gap <= LONGEST_LOOK_BACK, before, -1)

    def _past_sums(self, values: np.ndarray) -> np.ndarray:
        """Sums over each contract's last 60 cells before every cell; along the last axis."""
        summed = np.zeros((*values.shape[:-1], values.shape[-1] + 1))
        np.cumsum(values[..., self.by_contract], axis=-1, out=summed[..., 1:])
        first = np.maximum(self.place - _WINDOW, self.start)
        result: np.ndarray = summed[..., self.place] - summed[..., first]
        return result

    def _packed(self, values: np.ndarray) -> np.ndarray:
        """Values of the cells by row, as wide as the fullest row."""
        starts = np.searchsorted(self.row, np.arange(len(self.rows)))
        at = np.arange(len(self.row)) - starts[self.row]
        packed = np.full((len(self.rows), int(at.max(initial=-1)) + 1), np.nan)
        packed[self.row, at] = values
        return packed

    def _past_mean(self, values: np.ndarray) -> np.ndarray:
        """Mean over the last 60 rows before each row (the row itself where there is none), NaNs left out; (R,)."""
        known = ~np.isnan(values)
        summed = np.concatenate(([0.0], np.cumsum(np.where(known, values, 0.0))))
        counted = np.concatenate(([0], np.cumsum(known)))
        last = np.arange(len(values))
        first = np.maximum(last - _WINDOW, 0)
        count = counted[last] - counted[first]
        with np.errstate(invalid="ignore", divide="ignore"):
            return np.where(count > 0, (summed[last] - summed[first]) / count, values)

    def _past_median(self, values: np.ndarray) -> np.ndarray:
        """Median over the last 60 rows before each row; a row without a value counts as the one before it; (R,)."""
        filled = np.where(np.isnan(values), 0.0, values)
        last = np.maximum.accumulate(np.where(np.isnan(values), 0, np.arange(len(values))))
        padded = np.concatenate((np.full(_WINDOW, np.nan), filled[last]))
        windows = np.lib.stride_tricks.sliding_window_view(padded, _WINDOW)[: len(values)]
        result = row_medians(windows)
        return np.where(np.isnan(result), filled, result)

    def _measure(self) -> None:
        """Sensitivities, weights and distances of all cells."""
        tick, before, has_before = self.tick, self.before, self.before >= 0
        change = np.where(has_before, self.price - self.price[before], np.nan)
        self._find_held_back(change)
        size = np.maximum(row_medians(self._packed(np.abs(change))), 2 * tick)
        size = np.where(np.isnan(size), 2 * tick, size)
        self.size = size
        usual = self._past_mean(size)[self.row]
        self.usual = usual
        size = size[self.row]
        moves = np.where(self.is_bound & ~self.is_locked, np.nan, change)
        self.common = np.cumsum(np.nan_to_num(row_medians(self._packed(moves))))
        locked = np.bincount(self.row[self.is_locked], minlength=len(self.rows))
        live = np.bincount(self.row, minlength=len(self.rows))
        self.has_common = live >= _LEAST_FOR_COMMON
        self.is_limit_row = 2 * locked > live
        others, trust = self._moves(np.arange(len(self.row)), before)
        known = ~np.isnan(others) & has_before
        learns = known & (trust == 1.0) & ~self.is_bound
        unit = np.maximum(size, usual)
        theirs = np.clip(np.where(learns, others / unit, 0.0), -_CLIPPED_AT, _CLIPPED_AT)
        reach = np.maximum(np.abs(theirs), _LEAST_REACH)
        more = np.clip(np.where(learns, change / unit - theirs, 0.0), -reach, reach)
        self.sensitivity = 1.0 + self._past_sums(more * theirs) / (self._past_sums(theirs * theirs) + _PRIOR)
        error = np.minimum(np.abs(np.where(learns, change - self.sensitivity * others, 0.0)), size)
        count = self._past_sums(learns.astype(float))
        # Where there is no past, a contract one further away foretells so much less well.
        mean = 1.25 * (self._past_sums(error) + _PRIOR * _GUESSES[:, None] * usual) / (count + _PRIOR)
        self.error = np.hypot(mean, _ROUNDING * tick)
        distance = change - self._foretell(others, trust, known)
        self.distance = self._shorten(distance, change)
        self.is_alone = ~known.any(axis=0)
        magnitude = np.abs(self.distance)
        packed = self._packed(magnitude)
        middle = row_medians(packed)
        self.typical = self._past_median(middle)
        # How far the whole curve is out of its ordinary shape, by row.
        ratio = middle / np.maximum(self.typical, _ROUNDING * tick)
        is_curve = np.count_nonzero(~np.isnan(packed), axis=1) >= _LEAST_FOR_COMMON
        self.unrest = np.where(is_curve, np.clip(np.nan_to_num(ratio), 1.0, _MOST_UNREST), 1.0)
        clipped = np.minimum(np.where(np.isnan(magnitude), 0.0, magnitude), size)
        count = self._past_sums((~np.isnan(magnitude)).astype(float))
        guess = _NEWLY_LISTED * np.nan_to_num(self.typical)[self.row]
        self.noise = 1.25 * (self._past_sums(clipped) + _PRIOR * guess) / (count + _PRIOR)
        # Once more, without what lies far outside: one wrong settle shall not blunt the next sixty sessions.
        clipped = np.minimum(clipped, 2.5 * self.noise)
        self.noise = 1.25 * (self._past_sums(clipped) + _PRIOR * np.minimum(guess, self.noise)) / (count + _PRIOR)
        self.magnitude_by_contract = magnitude[self.by_contract]

    def _find_held_back(self, change: np.ndarray) -> None:
        """Cells that did not move freely, and the last free cell before each.

        is_still: unchanged; is_bound: unchanged without trade, or moved by just the daily limit; anchor: the cell
        itself, or that before the run of such cells it belongs to.
        """
        volume = self.panel.field("volume")[self.rows[self.row], self.column]
        self.is_still = change == 0.0
        self.is_bound = self.is_still & ~(volume > 0)
        self.is_locked = np.zeros(len(self.row), dtype=bool)
        limit = self.panel.market.daily_limit
        if limit is not None:
            with np.errstate(invalid="ignore"):
                self.is_locked = np.abs(np.abs(change) - limit) <= 0.5 * self.tick
        idle = np.bincount(self.row[volume == 0], minlength=len(self.rows)).astype(float)
        still = np.bincount(self.row[(volume == 0) & self.is_still], minlength=len(self.rows)).astype(float)
        self.stands_when_idle = self._past_mean(still) > _FITS_SHARE * self._past_mean(idle)
        self.is_bound |= self.is_locked
        held_back = self.is_still | self.is_locked
        free = np.where(held_back[self.by_contract], -1, np.arange(len(self.row)))
        anchor = np.maximum.accumulate(np.maximum(free, self.start[self.by_contract]))
        self.anchor = np.empty(len(self.row), dtype=np.int64)
        self.anchor[self.by_contract] = self.by_contract[anchor]

    def _moves(self, cells: np.ndarray, bases: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """Moves of the witnesses from each cell's base to the cell, (5, n), NaN where unknown; and their trust.

        The witnesses are the neighbours at each offset and, last, the median of all contracts that moved freely. One
        that stood still or at its limit, or comes from there, is hardly trusted.
        """
        count = len(self.row)
        found = np.full((len(_OFFSETS) + 1, len(cells)), np.nan)
        trust = np.ones(found.shape)
        row, base_row = self.row[cells], self.row[bases]
        for number, offset in enumerate(_OFFSETS):
            other = cells + offset
            inside = (other >= 0) & (other < count)
            other = np.where(inside, other, 0)
            inside &= self.row[other] == row
            earlier = self.cell[base_row, self.column[other]]
            inside &= earlier >= 0
            found[number] = np.where(inside, self.price[other] - self.price[earlier], np.nan)
            trust[number, self.is_bound[other] | self.is_bound[earlier]] = _HARDLY
        found[-1] = np.where(self.has_common[row], self.common[row] - self.common[base_row], np.nan)
        trust[-1, self.is_limit_row[row] | self.is_limit_row[base_row]] = _HARDLY
        return found, trust

    def _foretell(
        self, others: np.ndarray, trust: np.ndarray, known: np.ndarray, cells: np.ndarray | None = None
    ) -> np.ndarray:
        """Robust weighted mean of what the witnesses foretell, (n,); nought where there is none."""
        sensitivity = self.sensitivity if cells is None else self.sensitivity[:, cells]
        error = self.error if cells is None else self.error[:, cells]
        told = np.where(known, sensitivity * others, np.inf)
        weight = np.where(known, trust * error**-2.0, 0.0)
        several = np.count_nonzero(known, axis=0) > 1
        np.minimum(weight, _MOST_OF_OTHERS * (weight.sum(axis=0) - weight.max(axis=0)), out=weight, where=several)
        middle = weighted_medians(told, weight)
        with np.errstate(invalid="ignore"):
            fits = known & (np.abs(told - middle) <= _LEFT_OUT * np.maximum(error, self.tick))
        weight = np.where(fits, weight, 0.0)
        total = weight.sum(axis=0)
        mean = (weight * np.where(fits, told, 0.0)).sum(axis=0)
        return np.where(total > 0, mean / np.where(total > 0, total, 1.0), middle)

    def _shorten(self, distance: np.ndarray, change: np.ndarray) -> np.ndarray:
        """Distances, less what a contract that stood still or was held by its limit may catch up.

        NaN where a settle stands still: it says nothing of how closely the contract follows.
        """
        held_back = self.is_still | self.is_locked
        late = np.flatnonzero((self.before >= 0) & held_back[self.before])
        bases = self.anchor[self.before[late]]
        near = self.row[late] - self.row[bases] <= _LONGEST_HELD_BACK
        late, bases = late[near], bases[near]
        others, trust = self._moves(late, bases)
        since = self.price[late] - self.price[bases] - self._foretell(others, trust, ~np.isnan(others), late)
        first = distance[late]
        shorter = np.where(first * since <= 0, 0.0, np.where(np.abs(first) < np.abs(since), first, since))
        result = distance.copy()
        result[late] = shorter
        # Held by the limit on its way: what the curve says beyond it cannot be settled at.
        with np.errstate(invalid="ignore"):
            result[self.is_locked & (distance * change < 0)] = 0.0
        result[self.is_still] = np.nan
        return result

    def last_clean(self, row: int, contract: int) -> int:
        """The contract's last clean row before one, at most five rows back; -1 for none."""
        for back in range(1, min(row, LONGEST_LOOK_BACK) + 1):
            if not math.isnan(self.clean[row - back, contract]):
                return row - back
        return -1

    def foretell(self, row: int, contract: int, since: int) -> Foretold:
        """The contract's move from one row to another, as the clean settles of the nearest contracts foretell it."""
        now, then = self.clean[row], self.clean[since]
        live = np.flatnonzero(~np.isnan(now)).tolist()
        own = bisect.bisect_left(live, contract)
        # Without a clean settle of its own the contract is not counted among the live ones.
        is_live = own < len(live) and live[own] == contract
        cell = self._nearest_cell(row, contract)
        told: list[float] = []
        weights: list[float] = []
        errors: list[float] = []
        wanted = self.quality.nearest_contracts
        for step in range(1, len(live) + 1):
            for place in (own - step, own + step - (not is_live)):
                if not 0 <= place < len(live) or len(told) == wanted:
                    continue
                other = live[place]
                base = float(then[other])
                if math.isnan(base):
                    continue
                near = min(step, _REACH)
                which = _REACH - near if place < own else _REACH - 1 + near
                here, there = self.cell[row, other], self.cell[since, other]
                is_free = not ((here >= 0 and self.is_bound[here]) or (there >= 0 and self.is_bound[there]))
                error = float(self.error[which, cell])
                told.append(float(self.sensitivity[which, cell]) * (float(now[other]) - base))
                weights.append((1.0 if is_free else _HARDLY) * (error * max(1.0, step / _REACH)) ** -2.0)
                errors.append(error)
            if len(told) == wanted:
                break
        count = len(told)
        if not count:
            return Foretold(0.0, 0.0, 0)
        if self.has_common[row]:
            told.append(float(self.sensitivity[-1, cell] * (self.common[row] - self.common[since])))
            errors.append(float(self.error[-1, cell]))
            trust = _HARDLY if self.is_limit_row[row] or self.is_limit_row[since] else 1.0
            weights.append(trust * errors[-1] ** -2.0)
        return Foretold(*self._agree(told, weights, errors), count)

    def _agree(self, told: list[float], weights: list[float], errors: list[float]) -> tuple[float, float]:
        """Robust weighted mean of what witnesses tell, and how far they disagree."""
        if len(weights) > 1:
            most = _MOST_OF_OTHERS * (sum(weights) - max(weights))
            weights = [min(weight, most) for weight in weights]
        middle = weighted_median(told, weights)
        off = [abs(value - middle) for value in told]
        kept = [
            weight if away <= _LEFT_OUT * max(error, self.tick) else 0.0
            for weight, away, error in zip(weights, off, errors, strict=True)
        ]
        total = sum(kept)
        move = sum(k * t for k, t in zip(kept, told, strict=True)) / total if total > 0 else middle
        if len(told) > _FEW_WITNESSES:
            return move, MAD_SCALE * weighted_median(off, weights)
        # Of two or three witnesses none can be outvoted: one that disagrees makes all of them doubtful.
        return move, math.sqrt(sum(w * o * o for w, o in zip(weights, off, strict=True)) / sum(weights))

    def _nearest_cell(self, row: int, contract: int) -> int:
        """The contract's cell on a row or, where the row has none that can be, its last one before."""
        for earlier in range(row, max(-1, row - 2 * LONGEST_LOOK_BACK), -1):
            if self.cell[earlier, contract] >= 0:
                return int(self.cell[earlier, contract])
        return 0

    def scale(self, row: int, contract: int, since: int, told: Foretold) -> float:
        """Ordinary distance of the contract from what is foretold, in price units; at least half a tick.

        The largest of: its own past distances' scaled MAD (a newly listed contract's is drawn towards three times the
        curve's), more on a session on which the whole curve is out of shape and near expiry; and how far the
        witnesses disagree.
        """
        cell = self._nearest_cell(row, contract)
        place = self.place[cell]
        past = self.magnitude_by_contract[max(self.start[cell], place - _WINDOW) : place].tolist()
        past = [size for size in past if size == size]
        typical = float(self.typical[row])
        guess = MAD_SCALE * _NEWLY_LISTED * (0.0 if math.isnan(typical) else typical)
        if row < _LEAST_HISTORY:
            guess = max(guess, _OF_FIRST_MOVES * float(self.size[row]))
        known = min(len(past), _LEAST_HISTORY) / _LEAST_HISTORY
        own = (known * MAD_SCALE * statistics.median(past) if past else 0.0) + (1 - known) * guess
        own = max(own, 0.5 * self.tick) * float(self.unrest[row])
        if self.panel.last_trade[contract] - self.rows[row] <= _NEAR_EXPIRY:
            own *= _WIDER_NEAR_EXPIRY
        own = math.hypot(own, _OF_MOVE * told.move) * math.sqrt(row - since)
        return max(own, _OF_SPREAD * told.spread)

    def is_often_still(self, row: int, contract: int) -> bool:
        """Whether the contract follows the curve by fits: it stood still on many of its last sessions.

        Or it did not trade on this one, in a market whose contracts stand still when they do not.
        """
        if self.stands_when_idle[row] and self.panel.field("volume")[self.rows[row], contract] == 0:
            return True
        cell = self._nearest_cell(row, contract)
        place = self.place[cell]
        past = self.by_contract[max(self.start[cell], place - _FITS_WINDOW) : place]
        return len(past) > 0 and float(self.is_bound[past].mean()) >= _FITS_SHARE
