"""A raw file layout as declared.

Belongs here: which files a layout claims and how it says their text is written. Does not belong here:
reading them (`intake.py`).
"""

import codecs
import datetime
import re
from dataclasses import dataclass
from typing import Annotated, Any

from pydantic import AfterValidator, BeforeValidator, Field

from contracts.declared import CODE, Declared, insist, line_of, read_declaration
from contracts.deliveries import Delivery, contract_name, parse_month, parse_year
from contracts.errors import Mistake

_GROUPS = frozenset({"market", "year", "month", "month_code"})
# Encodings of more than one byte a character in which a line end is still found by its own bytes.
_WIDE_ENCODINGS = frozenset({"utf-8", "utf-8-sig", "utf-16", "utf-16-le", "utf-16-be"})
MARKET_CODE = "a market code of A-Z and 0-9, at most 12"
# Formats without a mark between two figures.
_COMPACT = re.compile(r"%[a-zA-Z]%[a-zA-Z]")
PRICE_FIELDS = ("open", "high", "low", "settle")
BAR_FIELDS = (*PRICE_FIELDS, "volume", "open_interest")


def _expression(value: str) -> str:
    try:
        pattern = re.compile(value)
    except re.error as error:
        raise ValueError(f"seen {value!r} ({error}); expected a regular expression") from None
    strange = set(pattern.groupindex) - _GROUPS
    if strange:
        raise ValueError(f"seen the group {sorted(strange)[0]!r}; expected groups among {', '.join(sorted(_GROUPS))}")
    return value


def _encoding(value: str) -> str:
    expected = "an encoding such as 'utf-8', 'utf-16', 'latin-1' or 'cp1252'"
    try:
        name = codecs.lookup(value).name
        # One character a byte, and the first 128 as in ASCII.
        table = bytes(range(256)).decode(name, errors="replace")
        is_narrow = len(table) == 256 and table[:128].encode("ascii") == bytes(range(128))
    except (LookupError, ValueError):
        is_narrow, name = False, ""
    if not is_narrow and name not in _WIDE_ENCODINGS:
        raise ValueError(f"seen {value!r}; expected {expected}")
    return value


def _not_rows(value: str) -> str:
    try:
        matches_all = re.match(value, "") is not None
    except re.error as error:
        raise ValueError(f"seen {value!r} ({error}); expected a regular expression") from None
    if matches_all:
        raise ValueError(f"seen {value!r}, which matches every line; expected what footers and notes begin with")
    return value


def _date_format(value: str) -> str:
    probe = datetime.date(2001, 11, 23)
    try:
        read = datetime.datetime.strptime(probe.strftime(value), value).date()
    except ValueError:
        read = None
    if read != probe:
        raise ValueError(f"seen {value!r}; expected a date format with day, month and year, such as '%Y-%m-%d'")
    return value


def _tuple(value: Any) -> Any:
    return tuple(value) if isinstance(value, list) else value


def _fields(value: tuple[str, ...]) -> tuple[str, ...]:
    strange = [name for name in value if name not in BAR_FIELDS]
    if strange:
        raise ValueError(f"seen {strange[0]!r}; expected fields among {', '.join(BAR_FIELDS)}")
    return value


def _scale(value: Any) -> Any:
    return float(value) if isinstance(value, int) and not isinstance(value, bool) else value


OneCharacter = Annotated[str, Field(min_length=1, max_length=1)]


class Headers(Declared):
    """Header names of the columns, by what they hold."""

    session: str
    open: str | None = None
    high: str | None = None
    low: str | None = None
    settle: str
    volume: str | None = None
    open_interest: str | None = None
    market: str | None = None
    year: str | None = None
    month: str | None = None
    contract: str | None = None


class Layout(Declared):
    """How the files of one kind are named and written.

    `not_rows` is an expression that the beginnings of footers and notes below the header match; `contract_code`
    one that a whole cell of the column `contract` matches, with groups as in `files`.
    """

    files: Annotated[str, AfterValidator(_expression)]
    delimiter: OneCharacter = ","
    encoding: Annotated[str, AfterValidator(_encoding)] = "utf-8"
    date_format: Annotated[str, AfterValidator(_date_format)] = "%Y-%m-%d"
    decimal: OneCharacter = "."
    thousands: Annotated[str, Field(max_length=1)] = ""
    missing: Annotated[tuple[str, ...], BeforeValidator(_tuple)] = ("",)
    skip_lines: Annotated[int, Field(ge=0, le=1000)] = 0
    comment: Annotated[str, Field(max_length=8)] = ""
    price_scale: Annotated[float, BeforeValidator(_scale), Field(gt=0, allow_inf_nan=False)] = 1.0
    zero_is_missing: Annotated[tuple[str, ...], BeforeValidator(_tuple), AfterValidator(_fields)] = ()
    not_rows: Annotated[str | None, AfterValidator(_not_rows)] = None
    contract_code: Annotated[str | None, AfterValidator(_expression)] = None
    year_window: Annotated[int, Field(ge=1800, le=2100)] = 1970
    columns: Headers


class Claim(Declared):
    """What a file's path says about its rows: market, delivery, either, or neither."""

    market: str | None = None
    year: int | None = None
    month: int | None = None

    @property
    def contract(self) -> str | None:
        """The contract the whole file belongs to; None where its rows say it."""
        if self.market is None or self.year is None or self.month is None:
            return None
        return contract_name(self.market, Delivery(self.year, self.month))


def claim_file(layout: Layout, path: str) -> Claim | None:
    """What the layout reads from a path below the raw folder; None where it does not claim the file.

    Raises ValueError where the expression matches and a group does not hold what its name says.
    """
    match = re.fullmatch(layout.files, path)
    if match is None:
        return None
    groups = {name: text for name, text in match.groupdict().items() if text is not None}
    market = groups.get("market")
    if market is not None:
        try:
            read_market(market)
        except ValueError as error:
            raise ValueError(f"{path}: {error}") from None
    year = parse_year(groups["year"], layout.year_window) if "year" in groups else None
    month_text = groups.get("month", groups.get("month_code"))
    return Claim(market=market, year=year, month=parse_month(month_text) if month_text is not None else None)


def read_market(text: str) -> str:
    """The market code that a text is; raises ValueError where it is none."""
    if re.fullmatch(CODE, text) is None:
        raise ValueError(f"seen the market {text!r}; expected {MARKET_CODE}")
    return text


@dataclass(frozen=True)
class ContractCode:
    """What a contract's code in a cell says: market, year or only its last digit, month; None where it does not."""

    market: str | None
    year: int | None
    digit: int | None
    month: int | None


def read_code(layout: Layout, text: str) -> ContractCode:
    """Read a trimmed cell of the column `contract`; raises ValueError where it is not as the layout says."""
    match = re.fullmatch(layout.contract_code or "", text, re.IGNORECASE)
    groups = match.groupdict() if match else {}
    if match is None or None in groups.values():
        raise ValueError(f"seen {text!r}; expected a contract written as {layout.contract_code}")
    market = read_market(groups["market"].upper()) if "market" in groups else None
    year, month = groups.get("year"), groups.get("month", groups.get("month_code"))
    is_digit = year is not None and re.fullmatch("[0-9]", year) is not None
    return ContractCode(
        market,
        parse_year(year, layout.year_window) if year is not None and not is_digit else None,
        int(year) if year is not None and is_digit else None,
        parse_month(month) if month is not None else None,
    )


def market_in_code(layout: Layout, text: str) -> str:
    """The market that a cell of the column `contract` names; empty where it cannot be read or names none."""
    try:
        return read_code(layout, text.strip()).market or ""
    except ValueError:
        return ""


def place_columns(columns: Headers, header: list[str]) -> dict[str, int]:
    """Where each declared column stands among trimmed header names; raises ValueError unless each stands there once."""
    places: dict[str, int] = {}
    for name, wanted in columns:
        if wanted is None:
            continue
        count = header.count(wanted)
        if count != 1:
            there = "".join(
                mark if mark.isprintable() else "\N{REPLACEMENT CHARACTER}" for mark in ", ".join(header)[:200]
            )
            seen = "twice" if count else f"not among {there}"
            raise ValueError(f"column {wanted!r} ({name}) is {seen}; expected once")
        places[name] = header.index(wanted)
    return places


def groups_of(expression: str | None) -> frozenset[str]:
    """The named groups of a declared expression."""
    return frozenset(re.compile(expression or "").groupindex)


def read_day(text: str, date_format: str) -> datetime.date:
    """Read a date; raises ValueError, also where a figure is missing that the format has no mark to notice it by."""
    day = datetime.datetime.strptime(text, date_format)
    # Of %Y%m%d alone, 2024112 would be a day too.
    if _COMPACT.search(date_format) and day.strftime(date_format).casefold() != text.casefold():
        raise ValueError(f"seen {text!r}; expected a date as {date_format}")
    return day.date()


def parse_layout(text: str, file: str) -> Layout:
    """Read one layout file; raises DeskError with every mistake it has."""
    return insist(*read_layout(text, file))


def read_layout(text: str, file: str) -> tuple[Layout | None, list[Mistake]]:
    """Read one layout file; returns what could be read and every mistake it has."""
    layout, _, mistakes = read_declaration(Layout, text, file)
    return layout, mistakes + (_inconsistencies(layout, text, file) if layout is not None else [])


def _inconsistencies(layout: Layout, text: str, file: str) -> list[Mistake]:
    groups, coded = groups_of(layout.files), groups_of(layout.contract_code)
    found: list[Mistake] = []

    def add(key: str, seen: str, expected: str) -> None:
        found.append(Mistake(file, key, seen, expected, line_of(text, tuple(key.split(".")))))

    if layout.contract_code is not None and layout.columns.contract is None:
        add("contract_code", "no column 'contract'", "a header for it in [columns]")
    if layout.contract_code is None and layout.columns.contract is not None:
        add("columns.contract", "no key 'contract_code'", "an expression that says how its cells are read")
    for name, names in (("market", {"market"}), ("year", {"year"}), ("month", {"month", "month_code"})):
        column = getattr(layout.columns, name)
        if not names & groups and not names & coded and column is None:
            add(
                "files",
                f"no group {name!r} and no column for it",
                f"one of the two, so that the {name} of a row is known",
            )
        if names & groups and column is not None:
            add(f"columns.{name}", f"{name} both in files and in a column", "one of the two")
        if names & coded and (names & groups or column is not None):
            other = "files" if names & groups else "a column of its own"
            add("contract_code", f"{name} both in contract_code and in {other}", "one of the two")
    headers = [header for header in layout.columns.model_dump().values() if header is not None]
    twice = sorted({header for header in headers if headers.count(header) > 1})
    if twice:
        add("columns", f"the header {twice[0]!r} twice", "a header of its own for each column")
    if layout.delimiter in '"\r\n':
        add("delimiter", repr(layout.delimiter), "a mark that is neither a quotation mark nor a line end")
    marks = [mark for mark in (layout.decimal, layout.thousands) if mark]
    if len(set(marks)) < len(marks) or layout.decimal == layout.delimiter:
        add(
            "decimal",
            f"{layout.decimal!r} with delimiter {layout.delimiter!r} and thousands {layout.thousands!r}",
            "three different marks",
        )
    return found
