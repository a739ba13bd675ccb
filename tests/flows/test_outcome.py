"""What a night came to says the same thing wherever it is told."""

import json
import re
import sqlite3
from pathlib import Path

from catalog.summary import FindingLine, Summary
from flows.outcome import Outcome
from flows.progress import Pace
from tests.flows.conftest import RunApart
from tests.integration.tiny import write_raw


def test_artifact_events_json_and_exit_code_agree_on_a_late_a_missing_and_a_held_back_market(
    desk: Path, tmp_path: Path, run_apart: RunApart
) -> None:
    """TINA is overdue by its clock; TINB's rows are rubbish; of TINC no file ever came."""
    tina = desk / "markets" / "tina.toml"
    (desk / "markets" / "tinc.toml").write_text(tina.read_text().replace("TINA", "TINC"))
    tina.write_text(tina.read_text().replace("delivery_months", 'due = "00:00"\ndue_zone = "UTC"\ndelivery_months'))
    (desk / "raw" / "TINB_2024_03.csv").write_text("date,high,low,settle,volume,oi\n" + "rubbish\n" * 90)
    done = run_apart("nightly", "--desk", desk)
    assert done.returncode == 3, done.stderr
    assert done.stderr == ""

    told = json.loads((desk / "published" / "last_night.json").read_text())
    assert (told["outcome"], told["exit_code"], told["published"], told["late"]) == (
        "held back", 3, ["TINA"], ["TINA"],
    )  # fmt: skip
    assert list(told["held_back"]) == ["TINB", "TINC"]
    assert "no raw file is of this market" in told["held_back"]["TINC"]

    with sqlite3.connect(tmp_path / "home" / ".prefect" / "prefect.db") as records:
        ((key, kind, page),) = records.execute("select key, type, data from artifact").fetchall()
        sent = records.execute(
            "select event, resource_id, payload from events where event like 'ropewalk.%' order by event, resource_id"
        ).fetchall()
        lines = [row[0] for row in records.execute("select message from log").fetchall()]
        (run_name,) = records.execute("select name from flow_run").fetchone()
    records.close()
    assert [(event, place.rpartition("/")[2]) for event, place, _ in sent] == [
        ("ropewalk.held-back", "ropewalk.market.TINB"),
        ("ropewalk.held-back", "ropewalk.market.TINC"),
        ("ropewalk.published", "published"),
    ]
    payload = json.loads(sent[2][2])
    assert payload == told
    assert {json.loads(sent[n][2])["reason"] for n in (0, 1)} == set(told["held_back"].values())
    assert (key, kind) == ("ropewalk-night", "markdown")
    assert "Exit code 3" in page
    assert run_name == "3 of 3 markets, data to 2024-02-20"
    text = page.replace("\\", "")
    for market, reason in told["held_back"].items():
        assert f"- `{market}`: {reason}" in text
        assert any(line.startswith(f"  held back: {market}: {reason}; ") for line in done.stdout.splitlines())
        assert any(line.startswith(f"  held back: {market}: {reason}") for line in lines)
    assert re.search(r"## Held back: 2.*## Late: 1.*TINA: nothing of.*## Found.*## Published: 1", text, re.DOTALL)
    assert re.search(r"^  late: TINA: nothing of ", done.stdout, re.MULTILINE)


def test_a_second_night_at_the_same_time_is_4_and_leaves_the_first_one_s_outcome(
    desk: Path, run_apart: RunApart
) -> None:
    from catalog.places import Places, write_lock

    assert run_apart("build", "--desk", desk).returncode == 0
    before = (desk / "published" / "last_night.json").read_bytes()
    write_raw(desk, 81)
    with write_lock(Places(desk / "published")):
        second = run_apart("nightly", "--desk", desk, PREFECT_API_URL="http://127.0.0.1:9/api")
    assert second.returncode == 4
    assert "pid" in second.stderr or "process" in second.stderr
    assert (desk / "published" / "last_night.json").read_bytes() == before


def test_a_night_that_publishes_nothing_leaves_its_reason_and_code(desk: Path, run_apart: RunApart) -> None:
    for file in (desk / "raw").iterdir():
        file.write_text("date,high,low,settle,volume,oi\n" + "rubbish\n" * 90)
    assert run_apart("build", "--desk", desk).returncode == 4
    told = json.loads((desk / "published" / "last_night.json").read_text())
    assert (told["outcome"], told["exit_code"], told["current"]) == ("failed", 4, None)
    assert told["error"].startswith("no market can be published")


def summary(**changes: object) -> Summary:
    values: dict[str, object] = {
        "snapshot": "000002-abc", "current": "000002-abc", "nothing_new": False, "published": ("TINA",),
        "held_back": (), "waived": (), "findings": (), "finding_counts": {}, "rows": 5, "unclaimed": 0, "late": (),
    }  # fmt: skip
    return Summary(**{**values, **changes})  # type: ignore[arg-type]


def test_text_of_files_is_no_markup_on_the_page() -> None:
    bad = "<script>x</script> | [a](http://b) `c` *d*\n# e"
    line = FindingLine("TINA", None, None, "restated", "review", "kept", 3, bad)
    page = Outcome("build", "2024-02-21T17:50:00+00:00", 0, "000002-abc", summary(findings=(line,))).as_markdown()
    assert "<script>" not in page
    assert r"&lt;script&gt;x&lt;/script&gt; \| \[a\]\(http://b\) \`c\` \*d\* \# e |" in page


def test_pace_tells_rows_a_second_and_the_time_left() -> None:
    pace = Pace(4, started=100.0)
    assert pace.describe(100.0) == "0 of 4 markets"
    pace.add(5000)
    assert pace.describe(102.0) == "1 of 4 markets, 2,500 rows a second, about 6 s left"
    pace.add(5000)
    assert pace.describe(200.0) == "2 of 4 markets, 100 rows a second, about 1 min 40 s left"
