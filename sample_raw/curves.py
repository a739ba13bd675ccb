"""Prices, volume and open interest of every contract of a market as they truly were.

Belongs here: the market model. Does not belong here: what goes wrong on the way into a file (`faults.py`).

Two factors move a curve, one dying away along it and one moving all of it alike (Schwartz and Smith 2000, from
memory), with a season by delivery month, changing volatility, and about a tick of each contract's own noise.
Numbers are drawn from raw 64-bit output and turned by plain arithmetic only: `exp` and `log` of a maths library
differ in their last digit from machine to machine, and the files must not.
"""

import datetime
from dataclasses import dataclass, field
from math import floor, sqrt
from typing import Any

import numpy as np
from days import Calendar

Traits = dict[str, Any]
Array = np.ndarray
SEED = 20150102
FIRST, LAST = datetime.date(2015, 1, 2), datetime.date(2024, 12, 31)
# Share of the first contract's positions and volume by the number of liquid contracts ahead.
POSITIONS_BY_RANK = (1.0, 0.42, 0.22, 0.14, 0.095, 0.07, 0.052, 0.04, 0.03, 0.024, 0.018, 0.014, 0.011, 0.009, 0.007)
VOLUME_BY_RANK = (1.0, 0.2, 0.06, 0.025, 0.012, 0.006, 0.003, 0.0016, 9e-4, 5e-4, 3e-4, 2e-4, 1.5e-4, 1e-4, 8e-5)


class Draws:
    """Chance of one purpose: the same for the same key, on every machine and with every numpy."""

    def __init__(self, *key: int) -> None:
        self._bits = np.random.PCG64([SEED, *key])

    def uniforms(self, count: int) -> Array:
        """Numbers from 0 up to 1, (count,)."""
        raw = self._bits.random_raw(count)
        drawn: Array = (raw >> np.uint64(11)).astype(np.float64) * 2.0**-53
        return drawn

    def normals(self, count: int) -> Array:
        """Nearly normal numbers, (count,): twelve sixteen-bit pieces of each three raw words, summed."""
        raw = np.atleast_1d(self._bits.random_raw(3 * count)).reshape(count, 3)
        total = np.zeros(count, dtype=np.int64)
        for shift in (0, 16, 32, 48):
            pieces = ((raw >> np.uint64(shift)) & np.uint64(0xFFFF)).astype(np.int64)
            total += pieces[:, 0] + pieces[:, 1] + pieces[:, 2]
        return (total - 393210).astype(np.float64) / 65536.0


def exponential(x: Array) -> Array:
    """e to the x by a short series and eight squarings; plain arithmetic, relative error near 1e-13."""
    y = np.asarray(x, dtype=np.float64) / 256.0
    total = np.ones_like(y)
    for n in (7.0, 6.0, 5.0, 4.0, 3.0, 2.0, 1.0):
        total = 1.0 + y / n * total
    for _ in range(8):
        total = total * total
    return total


def falling(x: Array) -> Array:
    """From 0 far below zero to 1 far above it, (the logistic curve)."""
    return 1.0 / (1.0 + exponential(-np.minimum(np.maximum(x, -30.0), 30.0)))


def by_rank(table: tuple[float, ...], rank: Array) -> Array:
    """The table's value at ranks that need not be whole; past its end its last."""
    values = np.array([*table, table[-1]])
    low = np.minimum(np.maximum(rank, 0.0), len(table) - 1.0)
    whole = np.floor(low).astype(np.int64)
    part = low - whole
    mixed: Array = values[whole] * (1.0 - part) + values[whole + 1] * part
    return mixed


@dataclass
class Contract:
    """One delivery month: per session of its life day, prices in ticks (None where none), lots."""

    year: int
    month: int
    last_trade: datetime.date
    anchor: int
    is_liquid: bool
    first: int
    last: int
    settle: list[int] = field(default_factory=list)
    ranges: list[tuple[int, int, int] | None] = field(default_factory=list)
    volume: list[int] = field(default_factory=list)
    positions: list[int] = field(default_factory=list)


@dataclass
class Factors:
    """What moves a curve, by weekday: near, far, season's strength, volatility over its mean, first part's chance."""

    days: dict[datetime.date, int]
    near: Array
    far: Array
    strength: Array
    volatility: Array
    chance: Array


@dataclass
class MarketData:
    """The true history of a market; `days` are its sessions as traded, contracts index into them."""

    code: str
    calendar: Calendar
    days: list[datetime.date]
    contracts: list[Contract]


def weekdays() -> list[datetime.date]:
    """Every weekday of the sample's ten years."""
    span = (LAST - FIRST).days + 1
    every = [FIRST + datetime.timedelta(days=n) for n in range(span)]
    return [day for day in every if day.weekday() < 5]


def draw_factors(number: int, traits: Traits, events: list[Traits], driver: Array | None) -> Factors:
    """The factors of one market; `driver`, where given, is another market's chance that the near part goes against."""
    days = weekdays()
    place = {day: n for n, day in enumerate(days)}
    draws = Draws(number, 1)
    first, second, third = draws.normals(len(days)), draws.normals(len(days)), draws.normals(len(days))
    if driver is not None:
        first = 0.6 * first - 0.8 * driver
    second = 0.35 * first + 0.9367 * second
    drift = np.zeros(len(days))
    for begin, end, total in traits["drifts"]:
        inside = [place[d] for d in days if begin <= d.isoformat() <= end]
        drift[inside] += total / len(inside)
    near, far, strength, variance = np.zeros(len(days)), np.zeros(len(days)), np.ones(len(days)), np.ones(len(days))
    keep = float(exponential(np.array(-traits["decay"] / 261.0)))
    moved = {place[event["session"]]: event for event in events if "far" in event}
    chi = xi = wave = path = 0.0
    now = 1.0
    for n in range(len(days)):
        sigma = sqrt(now)
        push = moved.get(n)
        path += drift[n]
        if push is not None:
            chi += push.get("near", 0.0)
            xi += push["far"]
            shock = 4.0
        else:
            chi = keep * chi + traits["near_vol"] * sigma * first[n]
            xi = xi - traits["recall"] * xi + traits["far_vol"] * sigma * second[n]
            shock = 0.5 * (first[n] * first[n] + second[n] * second[n])
        wave = 0.99 * wave + 0.02 * third[n]
        near[n], far[n], strength[n], variance[n] = chi, xi + path, 1.0 + wave, now
        now = min(max(0.04 + 0.07 * shock * now + 0.89 * now, 0.35), 6.0)
    return Factors(place, near, far, strength, np.sqrt(variance), first)


def list_contracts(market: Traits, traits: Traits, calendar: Calendar, start: int, end: int) -> list[Contract]:
    """Contracts with a session between the indices start and end of the calendar, in delivery order."""
    contracts = []
    liquid: list[int] = traits["liquid"] if "liquid" in traits else market["delivery_months"]
    for year in range(FIRST.year, LAST.year + 3):
        for month in market["delivery_months"]:
            last_trade = calendar.last_trade(year, month)
            begun = year * 12 + month - 1 - traits["listing"]
            first = calendar.at_or_after(datetime.date(begun // 12, begun % 12 + 1, 1))
            last = calendar.at_or_before(last_trade)
            notice = calendar.first_notice(year, month)
            anchor = last if notice is None else min(last, calendar.at_or_before(notice))
            if last >= start and first <= end:
                contracts.append(Contract(year, month, last_trade, anchor, month in liquid, first, last))
    return contracts


def migrate(
    contracts: list[Contract], traits: Traits, number: int, sessions: Array
) -> tuple[Array, Array, Array, Array]:
    """Where positions and volume stand: share gone on and rank, of positions and then of volume, (contracts, T)."""
    gone = np.zeros((len(contracts), len(sessions)))
    gone_volume = np.zeros_like(gone)
    ahead, ahead_volume = np.zeros(len(sessions)), np.zeros(len(sessions))
    rank, rank_volume = np.zeros_like(gone), np.zeros_like(gone)
    low, high = traits["cross"]
    for n, contract in enumerate(contracts):
        chance = Draws(number, 2, contract.year * 12 + contract.month).uniforms(2)
        middle = contract.anchor - (low + (high - low) * chance[0])
        gone[n] = falling((sessions - middle) / 1.9)
        gone_volume[n] = falling((sessions - middle + 2.0 * chance[1]) / 1.3)
        rank[n], rank_volume[n] = ahead, ahead_volume
        if contract.is_liquid:
            ahead = ahead + (1.0 - gone[n])
            ahead_volume = ahead_volume + (1.0 - gone_volume[n])
    return gone, rank, gone_volume, rank_volume


def trade_market(
    market: Traits, traits: Traits, events: list[Traits], factors: Factors, extra: set[datetime.date], number: int
) -> MarketData:
    """Lay out every contract of a market; `extra` are days on which it traded although its calendar says closed."""
    calendar = Calendar(market)
    inside = {day for day in calendar.days if FIRST <= day <= LAST} | extra
    days = sorted(inside)
    start = calendar.at_or_after(FIRST)
    end = calendar.at_or_before(LAST)
    contracts = list_contracts(market, traits, calendar, start, end)
    of_day = np.array([float(calendar.at_or_before(day)) for day in days])
    gone, rank, gone_volume, rank_volume = migrate(contracts, traits, number, of_day)
    at = np.array([factors.days[day] for day in days])
    tempo = np.ones(len(days))
    pace = 0.0
    for n, z in enumerate(Draws(number, 3).normals(len(days))):
        pace = 0.97 * pace + 0.035 * z
        tempo[n] = 1.0 + max(min(pace, 0.5), -0.5)
    growth = 0.85 + 0.3 * np.arange(len(days)) / len(days)
    for n, contract in enumerate(contracts):
        first_day, last_day = calendar.days[max(contract.first, start)], min(contract.last_trade, LAST)
        span = [k for k, day in enumerate(days) if first_day <= day <= last_day]
        contract.first, contract.last = span[0], span[-1]
        listed = calendar.at_or_after(first_day) if span[0] else calendar.at_or_after(FIRST) - 120
        ages = np.array([max(float(calendar.at_or_before(days[k]) - listed), 0.0) for k in span])
        age = np.minimum(ages / 70.0, 1.0)
        weight = age * (1.0 if contract.is_liquid else 0.003)
        base = growth[span] * tempo[span]
        positions = traits["positions"] * base * weight * by_rank(POSITIONS_BY_RANK, rank[n, span])
        positions = positions * (1.0 - 0.985 * gone[n, span])
        volume = traits["volume"] * base * weight * age * by_rank(VOLUME_BY_RANK, rank_volume[n, span])
        volume = volume * (1.0 - 0.99 * gone_volume[n, span])
        _live(contract, market, traits, events, factors, at[span], [days[k] for k in span], positions, volume, number)
    return MarketData(market["code"], calendar, days, contracts)


def _live(contract: Contract, market: Traits, traits: Traits, events: list[Traits], factors: Factors, at: Array,
          days: list[datetime.date], positions: Array, volume: Array, number: int) -> None:  # fmt: skip
    """Fill one contract's sessions."""
    count = len(days)
    draws = Draws(number, 4, contract.year * 12 + contract.month)
    slow, quick, lots, opening, upper, lower, held = (draws.normals(count) for _ in range(7))
    rounding = draws.uniforms(count)
    years = np.array([float((contract.last_trade - day).days) for day in days]) / 365.0
    fading = exponential(-traits["decay"] * years)
    season = traits["season"].get(str(contract.month), 0.0)
    log_price = (
        factors.far[at] + factors.near[at] * fading + traits["carry"] * years
        + factors.strength[at] * season + traits.get("contango", 0.0) * (1.0 - fading)
    )  # fmt: skip
    price = traits["level"] * exponential(log_price)
    tick = float(market["tick_size"])
    near, far = traits["near_vol"] * fading, traits["far_vol"]
    size = price / tick * factors.volatility[at] * np.sqrt(near * near + far * far)
    multiple, boost, extra = _own_events(contract, market["code"], events, days)
    locked = {event["session"]: event["direction"] for event in events if event["kind"] == "locked limit"}
    limit = floor(float(market["daily_limit"]) / tick + 0.5) if "daily_limit" in market else None
    wander = drift = 0.0
    for k in range(count):
        wander = 0.85 * wander + 0.5 * traits["noise"] * slow[k]
        settle = floor(price[k] * multiple[k] / tick + wander + 0.45 * traits["noise"] * quick[k] + 0.5)
        previous = contract.settle[-1] if contract.settle else None
        if limit is not None and previous is not None:
            reach = limit - 4
            settle = min(max(settle, previous - reach), previous + reach)
            if days[k] in locked:
                settle = previous + locked[days[k]] * limit
        own = extra.get(days[k])
        if own is not None:
            settle = own["settle"]
        traded = floor(volume[k] * float(exponential(np.array(0.3 * lots[k]))) * boost[k] + rounding[k])
        drift = 0.95 * drift + 0.012 * held[k]
        open_lots = floor(positions[k] * (1.0 + drift) + 0.5)
        before = contract.positions[-1] if contract.positions else 0
        if days[k] in locked:
            traded = traded // 60 + 1
            open_lots = before
        if own is not None and own["volume"]:
            traded = floor(float(traits["volume"]) * own["volume"])
        if traded == 0:
            open_lots = before
        elif contract.positions:
            traded = max(traded, abs(open_lots - before))
        contract.settle.append(settle)
        contract.volume.append(traded)
        contract.positions.append(open_lots)
        if traded == 0:
            contract.ranges.append(None)
            continue
        last = settle if previous is None else previous
        if days[k] in locked:
            contract.ranges.append((settle, settle, settle))
            continue
        reach_up = max(float(size[k]), 0.3 * abs(settle - last)) * (0.15 if traded < 20 else 1.0)
        begin = last + floor(0.3 * (settle - last) + 0.22 * reach_up * opening[k] + 0.5)
        high = max(begin, settle) + floor(0.42 * reach_up * abs(upper[k]))
        low = min(begin, settle) - floor(0.42 * reach_up * abs(lower[k]))
        if limit is not None and previous is not None:
            high, low = min(high, previous + limit), max(low, previous - limit)
            begin = min(max(begin, low), high)
        if own is not None and own["low"] is not None:
            high, low = max(begin, settle), min(own["low"], settle)
        if not market.get("may_be_negative", False):
            low = max(low, 1)
        contract.ranges.append((begin, high, low))


def _own_events(
    contract: Contract, code: str, events: list[Traits], days: list[datetime.date]
) -> tuple[Array, Array, dict[datetime.date, Traits]]:
    """A contract's own true events: price multiple and volume multiple by session, and sessions set outright."""
    multiple, boost = np.ones(len(days)), np.ones(len(days))
    outright: dict[datetime.date, Traits] = {}
    name = f"{code}-{contract.year}-{contract.month:02d}"
    for event in events:
        if event.get("contract") != name:
            continue
        if event["kind"] == "squeeze":
            path = event["path"]
            for back, share in enumerate(reversed(path), start=1):
                multiple[-back] = 1.0 + share
                boost[-back] = 6.0
        elif event["kind"] == "negative settle":
            at = days.index(event["session"])
            settle, low = event["settle_ticks"], event["low_ticks"]
            outright[days[at]] = {"settle": settle, "low": low, "volume": event["volume_share"]}
            outright[days[at + 1]] = {"settle": event["next_settle_ticks"], "low": None, "volume": 0.0}
    return multiple, boost, outright
