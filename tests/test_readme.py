"""What the README shows is run."""

import re
from pathlib import Path

import duckdb
import pytest

ROOT = Path(__file__).resolve().parent.parent
README = (ROOT / "README.md").read_text(encoding="utf-8")


def blocks(language: str) -> list[str]:
    return re.findall(rf"```{language}\n(.*?)```", README, flags=re.DOTALL)


@pytest.mark.parametrize("query", blocks("sql"))
def test_every_query_of_the_readme_answers_on_the_sample(query: str, sample_store: Path) -> None:
    with duckdb.connect(str(sample_store / "catalog.duckdb"), read_only=True) as connection:
        assert connection.sql(query).fetchall()


@pytest.mark.parametrize("code", blocks("python"))
def test_every_python_example_of_the_readme_runs(
    code: str, sample_store: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.chdir(sample_store.parent)
    exec(compile(code, "README.md", "exec"), {})
    assert "NWHT" in capsys.readouterr().out


def test_readme_names_every_command_and_no_other() -> None:
    from flows.commands import main

    named = set(re.findall(r"^\| `([a-z]+)[ `]", README.split("## Commands")[1], flags=re.MULTILINE))
    assert named == set(main.commands)


def test_readme_names_every_view(sample_store: Path) -> None:
    with duckdb.connect(str(sample_store / "catalog.duckdb"), read_only=True) as connection:
        views = {row[0] for row in connection.sql("select view_name from duckdb_views() where not internal").fetchall()}
    section = README.split("## What you get")[1].split("## Query it")[0]
    assert views - {"snapshot"} <= set(re.findall(r"`([a-z_]+)`", section))
