"""Market and delivery month of an unknown file, told from its path or from codes in a column.

Belongs here: the expression on the path, the expression on a contract's code, and why they are so. Does not
belong here: any other cell (`proposal_columns.py`).
"""

import datetime
import re
from collections.abc import Iterable, Sequence
from dataclasses import dataclass

from contracts.declared import CODE
from contracts.deliveries import MONTH_CODES, parse_month

_ENDING = re.compile(r"(?:\.(?:csv|txt|tsv|dat|asc|prn|text))?(?:\.(?:gz|zst))?$", re.IGNORECASE)
_WORDS = re.compile(r"([^A-Za-z0-9]+)")

_YEAR4, _YEAR2, _YEAR1 = r"(?P<year>\d{4})", r"(?P<year>\d{2})", r"(?P<year>\d)"
_MONTH2 = r"(?P<month>\d{2})"
_LETTER = f"(?P<month_code>[{MONTH_CODES}])"
_NAME = "(?P<month>[A-Za-z]{3})"
_LONG_NAME = "(?P<month>[A-Za-z]{3,9})"
_MARKET = "(?P<market>[A-Z0-9]+)"
# Year and month written as one word, the surest first.
_BODIES = (
    _YEAR4 + _MONTH2, _MONTH2 + _YEAR4, _LETTER + _YEAR4, _YEAR4 + _LETTER, _NAME + _YEAR4, _YEAR4 + _NAME,
    _LETTER + _YEAR2, _NAME + _YEAR2, _YEAR2 + _LETTER, _YEAR2 + _NAME, _YEAR2 + _MONTH2, _MONTH2 + _YEAR2,
)  # fmt: skip
_YEARS = (_YEAR4, _YEAR2)
_MONTHS = (_MONTH2, _LETTER, _NAME, r"(?P<month>\d)", r"(?P<month>\d{1,2})")
# Futures are listed at most about so many months ahead: a wide guess, from memory.
_LONGEST_LISTING = 15 * 12
_FIRST_YEAR, _LAST_YEAR = 1900, 2150
_CELLS_PROBED = 50

Span = tuple[datetime.date, datetime.date]


@dataclass(frozen=True)
class PathReading:
    """An expression that matches all the paths, what it captures, and what remains open."""

    expression: str
    captured: frozenset[str]
    evidence: str
    unsure: tuple[str, ...] = ()
    year_window: int | None = None


@dataclass(frozen=True)
class CodeReading:
    """An expression that matches all codes of a column."""

    expression: str
    captured: frozenset[str]
    evidence: str
    year_window: int | None = None


@dataclass(frozen=True)
class _Reading:
    """Which words of a path are read by which expressions."""

    words: dict[int, str]

    def groups(self, words: Sequence[str]) -> dict[str, str] | None:
        """What the expressions capture in one path's words; None where one does not match."""
        found: dict[str, str] = {}
        for at, expression in self.words.items():
            match = re.fullmatch(expression, words[at])
            if match is None:
                return None
            found |= match.groupdict()
        return found


def path_shape(path: str) -> tuple[str, ...]:
    """What paths that one expression can match have in common: what stands between their words, and the ending."""
    stem, ending = _split_ending(path)
    return (*_WORDS.split(stem)[1::2], ending.casefold())


def _split_ending(path: str) -> tuple[str, str]:
    match = _ENDING.search(path)
    ending = match[0] if match else ""
    return path[: len(path) - len(ending)], ending


def delivery_share(groups: Iterable[tuple[dict[str, str], Span]]) -> tuple[float, list[int]]:
    """Share of readings whose delivery month suits its sessions, and those months as year x 12 + month - 1.

    A contract trades before its delivery month ends, or little longer, and is listed some years ahead at most.
    """
    good = total = 0
    months: list[int] = []
    for found, (first, last) in groups:
        total += 1
        try:
            month = parse_month(found.get("month") or found.get("month_code") or "") - 1
        except ValueError:
            continue
        # A daily file may tell of a contract until the month after its delivery month.
        earliest = last.year * 12 + last.month - 2
        digits = found["year"]
        if len(digits) == 4:
            code = int(digits) * 12 + month
        else:
            base = 10 ** len(digits)
            code = (earliest // 12 + (int(digits) - earliest // 12) % base) * 12 + month
            if code < earliest:
                code += base * 12
        is_year = _FIRST_YEAR <= code // 12 <= _LAST_YEAR
        if is_year and earliest <= code <= first.year * 12 + first.month + _LONGEST_LISTING:
            good += 1
            months.append(code)
    return (good / total if total else 0.0), months


def _window(months: Sequence[int], expression: str) -> int | None:
    """First year of the hundred that two-digit years fall in; None where every year has four digits."""
    if _YEAR2 not in expression and r"(?P<year>\d{1,2})" not in expression:
        return None
    years = [month // 12 for month in months]
    if not years or (min(years) >= 1970 and max(years) < 2070):
        return 1970
    return min(years) // 10 * 10 - 10


def read_paths(paths: Sequence[str], spans: Sequence[Span], needed: frozenset[str]) -> PathReading | str:
    """The expression that matches paths of one shape and captures what is needed of market, year and month.

    `spans` are first and last session of each file. Returns in words what could not be found where it could not.
    """
    split = [_WORDS.split(_split_ending(path)[0]) for path in paths]
    words = [parts[0::2] for parts in split]
    days = _full_dates(words)
    reading, months = _Reading({}), list[int]()
    unsure: list[str] = []
    says: list[str] = []
    if "year" in needed:
        found = _best_delivery(words, spans, days, "market" in needed)
        if found is None:
            return (
                f"the path {paths[0]!r} does not say the delivery month, and no column does; expected year and month, "
                "such as 2025_03 or H25, that suit the file's sessions"
            )
        reading, months, also = found
        unsure += also
        expressions = " ".join(reading.words.values())
        says.append(f"year and month from {len(paths):,} of {len(paths):,} paths suit their files' sessions")
        if _YEAR2 in expressions:
            says.append(f"two-digit years give {' to '.join(map(str, sorted({min(months) // 12, max(months) // 12})))}")
    if "market" in needed and not any("(?P<market>" in expression for expression in reading.words.values()):
        at, also = _market_word(words, set(reading.words) | days, min(reading.words, default=len(words[0])))
        if at is None:
            return (
                f"the path {paths[0]!r} does not say the market, and no column does; expected a code of capital "
                "letters and digits, such as NWHT, in the name or a folder (--raw names the folder above it)"
            )
        unsure += also
        reading = _Reading({**reading.words, at: _MARKET})
        says.append("the market is the word " + ", ".join(sorted({row[at] for row in words})[:5]))
    if not needed:
        says.append("market and delivery month stand in columns; the path only has to match")
    expression = _write_expression(paths, split, reading, days, keep_digits="year" in needed)
    captured = frozenset("month" if name == "month_code" else name for name in re.compile(expression).groupindex)
    window = _window(months, expression) if "year" in needed else None
    return PathReading(expression, captured, "; ".join(says), tuple(unsure), window)


def _full_dates(words: Sequence[Sequence[str]]) -> set[int]:
    """Places of words that together are a day in every path: they are no delivery month."""
    found: set[int] = set()
    for at in range(len(words[0])):
        if all(_is_day(row[at]) for row in words):
            found.add(at)
        if at + 2 < len(words[0]) and not {at, at + 1, at + 2} & found:
            for order in ((0, 1, 2), (2, 1, 0)):
                if all(len(row[at + order[0]]) == 4 and _is_day("".join(row[at + k] for k in order)) for row in words):
                    found |= {at, at + 1, at + 2}
    return found


def _is_day(text: str) -> bool:
    if not re.fullmatch(r"(?:19|20)\d{6}", text, re.ASCII):
        return False
    try:
        datetime.date(int(text[:4]), int(text[4:6]), int(text[6:]))
    except ValueError:
        return False
    return True


def _best_delivery(
    words: Sequence[Sequence[str]], spans: Sequence[Span], days: set[int], may_hold_market: bool
) -> tuple[_Reading, list[int], list[str]] | None:
    """The reading of year and month that suits most files; of equal ones the surest."""
    places = [at for at in reversed(range(len(words[0]))) if at not in days]
    readings = [_Reading({at: body}) for body in _BODIES for at in places]
    if may_hold_market:
        readings += [_Reading({at: _MARKET + body}) for body in _BODIES for at in places]
    pairs = sorted((abs(a - b), -max(a, b), a, b) for a in places for b in places if a != b)
    readings += [_Reading({a: y, b: m}) for y in _YEARS for _, _, a, b in pairs for m in _MONTHS]
    best: tuple[float, _Reading, list[int]] | None = None
    rivals: list[str] = []
    for reading in readings:
        groups = [reading.groups(row) for row in words]
        if any(found is None for found in groups):
            continue
        share, months = delivery_share((found or {}, span) for found, span in zip(groups, spans, strict=True))
        if share < 0.9:
            continue
        if best is None or share > best[0]:
            best = (share, reading, months)
            rivals = []
        elif share == best[0] and months != best[2]:
            rivals.append(f"{months[0] // 12}-{months[0] % 12 + 1:02d}")
    if best is None:
        return None
    unsure = []
    if rivals:
        first = f"{best[2][0] // 12}-{best[2][0] % 12 + 1:02d}"
        others = ", ".join(sorted(set(rivals)))
        unsure.append(f"files: the first path is read as delivery {first}; {others} would suit its sessions too")
    return best[1], best[2], unsure


def _market_word(words: Sequence[Sequence[str]], taken: set[int], delivery: int) -> tuple[int | None, list[str]]:
    """Place of the word that is a market's code in every path; one that differs, or stands nearest, comes first."""
    fitting = [
        at
        for at in range(len(words[0]))
        if at not in taken and all(re.fullmatch(CODE, row[at]) and not row[at].isdecimal() for row in words)
    ]
    if not fitting:
        return None, []
    differing = [at for at in fitting if len({row[at] for row in words}) > 1]
    # In a name the market stands before its delivery month; failing that a folder or a later word says it.
    order = sorted(differing or fitting, key=lambda at: (at > delivery, abs(delivery - at)))
    rivals = [at for at in order[1:] if {row[at] for row in words} != {row[order[0]] for row in words}]
    if not rivals:
        return order[0], []
    others = ", ".join(repr(words[0][at]) for at in rivals)
    return order[0], [f"files: {words[0][order[0]]!r} is taken for the market of the first path; {others} could be it"]


def _write_expression(
    paths: Sequence[str], split: Sequence[Sequence[str]], reading: _Reading, days: set[int], keep_digits: bool
) -> str:
    """One expression for all paths: captured words, digits of days, and the rest as it stands."""
    parts: list[str] = []
    for at in range(0, len(split[0]), 2):
        word, values = at // 2, sorted({row[at] for row in split})
        if word in reading.words:
            parts.append(_with_markets(reading.words[word], values))
        elif all(re.fullmatch(r"\d+", value) for value in values) and (
            word in days or len(values) > 1 or not keep_digits or _is_year_folder(split[0], at)
        ):
            widths = {len(value) for value in values}
            parts.append(rf"\d{{{widths.pop()}}}" if len(widths) == 1 else r"\d+")
        elif len(values) == 1:
            parts.append(re.escape(values[0]).replace(r"\ ", " "))
        else:
            parts.append("[A-Za-z0-9]+" if all(values) else "[A-Za-z0-9]*")
        if at + 1 < len(split[0]):
            parts.append(re.escape(split[0][at + 1]).replace(r"\ ", " ").replace(r"\-", "-"))
    endings = sorted({_split_ending(path)[1] for path in paths})
    tail = [re.escape(ending) for ending in endings]
    return "".join(parts) + (tail[0] if len(tail) == 1 else f"(?:{'|'.join(tail)})")


def _is_year_folder(parts: Sequence[str], at: int) -> bool:
    """Whether a word is a whole folder's name and a year, which the next year's files will not share."""
    is_folder = at + 1 < len(parts) and parts[at + 1].startswith("/")
    return is_folder and (at == 0 or parts[at - 1].endswith("/")) and bool(re.fullmatch(r"(?:19|20)\d\d", parts[at]))


def _with_markets(expression: str, values: Sequence[str]) -> str:
    """The expression with the markets that were seen in place of any."""
    if not expression.startswith(_MARKET):
        return expression
    matches = [re.fullmatch(expression, value) for value in values]
    markets = sorted({match["market"] for match in matches if match})
    return f"(?P<market>{'|'.join(markets)})" + expression[len(_MARKET) :]


def read_codes(cells: Sequence[tuple[str, Span]], is_market_known: bool) -> CodeReading | None:
    """The expression that matches a column's contract codes, given with the session of each; None where none does.

    With the market known from elsewhere it is not captured, unless the code holds it too.
    """
    if not cells:
        return None
    shown = {cell for cell, _ in cells}
    months = (_YEAR4 + "{s}" + _MONTH2, r"(?P<month>\d{1,2}){s}" + _YEAR4, r"(?P<year>\d{4}){s}(?P<month>\d{1,2})")
    years = (_YEAR4, _YEAR2, _YEAR1, r"(?P<year>\d{1,2})")
    bodies = [*months, *(name + "{s}" + year for year in years for name in (_LETTER, _NAME))]
    bodies += [year + "{s}" + name for year in (_YEAR4, _YEAR2) for name in (_LETTER, _NAME)]
    bodies += [_YEAR2 + "{s}" + _MONTH2, _MONTH2 + "{s}" + _YEAR2, r"(?P<month>\d{1,2})[-_ ./]" + _YEAR2]
    bodies += [_LONG_NAME + "{s}" + year for year in (_YEAR4, _YEAR2)]
    prefixes = ["", *(f"{_MARKET}{gap}" for gap in ("", "[-_ ./]"))]
    if is_market_known:
        prefixes = ["", *(f"[A-Z0-9]+{gap}" for gap in ("", "[-_ ./]"))]
    best: tuple[float, CodeReading] | None = None
    for prefix in prefixes:
        for body in bodies:
            for gap in ("", "[-_ ./]"):
                expression = prefix + body.replace("{s}", gap)
                found = _match_codes(expression, cells, shown)
                if found is not None and (best is None or found[0] > best[0]):
                    best = found
    return best[1] if best else None


def _match_codes(
    expression: str, cells: Sequence[tuple[str, Span]], shown: set[str]
) -> tuple[float, CodeReading] | None:
    pattern = re.compile(expression, re.IGNORECASE)
    # Most expressions fit nothing of a column, which its first cells already show.
    if sum(pattern.fullmatch(cell) is None for cell, _ in cells[:_CELLS_PROBED]) * 2 > _CELLS_PROBED:
        return None
    matches = {cell: pattern.fullmatch(cell) for cell in shown}
    if sum(match is not None for match in matches.values()) < 0.95 * len(shown):
        return None
    pairs = [(match.groupdict(), span) for cell, span in cells if (match := matches[cell]) is not None]
    share, months = delivery_share((_upper(found), span) for found, span in pairs)
    if share < 0.9:
        return None
    captured = frozenset("month" if name == "month_code" else name for name in pattern.groupindex)
    says = f"{len(pairs):,} of {len(cells):,} codes match and suit their sessions, such as {cells[0][0]!r}"
    return share, CodeReading(expression, captured, says, _window(months, expression))


def _upper(found: dict[str, str]) -> dict[str, str]:
    return {name: text.upper() for name, text in found.items()}


def is_month(text: str) -> bool:
    """Whether a text is a month and nothing more: a number, a letter or a short name."""
    try:
        parse_month(text)
    except ValueError:
        return False
    return True
