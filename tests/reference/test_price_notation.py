"""Price text is read as published quotes mean it, written back, and refused where it says nothing."""

import csv
import pathlib

import pytest

from contracts.errors import NotationError
from contracts.notation import format_price, parse_price

DATA = pathlib.Path(__file__).parent / "data"


def published() -> list[tuple[str, str, float]]:
    """(text, notation, value) of every sourced row."""
    with (DATA / "price_notation.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert all(row["source"] for row in rows)
    return [(row["text"], row["notation"], float(row["value"])) for row in rows]


def test_there_are_eleven_published_texts() -> None:
    assert len(published()) == 11


@pytest.mark.parametrize(("text", "notation", "value"), published())
def test_published_text_is_read_as_its_value(text: str, notation: str, value: float) -> None:
    assert parse_price(text, notation) == value


@pytest.mark.parametrize(("text", "notation", "value"), published())
def test_published_value_written_and_read_again_is_the_same(text: str, notation: str, value: float) -> None:
    assert parse_price(format_price(value, notation), notation) == value


@pytest.mark.parametrize(("notation", "parts"), [("8ths", 8), ("64ths", 64), ("32nds", 128)])
def test_every_part_of_a_point_survives_the_round_trip(notation: str, parts: int) -> None:
    for count in range(-parts, 3 * parts):
        assert parse_price(format_price(count / parts, notation), notation) == count / parts


def test_decimal_values_survive_the_round_trip() -> None:
    for value in (0.0, 0.1 + 0.2, -37.63, 1e-7, 123456789.125, 2.0, 1e22):
        assert parse_price(format_price(value, "decimal"), "decimal") == value


def test_declared_marks_are_read() -> None:
    assert parse_price("1.234.567,25", "decimal", ",", ".") == 1234567.25
    assert parse_price("1 234,5", "decimal", ",", " ") == 1234.5
    assert parse_price("1,234", "decimal", ".", ",") == 1234.0
    assert parse_price(" 212.25 ", "decimal") == 212.25
    # One and the same text is a thousand or a part of one, as the marks are declared.
    assert parse_price("1.234", "decimal", ",", ".") == 1234.0
    assert parse_price("1.234", "decimal") == 1.234


@pytest.mark.parametrize(
    ("text", "notation"),
    [
        ("", "decimal"), (".", "decimal"), ("-", "decimal"), ("n/a", "decimal"), ("nan", "decimal"),
        ("inf", "decimal"), ("1,234.5", "decimal"), ("12.3.4", "decimal"), ("--5", "decimal"),
        ("5-", "decimal"), ("1_000", "decimal"),
        ("½½", "decimal"), ("5.5½", "decimal"), ("0x10", "decimal"), ("523'2", "decimal"),
        ("117.5", "32nds"), ("117'32", "32nds"), ("117'321", "32nds"), ("117'313", "32nds"),
        ("117'1", "32nds"),
        ("117'315+", "32nds"), ("117'", "32nds"), ("117", "32nds"),
        ("1-64", "64ths"), ("1-5", "64ths"), ("1-050", "64ths"), ("1.5", "64ths"),
        ("523'8", "8ths"), ("523'", "8ths"), ("523'25", "8ths"), ("523.25", "8ths"),
    ],
)  # fmt: skip
def test_text_that_is_no_price_of_its_notation_is_refused_by_name(text: str, notation: str) -> None:
    with pytest.raises(NotationError) as refused:
        parse_price(text, notation)
    assert repr(text) in str(refused.value)


def test_thousands_in_the_wrong_place_are_refused() -> None:
    for text in ("1,23", "12,3456", ",123", "1,,234"):
        with pytest.raises(NotationError):
            parse_price(text, "decimal", ".", ",")


@pytest.mark.parametrize(("value", "notation"), [(1.1, "8ths"), (1 / 128, "64ths"), (1 / 256, "32nds")])
def test_a_value_between_two_parts_cannot_be_written(value: float, notation: str) -> None:
    with pytest.raises(NotationError):
        format_price(value, notation)
