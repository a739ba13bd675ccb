"""Old snapshots go; what is current, named, young or leant on stays."""

import datetime
import os
from pathlib import Path

import pytest

from catalog.places import Places
from catalog.prune import forget_name, judge_snapshots, name_snapshot, prune
from catalog.query import open_catalog, run_query
from catalog.standing import current_snapshot, find_snapshot, list_snapshots
from catalog.verify import verify_store
from contracts.errors import StoreBusy, StoreUnsound, UsageError
from tests.integration.tiny import run_night, write_desk, write_raw

DAY = datetime.timedelta(days=1)


@pytest.fixture
def places(tmp_path: Path) -> Places:
    """A store of three nights, on the second of which one market was held back."""
    desk, store = write_desk(tmp_path), tmp_path / "published"
    raw = write_raw(desk, 90)
    run_night(desk, store)
    write_raw(desk, 91)
    lines = (raw / "TINB_2024_06.csv").read_text().splitlines(keepends=True)
    (raw / "TINB_2024_06.csv").write_text("".join(lines[:20] + lines[24:]))
    run_night(desk, store)
    write_raw(desk, 92, ("TINA",))
    run_night(desk, store)
    return Places(store)


def later(days: float) -> datetime.datetime:
    return datetime.datetime.now(datetime.UTC) + days * DAY


def fates(places: Places, now: datetime.datetime, older: int = 7) -> list[tuple[int, bool, str]]:
    return [(int(j.snapshot[:6]), j.goes, j.why) for j in judge_snapshots(places, older, now)]


def test_snapshots_younger_than_a_week_stay_whatever_is_asked(places: Places) -> None:
    assert [goes for _, goes, _ in fates(places, later(6.9))] == [False, False, False]
    with pytest.raises(UsageError, match="expected at least 7"):
        judge_snapshots(places, 6, later(100))


def test_the_old_go_but_for_the_current_and_what_it_serves_a_held_back_market_from(places: Places) -> None:
    first, second, third = list_snapshots(places)
    assert fates(places, later(8)) == [
        (1, False, f"{third} serves a market from it"),
        (2, True, "is 8 days old"),
        (3, False, "is the current one"),
    ]
    assert [j.snapshot for j in prune(places, 7, later(8)) if j.goes] == [second]
    assert list_snapshots(places) == [first, third]
    assert verify_store(places).problems == ()
    assert verify_store(places, first).problems == ()
    assert [path.name for path in places.snapshots.glob(".*")] == []


def test_a_named_snapshot_stays_and_is_found_by_its_name(places: Places) -> None:
    second = list_snapshots(places)[1]
    assert name_snapshot(places, "spring_backtest", "2") == second
    assert (2, False, "is named spring_backtest") in fates(places, later(400))
    assert find_snapshot(places, "spring_backtest") == second
    with open_catalog(places, find_snapshot(places, "spring_backtest")) as connection:
        assert run_query(connection, "select name from snapshot")[1] == [(second,)]
    with pytest.raises(UsageError, match=r"names .* already"):
        name_snapshot(places, "spring_backtest", "3")
    assert forget_name(places, "spring_backtest") == second
    assert (2, True, "is 400 days old") in fates(places, later(400.5))


@pytest.mark.parametrize("name", ["", "2", "../x", "Upper", "with space", "a" * 41])
def test_a_name_of_another_form_is_refused(places: Places, name: str) -> None:
    with pytest.raises(UsageError, match="expected small letters"):
        name_snapshot(places, name, "1")


def test_a_clock_that_was_set_back_removes_nothing(places: Places) -> None:
    """A snapshot from the future is young."""
    assert [goes for _, goes, _ in fates(places, later(-400))] == [False, False, False]


def test_a_folder_touched_lately_stays_though_its_run_is_old(places: Places) -> None:
    second = places.snapshot(list_snapshots(places)[1])
    soon = later(7.5).timestamp()
    os.utime(second, (soon, soon))
    assert (2, False, "is 0 days old") in fates(places, later(8))


def test_nothing_goes_while_a_kept_manifest_cannot_be_read(places: Places) -> None:
    manifest = places.snapshot(str(current_snapshot(places))) / "manifest.json"
    manifest.chmod(0o644)
    manifest.write_text("{}")
    assert all(not goes for _, goes, _ in fates(places, later(100)))


def test_names_that_cannot_be_read_are_an_error_and_nothing_goes(places: Places) -> None:
    places.names.write_text("[]")
    with pytest.raises(StoreUnsound, match="one JSON object of names"):
        prune(places, 7, later(100))
    assert len(list_snapshots(places)) == 3


def test_a_removal_cut_short_leaves_no_half_snapshot_and_the_next_night_sweeps_it(
    places: Places, monkeypatch: pytest.MonkeyPatch
) -> None:
    import shutil

    def dies(path: Path) -> None:
        next(path.rglob("*.parquet")).unlink()
        raise KeyboardInterrupt

    monkeypatch.setattr(shutil, "rmtree", dies)
    with pytest.raises(KeyboardInterrupt):
        prune(places, 7, later(8))
    monkeypatch.undo()
    assert [int(name[:6]) for name in list_snapshots(places)] == [1, 3]
    run_night(places.store.parent / "desk", places.store)
    assert [path.name for path in places.snapshots.glob(".*")] == []


def test_a_reader_on_a_pruned_snapshot_gets_an_error_and_no_short_answer(places: Places) -> None:
    second = list_snapshots(places)[1]
    with open_catalog(places, second) as connection:
        before = run_query(connection, "select count(*) from series")[1]
        prune(places, 7, later(8))
        try:
            assert run_query(connection, "select count(*) from series where settle > 0")[1] == before
        except StoreUnsound as error:
            assert "a published file cannot be read" in str(error)
        else:
            pytest.fail("the files are gone; expected an error")


def test_a_store_being_written_is_not_pruned(places: Places) -> None:
    from catalog.places import write_lock

    with write_lock(places), pytest.raises(StoreBusy):
        prune(places, 7, later(8))
