"""A proposed layout put to the test: it has to load, claim its files and read their rows.

Belongs here: writing the TOML, reading files by it, the first rows as it reads them. Does not belong here: why
a choice was made (`proposal_choices.py`).
"""

import csv
import datetime
import json
import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import lru_cache

import numpy as np

from contracts.declared import CODE
from contracts.errors import IntakeError
from contracts.intake import FileRows, ParsedRows, RawFile, parse_rows, split_file
from contracts.layouts import BAR_FIELDS, Claim, Layout, claim_file
from contracts.markets import Market, parse_market
from contracts.proposal_text import Look
from contracts.sessions import day_of

_SAMPLE_ROWS = 8
_MOST_MARKETS = 60
# Only notation and delivery months of it bear on reading; all else is there because a market has to have it.
_MARKET = """
code = "{code}"
name = "on trial"
exchange = "XXXX"
currency = "XXX"
unit = "1"
point_value = 1.0
tick_size = 1.0
price_notation = "{notation}"
may_be_negative = true
delivery_months = [1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12]
[last_trade]
rule = "FREQ=MONTHLY;BYMONTHDAY=15"
[plans.any]
trigger = "volume"
"""


@dataclass(frozen=True)
class SampleRow:
    """One row as a proposed layout reads it; None where a field is absent."""

    contract: str
    session: datetime.date
    open: float | None
    high: float | None
    low: float | None
    settle: float | None
    volume: float | None
    open_interest: float | None


@dataclass
class Trial:
    """What came of reading files by a layout: rows read and refused, why, and the first rows."""

    read: int = 0
    refused: int = 0
    trouble: list[str] = field(default_factory=list)
    sample: list[SampleRow] = field(default_factory=list)
    markets: list[str] = field(default_factory=list)


def toml_text(value: object) -> str:
    """A string, number or list of them as TOML."""
    if isinstance(value, list | tuple):
        return "[" + ", ".join(toml_text(inner) for inner in value) + "]"
    if isinstance(value, str):
        if "\\" in value and "'" not in value and value.isprintable():
            return f"'{value}'"
        quoted = json.dumps(value, ensure_ascii=False)
        return "".join(c if c.isprintable() else _escape(c) for c in quoted)
    return repr(value)


def _escape(character: str) -> str:
    number = ord(character)
    return f"\\u{number:04x}" if number < 0x10000 else f"\\U{number:08x}"


def comment_text(text: str) -> str:
    """A text as TOML comment lines can hold it: no control characters, no line ends."""
    return "".join(c if c.isprintable() else c.encode("unicode_escape").decode("ascii") for c in text)


@lru_cache(maxsize=256)
def _trial_market(code: str, notation: str) -> Market:
    return parse_market(_MARKET.format(code=code, notation=notation), "market on trial")


def try_layout(layout: Layout, name: str, notation: str, looks: Sequence[Look]) -> Trial:
    """Read all files by the layout, as a night would."""
    trial = Trial()
    counts: dict[str, int] = {}
    reads: Counter[str] = Counter()
    rejects: dict[str, dict[int, str]] = {}
    by_market: dict[str, list[tuple[Look, Claim]]] = {}
    for look in looks:
        try:
            claim = claim_file(layout, look.path)
            if claim is None:
                trial.trouble.append(f"{look.path}: the expression does not match it")
                continue
            rows = _split(layout, name, claim, look)
        except (IntakeError, ValueError, csv.Error) as error:
            trial.trouble.append(str(error) if look.path in str(error) else f"{look.path}: {error}")
            continue
        counts[look.path] = rows.row_count
        rejects[look.path] = {reject.line: reject.reason for reject in rows.rejects}
        for market in _markets_of(rows, layout, claim):
            by_market.setdefault(market, []).append((look, claim))
    for market, files in sorted(by_market.items()):
        split = [_split(layout, name, claim, look) for look, claim in files]
        parsed = parse_rows(split, _trial_market(market, notation))
        for index, number in zip(*np.unique(parsed.source, return_counts=True), strict=True):
            reads[split[index].raw.path] += int(number)
        for each in split:
            rejects[each.raw.path] |= {reject.line: reject.reason for reject in each.rejects}
        trial.sample += _sample_rows(parsed)[: max(0, _SAMPLE_ROWS - len(trial.sample))]
        trial.markets.append(market)
    trial.read = reads.total()
    for path, count in counts.items():
        _tell_refused(trial, path, count, count - reads[path], rejects[path])
    return trial


def _tell_refused(trial: Trial, path: str, count: int, refused: int, rejects: dict[int, str]) -> None:
    if not refused:
        return
    trial.refused += refused
    line, reason = min(rejects.items(), default=(0, "its market is no code of capital letters and digits"))
    place = f"{path}:{line}" if line else path
    trial.trouble.append(f"{place}: {refused:,} of {counted(count, 'row')} refused, the first: {reason}")


def counted(number: int, noun: str) -> str:
    """A number with its noun: `1 row`, `1,204 rows`."""
    return f"{number:,} {noun}" if number == 1 else f"{number:,} {noun}s"


def _split(layout: Layout, name: str, claim: Claim, look: Look) -> FileRows:
    return split_file(
        RawFile(
            path=look.path,
            file="0" * 64,
            text=look.data,
            layout_name=name,
            layout=layout,
            claim=claim,
            taken_in=1,
            size=len(look.data),
        )
    )


def _markets_of(rows: FileRows, layout: Layout, claim: Claim) -> list[str]:
    """The markets a file's rows belong to, those of which a code can be made."""
    if claim.market is not None:
        return [claim.market]
    pattern = getattr(layout, "contract_code", None)
    if "market" in rows.columns:
        found = {text.strip() for text in rows.columns["market"]}
    elif "contract" in rows.columns and pattern:
        code = re.compile(pattern, re.IGNORECASE)
        matches = [code.fullmatch(text.strip()) for text in set(rows.columns["contract"])]
        found = {match["market"].upper() for match in matches if match and match["market"]}
    else:
        found = set()
    return sorted(text for text in found if re.fullmatch(CODE, text))[:_MOST_MARKETS]


def _sample_rows(parsed: ParsedRows) -> list[SampleRow]:
    made = []
    for index in range(min(_SAMPLE_ROWS, len(parsed.line))):
        values = {
            name: None if np.isnan(value) else float(value)
            for name, value in zip(BAR_FIELDS, parsed.values[index], strict=True)
        }
        contract = parsed.contracts[parsed.contract[index]]
        made.append(SampleRow(contract=contract, session=day_of(parsed.session[index]), **values))
    return made
