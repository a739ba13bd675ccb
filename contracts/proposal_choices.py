"""The choices of a proposed layout for files that read alike, each with its evidence and what it leaves open.

Belongs here: what is decided over all files of a group at once. Does not belong here: what a single file shows
(`proposal_text.py`), whether the layout holds (`proposal_trial.py`).
"""

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import Any

from contracts.declared import CODE
from contracts.errors import NotationError
from contracts.layouts import BAR_FIELDS, PRICE_FIELDS, Layout
from contracts.markets import PriceNotation
from contracts.notation import parse_price
from contracts.proposal_columns import normalise
from contracts.proposal_marks import (
    Marks,
    best_formats,
    best_marks,
    choose_format,
    choose_marks,
    choose_notation,
    is_missing,
    is_number,
    read_day,
    shape_of,
)
from contracts.proposal_paths import Span, is_month, read_codes
from contracts.proposal_text import Look
from contracts.proposal_trial import counted

COUNT_FIELDS = ("volume", "open_interest")
_HUNDREDTHS = frozenset(("cents", "cent", "ct", "cts", "pence", "hundredths"))
# Optional keys of a layout; a proposal uses those that layouts have.
HAS_CONTRACT = "contract_code" in Layout.model_fields
HAS_NOT_ROWS = "not_rows" in Layout.model_fields
_MOST_FOOTERS = 8
# What stands in fewer rows than one of so many is a slip, not a way of writing.
_RARE = 500


@dataclass(frozen=True)
class Evidence:
    """What speaks for one choice: the layout's key, what was chosen, and why, in one line."""

    key: str
    choice: str
    text: str


@dataclass
class Choices:
    """The keys of a layout as they are decided, in the order in which they will be written."""

    keys: dict[str, Any] = field(default_factory=dict)
    columns: dict[str, str] = field(default_factory=dict)
    evidence: list[Evidence] = field(default_factory=list)
    unsure: list[str] = field(default_factory=list)
    notation: str = PriceNotation.DECIMAL.value

    def choose(self, key: str, value: Any, text: str, is_written: bool = True) -> None:
        """Decide a key; without `is_written` its default already says so."""
        if is_written:
            self.keys[key] = value
        shown = value if isinstance(value, str) else ", ".join(map(repr, value)) if isinstance(value, tuple) else value
        self.evidence.append(Evidence(key, str(shown), text))


def cells(looks: Sequence[Look], name: str) -> list[str]:
    """The trimmed cells of a field in all files; none where no column holds it."""
    return [text for look in looks if name in look.columns.places for text in look.texts(name)]


def shapes(looks: Sequence[Look], names: Sequence[str]) -> Counter[str]:
    """Shapes of the values of some fields, without missing marks."""
    found = _given(looks, names)
    merged: Counter[str] = Counter()
    for text, count in found.items():
        merged[shape_of(text)] += count
    return merged


def _given(looks: Sequence[Look], names: Sequence[str]) -> Counter[str]:
    return Counter(text for name in names for text in cells(looks, name) if not is_missing(text))


def formats_of(look: Look) -> frozenset[str]:
    """The date formats that read the most of a file's sessions."""
    return best_formats([text for text in look.texts("session") if text])


def marks_of(look: Look) -> frozenset[Marks]:
    """The decimal and thousands marks that read the most of a file's numbers."""
    prices = Counter[str]() if has_parts(look) else shapes([look], PRICE_FIELDS)
    return best_marks(prices, shapes([look], COUNT_FIELDS), look.delimiter)


def has_parts(look: Look) -> bool:
    """Whether a file's prices are in 32nds, 64ths or eighths."""
    return choose_notation(_given([look], PRICE_FIELDS)).value != PriceNotation.DECIMAL


def span_of(look: Look, date_format: str) -> Span | None:
    """First and last session of a file; None where no date reads."""
    days = [day for day in (read_day(text, date_format) for text in set(look.texts("session"))) if day is not None]
    return (min(days), max(days)) if days else None


def choose_text(choices: Choices, looks: Sequence[Look]) -> None:
    """Delimiter, encoding, lines above the header, comments."""
    first = looks[0]
    rows = sum(len(look.rows) for look in looks)
    width = len(first.header)
    choices.choose("delimiter", first.delimiter, f"{counted(rows, 'row')} with {width} fields, as many as the header")
    special = [look for look in looks if not look.is_plain]
    if special:
        encoding = special[0].encoding
        says = f"files that hold more than plain ASCII: {len(special):,} of {len(looks):,}"
        choices.choose("encoding", encoding, says)
        if encoding in ("cp1252", "latin-1"):
            says = f"the bytes are not UTF-8; {encoding} reads them, as other one-byte encodings would"
            choices.unsure.append(f"encoding: {says}")
    else:
        choices.choose("encoding", "utf-8", "all bytes are plain ASCII", is_written=False)
    if first.skip_lines:
        skipped = repr(first.skipped[0][:60]) if first.skipped else "blank"
        choices.choose("skip_lines", first.skip_lines, f"lines above the header are no rows; the first is {skipped}")
    comment = next((look.comment for look in looks if look.comment), "")
    if comment:
        number = sum(look.comments for look in looks)
        choices.choose("comment", comment, f"{counted(number, 'line')} with it at the beginning, and no row")


def choose_strays(choices: Choices, looks: Sequence[Look]) -> None:
    """Footers and notes below the rows."""
    strays = [line for look in looks for line in look.strays]
    header, date_format = looks[0].header, str(choices.keys["date_format"])
    starts: Counter[str] = Counter()
    rest: list[str] = []
    for line in strays:
        match = re.match(r"\W*[^\W\d]{3,}", line)
        if match is None or is_missing(match[0].strip('" ')):
            rest.append(line)
        else:
            starts[match[0]] += 1
    if starts and HAS_NOT_ROWS and len(starts) <= _MOST_FOOTERS:
        pattern = "|".join(re.escape(start).replace(r"\ ", " ") for start in sorted(starts))
        pattern = f"(?:{pattern})" if len(starts) > 1 else pattern
        delimiter = looks[0].delimiter
        is_harmless = not any(
            re.match(pattern, mark + delimiter.join(row)) and _is_dated(look, row, date_format)
            for look in looks
            for row in look.rows
            for mark in ("", '"')
        )
        if is_harmless and not re.match(pattern, delimiter.join(header)):
            number = sum(starts.values())
            choices.choose("not_rows", pattern, f"{counted(number, 'line')} with it at the beginning, and no session")
            shown = next(line for line in strays if re.match(pattern, line))
            choices.unsure.append(f"not_rows: {counted(number, 'line')} taken for no row, the first: {shown[:80]!r}")
            starts.clear()
    left = len(rest) + sum(starts.values())
    if left:
        shown = next(iter(rest), next(iter(starts), ""))
        choices.unsure.append(
            f"rows: of the lines below the header {left:,} hold no session or another number of fields, and will be "
            f"refused; the first begins {shown[:60]!r}"
        )


def _is_dated(look: Look, row: Sequence[str], date_format: str) -> bool:
    return read_day(row[look.columns.places["session"]].strip(), date_format) is not None


def choose_values(choices: Choices, looks: Sequence[Look], formats: frozenset[str], marks: frozenset[Marks]) -> None:
    """Date format, decimal and thousands marks, notation, missing marks, zero for missing, scale."""
    days = choose_format([[text for text in look.texts("session") if text] for look in looks], formats)
    choices.choose("date_format", days.value, days.evidence)
    choices.unsure += days.unsure
    notation = choose_notation(_given(looks, PRICE_FIELDS))
    choices.notation = notation.value
    is_decimal = notation.value == PriceNotation.DECIMAL
    price_shapes = shapes(looks, PRICE_FIELDS) if is_decimal else Counter[str]()
    chosen, decimal, thousands, unsure = choose_marks(
        price_shapes, shapes(looks, COUNT_FIELDS), looks[0].delimiter, marks
    )
    choices.choose("decimal", decimal.value, decimal.evidence, is_written=decimal.value != ".")
    choices.choose("thousands", thousands.value, thousands.evidence, is_written=bool(thousands.value))
    choices.unsure += unsure
    _choose_missing(choices, looks, chosen)
    _choose_zeros(choices, looks, chosen)
    _choose_scale(choices, looks)
    if not is_decimal:
        choices.evidence.append(Evidence("price_notation", notation.value, f"for the market: {notation.evidence}"))
        choices.unsure.append(
            f'price_notation: no key of a layout; the market\'s file has to say price_notation = "{notation.value}"'
        )
    choices.unsure += notation.unsure


def _choose_missing(choices: Choices, looks: Sequence[Look], marks: Marks) -> None:
    found: Counter[str] = Counter()
    strange: Counter[tuple[str, str]] = Counter()
    for name in BAR_FIELDS:
        for text, count in Counter(cells(looks, name)).items():
            if is_missing(text):
                found[text] += count
            elif not is_number(text):
                strange[name, text] += count
    marks_found = tuple(["", *sorted(text for text in found if text)])
    parts = ", ".join(f"{text!r}: {found[text]:,}" if text else f"empty: {found['']:,}" for text in marks_found)
    choices.choose("missing", marks_found, f"values that are no value: {parts}", is_written=marks_found != ("",))
    for (name, text), count in strange.most_common(5):
        where = f"stands in {counted(count, 'row')}"
        choices.unsure.append(f"{name}: {text[:40]!r} {where}; neither a number nor a known mark")


def _value(text: str, notation: str, marks: Marks) -> float | None:
    try:
        return parse_price(text, notation, *marks)
    except NotationError:
        return None


def _choose_zeros(choices: Choices, looks: Sequence[Look], marks: Marks) -> None:
    """Noughts for open, high and low where the settle is none: a day without trade."""
    names = [name for name in ("open", "high", "low") if name in looks[0].columns.places]
    if len(names) < 2 or "settle" not in looks[0].columns.places:
        return
    zero = settle_zero = 0
    for look in looks:
        for settle, *range_ in zip(look.texts("settle"), *(look.texts(name) for name in names), strict=True):
            if not settle or is_missing(settle):
                continue
            value = _value(settle, choices.notation, marks)
            settle_zero += value == 0.0
            if value and all(set(text) <= set("0.,'-+ ") and "0" in text for text in range_):
                zero += 1
    rows = sum(len(look.rows) for look in looks)
    if zero and zero * _RARE >= rows:
        text = f"all of them are 0 in {zero:,} of {rows:,} rows whose settle is not"
        choices.choose("zero_is_missing", tuple(names), text)
    elif zero:
        choices.unsure.append(
            f"zero_is_missing: {', '.join(names)} are 0 in {zero:,} of {rows:,} rows whose settle is not; too few to "
            "be a habit, so they are read as prices of 0"
        )
    if settle_zero:
        choices.unsure.append(f"settle: it is 0 in {counted(settle_zero, 'row')}; read as a price of 0, not as missing")


def _choose_scale(choices: Choices, looks: Sequence[Look]) -> None:
    places = looks[0].columns.places
    heads = [looks[0].header[places[name]].strip() for name in PRICE_FIELDS if name in places]
    if heads and all(_HUNDREDTHS & set(normalise(head).split()) for head in heads):
        choices.choose("price_scale", 0.01, f"the price columns are named in hundredths: {heads[-1]!r}")
        choices.unsure.append("price_scale: header names speak of hundredths, so prices are divided by 100")
    else:
        choices.choose("price_scale", 1.0, "no header speaks of hundredths", is_written=False)


def choose_columns(choices: Choices, looks: Sequence[Look]) -> None:
    """Header names of session, prices and counts, and which columns are left aside."""
    columns, header = looks[0].columns, looks[0].header
    for name in ("session", *BAR_FIELDS):
        if name not in columns.places:
            choices.unsure.append(f"{name}: no column found for it")
            continue
        head = header[columns.places[name]].strip()
        choices.columns[name] = head
        choices.evidence.append(Evidence(f"columns.{name}", head, columns.evidence.get(name, "")))
    choices.unsure += columns.unsure


def choose_delivery_columns(
    choices: Choices, looks: Sequence[Look], date_format: str
) -> tuple[frozenset[str], int | None]:
    """Columns for market, year and month where rows say them; returns what is known, and the window of short years."""
    header = looks[0].header
    known: set[str] = set()
    window: int | None = None
    bars = {choices.columns.get(name) for name in ("session", *BAR_FIELDS)}
    free = [at for at, name in enumerate(header) if name.strip() not in bars and header.count(name) == 1]

    def column(at: int) -> list[str]:
        return [row[at].strip() for look in looks for row in look.rows if _is_dated(look, row, date_format)]

    def take(name: str, at: int, why: str) -> None:
        choices.columns[name] = header[at].strip()
        choices.evidence.append(Evidence(f"columns.{name}", header[at].strip(), why))
        known.add(name)

    places = looks[0].columns.places
    year, month = places.get("year"), places.get("month")
    if year is not None and month is not None and year in free and month in free and year != month:
        years, months = column(year), column(month)
        if _mostly(years, r"(?:1[89]|20|21)\d\d|\d\d") and sum(map(is_month, months)) >= 0.95 * len(months):
            take("year", year, f"{len(years):,} values are years")
            take("month", month, f"{len(months):,} values are months")
            window = 1970 if any(len(text) == 2 for text in years) else None
    market = places.get("market")
    if market is not None and market in free and _mostly(column(market), CODE) and not _mostly(column(market), r"\d+"):
        markets = sorted(set(column(market)))
    else:
        markets, market = [], None
    if "year" not in known and HAS_CONTRACT:
        window = _choose_codes(choices, looks, date_format, free, market, known) or window
    if market is not None and "market" not in known and header[market].strip() not in choices.columns.values():
        take("market", market, f"{len(markets):,} markets, such as {markets[0]!r}")
    return frozenset(known), window


def _choose_codes(
    choices: Choices, looks: Sequence[Look], date_format: str, free: list[int], market: int | None, known: set[str]
) -> int | None:
    """A column with codes of contracts, by its name or by its values."""
    header, places = looks[0].header, looks[0].columns.places
    named = [places[name] for name in ("contract", "month", "market") if places.get(name) in free]
    for at in dict.fromkeys([*named, *free]):
        pairs: list[tuple[str, Span]] = []
        for look in looks:
            for row in look.rows:
                day = read_day(row[look.columns.places["session"]].strip(), date_format)
                if day is not None and row[at].strip():
                    pairs.append((row[at].strip(), (day, day)))
        if not pairs or (at not in named and all(is_number(text) for text, _ in pairs[:200])):
            continue
        reading = read_codes(pairs, is_market_known=market is not None and market != at)
        if reading is None:
            continue
        choices.columns["contract"] = header[at].strip()
        choices.choose("contract_code", reading.expression, reading.evidence)
        choices.evidence.append(Evidence("columns.contract", header[at].strip(), "its values are codes of contracts"))
        if at not in named:
            choices.unsure.append(f"contract: the header {header[at]!r} does not say so; told from its values")
        known |= reading.captured
        return reading.year_window
    return None


def _mostly(texts: Sequence[str], expression: str) -> bool:
    pattern = re.compile(expression)
    return bool(texts) and sum(pattern.fullmatch(text) is not None for text in texts) >= 0.95 * len(texts)
