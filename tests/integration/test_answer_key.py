"""The sample's planted faults are found and named; its true events come through untouched."""

import csv
import statistics
from pathlib import Path

import duckdb
import pytest

ROOT = Path(__file__).resolve().parent.parent.parent
KEY = list(csv.DictReader((ROOT / "sample_raw" / "answer_key.csv").read_text(encoding="utf-8").splitlines()))

# Faults of a settle that must not reach a signal.
REFUTED = {"misplaced decimal", "misplaced decimal, whole bar", "spike", "settle of nought"}


@pytest.fixture(scope="module")
def bars(sample_store: Path) -> dict[tuple[str, str], tuple[float, float | None, str]]:
    with duckdb.connect(str(sample_store / "catalog.duckdb"), read_only=True) as connection:
        rows = connection.sql("select contract, session::varchar, settle, clean_settle, status from bars").fetchall()
    return {(contract, session): (settle, clean, status) for contract, session, settle, clean, status in rows}


@pytest.fixture(scope="module")
def kinds(sample_store: Path) -> set[tuple[str, str | None]]:
    """Kind and contract of every finding."""
    with duckdb.connect(str(sample_store / "catalog.duckdb"), read_only=True) as connection:
        return set(connection.sql("select kind, contract from findings").fetchall())


def test_true_events_are_published_as_reported(bars: dict[tuple[str, str], tuple[float, float | None, str]]) -> None:
    events = [entry for entry in KEY if entry["nature"] == "event" and entry["field"] == "settle"]
    assert len(events) > 50
    altered = [e["id"] for e in events if bars[e["contract"], e["session"]][2] != "reported"]
    assert altered == []


def test_refuted_settles_are_repaired_near_the_truth(
    bars: dict[tuple[str, str], tuple[float, float | None, str]],
) -> None:
    """Half of them to within 0.3% of the truth, every one to within 3%."""
    planted = [entry for entry in KEY if entry["kind"] in REFUTED and entry["field"] == "settle"]
    assert len(planted) > 40
    cells = {entry["id"]: (entry["contract"], entry["session"]) for entry in planted}
    assert [cell for cell in cells.values() if bars[cell][2] != "repaired"] == []
    off = [abs((bars[e["contract"], e["session"]][1] or 0.0) / float(e["truth"]) - 1) for e in planted]
    assert statistics.median(off) <= 0.003
    assert max(off) <= 0.03


def test_nothing_but_planted_faults_is_replaced(bars: dict[tuple[str, str], tuple[float, float | None, str]]) -> None:
    planted = {(entry["contract"], entry["session"]) for entry in KEY if entry["nature"] == "fault"}
    replaced = {cell for cell, (_, _, status) in bars.items() if status in ("repaired", "masked")}
    assert replaced - planted == set()


def test_every_kind_of_fault_in_the_key_is_found_in_the_contracts_it_was_planted_in(
    kinds: set[tuple[str, str | None]],
) -> None:
    by_fault: dict[str, list[dict[str, str]]] = {}
    for entry in KEY:
        if entry["nature"] == "fault":
            by_fault.setdefault(entry["id"], []).append(entry)
    missed = []
    for fault, entries in by_fault.items():
        names = {entry["finding"] for entry in entries}
        contracts = {entry["contract"] or None for entry in entries} | {None}
        if not any((name, contract) in kinds for name in names for contract in contracts):
            missed.append((fault, sorted(names), entries[0]["kind"], entries[0]["contract"]))
    assert missed == []
