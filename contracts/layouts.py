"""A raw file layout as declared.

Belongs here: which files a layout claims and how it says their text is written. Does not belong here:
reading them (`intake.py`).
"""

import datetime
import re
from typing import Annotated, Any

from pydantic import AfterValidator, BeforeValidator, Field

from contracts.declared import CODE, Declared, insist, line_of, read_declaration
from contracts.deliveries import Delivery, contract_name, parse_month, parse_year
from contracts.errors import Mistake

_GROUPS = frozenset({"market", "year", "month", "month_code"})
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
    try:
        "".encode(value)
    except LookupError:
        raise ValueError(f"seen {value!r}; expected an encoding such as 'utf-8' or 'cp1252'") from None
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


class Layout(Declared):
    """How the files of one kind are named and written."""

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
    if market is not None and re.fullmatch(CODE, market) is None:
        raise ValueError(f"{path}: seen the market {market!r}; expected a market code of A-Z and 0-9, at most 12")
    year = parse_year(groups["year"], layout.year_window) if "year" in groups else None
    month_text = groups.get("month", groups.get("month_code"))
    return Claim(market=market, year=year, month=parse_month(month_text) if month_text is not None else None)


def parse_layout(text: str, file: str) -> Layout:
    """Read one layout file; raises DeskError with every mistake it has."""
    return insist(*read_layout(text, file))


def read_layout(text: str, file: str) -> tuple[Layout | None, list[Mistake]]:
    """Read one layout file; returns what could be read and every mistake it has."""
    layout, _, mistakes = read_declaration(Layout, text, file)
    return layout, mistakes + (_inconsistencies(layout, text, file) if layout is not None else [])


def _inconsistencies(layout: Layout, text: str, file: str) -> list[Mistake]:
    groups = set(re.compile(layout.files).groupindex)
    found: list[Mistake] = []

    def add(key: str, seen: str, expected: str) -> None:
        found.append(Mistake(file, key, seen, expected, line_of(text, tuple(key.split(".")))))

    for name, given in (
        ("market", {"market"} & groups),
        ("year", {"year"} & groups),
        ("month", {"month", "month_code"} & groups),
    ):
        column = getattr(layout.columns, name)
        if not given and column is None:
            add(
                "files",
                f"no group {name!r} and no column for it",
                f"one of the two, so that the {name} of a row is known",
            )
        if given and column is not None:
            add(f"columns.{name}", f"{name} both in files and in a column", "one of the two")
    headers = [header for header in layout.columns.model_dump().values() if header is not None]
    twice = sorted({header for header in headers if headers.count(header) > 1})
    if twice:
        add("columns", f"the header {twice[0]!r} twice", "a header of its own for each column")
    marks = [mark for mark in (layout.decimal, layout.thousands) if mark]
    if len(set(marks)) < len(marks) or layout.decimal == layout.delimiter:
        add(
            "decimal",
            f"{layout.decimal!r} with delimiter {layout.delimiter!r} and thousands {layout.thousands!r}",
            "three different marks",
        )
    return found
