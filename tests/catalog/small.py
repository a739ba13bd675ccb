"""A market of six sessions whose every number can be done with a pencil, and a store made of it."""

import datetime
from pathlib import Path
from typing import Any

import pyarrow as pa

from catalog.archive import take_in
from catalog.manifest import Manifest, StoredFile, Verdict
from catalog.places import Places, write_lock
from catalog.store import open_staging, publish, write_table
from contracts.tables import TABLES, Table, make_table

S = [datetime.date(2024, 1, day) for day in (8, 9, 10, 11, 12, 15)]
RAW_TEXT = b"session,settle\n2024-01-08,100\n"
RAW_SHA = "6cd4cf15d4a9dab6bb2f00fd2b0afeebb4d9f051e6cd9b994be1246ef4995894"
MARCH = [100.0, 101.0, 102.0, 103.0, 104.0, 105.0]
MAY = [110.0, 112.0, 111.0, 114.0, 113.0, 116.0]
STAMP = {"desk": "a desk", "code": "some code"}


def sound_rows(market: str = "NWHT", file: str = RAW_SHA) -> dict[str, dict[str, Any]]:
    """Columns of every table of one market that is right in every number.

    Three plans: `at_once` rolls from March to May on the fourth session, `in_halves` does so in two steps,
    `still` holds March throughout.
    """
    march, may = f"{market}-2024-03", f"{market}-2024-05"
    bars: dict[str, Any] = {
        "market": [market] * 12,
        "contract": [march] * 6 + [may] * 6,
        "session": S * 2,
        "settle": MARCH + MAY,
        "clean_settle": MARCH + MAY,
        "status": ["reported"] * 12,
        "file": [file] * 12,
        "line": list(range(2, 14)),
    }
    plans: list[dict[str, list[Any]]] = [
        {
            "contract": [march] * 3 + [may] * 3,
            "incoming": [None] * 6,
            "incoming_weight": [0.0] * 6,
            "settle": [100.0, 101.0, 102.0, 114.0, 113.0, 116.0],
            "shift": [9.0, 9.0, 9.0, 0.0, 0.0, 0.0],
            "scale": [111 / 102] * 3 + [1.0] * 3,
            "change": [None, 1.0, 1.0, 3.0, -1.0, 3.0],
            "simple_return": [None, 1 / 100, 1 / 101, 3 / 111, -1 / 114, 3 / 113],
            "rolled": [False, False, False, True, False, False],
        },
        {
            "contract": [march] * 4 + [may] * 2,
            "incoming": [None, None, None, may, None, None],
            "incoming_weight": [0.0, 0.0, 0.0, 0.5, 0.0, 0.0],
            "settle": [100.0, 101.0, 102.0, 108.5, 113.0, 116.0],
            "shift": [10.0, 10.0, 10.0, 5.5, 0.0, 0.0],
            "scale": [106.5 / 102 * (114 / 108.5)] * 3 + [114 / 108.5, 1.0, 1.0],
            "change": [None, 1.0, 1.0, 2.0, -1.0, 3.0],
            "simple_return": [None, 1 / 100, 1 / 101, 2 / 106.5, -1 / 114, 3 / 113],
            "rolled": [False, False, False, True, True, False],
        },
        {
            "contract": [march] * 6,
            "incoming": [None] * 6,
            "incoming_weight": [0.0] * 6,
            "settle": MARCH,
            "shift": [0.0] * 6,
            "scale": [1.0] * 6,
            "change": [None, 1.0, 1.0, 1.0, 1.0, 1.0],
            "simple_return": [None, 1 / 100, 1 / 101, 1 / 102, 1 / 103, 1 / 104],
            "rolled": [False] * 6,
        },
    ]
    series: dict[str, Any] = {
        "market": [market] * 18,
        "plan": ["at_once"] * 6 + ["in_halves"] * 6 + ["still"] * 6,
        "nearby": [1] * 18,
        "session": S * 3,
        "status": ["reported"] * 18,
        "findings": [0] * 18,
    }
    for plan in plans:
        plan["back_adjusted"] = [a + b for a, b in zip(plan["settle"], plan["shift"], strict=True)]
        plan["ratio_adjusted"] = [a * b for a, b in zip(plan["settle"], plan["scale"], strict=True)]
        plan["growth"] = [100.0]
        for value in plan["simple_return"][1:]:
            plan["growth"].append(plan["growth"][-1] * (1 + value))
        for name, values in plan.items():
            series[name] = series.get(name, []) + values
    rolls: dict[str, Any] = {
        "market": [market] * 3,
        "plan": ["at_once", "in_halves", "in_halves"],
        "nearby": [1, 1, 1],
        "step": [1, 1, 2],
        "decided_on": [S[2]] * 3,
        "measured_on": [S[2], S[2], S[3]],
        "effective_on": [S[3], S[3], S[4]],
        "outgoing": [march] * 3,
        "incoming": [may] * 3,
        "weight_before": [0.0, 0.0, 0.5],
        "weight_after": [1.0, 0.5, 1.0],
        "outgoing_settle": [102.0, 102.0, 103.0],
        "incoming_settle": [111.0, 111.0, 114.0],
        "gap": [9.0, 4.5, 5.5],
        "ratio": [111 / 102, 106.5 / 102, 114 / 108.5],
        "trigger": ["volume"] * 3,
        "impact_sessions": [0] * 3,
    }
    findings: dict[str, Any] = {
        "finding": [f"{market.lower()}0000001"],
        "market": [market],
        "contract": [march],
        "session": [S[1]],
        "kind": ["lone_move"],
        "severity": ["note"],
        "action": ["kept"],
        "impact_sessions": [0],
        "message": ["a move of its own"],
    }
    files: dict[str, Any] = {
        "path": [f"{market}.csv"],
        "file": [file],
        "bytes": [30],
        "market": [market],
        "rows": [12],
        "rejects": [1],
        "taken_in": [1],
    }
    rejects: dict[str, Any] = {
        "market": [market],
        "file": [file],
        "line": [14],
        "text": ["torn"],
        "reason": ["too few columns"],
    }
    terms: dict[str, Any] = {
        "market": [market] * 2,
        "contract": [march, may],
        "name": ["wheat"] * 2,
        "tick_size": [0.25] * 2,
    }
    coverage: dict[str, Any] = {
        "market": [market] * 3,
        "plan": ["at_once", "in_halves", "still"],
        "first_session": [S[0]] * 3,
        "last_session": [S[5]] * 3,
        "sessions": [6] * 3,
        "expected": [6] * 3,
        "repaired": [0] * 3,
        "carried": [0] * 3,
        "missing": [0] * 3,
        "state": ["published"] * 3,
    }
    runs: dict[str, Any] = {
        "run": [1],
        "command": ["build"],
        "started_at": [datetime.datetime(2024, 1, 16, 2, 30, tzinfo=datetime.UTC)],
        "outcome": ["published"],
        "markets": [1],
    }
    return {
        "bars": bars, "series": series, "rolls": rolls, "findings": findings, "rejects": rejects,
        "files": files, "coverage": coverage, "terms": terms, "runs": runs,
    }  # fmt: skip


def table_named(name: str) -> Table:
    """The definition of a table."""
    return next(table for table in TABLES if table.name == name)


def sound_table(name: str, market: str = "NWHT", file: str = RAW_SHA) -> pa.Table:
    """One table of `sound_rows`."""
    return make_table(table_named(name), sound_rows(market, file)[name])


def lay_raw(folder: Path, market: str = "NWHT", text: bytes = RAW_TEXT) -> None:
    """A raw folder with one file."""
    folder.mkdir(parents=True, exist_ok=True)
    (folder / f"{market}.csv").write_bytes(text)


def stage_small(staging: Path, market: str, file: str) -> dict[str, StoredFile]:
    """Write every table of the small market into a staging folder."""
    stored = {}
    for table in TABLES:
        owner = "_desk" if table.name in ("coverage", "runs") else market
        written = write_table(staging, table, owner, sound_table(table.name, market, file), STAMP)
        stored[written.path] = written
    return stored


def draft_of(files: dict[str, StoredFile], market: str = "NWHT") -> Manifest:
    """A manifest not yet numbered or named."""
    return Manifest(
        files=files,
        desk="a desk",
        code="some code",
        packages={"pyarrow": pa.__version__},
        intake=1,
        markets={market: Verdict(state="published", inputs="inputs")},
    )


def publish_small(places: Places, raw: Path, market: str = "NWHT") -> Manifest:
    """Take in one raw file and publish the small market as the next snapshot."""
    lay_raw(raw, market)
    with write_lock(places):
        intake = take_in(raw, places)
        staging = open_staging(places)
        return publish(places, staging, draft_of(stage_small(staging, market, intake.arrivals[0].file), market))
