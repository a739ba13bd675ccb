"""The command that proposes layouts: what it prints, where, and how it ends."""

import json
import tomllib
from pathlib import Path

import pytest
from click.testing import CliRunner, Result

from contracts.layouts import parse_layout
from flows.propose import propose
from flows.shell import Ropewalk

GOOD = b"date,open,high,low,settle,volume,oi\n2025-01-02,1,2,0.5,1.5,100,5\n2025-01-03,1,2,0.5,1.25,100,5\n"


def call(*arguments: object) -> Result:
    """The command in a group of its own."""
    group = Ropewalk("ropewalk")
    group.add_command(propose)
    return CliRunner().invoke(group, ["propose", *map(str, arguments)])


@pytest.fixture
def raw(tmp_path: Path) -> Path:
    """A folder with one good file, grains/NWHT_2025_03.csv."""
    (tmp_path / "grains").mkdir()
    (tmp_path / "grains" / "NWHT_2025_03.csv").write_bytes(GOOD)
    return tmp_path


def test_what_is_printed_is_a_layout_as_it_stands(raw: Path) -> None:
    result = call(raw / "grains" / "NWHT_2025_03.csv", "--raw", raw)
    assert result.exit_code == 0
    assert result.stderr == ""
    layout = parse_layout(result.stdout, "layouts/nwht.toml")
    assert layout.files == r"grains/(?P<market>NWHT)_(?P<year>\d{4})_(?P<month>\d{2})\.csv"
    assert layout.columns.open_interest == "oi"


def test_evidence_doubts_and_first_rows_stand_beside_it(raw: Path) -> None:
    (raw / "grains" / "NWHT_2025_12.csv").write_bytes(b"date,settle\n05/05/2025,212.25\n06/06/2025,213\n")
    lines = call(raw / "grains" / "NWHT_2025_12.csv", "--raw", raw).stdout.split("\n")
    assert lines[0] == f"# Paths are taken below {raw}"
    assert "# layouts/nwht.toml" in lines
    assert "# 2 of 2 values parse as day-first (%d/%m/%Y)" in lines
    assert "# - open_interest: no column found for it" in lines
    assert "# NWHT-2025-12  2025-05-05                   212.25" in lines


def test_the_folder_that_holds_all_files_is_the_default_for_raw(raw: Path) -> None:
    (raw / "other").mkdir()
    (raw / "other" / "NWHT_2025_05.csv").write_bytes(GOOD)
    result = call(raw / "grains" / "NWHT_2025_03.csv", raw / "other" / "NWHT_2025_05.csv", "--json")
    told = json.loads(result.stdout)
    assert told["raw"] == str(raw)
    assert [proposal["files"] for proposal in told["proposals"]] == [
        ["grains/NWHT_2025_03.csv", "other/NWHT_2025_05.csv"]
    ]


def test_json_holds_layout_evidence_doubts_and_sample(raw: Path) -> None:
    told = json.loads(call(raw / "grains" / "NWHT_2025_03.csv", "--raw", raw, "--json").stdout)
    (proposal,) = told["proposals"]
    assert told["nothing_made_of"] == []
    assert set(proposal) == {"name", "files", "layout", "evidence", "unsure", "sample"}
    assert tomllib.loads(proposal["layout"])["columns"]["settle"] == "settle"
    assert {"key": "columns.settle", "choice": "settle", "text": "the header 'settle' says so"} in proposal["evidence"]
    assert proposal["sample"][0] == {
        "contract": "NWHT-2025-03",
        "session": "2025-01-02",
        "open": 1.0,
        "high": 2.0,
        "low": 0.5,
        "settle": 1.5,
        "volume": 100.0,
        "open_interest": 5.0,
    }


def test_a_file_that_is_not_there_ends_with_2_and_is_named(raw: Path) -> None:
    result = call(raw / "nowhere.csv", "--raw", raw)
    assert result.exit_code == 2
    assert result.stdout == ""
    assert f"{raw / 'nowhere.csv'}: No such file or directory" in result.stderr


def test_a_file_nothing_can_be_made_of_ends_with_2_and_the_others_are_proposed(raw: Path) -> None:
    (raw / "note.txt").write_text("Dear desk,\nno prices today.\n")
    result = call(raw / "note.txt", raw / "grains" / "NWHT_2025_03.csv", "--raw", raw)
    assert result.exit_code == 2
    assert "note.txt: no line of it reads as a header" in result.stderr
    assert parse_layout(result.stdout, "x").columns.settle == "settle"


def test_a_file_outside_the_raw_folder_is_refused(raw: Path) -> None:
    (raw / "NWHT_2025_05.csv").write_bytes(GOOD)
    result = call(raw / "NWHT_2025_05.csv", "--raw", raw / "grains")
    assert result.exit_code == 2
    assert "is not below" in result.stderr


def test_a_folder_is_refused(raw: Path) -> None:
    result = call(raw / "grains", "--raw", raw)
    assert result.exit_code == 2
    assert "is a folder; expected a file" in result.stderr


def test_nothing_in_a_file_steers_the_terminal(raw: Path) -> None:
    (raw / "grains" / "NWHT_2025_03.csv").write_bytes(GOOD.replace(b"oi\n", b"open \x1b[31minterest\n"))
    result = call(raw / "grains" / "NWHT_2025_03.csv", "--raw", raw)
    assert "\x1b" not in result.stdout + result.stderr
    assert parse_layout(result.stdout, "x").columns.settle == "settle"
