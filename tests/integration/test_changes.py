"""A scripted month of nights: whatever differs between two of them has its cause, and none is left over."""

from pathlib import Path

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
import pytest

import catalog.assignment
import catalog.changes
import catalog.night
from catalog.causes import CAUSES, Cause, Marked, Step, mark_changes
from catalog.changed_rows import Row, rows_of
from catalog.changes import Changes, compare_snapshots
from catalog.kept_desk import desk_of
from catalog.places import Places
from catalog.standing import current_snapshot, read_manifest
from contracts.build import Built, Inputs, build_market
from contracts.errors import UsageError
from contracts.tables import MARKET_TABLES
from tests.integration.tiny import MARKETS, run_night, sessions, write_desk, write_raw

DAY = sessions(80)[59]


class Month:
    """A desk, its raw folder and the nights so far."""

    def __init__(self, folder: Path) -> None:
        self.desk, self.store = write_desk(folder), folder / "published"
        self.places = Places(self.store)
        self.count = 0
        self.edits: list[tuple[str, str, str]] = []

    def night(self, count: int, markets: tuple[str, ...] = MARKETS) -> Changes | None:
        """Write the raw files up to a session, with the edits, run, and compare with the night before."""
        before = current_snapshot(self.places)
        raw = write_raw(self.desk, count, markets)
        for file, old, new in self.edits:
            path = raw / file
            assert old in path.read_text()
            path.write_text(path.read_text().replace(old, new))
        run_night(self.desk, self.store)
        if before is None:
            return None
        changes = compare_snapshots(self.places)
        assert (changes.old, changes.new) == (before, current_snapshot(self.places))
        self.check_whole(changes)
        return changes

    def check_whole(self, changes: Changes) -> None:
        """Every value that differs by a plain comparison of the Parquet files is told, once, with a cause."""
        told: dict[tuple[object, ...], str] = {}
        for row in changes.rows():
            key = (row.market, row.table, tuple(row.key.values()), row.column)
            assert key not in told
            told[key] = row.cause
        assert set(told) == set(self.plain(changes.old, changes.new))
        assert Cause.UNEXPLAINED not in told.values()
        assert sum(changes.counts.values()) == len(told)

    def plain(self, old: str, new: str) -> list[tuple[object, ...]]:
        found: list[tuple[object, ...]] = []
        for market in MARKETS:
            for table in MARKET_TABLES:
                sides = []
                for name in (old, new):
                    path = self.places.snapshot(name) / table.name / f"{market}.parquet"
                    rows = pq.read_table(path).to_pylist()
                    sides.append({tuple(row[part] for part in table.key): row for row in rows})
                for key in {**sides[0], **sides[1]}:
                    one, other = sides[0].get(key), sides[1].get(key)
                    if one is None or other is None:
                        found.append((market, table.name, key, ""))
                        continue
                    found += [(market, table.name, key, name) for name in one if one[name] != other[name]]
        return found

    def edit(self, name: str, old: str, new: str) -> None:
        """Change a text of the desk."""
        path = self.desk / name
        assert old in path.read_text()
        path.write_text(path.read_text().replace(old, new))


@pytest.fixture
def month(tmp_path: Path) -> Month:
    return Month(tmp_path)


def causes(changes: Changes | None, *tables: str) -> set[tuple[str, str]]:
    """Market and cause of all that differs in some tables."""
    assert changes is not None
    return {(group.market, group.cause) for group in changes.groups if group.table in tables}


def test_a_month_of_nights(month: Month, monkeypatch: pytest.MonkeyPatch) -> None:
    month.night(70)

    # A plain night: new sessions, and every bar in a newer version of its file.
    changes = month.night(71)
    assert causes(changes, "series", "rolls") == {("TINA", "new session"), ("TINB", "new session")}
    assert causes(changes, "bars") == {
        ("TINA", "new session"), ("TINB", "new session"),
        ("TINA", "same row in a newer file"), ("TINB", "same row in a newer file"),
    }  # fmt: skip

    # A night on which rolls take effect: earlier prices shift, and by nothing but the gap.
    before = month.night(85)
    changes = before
    shifted = [g for g in changes.groups if g.cause == Cause.ROLL and g.table == "series"]  # type: ignore[union-attr]
    assert {(g.market, g.plan, g.nearby) for g in shifted} == {("TINA", "by_volume", 1), ("TINB", "by_volume", 1)}
    assert {name for g in shifted for name in g.columns} == {"shift", "scale", "back_adjusted", "ratio_adjusted"}
    assert causes(changes, "series") == {(m, c) for m in MARKETS for c in ("roll", "new session")}

    # A raw row is restated, on a session like any other.
    held = "TINA_2024_03.csv"
    row = next(line for line in (month.desk / "raw" / held).read_text().splitlines() if str(DAY) in line)
    parts = row.split(",")
    month.edits = [(held, row, ",".join([parts[0], parts[1], parts[2], f"{float(parts[3]) + 0.5:.2f}", *parts[4:]]))]
    changes = month.night(86)
    assert causes(changes, "series") == {("TINA", "restated raw row"), ("TINA", "new session"), ("TINB", "new session")}
    restated = next(m for m in changes.markets if m.market == "TINA").because["restated raw row"]  # type: ignore[union-attr]
    assert restated == (f"TINA-2024-03 {DAY}: settle {float(parts[3]):.10g} -> {float(parts[3]) + 0.5:.10g}",)
    lead = changes.groups[0]  # type: ignore[union-attr]
    assert lead.cause == "restated raw row"

    # The desk changes a plan.
    month.edit("markets/tina.toml", "backstop = 3", "backstop = 40")
    changes = month.night(86)
    assert causes(changes, "series", "rolls") == {("TINA", "desk change")}
    assert changes.markets[0].because["desk change"] == (  # type: ignore[union-attr]
        "markets/tina.toml plans.by_volume.backstop: 3 -> 40",
    )

    # A person corrects a settle, and takes the correction back.
    (month.desk / "repairs").mkdir()
    (month.desk / "repairs" / "by_hand.toml").write_text(REPAIR.format(day=DAY, settle=float(rows(month, DAY)[3])))
    changes = month.night(86)
    assert ("TINB", "repair made or withdrawn") in causes(changes, "series", "bars")
    assert causes(changes, "series", "bars", "rolls") == {("TINB", "repair made or withdrawn")}
    (month.desk / "repairs" / "by_hand.toml").unlink()
    assert causes(month.night(86), "series", "bars") == {("TINB", "repair made or withdrawn")}

    # A waiver of a finding.
    (month.desk / "waivers.toml").write_text(WAIVER.format(first=sessions(80)[0], last=DAY, until="2024-12-31"))
    changes = month.night(86)
    assert causes(changes, "findings") == {("TINA", "waiver")}
    assert causes(changes, "series", "bars", "rolls") == set()

    # A later version of the code starts growth at 1,000, and finds the sessions of the night as well.
    for module in (catalog.assignment, catalog.night, catalog.changes):
        monkeypatch.setattr(module, "code_digest", lambda: "f" * 64)
    for module in (catalog.night, catalog.changes):
        monkeypatch.setattr(module, "build_market", other_growth)
    changes = month.night(87)
    assert changes is not None
    assert {(g.cause, g.columns) for g in changes.groups if g.table == "series" and g.cause != "new session"} == {
        ("code version", ("growth",))
    }
    (reason,) = changes.markets[0].because["code version"]
    assert reason.endswith("ffffffffffff today")

    # One market is late for two nights, then comes with three sessions at once.
    month.edits = []
    assert causes(month.night(88, ("TINB",)), "series") == {("TINB", "new session")}
    assert causes(month.night(89, ("TINB",)), "series") == {("TINB", "new session")}
    assert ("TINA", "new session") in causes(month.night(90), "series")

    # Over the whole month every difference still has a cause.
    whole = compare_snapshots(month.places, "1")
    month.check_whole(whole)
    assert whole.counts["code version"] and whole.counts["roll"] and whole.counts["new session"]


def other_growth(inputs: Inputs) -> Built:
    """A build by code that starts growth at 1,000."""
    built = build_market(inputs)
    series = built.tables["series"]
    growth = pc.multiply(series["growth"], 10.0)
    field = series.schema.field("growth")
    tables = {**built.tables, "series": series.set_column(series.schema.get_field_index("growth"), field, growth)}
    return Built(tables, built.facts)


def test_a_row_that_comes_late_and_one_that_goes(month: Month) -> None:
    row = next(line + "\n" for line in rows_text(month, 70) if str(DAY) in line)
    month.edits = [("TINA_2024_03.csv", row, "")]
    month.night(70)
    month.edits = []
    changes = month.night(71)
    assert ("TINA", "late raw row") in causes(changes, "series")
    assert ("TINB", "late raw row") not in causes(changes, "series", "bars")


def test_a_wrong_price_that_tomorrow_refutes_or_clears(month: Month) -> None:
    """A jump on the last session is held against the next one; what then happens to it is a repair."""
    month.night(70)
    last = sessions(71)[70]
    raw = write_raw(month.desk, 71)
    row = next(line for line in (raw / "TINA_2024_03.csv").read_text().splitlines() if str(last) in line)
    parts = row.split(",")
    jumped = ",".join([parts[0], "", "", f"{float(parts[3]) + 40:.2f}", "0", parts[5]])
    month.edits = [("TINA_2024_03.csv", row, jumped)]
    first = month.night(71)
    second = month.night(72)
    assert causes(first, "series") <= {(m, c) for m in MARKETS for c in ("new session", "roll")}
    assert causes(second, "series") <= {
        (m, c) for m in MARKETS for c in ("new session", "roll", "repair made or withdrawn")
    }


def test_a_tampered_publication_is_unexplained_or_refused(month: Month) -> None:
    """A value altered on the way, hash and all, has no cause: the comparison says so."""
    month.night(70)
    manifest = read_manifest(month.places)
    desk = desk_of(month.places, manifest)
    assert desk.digest == manifest.desk
    tables = {
        table.name: pq.read_table(month.places.snapshot(manifest.name) / table.name / "TINA.parquet")
        for table in MARKET_TABLES
    }
    series = tables["series"].to_pylist()
    series[5]["back_adjusted"] += 1.0
    altered = {**tables, "series": pa.Table.from_pylist(series, schema=tables["series"].schema)}
    for step in (Step.NOTHING, Step.SESSIONS, Step.RAW):
        (marked,) = mark_changes([tables, altered], [step])
        assert [(row.cause, row.column) for row in rows_of_all(marked)] == [("unexplained", "back_adjusted")]


def test_a_snapshot_that_is_not_there(month: Month) -> None:
    month.night(70)
    with pytest.raises(UsageError, match="the first one"):
        compare_snapshots(month.places)
    with pytest.raises(UsageError, match="by name or number"):
        compare_snapshots(month.places, "7", "1")


def rows_of_all(marked: Marked) -> list[Row]:
    return [row for cause in CAUSES for row in rows_of("TINA", marked, cause)]


def rows_text(month: Month, count: int) -> list[str]:
    return (write_raw(month.desk, count) / "TINA_2024_03.csv").read_text().splitlines()


def rows(month: Month, day: object) -> list[str]:
    text = (month.desk / "raw" / "TINB_2024_03.csv").read_text().splitlines()
    return next(line for line in text if str(day) in line).split(",")


REPAIR = """
[[repair]]
contract = "TINB-2024-03"
session = {day}
field = "settle"
reported = {settle}
corrected = 219.75
reason = "typing slip, notice 4"
by = "desk"
on = 2024-03-01
"""

WAIVER = """
[[waiver]]
market = "TINA"
kind = "restated"
from = {first}
to = {last}
reason = "announced by the exchange"
by = "desk"
on = 2024-03-01
until = {until}
"""


def test_a_market_held_back_and_let_out_again(month: Month) -> None:
    """Its prices stand still; what is told of tonight's files is not blamed on a session or a desk."""
    month.night(70)
    raw = write_raw(month.desk, 70)
    lines = (raw / "TINB_2024_06.csv").read_text().splitlines(keepends=True)
    month.edits = [("TINB_2024_06.csv", "".join(lines[20:24]), "")]
    held = month.night(71)
    assert held is not None
    assert [line.partition(":")[0] for line in held.states] == ["TINB"]
    assert "published -> held back" in held.states[0]
    assert causes(held, "series", "bars") >= {("TINA", "new session")}
    assert {cause for market, cause in causes(held, "findings", "files") if market == "TINB"} == {"file taken in"}
    assert {market for market, _ in causes(held, "series", "bars", "rolls")} == {"TINA"}
    month.edits = []
    out = month.night(72)
    assert out is not None
    assert "held back -> published" in out.states[0]
    assert ("TINB", "new session") in causes(out, "series")
