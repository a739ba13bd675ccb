"""Nights that are asked for less: some markets, up to a session, only a look; and past nights replayed."""

import json
import re
from pathlib import Path

import duckdb
import pytest

from catalog.places import Places
from catalog.standing import list_snapshots, read_manifest
from tests.flows.conftest import Run, RunApart
from tests.flows.test_work import hashes
from tests.integration.tiny import write_raw

REFUSED = "http://127.0.0.1:9/api"


def state(desk: Path) -> dict[str, tuple[str, str | None, str]]:
    """State, snapshot that made the tables where it is an older one, and last session of each market."""
    markets = read_manifest(Places(desk / "published")).markets
    return {code: (v.state, v.last_good_snapshot, v.facts.get("last_session", "")) for code, v in markets.items()}


def test_only_the_market_asked_for_is_built_and_the_others_stay_until_they_are_asked_for(desk: Path, run: Run) -> None:
    assert run("build", "--desk", desk).exit_code == 0
    (first,) = list_snapshots(Places(desk / "published"))
    write_raw(desk, 81)
    some = run("build", "--desk", desk, "--market", "TINA")
    assert some.exit_code == 0
    assert "not asked for, and as they were: TINB" in some.stdout
    assert state(desk) == {"TINA": ("published", None, "2024-02-21"), "TINB": ("published", first, "2024-02-20")}
    assert run("verify", "--deep", "--desk", desk).exit_code == 0
    told = json.loads(run("changes", "--desk", desk, "--json").stdout)
    assert "unexplained" not in json.dumps(told)

    again = run("build", "--desk", desk, "--market", "TINA")
    assert again.stdout.startswith("nothing new")
    assert run("build", "--desk", desk, "--json").exit_code == 0
    assert state(desk)["TINB"] == ("published", None, "2024-02-21")
    told = json.loads(run("changes", "--desk", desk, "--json").stdout)
    assert "unexplained" not in json.dumps(told)
    assert run("verify", "--deep", "--desk", desk).exit_code == 0


def test_a_market_never_published_and_not_asked_for_is_held_back_and_says_why(desk: Path, run: Run) -> None:
    result = run("build", "--desk", desk, "--market", "TINB")
    assert result.exit_code == 3
    assert "held back: TINA: not asked for, and never published" in result.stdout
    assert run("build", "--desk", desk).exit_code == 0
    assert {code: state for code, (state, _, _) in state(desk).items()} == {"TINA": "published", "TINB": "published"}


@pytest.mark.parametrize("command", ["build", "nightly"])
def test_a_market_asked_for_that_is_not_declared_is_2_and_names_the_nearest(command: str, desk: Path, run: Run) -> None:
    result = run(command, "--desk", desk, "--market", "TINX")
    assert result.exit_code == 2
    assert "TINA" in result.stderr
    assert not (desk / "published").exists()


def test_as_of_a_session_gives_what_the_files_up_to_it_would_have(desk: Path, tmp_path: Path, run: Run) -> None:
    """All prices but those later: the tables of bars are equal row by row, though the files are longer."""
    import pyarrow.parquet as pq

    assert run("build", "--desk", desk, "--store", tmp_path / "short").exit_code == 0
    write_raw(desk, 90)
    assert run("build", "--desk", desk, "--as-of", "2024-02-20", "--store", tmp_path / "cut").exit_code == 0
    tables = {}
    for store in ("short", "cut"):
        places = Places(tmp_path / store)
        folder = places.snapshot(read_manifest(places).name)
        tables[store] = {table: pq.read_table(folder / table / "TINA.parquet") for table in ("series", "rolls")}
    assert tables["short"]["series"].num_rows == 80
    assert tables["short"]["series"].equals(tables["cut"]["series"])
    assert tables["short"]["rolls"].equals(tables["cut"]["rolls"])
    assert run("verify", "--deep", "--desk", desk, "--store", tmp_path / "cut").exit_code == 0


def test_as_of_a_day_before_the_snapshot_that_stands_is_refused_and_an_ordinary_night_follows_a_cut_one(
    desk: Path, run: Run
) -> None:
    assert run("build", "--desk", desk, "--as-of", "2024-02-19").exit_code == 0
    assert state(desk)["TINA"][2] == "2024-02-19"
    assert run("build", "--desk", desk, "--as-of", "2024-02-19").stdout.startswith("nothing new")
    assert run("build", "--desk", desk).exit_code == 0
    assert state(desk)["TINA"][2] == "2024-02-20"
    back = run("build", "--desk", desk, "--as-of", "2024-02-19")
    assert back.exit_code == 2
    assert "would put its readers back" in back.stderr and "--store" in back.stderr
    look = run("build", "--desk", desk, "--as-of", "2024-02-19", "--dry-run")
    assert look.exit_code == 0
    assert len(list_snapshots(Places(desk / "published"))) == 2


def test_a_dry_run_says_what_a_night_would_do_and_leaves_what_is_published_alone(desk: Path, run: Run) -> None:
    assert run("build", "--desk", desk).exit_code == 0
    before = hashes(desk / "published")
    log = (desk / "published" / "runs.jsonl").read_bytes()
    night = (desk / "published" / "last_night.json").read_bytes()
    write_raw(desk, 81)
    (desk / "raw" / "TINB_2024_03.csv").write_text("date,high,low,settle,volume,oi\n" + "rubbish\n" * 90)
    dry = run("build", "--desk", desk, "--dry-run")
    assert dry.exit_code == 3
    assert re.match(r"dry run: nothing was published, snapshot 000001-[0-9a-f]{12} stands; a night would ", dry.stdout)
    assert "new files: 8, now in the archive" in dry.stdout
    assert "would be rebuilt: TINA, TINB" in dry.stdout
    assert "held back: TINB: " in dry.stdout
    assert [entry.name for entry in (desk / "published" / "snapshots").iterdir()] == [
        read_manifest(Places(desk / "published")).name
    ]
    assert hashes(desk / "published") == before
    assert (desk / "published" / "runs.jsonl").read_bytes() == log
    assert (desk / "published" / "last_night.json").read_bytes() == night
    assert run("build", "--desk", desk).exit_code == 3


def test_past_nights_are_replayed_as_they_were_known_and_the_current_snapshot_stays(
    desk: Path, tmp_path: Path, run: Run, run_apart: RunApart, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A first run on Friday 16th with a settle of 999 on the 15th, which files that came on the 20th put right.

    The 15th is before any run, so it knows what the first one did; the 19th still knows the wrong settle; the
    20th knows the right one.
    """
    import catalog.night as nights

    store = desk / "published"
    file = desk / "raw" / "TINA_2024_06.csv"

    def publish_on(day: int) -> None:
        monkeypatch.setattr(nights, "_now", lambda: f"2024-02-{day}T19:30:00+00:00")
        assert run("build", "--desk", desk).exit_code == 0

    write_raw(desk, 78)
    right = file.read_text()
    (row,) = [line for line in right.splitlines() if line.startswith("2024-02-15")]
    cells = row.split(",")
    wrong = ",".join([*cells[:5], "4321"])
    file.write_text(right.replace(row, wrong))
    publish_on(16)
    write_raw(desk, 80)
    publish_on(20)
    current = (store / "CURRENT").read_text()

    span = ("--from", "2024-02-15", "--to", "2024-02-20")
    replayed = tmp_path / "replayed"
    done = run_apart("nightly", "--desk", desk, *span, "--store", replayed, "--json", PREFECT_API_URL=REFUSED)
    assert done.returncode == 0, done.stderr
    told = json.loads(done.stdout)["nights"]
    assert [(night["until"], night["known"]) for night in told] == [
        ("2024-02-15", "no run by 2024-02-15: the raw files of the first run, to intake 1, cut at this session"),
        ("2024-02-16", "the raw files published from by 2024-02-16, to intake 1"),
        ("2024-02-19", "the raw files published from by 2024-02-19, to intake 1"),
        ("2024-02-20", "the raw files published from by 2024-02-20, to intake 2"),
    ]
    of_interest = "contract = 'TINA-2024-06' and session = '2024-02-15'"
    query = f"select max(session), max(open_interest) filter ({of_interest}) from bars"
    seen = []
    for name in list_snapshots(Places(replayed)):
        path = replayed / "snapshots" / name / "bars" / "TINA.parquet"
        seen.append(duckdb.sql(query.replace("bars", f"'{path}'")).fetchall()[0])
    known = [(str(day), oi) for day, oi in seen]
    assert known == [("2024-02-15", 4321), ("2024-02-16", 4321), ("2024-02-16", 4321), ("2024-02-20", int(cells[5]))]
    assert (store / "CURRENT").read_text() == current
    again = run_apart("nightly", "--desk", desk, *span, "--store", replayed, PREFECT_API_URL=REFUSED)
    assert (again.returncode, again.stdout) == (0, "no night to replay; the store has them to 2024-02-20\n")


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (("--from", "2024-02-01"), "--from and --to together"),
        (("--archive", "published"), "--archive only with them"),
        (("--from", "2024-02-01", "--to", "2024-01-01", "--store", "other"), "first day not after the last"),
        (("--from", "2024-02-01", "--to", "2024-02-02"), "a store of its own"),
        (("--from", "2024-02-01", "--to", "2024-02-02", "--store", "desk/published"), "store to be replayed"),
        (("--from", "2024-02-01", "--to", "2024-02-02", "--store", "x", "--dry-run"), "none of them goes with"),
    ],
)
def test_a_replay_that_could_put_readers_back_is_2(
    options: tuple[str, ...], said: str, desk: Path, tmp_path: Path, run: Run, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    result = run("nightly", "--desk", desk, *options)
    assert result.exit_code == 2
    assert said in result.stderr
    assert not (tmp_path / "other").exists()


def test_a_store_with_nights_of_its_own_takes_no_replay(desk: Path, tmp_path: Path, run: Run) -> None:
    for store in ("published", "mine"):
        assert run("build", "--desk", desk, "--store", desk / store).exit_code == 0
    span = ("--from", "2024-02-01", "--to", "2024-02-02")
    result = run("nightly", "--desk", desk, *span, "--store", desk / "mine")
    assert result.exit_code == 2
    assert "has nights of its own" in result.stderr
