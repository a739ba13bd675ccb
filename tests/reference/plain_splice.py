"""The splice in plain loops: what a chain held, turned into the rows of a continuous series.

Belongs here: prices carried, weights, the three series. Does not belong here: when to roll
(`plain_rolls.py`), any import from `contracts/`.
"""

from typing import Any

from tests.reference.plain_market import PlainMarket
from tests.reference.plain_rolls import Chain, Row

MOST_CARRIED = 3
_WORST = ("reported", "repaired", "carried", "missing")


def price_at(market: PlainMarket, contract: str, t: int) -> float | None:
    """Clean settle on t, or the last one of at most three sessions before."""
    for back in range(MOST_CARRIED + 1):
        price = market.prices.get((contract, t - back))
        if price is not None:
            return price
    return None


def status_at(market: PlainMarket, contract: str, t: int) -> str:
    """How the contract's price on t stands."""
    if (contract, t) in market.prices:
        return "repaired" if (contract, t) in market.repaired else "reported"
    return "missing" if price_at(market, contract, t) is None else "carried"


def weights_at(chain: Chain, t: int) -> dict[str, float]:
    """Weights held through session t, the contract that is left first."""
    if chain.first is None:
        raise ValueError(f"nearby {chain.nearby} holds nothing")
    held = {chain.first: 1.0}
    for row in chain.rows:
        if row["effective_on"] <= t:
            weight = row["weight_after"]
            held = {row["incoming"]: 1.0} if weight == 1.0 else {row["outgoing"]: 1.0 - weight, row["incoming"]: weight}
    return held


def _sum(weights: dict[str, float], values: dict[str, float | None]) -> float | None:
    total = 0.0
    for contract, weight in weights.items():
        value = values[contract]
        if value is None:
            return None
        total += weight * value
    return total


def _value(market: PlainMarket, weights: dict[str, float], t: int) -> float | None:
    return _sum(weights, {contract: price_at(market, contract, t) for contract in weights})


def _shift_and_scale(rows: list[Row], t: int) -> tuple[float | None, float | None]:
    shift: float | None = 0.0
    scale: float | None = 1.0
    for row in rows:
        if row["effective_on"] > t:
            shift = None if shift is None or row["gap"] is None else shift + row["gap"]
            scale = None if scale is None or row["ratio"] is None else scale * row["ratio"]
    return shift, scale


def _position(
    market: PlainMarket,
    weights: dict[str, float],
    before: dict[str, float],
    between: list[Row],
    last: int,
    t: int,
) -> tuple[float | None, float | None]:
    """Change and simple return of the position held on t since session `last`, the last one with a price.

    `before` are the weights held on `last`, `between` the ledger rows effective after it and by t.
    """
    now = _value(market, weights, t)
    if now is None or any(row["measured_on"] is None for row in between):
        return None, None
    if all(row["measured_on"] == last for row in between):
        change = 0.0
        for contract, weight in weights.items():
            here, there = price_at(market, contract, t), price_at(market, contract, last)
            if here is None or there is None:
                raise ValueError(f"{contract} has no price on {last} and {t}, where it is held")
            change += weight * (here - there)
        base = _value(market, weights, last)
    else:
        # What a stale roll moves is valued at what was left, plus the gap when both last stood side by side.
        cost = base = _value(market, before, last)
        for row in between:
            cost = None if cost is None else cost + row["gap"]
            base = None if base is None or row["ratio"] is None else base * row["ratio"]
        if cost is None:
            return None, None
        change = now - cost
        # Where a ratio does not exist the return counts from the same value as the change.
        base = cost if base is None else base
    if base is None or base <= 0 or now <= 0:
        return change, None
    return change, now / base - 1


def splice_plain(market: PlainMarket, chain: Chain) -> list[dict[str, Any]]:
    """One row a session from the chain's start to the last session; an empty list where it never starts."""
    if chain.start is None:
        return []
    rows: list[dict[str, Any]] = []
    last: int | None = None
    for t in range(chain.start, len(market.sessions)):
        weights = weights_at(chain, t)
        effective = [row for row in chain.rows if row["effective_on"] == t]
        status = max((status_at(market, c, t) for c in weights), key=_WORST.index)
        settle = _value(market, weights, t)
        shift, scale = _shift_and_scale(chain.rows, t)
        change = simple_return = None
        if last is not None:
            between = [row for row in chain.rows if last < row["effective_on"] <= t]
            change, simple_return = _position(market, weights, weights_at(chain, last), between, last, t)
        held = list(weights)
        row: dict[str, Any] = {
            "session": t,
            "contract": held[0],
            "incoming": held[1] if len(held) == 2 else None,
            "incoming_weight": weights[held[1]] if len(held) == 2 else 0.0,
            "settle": settle,
            "volume": market.volume.get((held[0], t)),
            "open_interest": market.open_interest.get((held[0], t)),
            "shift": shift,
            "scale": scale,
            "back_adjusted": None if settle is None or shift is None else settle + shift,
            "ratio_adjusted": None if settle is None or scale is None else settle * scale,
            "change": change,
            "simple_return": simple_return,
            "growth": None,
            "rolled": bool(effective),
            "status": status,
        }
        for name, values in (("open", market.open), ("high", market.high), ("low", market.low)):
            is_traded = status in ("reported", "repaired")
            row[name] = _sum(weights, {c: values.get((c, t)) for c in held}) if is_traded else None
        rows.append(row)
        if settle is not None:
            last = t
    _compound(rows)
    return rows


def _compound(rows: list[dict[str, Any]]) -> None:
    """Fill growth: 100 on the first priced session after the last break, then compounded."""
    first = 0
    for i, row in enumerate(rows):
        if row["scale"] is None or (row["settle"] is not None and row["settle"] <= 0):
            first = i + 1
    growth: float | None = None
    for row in rows[first:]:
        if row["settle"] is None:
            continue
        if growth is None:
            growth = 100.0
        else:
            growth *= 1 + row["simple_return"]
        row["growth"] = growth
