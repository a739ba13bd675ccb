"""Opening a snapshot and asking it.

Belongs here: a connection that can read the published files and nothing else. Does not belong here: the views
themselves (`catalog_file.py`), what is asked.
"""

import shlex
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from typing import TYPE_CHECKING, Any

from catalog.catalog_file import lay_views, quote_text
from catalog.places import Places
from catalog.standing import current_snapshot, facts_of, read_manifest
from contracts.errors import StoreUnsound, UsageError
from contracts.tables import DERIVED

if TYPE_CHECKING:
    import duckdb

_DATABASE = "published"
_MEND = "run ropewalk verify --repoint"


def open_catalog(places: Places, snapshot: str | None = None) -> "duckdb.DuckDBPyConnection":
    """A connection to the newest snapshot, or to the one named, with its views and macros in reach.

    It reads files of the store's snapshots and no other, loads nothing, and its settings are locked. Raises
    UsageError where nothing is published or there is no such snapshot, StoreUnsound where the catalog is
    gone, damaged, or names files where the store no longer is.
    """
    import duckdb

    manifest = read_manifest(places, snapshot) if snapshot is not None else None
    if manifest is None and current_snapshot(places) is None:
        raise UsageError(f"{places.store}: nothing is published here yet; run ropewalk build first")
    connection = duckdb.connect(":memory:", config=_CLOSED)
    try:
        if manifest is not None:
            connection.execute(f"attach ':memory:' as {_DATABASE}")
            lay_views(connection, _DATABASE, facts_of(places, manifest))
        else:
            if not places.catalog.is_file():
                raise StoreUnsound(f"{places.catalog}: the catalog is gone; {_MEND}")
            connection.execute(f"attach {quote_text(str(places.catalog))} as {_DATABASE} (read_only)")
            _check_folder(connection, places)
        connection.execute(f"use {_DATABASE}")
        connection.execute(f"set allowed_directories = [{quote_text(str(places.snapshots))}]")
        for setting in ("temp_directory = ''", "enable_external_access = false", "lock_configuration = true"):
            connection.execute(f"set {setting}")
    except duckdb.Error as error:
        connection.close()
        raise StoreUnsound(f"{places.catalog}: cannot be opened: {_first_line(error)}; {_MEND}") from error
    except BaseException:
        connection.close()
        raise
    return connection


_CLOSED: dict[str, str | bool | int | float | list[str]] = {
    "autoinstall_known_extensions": False,
    "autoload_known_extensions": False,
    "allow_community_extensions": False,
    "python_enable_replacements": False,
}


def _check_folder(connection: "duckdb.DuckDBPyConnection", places: Places) -> None:
    """Refuse a catalog whose files are elsewhere than the store."""
    row = connection.execute(f"select name, folder from {_DATABASE}.snapshot").fetchone()  # noqa: S608
    if row is None:
        raise StoreUnsound(f"{places.catalog}: names no snapshot; {_MEND}")
    name, folder = row
    if folder != str(places.snapshot(name)):
        raise StoreUnsound(
            f"{places.catalog}: its views name files in {folder}, and the store is at {places.store}: "
            f"it was moved or copied; {_MEND}"
        )
    if not places.snapshot(name).is_dir():
        raise StoreUnsound(f"{places.catalog}: its snapshot {name} is gone; {_MEND}")


def run_query(
    connection: "duckdb.DuckDBPyConnection", sql: str, parameters: Sequence[Any] = ()
) -> tuple[list[str], list[tuple[Any, ...]]]:
    """Column names and rows of one query that only reads; `parameters` are bound to its question marks.

    Raises UsageError for anything but one reading statement and for what DuckDB cannot make of it,
    StoreUnsound where a published file cannot be read.
    """
    import duckdb

    try:
        kinds = [_kind_of(statement) for statement in duckdb.extract_statements(sql)]
        if kinds != ["SELECT"]:
            seen = ", ".join(kinds) or "nothing"
            raise UsageError(f"seen {seen}; expected one query that only reads, such as: from series limit 5")
        return _run_apart(connection, sql, parameters)
    except duckdb.Error as error:
        if _is_about_a_file(error):
            text = f"a published file cannot be read: {_first_line(error)}; run ropewalk verify"
            raise StoreUnsound(text) from error
        text = str(error).partition("\n\nLINE ")[0]
        raise UsageError(f"the query cannot be run: {text}") from error


def _run_apart(
    connection: "duckdb.DuckDBPyConnection", sql: str, parameters: Sequence[Any]
) -> tuple[list[str], list[tuple[Any, ...]]]:
    """Run a query on a thread of its own: the main one hears no signal while it works inside DuckDB."""
    with ThreadPoolExecutor(1) as pool:
        answer = pool.submit(_run_typed, connection, sql, parameters)
        try:
            return answer.result()
        except BaseException:
            connection.interrupt()
            raise


def _run_typed(
    connection: "duckdb.DuckDBPyConnection", sql: str, parameters: Sequence[Any]
) -> tuple[list[str], list[tuple[Any, ...]]]:
    if not parameters:
        # Since 2.0 a WITH clause at the top may hold a COPY or INSERT, and is a SELECT all the same;
        # within query() it may not, and explaining runs nothing.
        connection.execute(f"explain select * from query({quote_text(sql)})")  # noqa: S608
    cursor = connection.execute(sql, list(parameters))
    return [column[0] for column in cursor.description or ()], cursor.fetchall()


def _kind_of(statement: "duckdb.Statement") -> str:
    try:
        return str(statement.type).rpartition(".")[2]
    except ValueError:
        # UPDATE EXTENSIONS has a number in DuckDB 2.0 for which its Python client has no name.
        return "a statement of no known kind"


def _is_about_a_file(error: "duckdb.Error") -> bool:
    """Whether a query failed for the files it reads rather than for what it says."""
    import duckdb

    if isinstance(error, duckdb.InvalidInputException):
        return ".parquet" in str(error)
    # What a damaged Parquet footer or page raises has no class of its own.
    damaged = (duckdb.IOException, duckdb.SerializationException, duckdb.InternalException)
    return isinstance(error, damaged) or type(error) is duckdb.Error


def _first_line(error: Exception) -> str:
    return str(error).partition("\n")[0]


def how_to_open(places: Places) -> str:
    """How any client opens the catalog, as lines of text."""
    path = places.catalog
    derived = ", ".join(view.name for view in DERIVED)
    return "\n".join(
        [
            f"The catalog is {path}, a DuckDB file (any client from 1.2 on). Open it for reading only:",
            "",
            f"  Python  import duckdb; catalog = duckdb.connect({str(path)!r}, read_only=True)",
            "          catalog.sql(\"from series where market = '...'\").df()",
            f"  shell   duckdb -readonly {shlex.quote(str(path))}",
            "",
            "It shows the snapshot that is newest when it is opened: open it again after a night.",
            "Tables: bars, series, rolls, findings, rejects, files, coverage, terms, runs; dictionary says",
            "what their columns mean, snapshot which snapshot it is.",
            f"Views derived from them: {derived}.",
            "Macros: series_of(market), session_of(day), curve_of(market, day),",
            "price_trace(market, plan, nearby, day), and each derived view of one market by its name and _of, such as",
            f"from {DERIVED[0].name}_of('...').",
        ]
    )
