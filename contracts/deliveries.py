"""Delivery months, their codes, and contract identifiers.

Belongs here: `2025-03` as a thing that sorts, shifts and prints. Does not belong here: when a contract of
that month stops trading (`sessions.py`).
"""

import re
from dataclasses import dataclass
from typing import TypeVar

import numpy as np

# Letters of the twelve delivery months: common practice, no source.
MONTH_CODES = "FGHJKMNQUVXZ"
MONTH_NAMES = ("JAN", "FEB", "MAR", "APR", "MAY", "JUN", "JUL", "AUG", "SEP", "OCT", "NOV", "DEC")
_LONG_MONTH_NAMES = (
    "JANUARY", "FEBRUARY", "MARCH", "APRIL", "MAY", "JUNE", "JULY", "AUGUST", "SEPTEMBER", "OCTOBER", "NOVEMBER",
    "DECEMBER",
)  # fmt: skip

# A whole number, or an array of them.
Whole = TypeVar("Whole", int, np.ndarray)

_DELIVERY = re.compile(r"(\d{4})-(0[1-9]|1[0-2])")


@dataclass(frozen=True, order=True)
class Delivery:
    """A delivery month: four-digit year and month 1 to 12."""

    year: int
    month: int

    def __str__(self) -> str:
        return f"{self.year:04d}-{self.month:02d}"

    def shift(self, months: int) -> "Delivery":
        """The delivery month this many calendar months later (earlier where negative)."""
        index = self.year * 12 + self.month - 1 + months
        return Delivery(index // 12, index % 12 + 1)


def parse_delivery(text: str) -> Delivery:
    """Read `2025-03`; raises ValueError on anything else."""
    match = _DELIVERY.fullmatch(text)
    if match is None:
        raise ValueError(f"seen {text!r}; expected a delivery month such as 2025-03")
    return Delivery(int(match[1]), int(match[2]))


def parse_month(text: str) -> int:
    """Read a month given as a number (`3`, `03`), a code (`H`) or a name (`Mar`, `March`); raises ValueError."""
    bare = text.strip().upper()
    if bare.isdecimal() and bare.isascii() and 1 <= int(bare) <= 12:
        return int(bare)
    if len(bare) == 1 and bare in MONTH_CODES:
        return MONTH_CODES.index(bare) + 1
    for names in (MONTH_NAMES, _LONG_MONTH_NAMES):
        if bare in names:
            return names.index(bare) + 1
    raise ValueError(f"seen {text!r}; expected a month: 1 to 12, a code of {MONTH_CODES}, or a name such as MAR")


def parse_year(text: str, window: int) -> int:
    """Read a year of four digits, or of two within the hundred years that begin with `window`."""
    bare = text.strip()
    if bare.isascii() and bare.isdecimal() and len(bare) == 4:
        return int(bare)
    if bare.isascii() and bare.isdecimal() and len(bare) == 2:
        return window + (int(bare) - window) % 100
    raise ValueError(f"seen {text!r}; expected a year of four or two digits")


def year_of_digit(digit: Whole, month: Whole, session_month: Whole) -> Whole:
    """The delivery year meant by its last digit in a row of a session.

    The first year that ends in `digit` and whose delivery `month` (1 to 12) is not before the month that
    precedes the session's, since a contract may be printed for a few days after its last. `session_month` is
    the session's year * 12 + month - 1. Numbers or arrays of them.
    """
    earliest = -((month - session_month) // 12)
    return earliest + (digit - earliest) % 10


def contract_name(market: str, delivery: Delivery) -> str:
    """The identifier of one contract, e.g. `NWHT-2025-03`."""
    return f"{market}-{delivery}"


def delivery_of(contract: str) -> Delivery:
    """The delivery month of an identifier made by `contract_name`; raises ValueError."""
    return parse_delivery(contract[-7:])
