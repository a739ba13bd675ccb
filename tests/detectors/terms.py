"""The bench's markets: their terms and their nature.

Belongs here: what each synthetic market is like. Does not belong here: drawing its prices (`curves.py`).
"""

from dataclasses import dataclass

MONTHLY = tuple(range(1, 13))
QUARTERLY = (3, 6, 9, 12)


@dataclass(frozen=True)
class Terms:
    """One synthetic market.

    level: typical price; vol: standard deviation of a day's move, as a share of `level`; months: delivery months;
    listed: contracts alive at one time; season: half-range of the seasonal shape over delivery months, share of
    level; samuelson: mean reversion of the near end, a year; near: standard deviation of the near end's own daily
    move, share of vol; slope: daily move of the slope a year of tenor, share of vol; crop: first delivery month of
    the new crop, 0 for none; noise: a contract's own daily noise, share of vol; base: volume of the busiest
    contract; depth: how far out trade reaches, in contracts; idle: what an untraded contract's row shows
    ("marked" to the curve, "still", or "absent"); flat: whether its open, high and low repeat the settle (else
    blank); limit: daily limit, share of level, 0 for none; day, offset: last trading day of the month.
    """

    code: str
    tick: float
    level: float
    vol: float
    months: tuple[int, ...]
    listed: int
    season: float = 0.0
    samuelson: float = 0.5
    near: float = 0.4
    slope: float = 0.15
    crop: int = 0
    noise: float = 0.03
    base: float = 20000.0
    depth: float = 1.0
    idle: str = "marked"
    flat: bool = False
    limit: float = 0.0
    may_be_negative: bool = False
    lag: int = 1
    day: int = 15
    offset: int = 0
    years: int = 5


MARKETS = (
    Terms("BWHA", 0.25, 210.0, 0.016, (3, 5, 9, 12), 6, 0.03, noise=0.05, crop=9, limit=0.07),
    Terms("BWHB", 0.25, 640.0, 0.018, (3, 5, 7, 9, 12), 8, 0.04, noise=0.05, crop=7, base=60000, limit=0.06),
    Terms("BCRN", 0.25, 410.0, 0.015, (3, 5, 7, 9, 12), 9, 0.05, noise=0.04, crop=12, base=90000),
    Terms("BSOY", 0.25, 1150.0, 0.013, (1, 3, 5, 7, 8, 9, 11), 10, 0.04, crop=11, base=70000, depth=0.7, flat=True),
    Terms("BOIL", 0.01, 70.0, 0.021, MONTHLY, 18, 0.01, 1.2, 0.6, 0.25, base=300000, depth=2.0, day=20, offset=-1),
    Terms(
        "BGAS", 0.001, 3.2, 0.028, MONTHLY, 18, 0.15, 2.5, 0.8, 0.2, noise=0.08, base=120000, depth=1.5,
        day=26, offset=-1
    ),
    Terms("BHEA", 0.0001, 2.1, 0.02, MONTHLY, 14, 0.03, 1.0, 0.5, base=30000, day=28, offset=-1, flat=True),
    Terms("BDIE", 0.25, 620.0, 0.019, MONTHLY, 12, 0.02, 1.0, 0.5, noise=0.04, base=40000, depth=0.9, day=10),
    Terms("BCOP", 0.0005, 3.8, 0.013, MONTHLY, 16, 0.0, 0.3, 0.15, 0.06, noise=0.02, base=45000, day=27),
    Terms(
        "BGLD", 0.1, 1800.0, 0.009, (2, 4, 6, 8, 10, 12), 8, 0.0, 0.2, 0.05, 0.02, noise=0.012, base=150000,
        depth=0.5, day=27
    ),
    Terms(
        "BSIL", 0.005, 23.0, 0.017, (3, 5, 7, 9, 12), 7, 0.0, 0.2, 0.06, 0.02, noise=0.015, base=50000,
        depth=0.5, day=27,
    ),
    Terms("BPLT", 0.1, 950.0, 0.015, (1, 4, 7, 10), 4, 0.0, 0.3, 0.1, 0.05, base=9000, depth=0.35, day=27),
    Terms("BCOF", 0.05, 160.0, 0.021, (3, 5, 7, 9, 12), 8, 0.01, 0.5, 0.2, noise=0.02, depth=0.8, day=18),
    Terms("BSUG", 0.01, 18.0, 0.018, (3, 5, 7, 10), 8, 0.03, 0.8, 0.4, noise=0.05, base=60000, day=28, offset=-1),
    Terms("BCOC", 1.0, 2500.0, 0.016, (3, 5, 7, 9, 12), 8, 0.01, 0.5, 0.25, day=14),
    Terms(
        "BCOT", 0.01, 80.0, 0.016, (3, 5, 7, 10, 12), 7, 0.03, crop=12, base=6000, depth=0.6, limit=0.05, idle="still"
    ),
    Terms(
        "BCAT", 0.025, 120.0, 0.01, (2, 4, 6, 8, 10, 12), 7, 0.05, 1.5, 0.5, 0.1, noise=0.15, base=25000,
        limit=0.04, day=28
    ),
    Terms(
        "BHOG", 0.025, 80.0, 0.016, (2, 4, 5, 6, 7, 8, 10, 12), 9, 0.12, 1.8, 0.6, 0.1, noise=0.15, base=15000,
        depth=0.9, limit=0.05,
    ),
    Terms("BIDX", 0.25, 4000.0, 0.012, QUARTERLY, 4, 0.0, 0.1, 0.01, 0.008, noise=0.008, base=900000, depth=0.3, lag=0),
    Terms(
        "BIDY", 1.0, 13500.0, 0.013, QUARTERLY, 3, 0.0, 0.1, 0.01, 0.01, noise=0.01, base=60000, depth=0.2, flat=True,
    ),
    Terms(
        "BBND", 0.015625, 130.0, 0.005, QUARTERLY, 3, 0.0, 0.1, 0.05, 0.03, noise=0.015, base=500000, depth=0.3, day=20,
    ),
    Terms("BRAT", 0.005, 96.5, 0.0006, QUARTERLY, 16, 0.0, 0.2, 0.25, 0.3, noise=0.04, base=300000, depth=3.0),
    Terms("BVOL", 0.05, 19.0, 0.03, MONTHLY, 8, 0.0, 6.0, 1.5, 0.1, noise=0.08, base=80000, depth=1.2, day=18),
    Terms(
        "BPWR", 0.05, 20.0, 0.04, MONTHLY, 8, 0.3, 2.5, 0.8, 0.2, noise=0.12, base=8000, depth=0.8,
        may_be_negative=True, day=24, offset=-1,
    ),
    Terms("BRBR", 0.1, 170.0, 0.015, MONTHLY, 9, 0.01, 0.8, 0.3, noise=0.06, base=800, depth=0.9, idle="still", day=22),
    Terms(
        "BMLK", 0.01, 17.0, 0.014, MONTHLY, 12, 0.04, 1.5, 0.5, 0.15, noise=0.12, base=400, depth=1.3,
        idle="absent", day=25
    ),
    Terms("BRIC", 5.0, 14000.0, 0.011, (1, 3, 5, 7, 9, 11), 6, 0.02, noise=0.08, base=400, depth=0.6, idle="still"),
    Terms(
        "BMIL", 0.5, 330.0, 0.014, (1, 3, 5, 8, 11), 9, 0.03, noise=0.05, crop=8, base=3000, depth=0.7,
        idle="absent", lag=0,
    ),
)  # fmt: skip

# A subset with something of everything, for the everyday run.
FEW = ("BWHA", "BGLD", "BPWR", "BIDX", "BRIC")


def terms_of(code: str) -> Terms:
    """The terms of one market; raises KeyError."""
    return {terms.code: terms for terms in MARKETS}[code]


def market_text(terms: Terms, closed: list[str], lag: int) -> str:
    """The market's declaration."""
    limit = f"daily_limit = {round(terms.limit * terms.level / terms.tick) * terms.tick:.10g}\n" if terms.limit else ""
    return f"""
code = "{terms.code}"
name = "Bench market {terms.code}"
exchange = "XBEN"
currency = "EUR"
unit = "1 t"
point_value = 1.0
tick_size = {terms.tick!r}
may_be_negative = {str(terms.may_be_negative).lower()}
{limit}delivery_months = {list(terms.months)}
closed = [{", ".join(closed)}]
open_interest_lag = {lag}

[last_trade]
month_offset = {terms.offset}
rule = "FREQ=MONTHLY;BYMONTHDAY={terms.day}"
steps = [{{if_closed = "previous"}}]

[plans.by_calendar]
trigger = "calendar"
backstop = 5
"""
