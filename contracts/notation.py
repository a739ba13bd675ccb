"""Price text to number and back: decimal, 32nds, 64ths, eighths.

Belongs here: how a price is written. Does not belong here: the scale a market is quoted on (`panel.py`) or
what counts as a plausible price (`checks/`).
"""

import re
from functools import lru_cache

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from contracts.errors import NotationError
from contracts.markets import PriceNotation

# Dashes that printed tables use for a minus: hyphen, minus sign, en dash, em dash (AP settlement table, 2018-05-21);
# the other hyphens and dashes that print alike: common practice, no source.
_MINUS = "-\N{MINUS SIGN}\N{EN DASH}\N{EM DASH}\N{HYPHEN}\N{NON-BREAKING HYPHEN}\N{FIGURE DASH}"
# A reader cannot tell these apart, so a layout that declares one of a kind means all of it.
_ALIKE = (
    " \N{NO-BREAK SPACE}\N{NARROW NO-BREAK SPACE}\N{THIN SPACE}",
    "'\N{RIGHT SINGLE QUOTATION MARK}",
)
_FRACTIONS = {
    "\N{VULGAR FRACTION ONE QUARTER}": 0.25, "\N{VULGAR FRACTION ONE HALF}": 0.5,
    "\N{VULGAR FRACTION THREE QUARTERS}": 0.75, "\N{VULGAR FRACTION ONE EIGHTH}": 0.125,
    "\N{VULGAR FRACTION THREE EIGHTHS}": 0.375, "\N{VULGAR FRACTION FIVE EIGHTHS}": 0.625,
    "\N{VULGAR FRACTION SEVEN EIGHTHS}": 0.875,
}  # fmt: skip
# Third digit of a price in 32nds: quarters of a 32nd, the last figure of 0, 2.5, 5 and 7.5 cut off; plus is a half.
_QUARTERS = {"": 0.0, "0": 0.0, "2": 0.25, "5": 0.5, "7": 0.75, "+": 0.5}
_PARTED = re.compile(r"([0-9]{1,9})['\N{RIGHT SINGLE QUOTATION MARK}\-]([0-9]+)(\+?)")


@lru_cache(maxsize=64)
def _decimal_pattern(decimal: str, thousands: str) -> re.Pattern[str]:
    mark = f"[{re.escape(thousands_marks(thousands))}]" if thousands else ""
    whole = rf"(?:[0-9]{{1,3}}(?:{mark}[0-9]{{3}})+|[0-9]+)" if thousands else "[0-9]+"
    point = re.escape(decimal)
    fractions = "".join(_FRACTIONS)
    return re.compile(rf"({whole})?(?:{point}([0-9]*))?([eE][+\-]?[0-9]{{1,3}})?(?:\s?([{fractions}]))?")


def thousands_marks(mark: str) -> str:
    """The marks that a declared thousands mark stands for: a blank means every blank, an apostrophe both."""
    return next((alike for alike in _ALIKE if mark in alike), mark)


def parse_price(text: str, notation: str, decimal: str = ".", thousands: str = "") -> float:
    """Read one price; raises NotationError naming the text and what was expected.

    `notation` is a PriceNotation; `decimal` and `thousands` are the marks of a decimal price.
    """
    bare = text.strip()
    sign = 1.0
    if bare[:1] and bare[0] in _MINUS:
        sign, bare = -1.0, bare[1:].lstrip()
    elif bare[:1] == "+":
        bare = bare[1:]
    kind = PriceNotation(notation)
    value = _decimal(bare, decimal, thousands) if kind is PriceNotation.DECIMAL else _parted(bare, kind)
    if value is None:
        raise NotationError(f"seen {text!r}; expected {_EXPECTED[kind]}")
    return sign * value


_EXPECTED = {
    PriceNotation.DECIMAL: "a decimal price such as 212.25",
    PriceNotation.THIRTY_SECONDS: "a price in 32nds such as 117'165 or 97-12+",
    PriceNotation.SIXTY_FOURTHS: "a price in 64ths such as 1-05",
    PriceNotation.EIGHTHS: "a price in eighths such as 523'2",
}


def _decimal(bare: str, decimal: str, thousands: str) -> float | None:
    match = _decimal_pattern(decimal, thousands).fullmatch(bare)
    if match is None:
        return None
    whole, part, exponent, fraction = match.groups()
    if not whole and not part and not fraction:
        return None
    if fraction and (part is not None or exponent):
        return None
    digits = re.sub("[^0-9]", "", whole or "0")
    value = float(f"{digits}.{part or '0'}{exponent or ''}") + _FRACTIONS.get(fraction or "", 0.0)
    # 1e-400 is no zero, only too small for a double.
    is_lost = value == 0.0 and exponent is not None and (digits + (part or "")).strip("0") != ""
    return None if is_lost else value


def _parted(bare: str, kind: PriceNotation) -> float | None:
    match = _PARTED.fullmatch(bare)
    if match is None:
        return None
    whole, part, plus = int(match[1]), match[2], match[3]
    if kind is PriceNotation.EIGHTHS:
        return whole + int(part) / 8 if len(part) == 1 and int(part) < 8 and not plus else None
    if kind is PriceNotation.SIXTY_FOURTHS:
        return whole + int(part) / 64 if len(part) == 2 and int(part) < 64 and not plus else None
    rest = part[2:] + plus
    if len(part) < 2 or int(part[:2]) > 31 or rest not in _QUARTERS:
        return None
    return whole + (int(part[:2]) + _QUARTERS[rest]) / 32


def format_price(value: float, notation: str) -> str:
    """Write a price in its notation; `parse_price` reads it back.

    Decimal prices are written as short as they can be read back. Raises NotationError for a value that is
    no multiple of the notation's smallest part.
    """
    kind = PriceNotation(notation)
    if kind is PriceNotation.DECIMAL:
        return repr(float(value)).removesuffix(".0")
    sign, size = ("-" if value < 0 else ""), abs(value)
    whole = int(size)
    parts = {PriceNotation.EIGHTHS: 8, PriceNotation.SIXTY_FOURTHS: 64, PriceNotation.THIRTY_SECONDS: 128}[kind]
    count = (size - whole) * parts
    if count != int(count):
        raise NotationError(f"seen {value!r}; expected a multiple of 1/{parts}")
    if kind is PriceNotation.EIGHTHS:
        return f"{sign}{whole}'{int(count)}"
    if kind is PriceNotation.SIXTY_FOURTHS:
        return f"{sign}{whole}-{int(count):02d}"
    return f"{sign}{whole}'{int(count) // 4:02d}{'0257'[int(count) % 4]}"


def parse_prices(texts: pa.Array, notation: str, decimal: str, thousands: str) -> tuple[np.ndarray, np.ndarray]:
    """Read a column of prices; returns float64 values (NaN where unreadable or null) and a mask of unreadable ones."""
    bare = pc.utf8_trim_whitespace(texts)
    values = np.full(len(bare), np.nan)
    plain = _plain_numbers(bare, notation, decimal, thousands)
    if plain is not None:
        return plain, np.zeros(len(bare), dtype=bool)
    bad = np.zeros(len(bare), dtype=bool)
    uniques = bare.dictionary_encode()
    known = np.full(len(uniques.dictionary), np.nan)
    failed = np.zeros(len(uniques.dictionary), dtype=bool)
    for index, text in enumerate(uniques.dictionary.to_pylist()):
        try:
            known[index] = parse_price(text, notation, decimal, thousands)
        except NotationError:
            failed[index] = True
    present = bare.is_valid().to_numpy(zero_copy_only=False)
    codes = uniques.indices.fill_null(0).to_numpy(zero_copy_only=False)
    if len(known):
        values[present] = known[codes[present]]
        bad[present] = failed[codes[present]]
    return values, bad


def _plain_numbers(bare: pa.Array, notation: str, decimal: str, thousands: str) -> np.ndarray | None:
    """The column read in one go where all of it is plain decimal digits; None where a text needs a closer look."""
    if notation != PriceNotation.DECIMAL:
        return None
    marks = thousands_marks(thousands) if thousands else ""
    grouped = f"[0-9]{{1,3}}(?:[{re.escape(marks)}][0-9]{{3}})+|" if marks else ""
    plain = rf"^-?(?:{grouped}[0-9]{{1,300}})(?:{re.escape(decimal)}[0-9]*)?$"
    if not pc.all(pc.match_substring_regex(bare, plain), min_count=0).as_py():
        return None
    for mark in marks:
        bare = pc.replace_substring(bare, mark, "")
    if decimal != ".":
        bare = pc.replace_substring(bare, decimal, ".")
    read = pc.cast(bare, pa.float64())
    return np.asarray(read.to_numpy(zero_copy_only=False), dtype=np.float64)


def scale_prices(values: np.ndarray, factor: float) -> np.ndarray:
    """Prices times a factor; a factor such as 0.01 divides by 100, so that decimal prices stay the nearest doubles."""
    inverse = round(1.0 / factor)
    is_inverse = factor < 1.0 and abs(inverse * factor - 1.0) < 1e-12
    scaled = values / inverse if is_inverse else values * factor
    # Ten decimals of a number below 100,000 are still exact, so that rounding gives the nearest double.
    with np.errstate(invalid="ignore"):
        return np.where(np.abs(scaled) < 1e5, np.round(scaled, 10), scaled)
