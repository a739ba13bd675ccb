"""The quality log as text: what, where, why, what was done, what it cost."""

import datetime
from typing import Any

from flows.notes import word_cleaning, word_findings

SPIKE: dict[str, Any] = {
    "finding": "a1c4707d749a", "market": "NOIL", "contract": "NOIL-2017-01", "session": datetime.date(2016, 11, 15),
    "kind": "reverting_spike", "severity": "review", "field": "settle", "reported": 34.62, "expected": 36.47,
    "score": 20.81, "threshold": 8.0, "action": "repaired", "corrected": 36.47, "impact_sessions": 4,
    "waived_until": None,
    "message": "NOIL-2017-01, 2016-11-15: settle 34.62 stands -1.85 from where the curve puts it; repaired to 36.47",
}  # fmt: skip
STALE = SPIKE | {
    "finding": "495be8d49af2", "kind": "stale_price", "score": 6.0, "threshold": 5.0, "action": "kept",
    "corrected": None, "expected": 56.9, "reported": 58.28, "impact_sessions": 1,
    "waived_until": datetime.date(2024, 6, 30),
    "message": "NOIL-2023-12, 2023-09-12 to 2023-09-19: settle stands at 58.28 for 6 sessions",
}  # fmt: skip
NOTE = SPIKE | {
    "finding": "953b54f34e3c", "kind": "session_missing", "severity": "review", "score": 1.0, "action": "kept",
    "corrected": None, "expected": None, "reported": None, "impact_sessions": 0,
    "message": "NOIL, 2022-12-13: no contract has a bar on this session",
}  # fmt: skip


def test_a_finding_is_a_paragraph_with_why_and_cost_that_fits_the_terminal() -> None:
    assert word_findings([SPIKE], 80) == [
        "NOIL-2017-01, 2016-11-15: settle 34.62 stands -1.85 from where the curve puts",
        "    it; repaired to 36.47",
        "    Why: it stands 20.8 times its usual distance from what the curve says (told",
        "    from 8). Cost: had it stood, the trend score would be another on 4 sessions.",
        "    review reverting_spike a1c4707d749a",
    ]


def test_kept_price_says_what_was_expected_that_it_stands_and_until_when_it_is_waived() -> None:
    text = " ".join(line.strip() for line in word_findings([STALE], 160))
    assert "it traded through 6 sessions without a new settle (told from 5), expected 56.9. Done: kept" in text
    assert "Cost: on 1 session the trend score is another than with what was expected. Waived until 2024-06-30." in text


def test_finding_that_its_message_tells_in_full_says_no_more() -> None:
    assert word_findings([NOTE, NOTE], 100) == [
        "NOIL, 2022-12-13: no contract has a bar on this session",
        "    review session_missing 953b54f34e3c",
        "",
        "NOIL, 2022-12-13: no contract has a bar on this session",
        "    review session_missing 953b54f34e3c",
    ]


def test_no_findings_are_no_lines() -> None:
    assert word_findings([]) == []


def test_cleaning_is_told_by_plan_with_its_worst_session() -> None:
    worst = {"session": "2017-06-13", "clean": 4, "reported": -4}
    plans = {
        "by_volume": {"sessions": 2508, "replaced": 1, "turned": 8, "worst": worst},
        "quiet": {"sessions": 2508, "replaced": 0, "turned": 0, "worst": None},
    }
    assert word_cleaning("NOIL", plans, 200) == [
        "NOIL, plan by_volume: 1 held settle replaced; without cleaning the trend score would differ on 8 of 2,508",
        "    sessions, worst on 2017-06-13: -4 in place of +4",
        "NOIL, plan quiet: 0 held settles replaced; without cleaning no trend score would differ",
    ]
