"""The published tables and the views derived from them: columns, key, order of rows.

Belongs here: which columns make a table and how its rows are sorted. Does not belong here: what a column
means (`columns.py`), where a table is kept (`catalog/places.py`).
"""

from dataclasses import dataclass

import pyarrow as pa

from contracts.columns import COLUMNS, Column


@dataclass(frozen=True)
class Table:
    """A published table: `key` is unique, rows are sorted by `order` (the key where none is given)."""

    name: str
    meaning: str
    key: tuple[str, ...]
    columns: tuple[str, ...]
    renamed: tuple[tuple[str, str], ...] = ()
    order: tuple[str, ...] = ()

    def definition(self, name: str) -> Column:
        """The definition of one of the table's columns."""
        return COLUMNS[dict(self.renamed).get(name, name)]

    @property
    def schema(self) -> pa.Schema:
        """Arrow schema with each column's unit and meaning in its field metadata."""
        fields = []
        for name in self.columns:
            column = self.definition(name)
            metadata = {"unit": column.unit, "meaning": column.meaning}
            fields.append(pa.field(name, column.type, nullable=name not in self.key, metadata=metadata))
        return pa.schema(fields)


BARS = Table(
    "bars",
    "every bar that arrived, as reported, with the settle that is used",
    ("market", "contract", "session"),
    ("market", "contract", "session", "open", "high", "low", "settle", "volume", "open_interest",
     "clean_settle", "status", "file", "line"),
)  # fmt: skip

SERIES = Table(
    "series",
    "continuous series of each plan and nearby",
    ("market", "plan", "nearby", "session"),
    ("market", "plan", "nearby", "session", "contract", "incoming", "incoming_weight", "open", "high", "low",
     "settle", "volume", "open_interest", "shift", "scale", "back_adjusted", "ratio_adjusted", "change",
     "simple_return", "growth", "rolled", "status", "findings"),
)  # fmt: skip

ROLLS = Table(
    "rolls",
    "the roll ledger: every roll with its evidence, its two prices and its gap",
    ("market", "plan", "nearby", "effective_on", "step"),
    ("market", "plan", "nearby", "step", "decided_on", "measured_on", "effective_on", "outgoing", "incoming",
     "weight_before", "weight_after", "outgoing_settle", "incoming_settle", "gap", "ratio", "trigger",
     "outgoing_volume", "incoming_volume", "outgoing_open_interest", "incoming_open_interest", "last_trade",
     "first_notice", "impact_sessions"),
)  # fmt: skip

FINDINGS = Table(
    "findings",
    "the quality log: what is wrong or strange, why it is believed, what was done, what it would have cost",
    ("finding",),
    ("finding", "market", "contract", "session", "kind", "severity", "field", "reported", "expected", "score",
     "threshold", "action", "corrected", "impact_sessions", "waived_until", "message"),
    order=("market", "session", "contract", "kind", "finding"),
)  # fmt: skip

REJECTS = Table(
    "rejects",
    "rows that could not be read, whole",
    ("file", "line"),
    ("market", "contract", "file", "line", "text", "reason", "offset"),
)

FILES = Table(
    "files",
    "every version of every raw file the snapshot was made from",
    ("path", "file", "taken_in"),
    ("path", "file", "bytes", "layout", "market", "contract", "rows", "rejects", "first_session",
     "last_session", "taken_in"),
)  # fmt: skip

COVERAGE = Table(
    "coverage",
    "what is published of each market and plan, and what is not",
    ("market", "plan"),
    ("market", "plan", "first_session", "last_session", "sessions", "expected", "repaired", "carried", "missing",
     "last_good_snapshot", "state", "reason"),
    renamed=(("expected", "expected_sessions"),),
)  # fmt: skip

TERMS = Table(
    "terms",
    "declared terms of each market, with last trading session and first notice of every contract",
    ("market", "contract"),
    ("market", "contract", "name", "exchange", "currency", "unit", "point_value", "tick_size", "price_notation",
     "may_be_negative", "daily_limit", "calendar", "open_interest_lag", "currency_note", "last_trade",
     "first_notice"),
)  # fmt: skip

RUNS = Table(
    "runs",
    "one row a run; the only table that holds clock times",
    ("run",),
    ("run", "command", "started_at", "finished_at", "outcome", "markets", "published", "held_back"),
)

# Tables kept as one file a market, and those kept as one file for the whole store.
MARKET_TABLES = (BARS, SERIES, ROLLS, FINDINGS, REJECTS, FILES, TERMS)
STORE_TABLES = (COVERAGE, RUNS)
TABLES = (*MARKET_TABLES, *STORE_TABLES)

CURVE_SLOPE = Table(
    "curve_slope",
    "view: how the curve stands between nearby 1 and nearby 2, on every session of nearby 1",
    ("market", "plan", "session"),
    ("market", "plan", "session", "near_contract", "far_contract", "near_settle", "far_settle", "days_between",
     "roll_yield", "annualised_slope", "status"),
    renamed=(("status", "worse_status"),),
)  # fmt: skip

CONSTANT_MATURITY = Table(
    "constant_maturity",
    "view: price for a maturity always as far away, interpolated in calendar days between the two contracts around it",
    ("market", "session", "days"),
    ("market", "session", "days", "near_contract", "far_contract", "near_settle", "far_settle", "far_weight", "price"),
)

CALENDAR_SPREAD = Table(
    "calendar_spread",
    "view: settle of one nearby less that of a farther one, of every pair that a plan publishes",
    ("market", "plan", "nearby", "far_nearby", "session"),
    ("market", "plan", "nearby", "far_nearby", "session", "near_contract", "far_contract", "near_settle", "far_settle",
     "spread", "status"),
    renamed=(("status", "worse_status"),),
)  # fmt: skip

SERIES_IN_CURRENCY = Table(
    "series_in_currency",
    "view: series in currency per contract, where that is true",
    ("market", "plan", "nearby", "session"),
    ("market", "plan", "nearby", "session", "currency", "point_value", "change_value", "back_adjusted_value", "status"),
)

CALENDAR_SPREAD_IN_CURRENCY = Table(
    "calendar_spread_in_currency",
    "view: calendar_spread in currency per contract",
    ("market", "plan", "nearby", "far_nearby", "session"),
    ("market", "plan", "nearby", "far_nearby", "session", "currency", "point_value", "spread_value", "status"),
    renamed=(("status", "worse_status"),),
)

# Made by the catalog of what is published and kept in no file; a later one may stand on an earlier one.
DERIVED = (CURVE_SLOPE, CONSTANT_MATURITY, CALENDAR_SPREAD, SERIES_IN_CURRENCY, CALENDAR_SPREAD_IN_CURRENCY)


def make_table(table: Table, columns: dict[str, object]) -> pa.Table:
    """Arrow table of the schema from arrays or lists by column name, sorted in the table's order.

    A column left out is null on every row; one too many raises ValueError. Arrays may be numpy (NaN is
    null), Arrow or lists.
    """
    unknown = set(columns) - set(table.columns)
    if unknown:
        raise ValueError(f"{table.name} has no column {', '.join(sorted(unknown))}")
    lengths = {len(values) for values in columns.values()}  # type: ignore[arg-type]
    if len(lengths) > 1:
        raise ValueError(f"{table.name}: columns of different lengths {sorted(lengths)}")
    rows = lengths.pop() if lengths else 0
    arrays = []
    for field in table.schema:
        values = columns.get(field.name)
        if values is None:
            arrays.append(pa.nulls(rows, field.type))
        elif isinstance(values, (pa.Array, pa.ChunkedArray)):
            arrays.append(values.cast(field.type))
        else:
            arrays.append(pa.array(values, type=field.type, from_pandas=True))
    made = pa.table(arrays, schema=table.schema)
    return made.sort_by([(name, "ascending") for name in table.order or table.key]) if rows > 1 else made
