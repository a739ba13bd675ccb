"""Any workers give the same tables, and a night survives the death of one."""

import importlib.util
import re
from pathlib import Path

import pytest

from catalog.places import Places
from catalog.standing import read_manifest
from flows.work import count_workers
from tests.flows.conftest import Run
from tests.integration.tiny import write_raw


def hashes(store: Path) -> dict[str, str]:
    """The tables of a store's newest snapshot, but for the one that holds the clock."""
    files = read_manifest(Places(store)).files
    return {path: file.sha256 for path, file in files.items() if not path.startswith("runs/")}


def declare_workers(desk: Path, workers: str, more: str = "") -> None:
    (desk / "desk.toml").write_text((desk / "desk.toml").read_text() + f'\n[run]\nworkers = "{workers}"\n{more}\n')


@pytest.mark.parametrize(("jobs", "markets", "workers"), [(1, 9, 1), (3, 9, 3), (16, 9, 9), (None, 1, 1), (4, 0, 1)])
def test_there_are_never_more_workers_than_markets(jobs: int | None, markets: int, workers: int) -> None:
    assert count_workers(jobs, markets) == workers


def test_without_a_number_there_are_at_least_two_workers() -> None:
    assert count_workers(None, 1000) >= 2


@pytest.mark.parametrize("workers", ["threads", "processes"])
def test_one_worker_and_many_give_the_same_bytes(workers: str, desk: Path, tmp_path: Path, run: Run) -> None:
    declare_workers(desk, workers)
    for jobs in ("1", "2"):
        assert run("build", "--desk", desk, "--jobs", jobs, "--store", tmp_path / jobs).exit_code == 0
    one, two = hashes(tmp_path / "1"), hashes(tmp_path / "2")
    assert len(one) > 14
    assert one == two


def test_a_worker_that_dies_holds_back_its_market_and_no_other(
    desk: Path, run: Run, monkeypatch: pytest.MonkeyPatch
) -> None:
    declare_workers(desk, "processes")
    monkeypatch.setattr("catalog.night.build_one", importlib.import_module("tests.flows.dying").build_one)
    result = run("build", "--desk", desk, "--jobs", "1")
    assert result.exit_code == 3, result.stderr
    assert "published: TINA\n" in result.stdout
    assert re.search(r"held back: TINB: .*process that built it died", result.stdout)


def test_the_store_s_clock_free_tables_do_not_change_in_a_night_that_adds_nothing_to_a_market(
    desk: Path, tmp_path: Path, run: Run
) -> None:
    store = tmp_path / "store"
    assert run("build", "--desk", desk, "--store", store).exit_code == 0
    before = hashes(store)
    write_raw(desk, 81, ("TINA",))
    assert run("build", "--desk", desk, "--store", store).exit_code == 0
    after = hashes(store)
    changed = {path for path in before if before[path] != after[path]}
    assert "series/TINA.parquet" in changed
    assert not [path for path in changed if path.endswith("/TINB.parquet")]


@pytest.mark.skipif(importlib.util.find_spec("distributed") is not None, reason="Dask is installed")
@pytest.mark.parametrize("command", ["build", "nightly"])
def test_dask_that_is_not_installed_is_2_and_says_what_to_install(command: str, desk: Path, run: Run) -> None:
    declare_workers(desk, "dask")
    result = run(command, "--desk", desk)
    assert result.exit_code == 2
    assert "install ropewalk[dask]" in result.stderr
    assert not (desk / "published").exists()


@pytest.mark.skipif(importlib.util.find_spec("distributed") is None, reason="the extra ropewalk[dask]")
def test_dask_gives_the_same_tables_as_threads(desk: Path, tmp_path: Path, run_apart) -> None:  # type: ignore[no-untyped-def]
    declare_workers(desk, "dask")
    done = run_apart("build", "--desk", desk, "--jobs", "2", "--store", tmp_path / "dask")
    assert done.returncode == 0, done.stderr
    text = (desk / "desk.toml").read_text()
    (desk / "desk.toml").write_text(text.replace('"dask"', '"threads"'))
    assert run_apart("build", "--desk", desk, "--store", tmp_path / "threads").returncode == 0
    assert hashes(tmp_path / "dask") == hashes(tmp_path / "threads")


@pytest.mark.skipif(importlib.util.find_spec("distributed") is None, reason="the extra ropewalk[dask]")
def test_a_dask_worker_that_is_killed_costs_nothing_and_the_writer_stays_one(
    desk: Path, tmp_path: Path, run: Run, monkeypatch: pytest.MonkeyPatch
) -> None:
    """A cluster of two worker processes on loopback; the first to begin TINB is killed in the middle of it."""
    from distributed import LocalCluster

    from flows.settings import Where
    from flows.work import pool_builder, run_night

    declare_workers(desk, "threads")
    assert run("build", "--desk", desk, "--store", tmp_path / "threads").exit_code == 0
    text = (desk / "desk.toml").read_text()
    marker = tmp_path / "killed"
    monkeypatch.setenv("ROPEWALK_TEST_KILL_ONCE", str(marker))
    monkeypatch.setattr("catalog.night.build_one", importlib.import_module("tests.flows.dying").build_one_killed_once)
    with LocalCluster(n_workers=2, threads_per_worker=1, dashboard_address=None, host="127.0.0.1") as cluster:
        declared = text.replace('"threads"', f'"dask"\ndask_address = "{cluster.scheduler_address}"')
        (desk / "desk.toml").write_text(declared)
        summary = run_night(Where(desk, None, tmp_path / "dask"), "build", pool_builder(2))
    assert marker.exists(), "no worker was killed"
    assert (summary.published, summary.held_back) == (("TINA", "TINB"), ())
    assert hashes(tmp_path / "dask") == hashes(tmp_path / "threads")
