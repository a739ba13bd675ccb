"""What the reading commands print, as text and as JSON."""

import json
import os
import re
from pathlib import Path

import pytest

from tests.flows.conftest import Run
from tests.integration.tiny import write_desk, write_raw


@pytest.fixture(scope="module")
def published(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A desk that is published, with one settle of TINA ten times too large and a file nobody claims."""
    from click.testing import CliRunner

    from flows.commands import main

    desk = write_desk(tmp_path_factory.mktemp("answers"))
    write_raw(desk, 80)
    file = desk / "raw" / "TINA_2024_03.csv"
    lines = file.read_text().splitlines()
    cells = lines[41].split(",")
    assert cells[0] == "2023-12-27"
    cells[3] = str(float(cells[3]) * 10)
    lines[41] = ",".join(cells)
    file.write_text("\n".join(lines) + "\n")
    (desk / "raw" / "notes.txt").write_text("hello\n")
    assert CliRunner().invoke(main, ["build", "--desk", str(desk)]).exit_code == 0
    return desk


def test_desk_as_json(published: Path, run: Run) -> None:
    told = json.loads(run("desk", "--desk", published, "--json").stdout)
    assert told == {"markets": ["TINA", "TINB"], "layouts": ["plain"], "mistakes": []}


def test_desk_as_text_counts_what_is_declared(published: Path, run: Run) -> None:
    lines = run("desk", "--desk", published).stdout.splitlines()
    assert lines[0].endswith("2 markets, 1 layout, 0 repairs, 0 waivers; no mistakes")
    assert lines[1] == "runs on cron 30 19 * * 1-5 UTC, by threads"
    assert lines[4].split() == ["TINA", "Northmark", "TINA", "XNMK", "EUR", "by_volume"]


def test_desk_of_a_market_as_json(published: Path, run: Run) -> None:
    """The 15th of September 2024 is a Sunday, of December 2024 too; three weekdays before is the deadline."""
    told = json.loads(run("desk", "TINA", "--desk", published, "--years", "2024", "--json").stdout)
    assert told == {
        "contracts": [
            {
                "contract": f"TINA-2024-{month}",
                "last_trade": last,
                "first_notice": None,
                "deadlines": {"by_volume": deadline},
            }
            for month, last, deadline in (
                ("03", "2024-03-15", "2024-03-12"),
                ("06", "2024-06-14", "2024-06-11"),
                ("09", "2024-09-13", "2024-09-10"),
                ("12", "2024-12-13", "2024-12-10"),
            )
        ]
    }


def test_desk_of_a_market_as_text(published: Path, run: Run) -> None:
    lines = run("desk", "TINA", "--desk", published, "--years", "2024:2025").stdout.splitlines()
    assert re.split(r"  +", lines[0]) == ["contract", "last_trade", "first_notice", "deadline of by_volume"]
    assert lines[1].split() == ["TINA-2024-03", "2024-03-15", "2024-03-12"]
    assert len(lines) == 9


def test_a_market_that_is_not_declared_is_met_with_the_nearest(published: Path, run: Run) -> None:
    result = run("desk", "TINX", "--desk", published)
    assert result.exit_code == 2
    assert "did you mean TINA or TINB?" in result.stderr or "did you mean TINB or TINA?" in result.stderr


def test_mistakes_of_a_desk_as_json(tmp_path: Path, run: Run) -> None:
    desk = write_desk(tmp_path)
    file = desk / "markets" / "tina.toml"
    file.write_text(file.read_text().replace("tick_size = 0.25", "tick_size = 'x'"))
    result = run("desk", "--desk", desk, "--json")
    assert result.exit_code == 2
    (mistake,) = json.loads(result.stdout)["mistakes"]
    assert set(mistake) == {"file", "line", "key", "seen", "expected"}
    assert (mistake["file"], mistake["key"], mistake["seen"]) == ("markets/tina.toml", "tick_size", "'x'")
    assert file.read_text().splitlines()[mistake["line"] - 1].startswith("tick_size")


def test_findings_are_most_harmful_first(published: Path, run: Run) -> None:
    told = json.loads(run("findings", "--desk", published, "--json").stdout)
    impacts = [finding["impact_sessions"] for finding in told["findings"]]
    assert impacts == sorted(impacts, reverse=True)
    assert told["total"] == len(impacts)
    worst = told["findings"][0]
    assert (worst["contract"], worst["session"]) == ("TINA-2024-03", "2023-12-27")
    assert (worst["kind"], worst["action"]) == ("decimal_shift", "repaired")
    assert worst["impact_sessions"] > 0


def test_findings_can_be_narrowed(published: Path, run: Run) -> None:
    def told(*options: str) -> list[dict[str, str | None]]:
        found = json.loads(run("findings", *options, "--desk", published, "--json").stdout)["findings"]
        assert isinstance(found, list)
        return found

    everything = told()
    of_kind = told("--kind", "decimal_shift")
    assert [finding["kind"] for finding in of_kind] == ["decimal_shift"]
    assert told("TINB", "--kind", "decimal_shift") == []
    assert told("--since", "2023-12-27", "--kind", "decimal_shift") == of_kind
    assert told("--since", "2023-12-28", "--kind", "decimal_shift") == []
    reviews = told("--severity", "review")
    assert reviews == [finding for finding in everything if finding["severity"] == "review"]
    assert told("--limit", "1") == everything[:1]
    (unclaimed,) = told("--kind", "unclaimed_file")
    assert unclaimed["market"] is None


def test_findings_as_text_say_how_many_there_are_in_all(published: Path, run: Run) -> None:
    total = json.loads(run("findings", "--desk", published, "--json").stdout)["total"]
    assert total >= 2
    result = run("findings", "--desk", published, "--limit", "1")
    lines = result.stdout.splitlines()
    assert lines[0].startswith("TINA-2024-03, 2023-12-27: settle")
    assert "Cost: had it stood, the trend score would be another on" in " ".join(line.strip() for line in lines[1:5])
    assert lines[-1] == f"the first 1 of {total}; --limit {total} shows all"
    of_market = run("findings", "TINA", "--limit", "1", "--desk", published).stdout
    assert "replaced; without cleaning the trend score would differ on" in " ".join(of_market.split())
    cleaning = json.loads(run("findings", "TINA", "--desk", published, "--json").stdout)["cleaning"]
    assert list(cleaning) == ["TINA"] and all(one["turned"] > 0 for one in cleaning["TINA"].values())
    none = run("findings", "TINB", "--kind", "decimal_shift", "--desk", published)
    assert (none.exit_code, none.stdout) == (0, "no findings\n")


@pytest.mark.parametrize(
    ("arguments", "hint"),
    [
        (("findings", "TINQ"), "did you mean"),
        (("findings", "--kind", "decimal"), "did you mean decimal_shift"),
        (("rolls", "tina"), "did you mean TINA"),
        (("rolls", "TINA", "--plan", "by_volum"), "did you mean by_volume"),
        (("trace", "TINX", "2024-01-10"), "TINA"),
        (("trace", "TINA", "2024-01-10", "--plan", "other"), "by_volume"),
        (("trace", "TINA", "2024-01-13"), "2024-01-12"),
        (("trace", "TINA", "2024-01-10", "--snapshot", "000009-abcdefabcdef"), "000009"),
        (("verify", "--snapshot", "000009-abcdefabcdef"), "000009"),
    ],
)
def test_what_is_not_there_is_2_and_names_what_is(
    arguments: tuple[str, ...], hint: str, published: Path, run: Run
) -> None:
    result = run(*arguments, "--desk", published)
    assert result.exit_code == 2
    assert hint in result.stderr


@pytest.mark.parametrize(
    "arguments",
    [("findings",), ("rolls", "TINA"), ("trace", "TINA", "2024-01-10"), ("verify",), ("sql", "select 1")],
)
def test_a_store_with_nothing_in_it_is_2_for_every_reader(arguments: tuple[str, ...], tmp_path: Path, run: Run) -> None:
    result = run(*arguments, "--store", tmp_path / "empty")
    assert result.exit_code == 2
    assert "empty" in result.stderr
    assert not (tmp_path / "empty").exists()


def test_rolls_as_json_and_text(published: Path, run: Run) -> None:
    told = json.loads(run("rolls", "TINA", "--desk", published, "--json").stdout)["rolls"]
    assert [(roll["outgoing"], roll["incoming"]) for roll in told] == [("TINA-2024-03", "TINA-2024-06")]
    (roll,) = told
    assert roll["gap"] == roll["incoming_settle"] - roll["outgoing_settle"]
    lines = run("rolls", "TINA", "--plan", "by_volume", "--nearby", "1", "--desk", published).stdout.splitlines()
    assert lines[0].split()[:5] == ["plan", "nearby", "effective_on", "outgoing", "incoming"]
    assert lines[1].split()[:5] == ["by_volume", "1", roll["effective_on"], "TINA-2024-03", "TINA-2024-06"]
    assert run("rolls", "TINA", "--nearby", "7", "--desk", published).stdout == "no rolls\n"


def test_trace_leads_to_the_raw_line(published: Path, run: Run) -> None:
    told = json.loads(run("trace", "TINA", "2023-12-27", "--desk", published, "--json").stdout)
    (leg,) = told["legs"]
    assert (leg["path"], leg["line"], leg["status"]) == ("TINA_2024_03.csv", 42, "repaired")
    text = run("trace", "TINA", "2023-12-27", "--desk", published).stdout
    assert "TINA_2024_03.csv:42" in text


def test_verify_tells_what_was_checked(published: Path, run: Run) -> None:
    result = run("verify", "--desk", published, "--json")
    told = json.loads(result.stdout)
    assert result.exit_code == 0
    assert set(told) == {"snapshot", "sound", "deep", "files_checked", "rules_run", "problems"}
    assert (told["sound"], told["problems"], told["deep"]) == (True, [], False)
    assert told["files_checked"] > 16 and told["rules_run"] > 0
    assert ": sound (" in run("verify", "--desk", published).stdout


def test_verify_deep_derives_every_number_again(published: Path, run: Run) -> None:
    result = run("verify", "--deep", "--desk", published)
    assert result.exit_code == 0
    assert "every number derived again" in result.stdout


def test_verify_deep_with_another_desk_is_5_and_says_so(published: Path, tmp_path: Path, run: Run) -> None:
    other = write_desk(tmp_path)
    (other / "desk.toml").write_text((other / "desk.toml").read_text().replace("[5, 10]", "[5, 11]"))
    result = run("verify", "--deep", "--desk", other, "--store", published / "published")
    assert result.exit_code == 5
    assert "the desk is another: desk.toml look_backs: [5, 10] -> [5, 11]" in result.stdout


def test_a_store_that_was_moved_says_so_and_is_pointed_right(published: Path, tmp_path: Path, run: Run) -> None:
    import shutil

    shutil.copytree(published / "published", tmp_path / "moved")
    before = run("findings", "--store", tmp_path / "moved")
    assert before.exit_code == 5
    assert "--repoint" in before.stderr
    assert run("verify", "--repoint", "--store", tmp_path / "moved").exit_code == 0
    assert run("findings", "--store", tmp_path / "moved").exit_code == 0


def test_sql_answers_as_json_and_text(published: Path, run: Run) -> None:
    query = "select market, plan, count(*) as sessions, min(session) as first from series group by all order by all"
    told = json.loads(run("sql", query, "--desk", published, "--json").stdout)
    assert told["columns"] == ["market", "plan", "sessions", "first"]
    assert told["rows"] == [["TINA", "by_volume", 80, "2023-11-01"], ["TINB", "by_volume", 80, "2023-11-01"]]
    lines = run("sql", query, "--desk", published).stdout.splitlines()
    assert lines[1].split() == ["TINA", "by_volume", "80", "2023-11-01"]


@pytest.mark.parametrize("query", ["drop view series", "selec 1", "copy series to 'x.csv'", "select 1; select 2", ""])
def test_sql_that_does_not_read_is_2(query: str, published: Path, run: Run) -> None:
    result = run("sql", query, "--desk", published)
    assert result.exit_code == 2
    assert "Traceback" not in result.stderr and result.stderr


def test_sql_cannot_steer_the_terminal(published: Path, run: Run) -> None:
    result = run("sql", "select 'a' || chr(27) || '[2J' as \"x\x1b[31m\"", "--desk", published)
    assert result.exit_code == 0
    assert "\x1b" not in result.stdout
    assert "a\\x1b[2J" in result.stdout


def test_sql_without_a_query_says_how_to_open_the_catalog(published: Path, run: Run) -> None:
    result = run("sql", "--desk", published)
    assert result.exit_code == 0
    assert str(published / "published" / "catalog.duckdb") in result.stdout
    assert "read_only" in result.stdout


def test_rehash_sees_a_file_that_changed_behind_its_size_and_time(published: Path, run: Run) -> None:
    file = published / "raw" / "TINA_2024_06.csv"
    before = file.stat()
    text = file.read_text()
    assert text.count(",5000,") > 1
    file.write_text(text.replace(",5000,", ",5001,", 1))
    os.utime(file, ns=(before.st_atime_ns, before.st_mtime_ns))
    assert run("build", "--desk", published, "--json", "--rehash").exit_code == 0
    told = json.loads(run("findings", "--desk", published, "--kind", "restated", "--json").stdout)
    assert [row["contract"] for row in told["findings"]] == ["TINA-2024-06"]
