"""How each kind of fault of one contract's prices looks.

Belongs here: one function a kind; each plants around a session and says whether it could. Does not belong here: which
kinds go where (`mix.py`).
"""

import numpy as np

from tests.detectors.curves import HIGH, LOW, OPEN, SETTLE, VOLUME
from tests.detectors.faults import Planter, price_jump


def decimal_shift(p: Planter, session: int) -> bool:
    """Ten or a hundred times too large or small, settle only or the whole bar."""
    contract = p.pick(session)
    if contract is None or abs(p.truth(session, contract)) < 20 * p.tick:
        return False
    factor = float(p.rng.choice([10.0, 100.0, 0.1, 0.01]))
    whole = bool(p.rng.random() < 0.5)
    p.put(session, contract, round(p.truth(session, contract) * factor, 8), whole, factor)
    p.note("decimal_shift", f"x{factor:g} {'bar' if whole else 'settle'}", session, contract, size=factor)
    return True


def reverting_spike(p: Planter, session: int) -> bool:
    """4% to 15% off for one session, settle only or the whole bar."""
    contract = p.pick(session)
    if contract is None:
        return False
    jump = price_jump(p, session, contract)
    wrong = p.on_tick(p.truth(session, contract) + jump)
    if not p.grown.terms.may_be_negative and wrong <= 0:
        return False
    whole = bool(p.rng.random() < 0.5)
    p.put(session, contract, wrong, whole)
    p.note("reverting_spike", "bar" if whole else "settle", session, contract, size=jump)
    return True


def curve_break(p: Planter, session: int) -> bool:
    """Off by 4% to 15% for two or three sessions, or for good against its own range."""
    for_good = p.rng.random() < 0.3
    length = int(p.rng.integers(10, 25)) if for_good else int(p.rng.integers(2, 4))
    contract = p.pick(session, length=length)
    if contract is None:
        return False
    jump = price_jump(p, session, contract)
    if not p.grown.terms.may_be_negative and p.truth(session, contract) + jump <= 0:
        return False
    whole = not for_good and p.rng.random() < 0.5
    for at in range(session, session + length):
        p.put(at, contract, p.on_tick(p.truth(at, contract) + jump), bool(whole))
    form = "level shift" if for_good else f"{length} sessions, {'bar' if whole else 'settle'}"
    p.note("curve_break", form, session, contract, length, size=jump)
    return True


def digits_swapped(p: Planter, session: int) -> bool:
    """Two neighbouring figures of the settle's text change places; at least 8 ticks and half a day's move away."""
    contract = p.pick(session)
    if contract is None:
        return False
    truth = p.truth(session, contract)
    text = f"{abs(truth):.{p.grown.decimals}f}"
    base = p.grown.terms.level if p.grown.terms.may_be_negative else abs(truth)
    options = []
    for place in range(len(text) - 1):
        if "." in text[place : place + 2]:
            continue
        swapped = text[:place] + text[place + 1] + text[place] + text[place + 2 :]
        wrong = float(swapped) * (1 if truth >= 0 else -1)
        # A power of ten or nought would be another fault.
        near = 0.1 < abs(wrong / truth) < 9.0 if truth else False
        if near and abs(wrong - truth) >= max(8 * p.tick, 0.5 * p.grown.terms.vol * base):
            options.append(wrong)
    if not options:
        return False
    wrong = float(p.rng.choice(options))
    p.put(session, contract, wrong, False)
    p.note("digits_swapped", "settle", session, contract, size=wrong - truth)
    return True


def sign_flipped(p: Planter, session: int) -> bool:
    """The settle or the whole bar with the other sign; at least 20 ticks from nought."""
    contract = p.pick(session)
    if contract is None:
        return False
    truth = p.truth(session, contract)
    if abs(truth) < 20 * p.tick or abs(truth) < 0.15 * p.grown.terms.level:
        return False
    whole = bool(p.rng.random() < 0.4)
    p.put(session, contract, -truth, whole, -1.0)
    if whole:
        values = p.planted.values
        high, low = values[HIGH, session, contract], values[LOW, session, contract]
        values[HIGH, session, contract], values[LOW, session, contract] = low, high
    p.note("sign_flipped", "bar" if whole else "settle", session, contract, size=-2 * truth)
    return True


def neighbours_price(p: Planter, session: int) -> bool:
    """Another delivery's whole row under this one's name, at least 6 ticks and a quarter of a day's move away."""
    contract = p.pick(session)
    if contract is None:
        return False
    values = p.grown.values
    truth = p.truth(session, contract)
    base = p.grown.terms.level if p.grown.terms.may_be_negative else abs(truth)
    others = [
        other for other in (contract - 2, contract - 1, contract + 1, contract + 2)
        if 0 <= other < values.shape[2] and values[VOLUME, session, other] > 0
        and not p.taken[session, other]
        and abs(values[SETTLE, session, other] - truth) >= max(6 * p.tick, 0.25 * p.grown.terms.vol * base)
    ]  # fmt: skip
    if not others:
        return False
    other = int(p.rng.choice(others))
    p.planted.values[:, session, contract] = values[:, session, other]
    p.note("neighbours_price", f"{other - contract:+d}", session, contract, size=p.truth(session, other) - truth)
    return True


def not_positive(p: Planter, session: int) -> bool:
    """A settle of nought where that cannot be."""
    contract = p.pick(session)
    if contract is None or p.grown.terms.may_be_negative:
        return False
    p.put(session, contract, 0.0, False)
    p.note("not_positive", "nought", session, contract, size=-p.truth(session, contract))
    return True


def limit_exceeded(p: Planter, session: int) -> bool:
    """A settle beyond the daily limit, by up to half of it, and back."""
    limit = p.grown.market.daily_limit
    contract = p.pick(session)
    if limit is None or contract is None:
        return False
    before, truth = p.truth(session - 1, contract), p.truth(session, contract)
    wrong = p.on_tick(before + float(p.rng.choice([-1, 1]) * p.rng.uniform(1.1, 1.5)) * limit)
    if wrong <= 0 or abs(wrong - truth) < 0.04 * truth:
        return False
    p.put(session, contract, wrong, False)
    p.note("limit_exceeded", "settle", session, contract, size=wrong - truth)
    return True


def stale_price(p: Planter, session: int) -> bool:
    """A traded contract's settle (or whole row but its volume) stands for 6 to 12 sessions while the curve moves."""
    length = int(p.rng.integers(6, 13))
    contract = p.pick(session, most=100, length=length)
    if contract is None:
        return False
    run = slice(session, session + length)
    settles = p.grown.values[SETTLE, session - 1 : session + length, contract]
    moves = np.abs(np.diff(settles))
    if (p.grown.values[VOLUME, run, contract] < 20).any() or np.mean(moves >= 3 * p.tick) < 0.7:
        return False
    p.planted.values[SETTLE, run, contract] = settles[0]
    whole = bool(p.rng.random() < 0.5)
    if whole:
        for place in (OPEN, HIGH, LOW):
            p.planted.values[place, run, contract] = p.grown.values[place, session - 1, contract]
    # The run may truly have begun before: sessions on which the price happened to stand.
    begun = session
    while p.truth(begun - 1, contract) == p.truth(begun - 2, contract) and session - begun < 5:
        begun -= 1
    form = f"{length} sessions, {'bar' if whole else 'settle'}"
    p.note("stale_price", form, begun, contract, session - begun + length)
    return True


def curve_kinked(p: Planter, session: int) -> bool:
    """An inner contract's whole bar drifts 5% to 15% off its neighbours, without a jump, stands there and drifts back.

    Either from its first row on (then it drifts back only), or within its life.
    """
    terms, values = p.grown.terms, p.grown.values
    ramp, stay = int(p.rng.integers(20, 31)), int(p.rng.integers(10, 31))
    born = p.rng.random() < 0.4
    length = stay + ramp + (0 if born else ramp)
    if born:
        first = np.array([np.argmax(np.isfinite(values[SETTLE, :, c])) for c in range(values.shape[2])])
        columns = [c for c in np.flatnonzero((first >= session) & (first < session + 60)) if first[c] > 5]
        if not columns:
            return False
        contract = int(columns[0])
        session = int(first[contract])
        if p.taken[session : session + length + 3, contract].any():
            return False
    else:
        picked = p.pick(session, least=20, most=200, length=length)
        if picked is None:
            return False
        contract = picked
    run = slice(session, session + length)
    rows = values[SETTLE, run]
    if len(rows) < length or session + length + 3 >= len(p.grown.days) or not np.isfinite(rows[:, contract]).all():
        return False
    nearer, farther = np.isfinite(rows[:, :contract]).any(axis=1), np.isfinite(rows[:, contract + 1 :]).any(axis=1)
    if not nearer.all() or (not farther.all() and not born):
        return False
    shape = np.concatenate(([] if born else np.linspace(0, 1, ramp), np.ones(stay), np.linspace(1, 0, ramp)))
    base = terms.level if terms.may_be_negative else float(np.median(rows[:, contract]))
    size = float(p.rng.choice([-1, 1]) * p.rng.uniform(0.05, 0.15)) * base
    for step, at in enumerate(range(session, session + length)):
        p.put(at, contract, p.on_tick(p.truth(at, contract) + size * shape[step]), True)
    if not terms.may_be_negative and (p.planted.values[SETTLE, run, contract] <= 0).any():
        p.planted.values[:, run, contract] = values[:, run, contract]
        return False
    p.note("curve_kinked", "from its first row" if born else "drift", session, contract, length, size=size)
    return True
