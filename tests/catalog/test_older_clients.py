"""The catalog opens and answers in every DuckDB from 1.2 on.

Each version is installed into an environment of its own, which takes the network and a minute: asked for with
ROPEWALK_CLIENTS=1.
"""

import json
import os
import subprocess
import sys
from pathlib import Path

import duckdb
import pytest

from contracts.tables import DERIVED

VERSIONS = ("1.2.2", "1.4.4", "1.5.4", "2.0.1")

ASK = """
import json, sys
import duckdb
catalog = duckdb.connect(sys.argv[1], read_only=True)
answers = [[list(map(str, row)) for row in catalog.execute(query).fetchall()] for query in json.loads(sys.argv[2])]
print(json.dumps([duckdb.__version__, answers]))
"""


def queries(store: Path) -> list[str]:
    """One for every view and macro of the catalog."""
    with duckdb.connect(str(store / "catalog.duckdb"), read_only=True) as connection:
        views = [row[0] for row in connection.sql("select view_name from duckdb_views() where not internal").fetchall()]
        tables = [row[0] for row in connection.sql("select table_name from duckdb_tables()").fetchall()]
    asked = [f"select count(*) from {name}" for name in sorted(views + tables)]
    return [
        *asked,
        "select market, plan, count(*), round(sum(back_adjusted), 6) from series group by all order by all",
        "select count(*) from series_of('NWHT')",
        "select * from session_of('2024-03-01') order by all limit 5",
        "select * from curve_of('NWHT', '2024-03-01') order by all",
        "select * from price_trace('NWHT', 'by_open_interest', 1, '2024-03-01')",
        *(f"select * from {view.name}_of('NWHT') order by all limit 30" for view in DERIVED),
        'select "column", unit from dictionary order by all',
    ]


@pytest.mark.skipif("ROPEWALK_CLIENTS" not in os.environ, reason="asked for with ROPEWALK_CLIENTS=1; takes the network")
@pytest.mark.parametrize("version", VERSIONS)
def test_catalog_answers_alike_in(sample_store: Path, tmp_path: Path, version: str) -> None:
    subprocess.run([sys.executable, "-m", "venv", str(tmp_path / "env")], check=True)
    python = tmp_path / "env" / "bin" / "python"
    subprocess.run([python, "-m", "pip", "install", "-q", f"duckdb=={version}"], check=True)
    asked = queries(sample_store)
    told = subprocess.run(
        [python, "-c", ASK, str(sample_store / "catalog.duckdb"), json.dumps(asked)],
        capture_output=True, text=True,
    )  # fmt: skip
    assert told.returncode == 0, told.stderr
    seen, answers = json.loads(told.stdout)
    assert seen == version
    with duckdb.connect(str(sample_store / "catalog.duckdb"), read_only=True) as connection:
        expected = [[list(map(str, row)) for row in connection.sql(query).fetchall()] for query in asked]
    assert answers == expected
