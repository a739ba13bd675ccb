"""What the README shows is run."""

import re
import shlex
import subprocess
import sys
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


def test_readme_shows_the_study_as_the_command_prints_it(sample_store: Path) -> None:
    command = next(line for line in "".join(blocks("sh")).splitlines() if line.startswith("ropewalk study"))
    words = shlex.split(command)[1:]
    told = subprocess.run(
        [sys.executable, "-m", "flows.commands", *words[: words.index("--picture")], "--store", str(sample_store)],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    printed = {
        re.split(r"  +", line)[0]: re.split(r"  +", line)[1:] for line in told.stdout.splitlines() if "  " in line
    }
    rows = re.findall(r"^\| ([^|]+) \| ([^|]+) \| ([^|]+) \| ([^|]+) \|$", README.split("## Which roll rule")[1], re.M)
    shown = {name: values for name, *values in rows[1:5] if name != "---"}
    assert len(shown) == 4
    for name, values in shown.items():
        assert printed[name] == values
