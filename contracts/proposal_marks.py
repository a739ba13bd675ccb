"""How dates and numbers are written in a file nobody has declared yet, told from the values themselves.

Belongs here: date formats, decimal and thousands marks, marks for a missing value, price notation, each with
how many values speak for it. Does not belong here: which column is which (`proposal_columns.py`).
"""

import datetime
import itertools
import re
import string
from collections import Counter
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import lru_cache

from contracts.errors import NotationError
from contracts.markets import PriceNotation
from contracts.notation import parse_price

# What tables print for "no value": common practice, no source. Compared without regard to case.
MISSING_MARKS = frozenset(
    ("", "-", "--", "---", "\N{EN DASH}", "\N{EM DASH}", ".", "..", "...", "*", "?", "x", "na", "n/a", "n.a.", "n.a",
     "#n/a", "#na", "nan", "null", "none", "nil", "nd", "n.d.", "k.a.", "nq", "n.q.", "\\n")
)  # fmt: skip
_BLANKS = (" ", "\N{NO-BREAK SPACE}", "\N{NARROW NO-BREAK SPACE}")
_THOUSANDS = ("", ",", ".", *_BLANKS, "'", "\N{RIGHT SINGLE QUOTATION MARK}")
Marks = tuple[str, str]
# The first of those that read equally well is proposed.
ALL_MARKS: tuple[Marks, ...] = tuple((d, t) for t in _THOUSANDS for d in (".", ",") if d != t)

_FIRST_YEAR, _LAST_YEAR = 1850, 2150
_TIMES = (("", ""), (" %H:%M:%S", r" \d\d:\d\d:\d\d"), ("T%H:%M:%S", r"T\d\d:\d\d:\d\d"), (" %H:%M", r" \d\d:\d\d"))


def _numeric_formats() -> list[tuple[str, str]]:
    made = []
    for sep in ("-", "/", ".", " "):
        bare = re.escape(sep)
        for parts, shape in (
            ("%Y %m %d", r"\d{4} \d{1,2} \d{1,2}"),
            ("%d %m %Y", r"\d{1,2} \d{1,2} \d{4}"),
            ("%m %d %Y", r"\d{1,2} \d{1,2} \d{4}"),
            ("%d %m %y", r"\d{1,2} \d{1,2} \d{2}"),
            ("%m %d %y", r"\d{1,2} \d{1,2} \d{2}"),
            ("%y %m %d", r"\d{2} \d{1,2} \d{1,2}"),
        ):
            made.append((parts.replace(" ", sep), shape.replace(" ", bare)))
    made += [("%Y%m%d", r"\d{8}"), ("%d%m%Y", r"\d{8}"), ("%m%d%Y", r"\d{8}")]
    made += [("%y%m%d", r"\d{6}"), ("%d%m%y", r"\d{6}"), ("%m%d%y", r"\d{6}")]
    return made


def _named_formats() -> list[tuple[str, str]]:
    made = []
    for name, letters in (("%b", "[A-Za-z]{3}"), ("%B", "[A-Za-z]{4,9}")):
        for sep in ("-", " ", "/", ".", ""):
            for year, digits in (("%Y", r"\d{4}"), ("%y", r"\d{2}")):
                made.append(
                    (f"%d{sep}{name}{sep}{year}", rf"\d{{1,2}}{re.escape(sep)}{letters}{re.escape(sep)}{digits}")
                )
        for comma in (", ", " "):
            made.append((f"{name} %d{comma}%Y", rf"{letters} \d{{1,2}}{comma}\d{{4}}"))
        made.append((f"%Y-{name}-%d", rf"\d{{4}}-{letters}-\d{{1,2}}"))
    return made


_FORMATS: tuple[tuple[str, re.Pattern[str]], ...] = tuple(
    (written + time, re.compile(shape + digits, re.ASCII))
    for written, shape in (*_numeric_formats(), *_named_formats())
    for time, digits in _TIMES
)


@lru_cache(maxsize=200_000)
def read_day(text: str, date_format: str) -> datetime.date | None:
    """The day a text gives in a format; None where it gives none, or one of no century that futures traded in."""
    try:
        day = datetime.datetime.strptime(text, date_format).date()
    except ValueError:
        return None
    return day if _FIRST_YEAR <= day.year <= _LAST_YEAR else None


def count_formats(texts: Iterable[str]) -> Counter[str]:
    """For each date format how many of the texts it reads; formats that read none are left out."""
    found: Counter[str] = Counter()
    for text, count in Counter(texts).items():
        if not 6 <= len(text) <= 40 or not text.isascii():
            continue
        for date_format in _formats_of_shape(text.translate(_DATE_SHAPE)):
            if read_day(text, date_format) is not None:
                found[date_format] += count
    return found


_DATE_SHAPE = str.maketrans(
    string.digits + string.ascii_letters.replace("T", ""), "1" * 10 + "a" * (len(string.ascii_letters) - 1)
)


@lru_cache(maxsize=10_000)
def _formats_of_shape(shape: str) -> tuple[str, ...]:
    """The formats that texts may have which differ from the shape in digits and letters only."""
    return tuple(date_format for date_format, pattern in _FORMATS if pattern.fullmatch(shape))


def best_formats(texts: Sequence[str]) -> frozenset[str]:
    """The date formats that read the most of the texts; none where less than half are dates at all."""
    found = count_formats(texts)
    most = max(found.values(), default=0)
    if most == 0 or most * 2 < len(texts):
        return frozenset()
    return frozenset(date_format for date_format, count in found.items() if count == most)


@dataclass(frozen=True)
class Chosen:
    """A choice with what speaks for it, and what remains open."""

    value: str
    evidence: str
    unsure: tuple[str, ...] = ()


def describe_format(date_format: str) -> str:
    """A date format in words: `day-first (%d.%m.%Y)`."""
    order = re.findall(r"%([YymBbd])", date_format)
    kind = {"Y": "year", "y": "year", "d": "day"}.get(order[0], "month")
    return f"{kind}-first ({date_format})"


def choose_format(files: Sequence[Sequence[str]], allowed: frozenset[str]) -> Chosen:
    """The date format of some files' session columns, among those that read the most of their values.

    Where several read all, the one that puts fewest sessions on a weekend and fewest out of order is taken.
    """
    texts = [text for file in files for text in file]
    counts = count_formats(texts)
    total = len(texts)
    order = [date_format for date_format, _ in _FORMATS if date_format in allowed]
    oddities = {date_format: _oddities(files, date_format) for date_format in order}
    chosen = min(order, key=lambda date_format: sum(oddities[date_format]))
    says = f"{counts[chosen]:,} of {total:,} values parse as {describe_format(chosen)}"
    others = [f for f in counts if f != chosen and f not in allowed and _is_mirror(f, chosen)]
    for other in sorted(others, key=lambda f: -counts[f])[:1]:
        says += f"; {total - counts[other]:,} cannot be {describe_format(other)}"
    unsure: list[str] = []
    for other in order:
        if other == chosen:
            continue
        mine, theirs = oddities[chosen], oddities[other]
        reads = f"every date that parses as {describe_format(chosen)} parses as {describe_format(other)} too"
        if sum(mine) < sum(theirs):
            says += f"; on a weekend as {describe_format(other)}: {theirs[0]:,}, as chosen: {mine[0]:,}"
            says += f"; out of order: {theirs[1]:,} and {mine[1]:,}"
            unsure.append(f"date_format: {reads}; chosen by weekends and order of rows, not by the dates themselves")
        else:
            unsure.append(f"date_format: {reads}, and neither weekends nor order of rows decide; the first is a guess")
    if "%y" in chosen:
        unsure.append("date_format: years have two digits; 69 to 99 are taken as 1969 to 1999")
    return Chosen(chosen, says, tuple(unsure))


def _is_mirror(one: str, other: str) -> bool:
    """Whether two formats have the same parts and separators in another order."""
    parts = re.compile(r"%[a-zA-Z]")
    return parts.split(one) == parts.split(other) and sorted(parts.findall(one)) == sorted(parts.findall(other))


def _oddities(files: Sequence[Sequence[str]], date_format: str) -> tuple[int, int]:
    """Days on a weekend, and days out of order; nearly all futures rest on weekends: common practice, no source."""
    weekends = turns = 0
    for file in files:
        days = [day for day in (read_day(text, date_format) for text in file) if day is not None]
        weekends += sum(day.weekday() >= 5 for day in days)
        pairs = list(itertools.pairwise(days))
        turns += min(sum(a > b for a, b in pairs), sum(a < b for a, b in pairs))
    return weekends, turns


# A price in parts: 123'190, 97-12+, 523'2.
_PARTED = re.compile(r"[-+]?\d+['\-]\d{1,3}\+?")
_GROUPED = re.compile(r"[-+]?\d{1,3}(?:'\d{3})+")
_SHAPE = str.maketrans("23456789", "11111111")


def shape_of(text: str) -> str:
    """The text with every digit but 0 made 1: whether it reads, and whether it is whole, depends on no more."""
    return text.translate(_SHAPE)


def is_missing(text: str) -> bool:
    """Whether a trimmed text is one of the known marks for no value."""
    return text.casefold() in MISSING_MARKS


def is_parted(text: str) -> bool:
    """Whether a trimmed text has the form of a price in 32nds, 64ths or eighths."""
    return _PARTED.fullmatch(text) is not None


@lru_cache(maxsize=100_000)
def reads_number(shape: str, decimal: str, thousands: str, is_count: bool) -> bool:
    """Whether a shape is a number under these marks; a count has to be whole and not negative."""
    try:
        value = parse_price(shape, PriceNotation.DECIMAL, decimal, thousands)
    except NotationError:
        return False
    return not is_count or (value >= 0 and value == int(value)) if abs(value) < 1e300 else False


def is_number(text: str) -> bool:
    """Whether a trimmed text is a number under any marks, or a price in parts."""
    shape = shape_of(text)
    return is_parted(text) or any(reads_number(shape, d, t, False) for d, t in ALL_MARKS)


def marks_score(prices: Counter[str], counts: Counter[str], marks: Marks) -> tuple[int, int]:
    """How many values of price and count columns read under the marks, and, negative, how many go against them.

    `prices` and `counts` hold shapes. A whole part of four digits or more without the thousands mark goes against it.
    """
    decimal, thousands = marks
    good = against = 0
    for shapes, is_count in ((prices, False), (counts, True)):
        for shape, number in shapes.items():
            if not reads_number(shape, decimal, thousands, is_count):
                continue
            good += number
            if thousands and re.match(rf"\D*\d{{4,}}(?:{re.escape(decimal)}|$)", shape):
                against += number
            if thousands and re.match(rf"\D*0{re.escape(thousands)}", shape):
                against += number
    return good, -against


def best_marks(prices: Counter[str], counts: Counter[str], delimiter: str) -> frozenset[Marks]:
    """The decimal and thousands marks under which most values read."""
    scores = {marks: marks_score(prices, counts, marks)[0] for marks in ALL_MARKS if marks[0] != delimiter}
    top = max(scores.values())
    return frozenset(marks for marks, score in scores.items() if score == top)


def choose_marks(
    prices: Counter[str], counts: Counter[str], delimiter: str, allowed: frozenset[Marks]
) -> tuple[Marks, Chosen, Chosen, tuple[str, ...]]:
    """Decimal and thousands marks of some files: the pair, the evidence for each, and what remains open."""
    everything = prices + counts
    seen = set("".join(everything))
    scores = {marks: marks_score(prices, counts, marks) for marks in ALL_MARKS if marks in allowed}
    top = max(scores.values())
    order = [marks for marks in scores if scores[marks] == top]
    # A mark that never stands anywhere is no mark; without any, the point is the commoner decimal mark.
    order = [m for m in order if (not m[1] or m[1] in seen)] or order
    order.sort(key=lambda marks: (marks[0] not in seen and marks[1] not in seen, bool(marks[1]) and delimiter == ";"))
    chosen = order[0]
    decimal, thousands = chosen
    total = sum(everything.values())
    with_decimal = sum(n for shape, n in prices.items() if decimal in shape)
    with_thousands = sum(n for shape, n in everything.items() if thousands and thousands in shape)
    says = f"{scores[chosen][0]:,} of {total:,} numbers read; the mark {decimal!r} stands in {with_decimal:,} prices"
    unsure: list[str] = []
    if not with_decimal and prices:
        unsure.append(f"decimal: a decimal mark was never seen; {decimal!r} is a guess")
    rivals = [m for m in order[1:] if (m[0] in seen or m[1] in seen) and _differs(everything, m, chosen)]
    for rival in rivals[:1]:
        unsure.append(
            f"decimal: every number also reads with decimal mark {rival[0]!r} and thousands mark {rival[1]!r}; "
            f"look at the prices below"
        )
    parts = f"the mark {thousands!r} parts {with_thousands:,} numbers" if thousands else "no mark parts thousands"
    return chosen, Chosen(decimal, says), Chosen(thousands, parts), tuple(unsure)


def _differs(shapes: Counter[str], one: Marks, other: Marks) -> bool:
    """Whether two pairs of marks read some number differently."""
    for shape in shapes:
        if reads_number(shape, *one, False) and reads_number(shape, *other, False):
            price = PriceNotation.DECIMAL
            if parse_price(shape, price, *one) != parse_price(shape, price, *other):
                return True
    return False


def choose_notation(texts: Counter[str]) -> Chosen:
    """How prices are written: decimal, or parts of 32, 64 or 8.

    `texts` are trimmed price texts without missing ones.
    """
    parted = Counter({text: number for text, number in texts.items() if is_parted(text)})
    total, in_parts = sum(texts.values()), sum(parted.values())
    if in_parts * 2 <= total:
        return Chosen(PriceNotation.DECIMAL, f"{total - in_parts:,} of {total:,} prices are plain decimal numbers")
    kinds = [PriceNotation.THIRTY_SECONDS, PriceNotation.SIXTY_FOURTHS, PriceNotation.EIGHTHS]
    reads = {kind: sum(n for text, n in parted.items() if _reads_parts(text, kind)) for kind in kinds}
    chosen = max(kinds, key=lambda kind: reads[kind])
    grouped = sum(number for text, number in parted.items() if _GROUPED.fullmatch(text))
    if grouped > reads[chosen]:
        says = f"{grouped:,} of {total:,} prices are numbers with an apostrophe for thousands"
        return Chosen(PriceNotation.DECIMAL, says)
    says = f"{reads[chosen]:,} of {total:,} prices read in {chosen.value}"
    unsure = []
    for kind in kinds:
        if kind is not chosen and reads[kind] == reads[chosen]:
            unsure.append(f"price_notation: every price reads in {kind.value} too; {chosen.value} is a guess")
        elif kind is not chosen and reads[kind]:
            says += f"; {total - reads[kind]:,} cannot be {kind.value}"
    return Chosen(chosen.value, says, tuple(unsure))


def _reads_parts(text: str, kind: PriceNotation) -> bool:
    try:
        parse_price(text, kind)
    except NotationError:
        return False
    return True
