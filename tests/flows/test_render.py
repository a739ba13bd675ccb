"""What is shown is aligned, exact, and cannot steer a terminal."""

import datetime
import json

import pytest

from flows.render import aligned, plain, say_json, show


def test_numbers_stand_to_the_right_and_words_to_the_left() -> None:
    assert aligned(("market", "gap"), [("NWHT", -7.25), ("NOIL", None), ("N", 12.0)]) == [
        "market    gap",
        "NWHT    -7.25",
        "NOIL",
        "N          12",
    ]


def test_a_table_without_rows_is_its_heads() -> None:
    assert aligned(("a", "b"), []) == ["a  b"]


@pytest.mark.parametrize(
    ("value", "shown"),
    [
        (None, ""),
        (True, "yes"),
        (3, "3"),
        (0.1 + 0.2, "0.3"),
        (212.25, "212.25"),
        (datetime.date(2024, 11, 5), "2024-11-05"),
        ("a\tb", "a\\tb"),
    ],
)
def test_one_cell(value: object, shown: str) -> None:
    assert show(value) == shown


@pytest.mark.parametrize(
    ("text", "shown"),
    [
        ("\x1b[2J\x1b]0;title\x07", "\\x1b[2J\\x1b]0;title\\x07"),
        ("one\r\ntwo", "one\\r\\ntwo"),
        ("21\u202e5.25", "21\\u202e5.25"),
        ("\x9b31m", "\\x9b31m"),
        ("Å 101½ €", "Å 101½ €"),
    ],
)
def test_characters_that_steer_a_terminal_are_written_as_escapes(text: str, shown: str) -> None:
    assert plain(text) == shown


def test_json_has_no_number_that_json_does_not_have(capsys: pytest.CaptureFixture[str]) -> None:
    say_json({"day": datetime.date(2024, 1, 2), "none": float("nan"), "far": [float("inf"), 1.5], "is": True})
    assert json.loads(capsys.readouterr().out) == {
        "day": "2024-01-02",
        "none": None,
        "far": [None, 1.5],
        "is": True,
    }
