"""The trend-sign score in plain loops, and what a fault left standing would have done to it.

Belongs here: signs, scores, sessions whose score differs. Does not belong here: any import from `contracts/`.
"""

from dataclasses import replace

from tests.reference.plain_market import PlainMarket
from tests.reference.plain_rolls import Chain
from tests.reference.plain_splice import splice_plain

LOOK_BACKS = (5, 10, 21, 42)


def plain_score(values: list[float | None], t: int, look_backs: tuple[int, ...] = LOOK_BACKS) -> int | None:
    """Sum of the signs of values[t] - values[t - L]; None where a look-back has no value on one of its ends.

    A difference below a billionth is rounding and has no sign.
    """
    score = 0
    for back in look_backs:
        now = values[t]
        then = values[t - back] if t - back >= 0 else None
        if now is None or then is None:
            return None
        if abs(now - then) < 1e-9 * max(1.0, abs(now)):
            continue
        score += 1 if now > then else -1
    return score


def count_different(
    one: list[float | None], other: list[float | None], look_backs: tuple[int, ...] = LOOK_BACKS
) -> int:
    """Sessions whose score differs between two series of equal length."""
    if len(one) != len(other):
        raise ValueError(f"{len(one)} and {len(other)} sessions cannot be compared")
    different = 0
    for t in range(len(one)):
        if plain_score(one, t, look_backs) != plain_score(other, t, look_backs):
            different += 1
    return different


def impact_of_gap(
    back_adjusted: list[float | None], effective: int, gap: float, look_backs: tuple[int, ...] = LOOK_BACKS
) -> int:
    """Sessions whose score would differ had the gap of a roll effective on index `effective` been left in."""
    left_in: list[float | None] = []
    for i, value in enumerate(back_adjusted):
        left_in.append(value - gap if value is not None and i < effective else value)
    return count_different(back_adjusted, left_in, look_backs)


def impact_of_price(
    market: PlainMarket,
    chain: Chain,
    contract: str,
    session: int,
    reported: float,
    look_backs: tuple[int, ...] = LOOK_BACKS,
) -> int:
    """Sessions whose score would differ had `reported` stood as the contract's settle, all rolls as they are."""
    return impact_of_prices(market, chain, contract, {session: reported}, look_backs)


def impact_of_prices(
    market: PlainMarket,
    chain: Chain,
    contract: str,
    reported: dict[int, float],
    look_backs: tuple[int, ...] = LOOK_BACKS,
) -> int:
    """Sessions whose score would differ had these stood as the contract's settles by session, all rolls as they are.

    A roll measured on one of the sessions is measured on the reported price too.
    """
    prices = dict(market.prices)
    for session, price in reported.items():
        prices[(contract, session)] = price
    rows = []
    for row in chain.rows:
        row = dict(row)
        measured = row["measured_on"]
        if measured in reported and contract in (row["outgoing"], row["incoming"]):
            left, right = prices[(row["outgoing"], measured)], prices[(row["incoming"], measured)]
            row["gap"] = (row["weight_after"] - row["weight_before"]) * (right - left)
        rows.append(row)
    before = [row["back_adjusted"] for row in splice_plain(market, chain)]
    after = [row["back_adjusted"] for row in splice_plain(replace(market, prices=prices), replace(chain, rows=rows))]
    return count_different(before, after, look_backs)
