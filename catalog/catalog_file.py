"""The catalog: a DuckDB file with views on one snapshot, for any client.

Belongs here: making that file, and the one place where a path is written into SQL. Does not belong here:
opening it and asking it (`query.py`), when it is switched to (`store.py`).
"""

import os
from dataclasses import dataclass
from functools import cache
from pathlib import Path
from string import Template
from typing import TYPE_CHECKING

import pyarrow as pa

from catalog.places import DESK_WIDE
from contracts.errors import StoreError
from contracts.tables import DERIVED, TABLES, Table

if TYPE_CHECKING:
    import duckdb

# DuckDB 2.0 writes files that no client before it opens unless it is told to write older ones.
STORAGE_VERSION = "v1.2.0"
_VIEWS = Path(__file__).parent / "views"
_MACROS = ("series_of", "session_of", "curve_of", "price_trace")
_TYPES = {
    pa.string(): "varchar",
    pa.date32(): "date",
    pa.float64(): "double",
    pa.int32(): "integer",
    pa.int64(): "bigint",
    pa.bool_(): "boolean",
    pa.timestamp("us", tz="UTC"): "timestamp with time zone",
}


@dataclass(frozen=True)
class SnapshotFacts:
    """A snapshot as the catalog shows it; `files` are paths below `folder`."""

    name: str
    sequence: int
    parent: str | None
    desk: str
    code: str
    folder: Path
    files: tuple[str, ...]


def build_catalog(target: Path, facts: SnapshotFacts) -> None:
    """Make a new catalog file at `target`, forced to the disk; the snapshot's files must be in place.

    Raises StoreError, leaving no file.
    """
    import duckdb

    log = target.with_name(f"{target.name}.wal")
    try:
        log.unlink(missing_ok=True)
        with duckdb.connect(":memory:", config={"threads": 1}) as connection:
            connection.execute(
                f"attach {quote_text(str(target))} as made (storage_version {quote_text(STORAGE_VERSION)})"
            )
            lay_views(connection, "made", facts)
            connection.execute("detach made")
        with target.open("rb") as file:
            os.fsync(file.fileno())
        target.chmod(0o444 & target.stat().st_mode)
    except (duckdb.Error, OSError) as error:
        for remains in (target, log):
            remains.unlink(missing_ok=True)
        raise StoreError(f"the catalog could not be built: {error}; the last one still stands") from error


def lay_views(connection: "duckdb.DuckDBPyConnection", database: str, facts: SnapshotFacts) -> None:
    """Make the tables' views, the macros, `dictionary` and `snapshot` in a database of a connection."""
    sources = {table.name: _source(table, facts) for table in TABLES}
    for table in TABLES:
        columns = ", ".join(quote_name(name) for name in table.columns)
        text = _statement("table").substitute(
            database=database, name=quote_name(table.name), columns=columns, source=sources[table.name]
        )
        connection.execute(text)
    about = quote_text(f"snapshot {facts.name}, desk {facts.desk[:12]}, code {facts.code[:12]}")
    for macro in _MACROS:
        connection.execute(_statement(macro).substitute(database=database, about=about, **sources))
    _lay_derived(connection, database, sources)
    connection.execute(_statement("dictionary").substitute(database=database))
    rows = [row for table in (*TABLES, *DERIVED) for row in describe_columns(table)]
    # One statement; a hundred would take longer than all the rest of the catalog.
    places = ", ".join(["(?, ?, ?, ?, ?, ?)"] * len(rows))
    values = [value for row in rows for value in row]
    connection.execute(f"insert into {database}.dictionary values {places}", values)  # noqa: S608
    connection.execute(_statement("snapshot").substitute(database=database))
    row = [facts.name, facts.sequence, facts.parent, facts.desk, facts.code, str(facts.folder)]
    connection.execute(f"insert into {database}.snapshot values (?, ?, ?, ?, ?, ?)", row)  # noqa: S608


def _lay_derived(connection: "duckdb.DuckDBPyConnection", database: str, sources: dict[str, str]) -> None:
    """Make each derived view, and a macro of one market with its name and `_of`."""
    # A view looks names up in the catalog it lies in, whatever the caller calls that; a macro does not.
    shown = {table.name: table.name for table in (*TABLES, *DERIVED)}
    asked = {
        table.name: f"(select * from {sources[table.name]} where market = market_code)"  # noqa: S608
        for table in TABLES
        if "market" in table.columns
    }
    for view in DERIVED:
        body = _statement(view.name)
        connection.execute(f"create view {database}.{view.name} as {body.substitute(shown)}")
        text = body.substitute(asked)
        connection.execute(f"create macro {database}.{view.name}_of(market_code) as table {text}")
        asked[view.name] = f"({text})"


def describe_columns(table: Table) -> list[list[str]]:
    """The dictionary's rows of a table: table, column, type, unit, meaning, meaning of the table."""
    rows = []
    for name in table.columns:
        column = table.definition(name)
        rows.append([table.name, name, _TYPES[column.type], column.unit, column.meaning, table.meaning])
    return rows


def quote_text(text: str) -> str:
    """A text as an SQL literal."""
    return "'" + text.replace("'", "''") + "'"


def quote_name(name: str) -> str:
    """A name as an SQL identifier."""
    return '"' + name.replace('"', '""') + '"'


def _source(table: Table, facts: SnapshotFacts) -> str:
    """A from-item with the rows of a table: its files by name, or no rows of its types."""
    paths = [str(facts.folder / path) for path in facts.files if path.startswith(f"{table.name}/")]
    if not paths:
        types = [_TYPES[table.definition(name).type] for name in table.columns]
        nulls = (f"cast(null as {kind}) as {quote_name(name)}" for kind, name in zip(types, table.columns, strict=True))
        return f"(select {', '.join(nulls)} where false)"
    # Folders named like year=2024 above the store would otherwise add columns.
    options = "hive_partitioning = false"
    names = [quote_name(name) for name in table.columns]
    if "market" in table.key and not any(path.endswith(f"/{DESK_WIDE}.parquet") for path in paths):
        # A market's file holds its rows alone; taken from the name, a condition on the market opens no other
        # file. Of 200 files, asking for one market then takes a third of the time.
        options += ", filename = true"
        names[table.columns.index("market")] = "parse_filename(filename, true) as market"
    files = ", ".join(map(quote_text, paths))
    return f"(select {', '.join(names)} from read_parquet([{files}], {options}))"  # noqa: S608


@cache
def _statement(name: str) -> Template:
    return Template((_VIEWS / f"{name}.sql").read_text(encoding="utf-8"))
