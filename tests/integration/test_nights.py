"""Nights one after the other: the same bytes, nothing new, a sick market held back, nothing touched by a wrong desk."""

import shutil
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import duckdb
import pytest

from catalog.declarations import SAMPLE_DESK, load_desk
from catalog.deep import rederive
from catalog.night import begin, build_one, finish
from catalog.places import Places, write_lock
from catalog.standing import current_snapshot, read_manifest
from catalog.verify import verify_store
from contracts.errors import DeskError
from tests.integration.tiny import run_night, write_desk, write_raw


def rows(store: Path, query: str) -> list[tuple]:  # type: ignore[type-arg]
    with duckdb.connect(str(store / "catalog.duckdb"), read_only=True) as connection:
        return connection.sql(query).fetchall()


def table_hashes(store: Path) -> dict[str, str]:
    manifest = read_manifest(Places(store))
    return {path: file.sha256 for path, file in manifest.files.items() if not path.startswith("runs/")}


@pytest.fixture
def tiny(tmp_path: Path) -> Path:
    desk = write_desk(tmp_path)
    write_raw(desk, 100)
    return desk


def test_file_order_and_worker_count_do_not_change_a_byte(sample_store: Path, tmp_path: Path) -> None:
    """The sample's files are laid down in reverse, its markets built backwards by four workers at once."""
    desk = load_desk(SAMPLE_DESK)
    raw = tmp_path / "raw"
    for file in sorted((path for path in desk.raw.rglob("*") if path.is_file()), reverse=True):
        target = raw / file.relative_to(desk.raw)
        target.parent.mkdir(parents=True, exist_ok=True)
        shutil.copyfile(file, target)
    store = tmp_path / "published"
    with write_lock(Places(store)):
        night = begin(SAMPLE_DESK, raw, store, "build")
        with ThreadPoolExecutor(4) as pool:
            results = list(pool.map(lambda market: build_one(night, market), reversed(night.markets)))
        finish(night, results)
    first, second = table_hashes(sample_store), table_hashes(store)
    assert len(first) > 9 * 7
    assert first == second


def test_second_night_publishes_nothing_and_says_so(tiny: Path, tmp_path: Path) -> None:
    store = tmp_path / "published"
    first = run_night(tiny, store)
    second = run_night(tiny, store)
    assert first.snapshot is not None
    assert (second.snapshot, second.current, second.exit_code) == (None, first.snapshot, 0)
    assert second.lines()[0] == f"nothing new: snapshot {first.snapshot} stands"
    assert len(list((store / "snapshots").iterdir())) == 1


def test_night_with_one_market_changed_links_the_other(tiny: Path, tmp_path: Path) -> None:
    store = tmp_path / "published"
    first = run_night(tiny, store)
    write_raw(tiny, 101, ("TINA",))
    second = run_night(tiny, store)
    assert second.published == ("TINA", "TINB")
    places = Places(store)
    same = [places.snapshot(name) / "series" / "TINB.parquet" for name in (first.current, second.current)]
    assert same[0].stat().st_ino == same[1].stat().st_ino
    assert rows(store, "select market, max(session)::varchar from series group by all order by all") == [
        ("TINA", "2024-03-20"),
        ("TINB", "2024-03-19"),
    ]


def test_market_that_lost_rows_is_held_back_and_serves_its_last_good_tables(tiny: Path, tmp_path: Path) -> None:
    store = tmp_path / "published"
    first = run_night(tiny, store)
    good = rows(store, "select * from series where market = 'TINB' order by all")
    file = tiny / "raw" / "TINB_2024_06.csv"
    lines = file.read_text().splitlines(keepends=True)
    file.write_text("".join(lines[:40] + lines[45:]))
    write_raw(tiny, 101, ("TINA",))
    second = run_night(tiny, store)
    assert second.exit_code == 3
    assert [market for market, _ in second.held_back] == ["TINB"]
    assert second.served == (("TINB", first.current, "2024-03-19"),)
    (line,) = [line for line in second.lines() if line.startswith("  held back: TINB: ")]
    assert line.endswith(f"; served as of {first.current}, to 2024-03-19")
    assert rows(store, "select * from series where market = 'TINB' order by all") == good
    (held,) = rows(store, "select state, last_good_snapshot, reason from coverage where market = 'TINB'")
    assert held[:2] == ("held back", first.snapshot)
    assert "5 rows of its version of intake 1 are missing from the newest version" in held[2]
    assert ("shrunken_file", "block") in rows(store, "select kind, severity from findings where market = 'TINB'")
    assert verify_store(Places(store)).problems == ()
    # When the file comes whole again, the market goes out again.
    file.write_text("".join(lines))
    third = run_night(tiny, store)
    assert (third.held_back, third.exit_code) == ((), 0)


def test_market_without_files_does_not_stop_the_other(tiny: Path, tmp_path: Path) -> None:
    for file in (tiny / "raw").glob("TINB_*"):
        file.unlink()
    summary = run_night(tiny, tmp_path / "published")
    assert summary.published == ("TINA",)
    assert summary.held_back == (("TINB", "TINB: no raw file is of this market"),)
    assert "  held back: TINB: TINB: no raw file is of this market; nothing of it is served" in summary.lines()
    assert summary.as_json()["served"] == {"TINB": {"snapshot": None, "to": None}}


def test_silent_market_is_held_back_by_the_data_date(tiny: Path, tmp_path: Path) -> None:
    write_raw(tiny, 110, ("TINA",))
    summary = run_night(tiny, tmp_path / "published")
    assert summary.held_back == (("TINB", "10 sessions without a bar up to 2024-04-02, more than 5"),)


def test_wrong_desk_is_refused_whole_and_nothing_is_touched(tiny: Path, tmp_path: Path) -> None:
    """A typo, an unknown key, two plans of one name and a rule that yields no day, each with file and key."""
    market = (tiny / "markets" / "tina.toml").read_text()
    (tiny / "markets" / "tina.toml").write_text(market.replace('"volume"', '"volumes"').replace("unit =", "units ="))
    other = (tiny / "markets" / "tinb.toml").read_text().replace("BYMONTHDAY=15", "BYMONTHDAY=31")
    (tiny / "markets" / "tinb.toml").write_text(other + '\n[plans.by_volume]\ntrigger = "volume"\n')
    # A waiver of a market whose file is wrong is no mistake of its own; one of a market nobody declares is.
    waiver = '[[waiver]]\nmarket = "{}"\nkind = "off_tick"\nfrom = 2024-01-01\nto = 2024-01-02\nreason = "test"\n'
    waiver += 'by = "desk"\non = 2024-01-01\nuntil = 2024-12-31\n'
    (tiny / "waivers.toml").write_text(waiver.format("TINA") + waiver.format("TINC"))
    store = tmp_path / "published"
    with pytest.raises(DeskError) as caught:
        begin(tiny, None, store, "build")
    assert [(mistake.file, mistake.key) for mistake in caught.value.mistakes] == [
        ("markets/tina.toml", "unit"),
        ("markets/tina.toml", "units"),
        ("markets/tina.toml", "plans.by_volume.trigger"),
        ("markets/tinb.toml", "last_trade.rule"),
        ("markets/tinb.toml", "plans.by_volume"),
        ("waivers.toml", "waiver[1].market"),
    ]
    assert not store.exists()


def test_declared_repair_that_no_longer_stands_holds_its_market_back(tiny: Path, tmp_path: Path) -> None:
    (tiny / "repairs").mkdir()
    (tiny / "repairs" / "one.toml").write_text(
        '[[repair]]\ncontract = "TINA-2024-06"\nsession = 2023-12-01\nfield = "settle"\nreported = 999.0\n'
        'corrected = 1.0\nreason = "test"\nby = "desk"\non = 2024-01-01\n'
    )
    summary = run_night(tiny, tmp_path / "published")
    ((market, reason),) = summary.held_back
    assert market == "TINA"
    assert "the repair by desk expects 999 as reported" in reason


def test_waived_block_does_not_hold_its_market_back(tiny: Path, tmp_path: Path) -> None:
    """The same refused repair as above, accepted by a person until a day."""
    (tiny / "repairs").mkdir()
    (tiny / "repairs" / "one.toml").write_text(
        '[[repair]]\ncontract = "TINA-2024-06"\nsession = 2023-12-01\nfield = "settle"\nreported = 999.0\n'
        'corrected = 1.0\nreason = "test"\nby = "desk"\non = 2024-01-01\n'
    )
    store = tmp_path / "published"
    assert len(run_night(tiny, store).held_back) == 1
    ((finding,),) = rows(store, "select finding from findings where kind = 'repair_refused'")
    (tiny / "waivers.toml").write_text(
        f'[[waiver]]\nfinding = "{finding}"\nreason = "the file is on its way"\nby = "desk"\non = 2024-01-01\n'
        "until = 2024-12-31\n"
    )
    assert run_night(tiny, store).held_back == ()
    assert rows(store, "select waived_until::varchar from findings where kind = 'repair_refused'") == [("2024-12-31",)]


def test_waiver_past_its_day_stops_working_and_says_so(tiny: Path, tmp_path: Path) -> None:
    file = tiny / "raw" / "TINA_2024_06.csv"
    lines = file.read_text().splitlines(keepends=True)
    file.write_text("".join(lines[:20] + lines[21:]))
    waiver = (
        '[[waiver]]\nmarket = "TINA"\nkind = "contract_missing"\nfrom = 2023-11-01\nto = 2024-03-01\n'
        'reason = "exchange never settled it"\nby = "desk"\non = 2024-01-01\nuntil = {until}\n'
    )
    (tiny / "waivers.toml").write_text(waiver.format(until="2024-12-31"))
    store = tmp_path / "published"
    run_night(tiny, store)
    query = "select kind, waived_until::varchar from findings where kind in ('contract_missing', 'waiver_expired')"
    assert rows(store, query) == [("contract_missing", "2024-12-31")]
    (tiny / "waivers.toml").write_text(waiver.format(until="2024-01-31"))
    run_night(tiny, store)
    assert sorted(rows(store, query)) == [("contract_missing", None), ("waiver_expired", None)]


def test_every_published_number_is_derived_again_from_the_archive(tiny: Path, tmp_path: Path) -> None:
    store = tmp_path / "published"
    run_night(tiny, store)
    shutil.rmtree(tiny / "raw")
    assert rederive(Places(store), load_desk(tiny)) == ()


def test_store_is_rebuilt_from_the_archive_when_the_raw_folder_is_gone(tiny: Path, tmp_path: Path) -> None:
    store, other = tmp_path / "published", tmp_path / "again"
    run_night(tiny, store)
    shutil.copytree(store / "archive", other / "archive")
    shutil.rmtree(tiny / "raw")
    run_night(tiny, other)
    assert table_hashes(store).keys() == table_hashes(other).keys()
    first, second = table_hashes(store), table_hashes(other)
    assert {path for path in first if first[path] != second[path]} <= {"findings/_desk.parquet"}
    assert current_snapshot(Places(other)) is not None


def test_rubbish_of_a_dead_contract_is_told_and_does_not_stop_its_market(tiny: Path, tmp_path: Path) -> None:
    (tiny / "raw" / "TINA_2023_03.csv").write_bytes(bytes(range(256)) * 20)
    (tiny / "raw" / "TINA_2023_06.csv").write_bytes(b"")
    (tiny / "raw" / "TINA_2023_09.csv").symlink_to("/etc/hostname")
    store = tmp_path / "published"
    summary = run_night(tiny, store)
    assert summary.published == ("TINA", "TINB")
    query = "select kind, contract from findings where kind in ('unreadable_file', 'refused_path') order by all"
    assert rows(store, query) == [
        ("refused_path", None),
        ("unreadable_file", "TINA-2023-03"),
        ("unreadable_file", "TINA-2023-06"),
    ]


def test_rubbish_of_a_live_contract_holds_its_market_back(tiny: Path, tmp_path: Path) -> None:
    (tiny / "raw" / "TINA_2025_03.csv").write_bytes(b"")
    summary = run_night(tiny, tmp_path / "published")
    assert summary.held_back == (("TINA", "TINA_2025_03.csv: the file is empty; expected a header and rows"),)


def test_where_and_on_what_a_night_runs_is_no_part_of_what_it_publishes(tiny: Path, tmp_path: Path) -> None:
    store = tmp_path / "published"
    first = run_night(tiny, store)
    desk = (tiny / "desk.toml").read_text()
    (tiny / "desk.toml").write_text(desk + '[run]\nworkers = "processes"\n[schedule]\ncron = "0 6 * * *"\n')
    assert run_night(tiny, store).nothing_new
    (tiny / "desk.toml").write_text(desk.replace("silent_sessions = 5", "silent_sessions = 6"))
    second = run_night(tiny, store)
    assert second.snapshot not in (None, first.snapshot)


def test_linked_tables_are_derived_again_after_another_market_changed(tiny: Path, tmp_path: Path) -> None:
    store = tmp_path / "published"
    run_night(tiny, store)
    market = tiny / "markets" / "tina.toml"
    market.write_text(market.read_text().replace("backstop = 3", "backstop = 4"))
    assert run_night(tiny, store).published == ("TINA", "TINB")
    assert rederive(Places(store), load_desk(tiny)) == ()
