"""True prices, volumes and open interest of a synthetic market.

Belongs here: drawing a market as it truly was, events included. Does not belong here: faults (`faults.py`).

The price of a contract is level x exp(x) (level + level x x where it may be negative), with x the sum of a season over
delivery months, a long-term factor, a near-end factor that dies out with tenor (two factors, one lasting and one
reverting: Schwartz and Smith 2000, from memory; it gives the Samuelson effect), slope, curvature, a factor a crop
year, and a contract's own noise. Volatility clusters and moves have fat tails (Student, 4 degrees of freedom).
"""

import datetime
from dataclasses import dataclass, field

import numpy as np

from contracts.deliveries import Delivery, contract_name
from contracts.markets import Market, parse_market
from contracts.sessions import day_number, last_trade_day, market_days
from tests.detectors.terms import Terms, market_text

OPEN, HIGH, LOW, SETTLE, VOLUME, INTEREST = range(6)
_YEAR = 252.0
_FIRST_YEAR = 2017


@dataclass
class Event:
    """A strange truth: its nature, the contracts' columns and sessions it shows on."""

    nature: str
    sessions: tuple[int, ...]
    contracts: tuple[int, ...]


@dataclass(repr=False)
class Grown:
    """A market as it truly was.

    days (T,): day numbers of sessions; values (6, T, N), NaN where there is no row; fair (T, N): the unrounded
    price; ends (N,): session of the last trade, which may be T or more; decimals: figures after the point.
    """

    terms: Terms
    market: Market
    closed: list[str]
    contracts: tuple[str, ...]
    days: np.ndarray
    values: np.ndarray
    fair: np.ndarray
    ends: np.ndarray
    decimals: int
    events: list[Event] = field(default_factory=list)


def grow(terms: Terms, seed: int) -> Grown:
    """Draw a market: the same terms and seed give the same one."""
    rng = np.random.default_rng([seed, *terms.code.encode()])
    closed = _holidays(rng, terms)
    market = parse_market(market_text(terms, closed, terms.lag), f"markets/{terms.code.lower()}.toml")
    calendar = market_days(market, _FIRST_YEAR - 1, _FIRST_YEAR + terms.years + 4)
    first = day_number(datetime.date(_FIRST_YEAR, 1, 1))
    every = calendar.between(first, day_number(datetime.date(_FIRST_YEAR + terms.years + 3, 12, 31)))
    count = int(np.searchsorted(every, day_number(datetime.date(_FIRST_YEAR + terms.years, 1, 1))))
    count -= int(rng.integers(0, 200))
    names, deliveries, ends = _contracts(terms, market, every, count)
    starts = np.concatenate((np.zeros(terms.listed, np.int64), ends[: -terms.listed] + 1)).astype(np.int64)
    # Exchanges list a new month some days before or after the old one ends.
    starts[terms.listed :] = np.maximum(0, starts[terms.listed :] + rng.integers(-3, 15, len(starts) - terms.listed))
    live = starts < count
    names = [name for name, ok in zip(names, live, strict=True) if ok]
    deliveries = [delivery for delivery, ok in zip(deliveries, live, strict=True) if ok]
    ends, starts = ends[live], starts[live]
    rows = np.arange(count)[:, None]
    alive = (rows >= starts) & (rows <= ends)
    left = (ends - rows).astype(float)
    events: list[Event] = []
    day_vol = _volatility(rng, terms, count)
    x = _factors(rng, terms, deliveries, left / _YEAR, day_vol, alive, events)
    surge = np.ones(alive.shape)
    wide = _lone_events(rng, terms, x, left, alive, day_vol, surge, events)
    fair = terms.level * (1 + x if terms.may_be_negative else np.exp(x))
    limit = round(terms.limit * terms.level / terms.tick) * terms.tick
    held = _limit(fair, alive, limit, terms.tick, events) if limit else fair
    decimals = len(f"{terms.tick:.10f}".rstrip("0").split(".")[1])
    scale = (terms.level if terms.may_be_negative else held) * day_vol[:, None]
    volume, interest = _activity(rng, terms, left, alive, held, scale, surge)
    settle = _settles(rng, terms, held, volume, left, alive, limit)
    values = np.stack([*_ranges(rng, terms, held, settle, volume, scale, wide, limit), settle, volume, interest])
    if terms.idle == "absent":
        spacing = _spacing(ends)
        gone = (volume == 0) & (left > 1.5 * spacing) & (rng.random(alive.shape) < 0.8)
        values[:, gone & (rows > starts)] = np.nan
    values[:, ~alive] = np.nan
    values[: OPEN + 4] = np.round(values[:4], decimals)
    if terms.lag:
        values[INTEREST, -terms.lag :] = np.nan
    return Grown(terms, market, closed, tuple(names), every[:count], values, fair, ends, decimals, events)


def _holidays(rng: np.random.Generator, terms: Terms) -> list[str]:
    days = []
    for year in range(_FIRST_YEAR, _FIRST_YEAR + terms.years + 4):
        for month, day in ((1, 1), (5, 1), (12, 25), (12, 26), (7, 4), (10, 3)):
            if rng.random() < 0.85 and datetime.date(year, month, day).weekday() < 5:
                days.append(datetime.date(year, month, day).isoformat())
    return days


def _contracts(
    terms: Terms, market: Market, every: np.ndarray, count: int
) -> tuple[list[str], list[Delivery], np.ndarray]:
    names, deliveries, ends = [], [], []
    for year in range(_FIRST_YEAR, _FIRST_YEAR + terms.years + 5):
        for month in terms.months:
            delivery = Delivery(year, month)
            last = day_number(last_trade_day(market, delivery))
            end = int(np.searchsorted(every, last, side="right")) - 1
            if end >= 3 and end < len(every) - 1:
                names.append(contract_name(terms.code, delivery))
                deliveries.append(delivery)
                ends.append(end)
    return names, deliveries, np.array(ends, dtype=np.int64)


def _spacing(ends: np.ndarray) -> float:
    return float(np.median(np.diff(ends)))


def _volatility(rng: np.random.Generator, terms: Terms, count: int) -> np.ndarray:
    """Standard deviation of each day's move, share of the level; it clusters."""
    state, path = 0.0, np.empty(count)
    draws = rng.standard_normal(count)
    for day in range(count):
        state = 0.97 * state + 0.11 * draws[day]
        path[day] = state
    # So that a near contract's ordinary day, near end included, is `vol`.
    near = np.hypot(1 + 0.6 * terms.near, 0.8 * terms.near) * 1.22
    return terms.vol / near * np.exp(np.clip(path, -1.0, 1.2))


def _fat(rng: np.random.Generator, *shape: int) -> np.ndarray:
    """Student draws of 4 degrees of freedom and unit variance."""
    return rng.standard_t(4, shape) / np.sqrt(2.0)


def _revert(steps: np.ndarray, half_life: float) -> np.ndarray:
    """A path of these steps that loses half of itself in so many sessions; along the first axis."""
    keep = 0.5 ** (1.0 / half_life)
    path = np.empty_like(steps)
    state = np.zeros(steps.shape[1:])
    for day in range(len(steps)):
        state = keep * state + steps[day]
        path[day] = state
    return path


def _factors(
    rng: np.random.Generator, terms: Terms, deliveries: list[Delivery], tenor: np.ndarray, day_vol: np.ndarray,
    alive: np.ndarray, events: list[Event],
) -> np.ndarray:  # fmt: skip
    """The logarithm of price over level, (T, N)."""
    count, width = tenor.shape
    tenor = np.maximum(tenor, 0.0)
    common = _fat(rng, count) * day_vol
    for day in np.flatnonzero(rng.random(count) < 1.3 / _YEAR):
        if 10 < day < count - 3:
            common[day] = rng.choice([-1, 1]) * rng.uniform(5, 9) * day_vol[day]
            events.append(Event("shock", (int(day),), tuple(np.flatnonzero(alive[day]).tolist())))
    own_near = 0.6 * common + 0.8 * _fat(rng, count) * day_vol
    long_term = _revert(common, 350.0)
    near = _revert(terms.near * own_near, 0.69 * _YEAR / terms.samuelson)
    slope = _revert(terms.slope * _fat(rng, count) * day_vol, 200.0)
    bend = _revert(0.4 * terms.slope * _fat(rng, count) * day_vol, 120.0)
    month = np.array([delivery.month for delivery in deliveries])
    year = np.array([delivery.year for delivery in deliveries])
    phase, second = rng.uniform(0, 2 * np.pi, 2)
    shape = np.sin(2 * np.pi * month / 12 + phase) + 0.35 * np.sin(4 * np.pi * month / 12 + second)
    reach = np.minimum(tenor, 2.5)
    x = long_term[:, None] + near[:, None] * np.exp(-terms.samuelson * tenor) + terms.season * shape
    x += slope[:, None] * (reach - 0.7) + bend[:, None] * (reach - 0.8) ** 2
    # Contango or its reverse, moving slowly.
    x += rng.normal(0, 0.03) * reach * min(1.0, terms.vol / 0.01)
    if terms.crop:
        crop = year + (month >= terms.crop)
        for one in np.unique(crop):
            path = _revert(0.25 * _fat(rng, count) * day_vol, 150.0)
            x[:, crop == one] += path[:, None] + rng.normal(0, 2 * terms.vol)
    own = rng.standard_t(5, (count, width)) / np.sqrt(5 / 3) * terms.noise * day_vol[:, None]
    own *= np.where(tenor < 20 / _YEAR, 2.0, 1.0)
    return x + _revert(own, 15.0)


def _lone_events(
    rng: np.random.Generator, terms: Terms, x: np.ndarray, left: np.ndarray, alive: np.ndarray, day_vol: np.ndarray,
    surge: np.ndarray, events: list[Event],
) -> np.ndarray:  # fmt: skip
    """Put squeezes into expiry and lone moves into x and the volume's surge; returns where the range is behind them."""
    count, width = x.shape
    wide = np.zeros(x.shape, dtype=bool)
    size = max(1.0, terms.vol / 0.015) if terms.vol > 0.002 else 0.08
    for contract in range(width):
        days = np.flatnonzero(alive[:, contract])
        if len(days) < 60:
            continue
        last = int(days[-1])
        if left[last, contract] == 0 and rng.random() < 0.12:
            run = int(rng.integers(3, 11))
            end = last - int(rng.integers(0, 3))
            days_up = np.arange(end - run + 1, end + 1)
            path = np.cumsum(rng.dirichlet(np.full(run, 2.0))) * rng.uniform(0.05, 0.2) * size
            path *= 1 if rng.random() < 0.8 else -0.5
            x[days_up, contract] += path
            falls = rng.random() < 0.5
            x[end + 1 : last + 1, contract] += path[-1] * (rng.uniform(0.1, 0.6) if falls else 1.0)
            marked = np.arange(end - run + 1, last + 1)
            surge[marked, contract] *= rng.uniform(2.5, 6.0, len(marked))
            wide[marked, contract] = True
            events.append(Event("squeeze", tuple(marked.tolist()), (contract,)))
        elif rng.random() < 0.15:
            near = days[(left[days, contract] > 12) & (left[days, contract] < 120) & (days > 30)]
            if not len(near):
                continue
            day = int(rng.choice(near))
            move = rng.choice([-1, 1]) * rng.uniform(0.03, 0.09) * size
            fade = 0.5 ** (np.arange(count - day) / rng.uniform(15, 60))
            x[day:, contract] += move * fade
            surge[day, contract] *= rng.uniform(3.0, 8.0)
            wide[day, contract] = True
            events.append(Event("lone move", (day,), (contract,)))
    return wide


def _limit(fair: np.ndarray, alive: np.ndarray, limit: float, tick: float, events: list[Event]) -> np.ndarray:
    """Prices that move no more than the daily limit from the last settle, and catch up afterwards."""
    held = fair.copy()
    for day in range(1, len(fair)):
        before = np.where(alive[day - 1], np.round(held[day - 1] / tick) * tick, np.nan)
        low, high = before - limit, before + limit
        held[day] = np.where(np.isnan(before), fair[day], np.clip(fair[day], low, high))
        locked = np.flatnonzero(alive[day] & (held[day] != fair[day]))
        if len(locked):
            # The next session still carries what the limit held back.
            after = (day, day + 1) if day + 1 < len(fair) else (day,)
            events.append(Event("limit", after, tuple(np.flatnonzero(alive[day]).tolist())))
    return held


def _activity(
    rng: np.random.Generator, terms: Terms, left: np.ndarray, alive: np.ndarray, held: np.ndarray, scale: np.ndarray,
    surge: np.ndarray,
) -> tuple[np.ndarray, np.ndarray]:  # fmt: skip
    """Volume and open interest by a contract's life: little, then much, then gone."""
    spacing = _spacing(np.sort(left[0]))
    rank = np.maximum(left, 0) / spacing
    ending = np.clip((left + 1) / 14.0, 0.02, 1.0)
    share = np.exp(-np.maximum(rank - 0.5, 0.0) / terms.depth) * ending
    move = np.zeros(held.shape)
    move[1:] = np.abs(held[1:] - held[:-1]) / scale[1:]
    day_size = np.exp(_revert(0.1 * rng.standard_normal(len(left)), 10.0))[:, None]
    mean = terms.base * share * day_size * surge * (0.7 + 0.3 * np.minimum(move, 4.0))
    mean = mean * np.exp(rng.normal(-0.12, 0.5, mean.shape))
    volume = rng.poisson(np.where(alive, mean, 0.0)).astype(float)
    target = 6.0 * terms.base * np.exp(-np.maximum(rank - 0.6, 0.0) / (1.3 * terms.depth))
    target *= np.clip((left + 1) / 25.0, 0.03, 1.0)
    interest = np.zeros(held.shape)
    state = target[0].copy()
    draws = rng.standard_normal(held.shape)
    for day in range(len(held)):
        born = alive[day] & ~alive[max(day - 1, 0)] if day else np.zeros(len(state), bool)
        state = np.where(born, 0.0, state)
        state = np.maximum(0.0, state + 0.08 * (target[day] - state) + 0.12 * draws[day] * volume[day])
        interest[day] = np.round(state)
    return volume, interest


def _settles(
    rng: np.random.Generator, terms: Terms, held: np.ndarray, volume: np.ndarray, left: np.ndarray, alive: np.ndarray,
    limit: float,
) -> np.ndarray:  # fmt: skip
    """Settles on ticks; of contracts that do not trade, marked to the curve with a tick of noise, or standing still."""
    tick = terms.tick
    noise = np.where(volume > 200, 0, rng.choice([-1, 0, 0, 1], held.shape))
    if limit:
        noise = 0 * noise
    settle = (np.round(held / tick) + noise) * tick
    if not terms.may_be_negative:
        settle = np.maximum(settle, tick)
    if terms.idle == "still":
        spacing = _spacing(np.sort(left[0]))
        stands = (volume == 0) & (left > spacing) & (rng.random(held.shape) < 0.75)
        stands[0] = False
        for day in range(1, len(held)):
            keep = stands[day] & alive[day - 1]
            settle[day] = np.where(keep, settle[day - 1], settle[day])
            if limit:
                # What catches up after standing still is held by the limit too.
                bounded = np.clip(settle[day], settle[day - 1] - limit, settle[day - 1] + limit)
                settle[day] = np.where(alive[day - 1], np.round(bounded / tick) * tick, settle[day])
    return settle


def _ranges(
    rng: np.random.Generator, terms: Terms, held: np.ndarray, settle: np.ndarray, volume: np.ndarray,
    scale: np.ndarray, wide: np.ndarray, limit: float,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:  # fmt: skip
    """Open, high and low that the settle agrees with; few trades see little of the session's range."""
    tick, shape = terms.tick, settle.shape
    before = np.vstack([settle[:1], settle[:-1]])
    gap = np.where(wide, rng.uniform(0.0, 0.3, shape), rng.uniform(0.0, 0.5, shape))
    first = before + gap * (settle - before) + 0.15 * scale * rng.standard_normal(shape)
    above = np.abs(rng.standard_normal(shape)) * 0.35 * scale
    below = np.abs(rng.standard_normal(shape)) * 0.35 * scale
    high, low = np.maximum(first, settle) + above, np.minimum(first, settle) - below
    # A handful of trades: each somewhere between the session's low and high.
    few = volume < 30
    one, two, three = (low + rng.random(shape) * (high - low) for _ in range(3))
    first = np.where(few, one, first)
    thin_high = np.where(
        volume <= 1, one, np.where(volume <= 4, np.maximum(one, two), np.maximum(np.maximum(one, two), three))
    )
    thin_low = np.where(
        volume <= 1, one, np.where(volume <= 4, np.minimum(one, two), np.minimum(np.minimum(one, two), three))
    )
    high, low = np.where(few, thin_high, high), np.where(few, thin_low, low)
    if limit:
        bounds = before - limit, before + limit
        first, high, low = (np.clip(part, *bounds) for part in (first, high, low))
    first, high, low = (np.round(part / tick) * tick for part in (first, high, low))
    if not terms.may_be_negative:
        first, high, low = (np.maximum(part, tick) for part in (first, high, low))
    idle = volume == 0
    filler = settle if terms.flat else np.nan
    return np.where(idle, filler, first), np.where(idle, filler, high), np.where(idle, filler, low)
