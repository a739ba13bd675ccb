"""Ten nights of late, restated, torn, shrunken, renamed and repaired files, and exactly what stands after each."""

import shutil
from collections.abc import Callable
from pathlib import Path

import duckdb
import pytest

from catalog.places import Places
from catalog.standing import read_manifest
from contracts.intake import TORN
from tests.integration.tiny import DELIVERIES, HEADER, MARKETS, rows_of, run_night, sessions, write_desk, write_raw

# Kinds that say how the roll plans fared and not how the files did.
ABOUT_ROLLS = ("roll_forced", "roll_pending", "roll_postponed")
Findings = list[tuple[str | None, str | None, str, str]]


class Nights:
    """A store, and the raw folder as a vendor leaves it night after night."""

    def __init__(self, folder: Path) -> None:
        self.folder, self.desk = folder, write_desk(folder)
        self.raw, self.store = self.desk / "raw", folder / "published"
        self.raw.mkdir()

    def write(self, count: int, *markets: str) -> None:
        write_raw(self.desk, count, markets or MARKETS)

    def file(self, market: str, year: int, month: int) -> Path:
        return self.raw / f"{market}_{year}_{month:02d}.csv"

    def edit(self, path: Path, change: Callable[[list[str]], list[str]]) -> None:
        path.write_text("".join(change(path.read_text().splitlines(keepends=True))))

    def run(self) -> "Nights":
        self.summary = run_night(self.desk, self.store)
        return self

    def ask(self, query: str) -> list[tuple]:  # type: ignore[type-arg]
        with duckdb.connect(str(self.store / "catalog.duckdb"), read_only=True) as connection:
            return connection.sql(query).fetchall()

    def findings(self) -> Findings:
        """Market, contract, kind and action of all that is said of files and rows."""
        rows = self.ask("select market, contract, kind, action from findings order by all")
        return [row for row in rows if row[2] not in ABOUT_ROLLS]

    def rejects(self) -> list[tuple[str, int, str]]:
        return self.ask("select contract, line, reason from rejects order by all")

    def bars(self) -> dict[str, int]:
        return dict(self.ask("select contract, count(*) from bars group by all order by all"))

    def check_rebuilt(self, night: int) -> None:
        """A store that has only the archive publishes the same tables."""
        other = self.folder / f"again{night}"
        shutil.copytree(self.store / "archive", other / "archive")
        run_night(self.desk, other, self.folder / "nothing")
        first, second = (self.hashes(store) for store in (self.store, other))
        # A market held back serves older tables; a store without a past has none of it.
        held = {market for market, _ in self.summary.held_back}
        apart = {path for path in first if first[path] != second.get(path)}
        assert {path for path in apart if Path(path).stem not in held | {"_desk"}} == set()

    def hashes(self, store: Path) -> dict[str, str]:
        return {path: file.sha256 for path, file in read_manifest(Places(store)).files.items()}


def expected_bars(counts: dict[str, int], **changed: int) -> dict[str, int]:
    """Rows of each contract by its market's number of sessions, with some set apart."""
    made = {
        f"{market}-{year}-{month:02d}": len(rows_of(market, (year, month), counts[market]))
        for market in MARKETS
        for year, month in DELIVERIES
    }
    return made | {name.replace("_", "-"): count for name, count in changed.items()}


@pytest.fixture
def nights(tmp_path: Path) -> Nights:
    return Nights(tmp_path)


def test_ten_nights(nights: Nights) -> None:
    # 1: everything arrives.
    nights.write(100)
    assert nights.run().summary.published == MARKETS
    assert (nights.findings(), nights.rejects()) == ([], [])
    assert nights.bars() == expected_bars({"TINA": 100, "TINB": 100})
    nights.check_rebuilt(1)

    # 2: cumulative files come again with one more row; the rows they repeat are no findings.
    nights.write(101)
    assert nights.run().summary.published == MARKETS
    assert (nights.findings(), nights.rejects()) == ([], [])
    assert nights.bars() == expected_bars({"TINA": 101, "TINB": 101})
    nights.check_rebuilt(2)

    # 3: one market is late, by the data of the other.
    nights.write(102, "TINA")
    assert nights.run().summary.late == ("TINB",)
    assert nights.findings() == [("TINB", None, "file_late", "kept")]
    assert nights.bars() == expected_bars({"TINA": 102, "TINB": 101})
    nights.check_rebuilt(3)

    # 4: it catches up, and a row of the other is restated.
    nights.write(103)
    day = sessions(51)[-1]
    file = nights.file("TINA", 2024, 6)
    old = next(line for line in rows_of("TINA", (2024, 6), 103) if str(day) in line).split(",")
    new = [*old[:4], str(int(old[4]) + 7), old[5]]
    nights.edit(file, lambda lines: [",".join(new) if str(day) in line else line for line in lines])
    nights.run()
    assert nights.findings() == [("TINA", "TINA-2024-06", "restated", "rejected")]
    assert nights.ask(f"select volume from bars where contract = 'TINA-2024-06' and session = '{day}'") == [
        (int(old[4]) + 7,)
    ]
    nights.check_rebuilt(4)

    # 5: a file is cut in the middle of its last row; that row is held out, the contract is late.
    nights.write(104)
    nights.edit(file, lambda lines: [",".join(new) if str(day) in line else line for line in lines])
    torn = nights.file("TINB", 2024, 9)
    torn.write_text(torn.read_text()[:-4])
    nights.run()
    assert nights.findings() == [
        ("TINA", "TINA-2024-06", "restated", "rejected"),
        ("TINB", "TINB-2024-09", "file_late", "kept"),
        ("TINB", "TINB-2024-09", "torn_file", "rejected"),
    ]
    assert nights.rejects() == [("TINB-2024-09", 105, TORN)]
    assert nights.bars() == expected_bars({"TINA": 104, "TINB": 104}, TINB_2024_09=103)
    nights.check_rebuilt(5)

    # 6: it comes whole.
    nights.write(104, "TINB")
    nights.run()
    assert nights.findings() == [("TINA", "TINA-2024-06", "restated", "rejected")]
    assert (nights.rejects(), nights.bars()) == ([], expected_bars({"TINA": 104, "TINB": 104}))
    nights.check_rebuilt(6)

    # 7: a file comes with five rows fewer: its market is held back and serves yesterday's bars.
    shrunken = nights.file("TINB", 2024, 12)
    nights.edit(shrunken, lambda lines: lines[:30] + lines[35:])
    assert [market for market, _ in nights.run().summary.held_back] == ["TINB"]
    assert nights.summary.exit_code == 3
    assert ("TINB", "TINB-2024-12", "shrunken_file", "kept") in nights.findings()
    assert nights.bars() == expected_bars({"TINA": 104, "TINB": 104})
    nights.check_rebuilt(7)

    # 8: the vendor mends it, with a session more.
    nights.write(105, "TINB")
    nights.write(105, "TINA")
    assert nights.run().summary.published == MARKETS
    assert nights.bars() == expected_bars({"TINA": 105, "TINB": 105})
    # The version of night 8 took the restated value of night 4 back: that is another restatement.
    assert nights.findings() == [("TINA", "TINA-2024-06", "restated", "rejected")]
    nights.check_rebuilt(8)

    # 9: a file is renamed: nobody claims the new name, and the contract is late under its own.
    nights.write(106)
    file = nights.file("TINA", 2024, 9)
    file.rename(nights.raw / "TINA-2024-09.csv")
    nights.run()
    assert nights.findings() == [
        ("TINA", "TINA-2024-06", "restated", "rejected"),
        ("TINA", "TINA-2024-09", "file_late", "kept"),
        (None, None, "unclaimed_file", "kept"),
    ]
    assert nights.summary.unclaimed == 1
    assert nights.bars() == expected_bars({"TINA": 106, "TINB": 106}, TINA_2024_09=105)
    nights.check_rebuilt(9)

    # 10: its name is back; another file repeats a row and contradicts one.
    nights.write(106, "TINA")
    (nights.raw / "TINA-2024-09.csv").unlink()
    rows = rows_of("TINB", (2024, 6), 106)
    contradicted = rows[60].replace(",", ",9", 1)
    text = HEADER + "".join([*rows[:61], contradicted, *rows[61:], rows[-1]])
    nights.file("TINB", 2024, 6).write_text(text)
    nights.run()
    kinds = [(contract, kind) for market, contract, kind, _ in nights.findings() if market == "TINB"]
    assert kinds == [
        ("TINB-2024-06", "conflicting_rows"),
        ("TINB-2024-06", "duplicate_rows"),
        ("TINB-2024-06", "range_broken"),  # the later row stands, and its high cannot be
        ("TINB-2024-06", "restated"),
    ]
    assert nights.bars() == expected_bars({"TINA": 106, "TINB": 106})
    nights.check_rebuilt(10)
