"""A planted market through the public chain: raw text in, findings and clean settles out.

Belongs here: writing the raw text and reading the tables of `contracts.build.build_market`, so that every check is
measured as a desk would meet it, whatever functions it is made of. Does not belong here: judging the outcome.
"""

import datetime
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.csv as pa_csv

from contracts.build import Inputs, build_market
from contracts.intake import RawFile
from contracts.layouts import claim_file, parse_layout
from contracts.markets import parse_market
from contracts.sessions import day_number, day_of
from tests.detectors.faults import Planted
from tests.detectors.terms import market_text

_LAYOUT = parse_layout(
    """
files = '(?P<market>[A-Z0-9]+)\\.csv'
[columns]
year = "year"
month = "month"
session = "session"
open = "open"
high = "high"
low = "low"
settle = "settle"
volume = "volume"
open_interest = "open_interest"
""",
    "layouts/bench.toml",
)
_FIELDS = ("open", "high", "low", "settle", "volume", "open_interest")
_EPOCH = datetime.date(1970, 1, 1)


@dataclass(frozen=True)
class Found:
    """One finding, with its day as a number; `day` and `contract` may be None."""

    kind: str
    severity: str
    contract: str | None
    day: int | None
    action: str
    message: str


@dataclass(frozen=True)
class Outcome:
    """What came out: findings, and by (contract, day) the clean settle and its status."""

    found: list[Found]
    clean: dict[tuple[str, int], tuple[float, str]]


def raw_text(planted: Planted) -> bytes:
    """The market's rows as one CSV file, by session and contract."""
    grown, values = planted.grown, planted.values
    sessions, columns = np.nonzero(np.isfinite(values[3]))
    table = values[:, sessions, columns]
    days = grown.days[sessions]
    if planted.strays:
        columns = np.concatenate((columns, [column for column, _, _ in planted.strays]))
        days = np.concatenate((days, [day for _, day, _ in planted.strays]))
        table = np.hstack([table, np.array([row for _, _, row in planted.strays]).T])
    year = np.array([int(name[-7:-3]) for name in grown.contracts])[columns]
    month = np.array([int(name[-2:]) for name in grown.contracts])[columns]
    arrays = {"year": year, "month": month, "session": days.astype("datetime64[D]")}
    parts = {name: pa.array(part) for name, part in arrays.items()}
    for place, name in enumerate(_FIELDS):
        column = table[place]
        if place >= 4:
            parts[name] = pa.array(np.nan_to_num(column).astype(np.int64), mask=np.isnan(column))
        else:
            parts[name] = pa.array(column, mask=np.isnan(column))
    sink = pa.BufferOutputStream()
    pa_csv.write_csv(pa.table(parts), sink, pa_csv.WriteOptions(quoting_style="none"))
    return sink.getvalue().to_pybytes()


def run_chain(planted: Planted) -> Outcome:
    """Build the market from its raw text, with default thresholds."""
    terms = planted.grown.terms
    closed = planted.grown.closed + [day_of(day).isoformat() for day in planted.closed]
    market = parse_market(market_text(terms, closed, planted.lag), f"markets/{terms.code.lower()}.toml")
    text = raw_text(planted)
    path = f"{terms.code}.csv"
    claim = claim_file(_LAYOUT, path)
    assert claim is not None
    raw = RawFile(path, "0" * 64, text, "bench", _LAYOUT, claim, 1, len(text))
    tables = build_market(Inputs(market, (raw,), (False,))).tables
    return Outcome(_findings(tables["findings"]), _settles(tables["bars"]))


def _findings(table: pa.Table) -> list[Found]:
    rows: list[dict[str, Any]] = table.select(
        ["kind", "severity", "contract", "session", "action", "message"]
    ).to_pylist()
    return [
        Found(
            row["kind"], row["severity"], row["contract"],
            None if row["session"] is None else day_number(row["session"]), row["action"], row["message"],
        )
        for row in rows
    ]  # fmt: skip


def _settles(table: pa.Table) -> dict[tuple[str, int], tuple[float, str]]:
    """The rows whose clean settle is not the reported one."""
    bars = table.select(["contract", "session", "settle", "clean_settle", "status"]).to_pylist()
    return {
        (row["contract"], day_number(row["session"])): (
            float("nan") if row["clean_settle"] is None else row["clean_settle"],
            row["status"],
        )
        for row in bars
        if row["status"] in ("repaired", "masked")
    }
