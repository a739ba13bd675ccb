"""Every roll of the sample's nearby 1 decided again from its printed evidence alone, by rules written out plainly."""

import json
from pathlib import Path
from typing import Any

import pytest
from click.testing import CliRunner

from flows.commands import main

MARKETS = ("NBND", "NCOC", "NCOP", "NEQX", "NGAS", "NKRN", "NOIL", "NVOL", "NWHT")


def ask(store: Path, *words: str) -> Any:
    # The group ends the process itself; its command is called without that.
    result = CliRunner().invoke(main, [*words, "--store", str(store)])
    assert result.exit_code == 0, result.output
    return result.output


def exceeds(plan: dict[str, Any], session: dict[str, Any]) -> bool:
    """The trigger on one session: a missing value on either side is no."""

    def above(name: str) -> bool:
        one, other = session[f"outgoing_{name}"], session[f"incoming_{name}"]
        return one is not None and other is not None and other > one

    return {
        "volume": above("volume"),
        "open interest": above("open_interest"),
        "both": above("volume") and above("open_interest"),
        "either": above("volume") or above("open_interest"),
        "calendar": False,
    }[plan["trigger"]]


@pytest.mark.parametrize("market", MARKETS)
def test_each_roll_follows_from_what_is_printed_of_it(sample_store: Path, market: str) -> None:
    told = json.loads(ask(sample_store, "rolls", market, "--evidence", "--json"))
    ledger = json.loads(ask(sample_store, "rolls", market, "--nearby", "1", "--json"))["rolls"]
    assert told["evidence"]
    for each in told["evidence"]:
        plan = told["plans"][each["plan"]]
        rows = [r for r in ledger if r["plan"] == each["plan"] and r["decided_on"] == each["decided_on"]]
        assert [row["step"] for row in rows] == [step["step"] for step in each["steps"]]
        decide(plan, each)
        measure(each, rows)


def decide(plan: dict[str, Any], each: dict[str, Any]) -> None:
    """Trigger, incoming and the day of the decision."""
    confirm, compared = plan["confirm"], each["compared"]
    assert compared[-1]["session"] == each["decided_on"]
    fired = len(compared) >= confirm and all(exceeds(plan, session) for session in compared[-confirm:])
    due = plan["delay"] + plan["steps"] - 1 >= each["sessions_to_deadline"]
    if each["force"] is not None:
        assert each["trigger"] == "forced" and each["planned_for"] == each["force"]
    else:
        by_deadline = "calendar" if plan["trigger"] == "calendar" else "backstop"
        assert fired or due
        assert each["trigger"] == (plan["trigger"] if fired else by_deadline)
        if each["free_since"] < each["decided_on"] and len(compared) > confirm:
            # Not a session earlier: the trigger had not held long enough, and the deadline was further off.
            held_before = all(exceeds(plan, session) for session in compared[-confirm - 1 : -1])
            incoming_is_new = plan["incoming"] == "most active"
            assert not held_before or incoming_is_new
            assert plan["delay"] + plan["steps"] - 1 < each["sessions_to_deadline"] + 1
    activities = [candidate["activity"] for candidate in each["candidates"]]
    best = max((value for value in activities if value is not None), default=None)
    chosen = 0 if plan["incoming"] == "next" or best is None else activities.index(best)
    assert each["candidates"][chosen]["contract"] == each["incoming"]


def measure(each: dict[str, Any], rows: list[dict[str, Any]]) -> None:
    """Gap and ratio of each step from the two settles of the first session that has both."""
    for step, sessions, row in zip(each["steps"], each["measuring"], rows, strict=True):
        if row["measured_on"] is None:
            assert sessions == []
            continue
        last = sessions[-1]
        assert last["session"] == row["measured_on"]
        assert last["outgoing_usable"] and last["incoming_usable"]
        if not step["stale"]:
            assert not any(session["outgoing_usable"] and session["incoming_usable"] for session in sessions[:-1])
        share = row["weight_after"] - row["weight_before"]
        assert row["gap"] == pytest.approx(share * (last["incoming"] - last["outgoing"]), abs=1e-12)
        after = (1 - row["weight_after"]) * last["outgoing"] + row["weight_after"] * last["incoming"]
        before = (1 - row["weight_before"]) * last["outgoing"] + row["weight_before"] * last["incoming"]
        if row["ratio"] is not None:
            assert row["ratio"] == pytest.approx(after / before, rel=1e-12)


def test_evidence_reads_as_a_person_would_decide(sample_store: Path) -> None:
    lines = ask(sample_store, "rolls", "NWHT", "--plan", "by_open_interest", "--evidence").splitlines()
    at = lines.index("  NWHT-2024-05 -> NWHT-2024-09, decided at the close of 2024-04-19 by open interest")
    assert lines[at + 1 : at + 7] == [
        "    could be decided from 2024-02-21 on",
        "    2024-04-17  volume 27884 against 27943, open interest 89625 against 85633",
        "    2024-04-18  volume 18034 against 32929, open interest 71629 against 92747",
        "    2024-04-19  volume 13685 against 23011, open interest 53595 against 98215",
        "    deadline on 2024-04-26, 5 sessions after the decision; delay and steps need 1: not due",
        "    measured 2024-04-19: gap (203.5 - 212.75) = -9.25, ratio 0.9565217391",
    ]
