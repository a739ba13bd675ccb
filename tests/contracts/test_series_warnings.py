"""Where an adjusted series misleads, it is said where it is read."""

import math
import re

import numpy as np
import pyarrow as pa
import pytest

from contracts.checks.rolled import check_back_adjusted
from contracts.columns import COLUMNS
from contracts.findings import Finding, Kind, Severity
from contracts.markets import parse_market
from contracts.rolls import lay_rolls
from contracts.splice import carry_forward, splice
from contracts.tables import SERIES
from tests.contracts.small import MARKET, make_panel, weekdays

CONTRACTS = ("NWHT-2024-03", "NWHT-2024-05")
DAYS = weekdays("2024-01-02", 6)
# May's volume passes March's on the fourth session; the roll takes effect on the fifth.
VOLUME = np.array([[90, 10], [90, 20], [80, 40], [50, 80], [30, 90], [10, 95.0]])
ENDED = math.nan


def findings_of(march: list[float], may: list[float], volume: np.ndarray = VOLUME) -> tuple[list[Finding], list[float]]:
    """The check's findings on a roll from March to May, and the back-adjusted prices it saw."""
    market = parse_market(MARKET.format(extra="may_be_negative = true"), "markets/nwht.toml")
    settle = np.array([march, may]).T
    panel = make_panel(market, CONTRACTS, DAYS, settle, volume=volume)
    (held,) = lay_rolls(panel, ~np.isnan(settle), settle, market.plans["by_volume"])
    series = splice(held, *carry_forward(settle, np.zeros(settle.shape, dtype=bool)))
    found = check_back_adjusted(panel, "by_volume", held, series.settle, series.back_adjusted)
    return found, series.back_adjusted.tolist()


def test_back_adjusted_at_or_below_zero_of_positive_settles_is_one_note_with_its_sessions() -> None:
    """The gap is 4 - 14 = -10: 8, 10, 12 become -2, 0, 2."""
    found, back = findings_of([8, 10, 12, 14, 15, 16], [1, 2, 3, 4, 5, 6])
    assert back == [-2, 0, 2, 4, 5, 6]
    (note,) = found
    assert (note.kind, note.severity, note.market) == (
        Kind.PERCENT_OF_BACK_ADJUSTED_UNDEFINED, Severity.NOTE, "NWHT",
    )  # fmt: skip
    assert note.score == 2.0
    assert note.message == (
        "NWHT: plan by_volume, nearby 1: back_adjusted is at or below zero on 2 sessions from 2024-01-02 to "
        "2024-01-03 whose settle is above zero; its differences stand, its percentages mean nothing: take "
        "simple_return or ratio_adjusted"
    )


def test_prices_that_stay_above_zero_have_percentages() -> None:
    found, back = findings_of([8, 10, 12, 14, 15, 16], [5, 6, 7, 8, 9, 10])
    assert back == [2, 4, 6, 8, 9, 10]
    assert found == []


def test_settles_at_or_below_zero_are_not_the_adjustments_doing() -> None:
    """March really settles at 0 and -1; added to the gap of +1 they are 1 and 0, and May's own -2 is no sum."""
    found, back = findings_of([0, -1, 2, 3, 4, 5], [9, 9, 3, 4, -2, 6])
    assert back == [1, 0, 3, 4, -2, 6]
    assert found == []


def test_sessions_without_a_price_are_not_counted() -> None:
    """March has no bar on the second to sixth session of eight: three are carried, two are missing."""
    days = weekdays("2024-01-02", 8)
    march, may = [8, ENDED, ENDED, ENDED, ENDED, ENDED, 14, 15], [1.0, 1, 1, 1, 1, 1, 4, 5]
    market = parse_market(MARKET.format(extra=""), "markets/nwht.toml")
    settle = np.array([march, may]).T
    volume = np.array([[9.0] * 6 + [1, 1], [1.0] * 6 + [9, 9]]).T
    panel = make_panel(market, CONTRACTS, days, settle, volume=volume)
    (held,) = lay_rolls(panel, ~np.isnan(settle), settle, market.plans["by_volume"])
    series = splice(held, *carry_forward(settle, np.zeros(settle.shape, dtype=bool)))
    assert series.back_adjusted[:4].tolist() == [-2.0] * 4 and np.isnan(series.back_adjusted[4:6]).all()
    (note,) = check_back_adjusted(panel, "by_volume", held, series.settle, series.back_adjusted)
    assert note.score == 4.0
    assert "on 4 sessions from 2024-01-02 to 2024-01-05" in note.message


def test_note_is_the_same_one_when_the_next_roll_moves_its_sessions() -> None:
    first, _ = findings_of([8, 10, 12, 14, 15, 16], [1, 2, 3, 4, 5, 6])
    later, _ = findings_of([8, 10, 12, 14, 15, 16], [1, 2, 3, 0.5, 5, 6])
    assert first[0].message != later[0].message
    assert first[0].identity == later[0].identity


@pytest.mark.parametrize(
    ("column", "right", "wrong"),
    [
        ("settle", "differences and returns within one holding only", "never over a roll"),
        ("open", "differences and returns within one holding only", None),
        ("high", "differences and returns within one holding only", None),
        ("low", "differences and returns within one holding only", None),
        ("shift", "makes differences true", "percentages wrong"),
        ("scale", "makes returns true", "differences wrong"),
        ("back_adjusted", "right for differences", "wrong for returns and percentages"),
        ("ratio_adjusted", "right for returns", "wrong for differences"),
        ("change", "right for differences", "not for returns"),
        ("simple_return", "right for returns", "not for differences"),
        ("growth", "right for returns", "not for differences"),
    ],
)
def test_column_says_which_statistic_it_is_right_for(column: str, right: str, wrong: str | None) -> None:
    """In the definition, and in the metadata of the published file's field."""
    meaning = SERIES.schema.field(column).metadata[b"meaning"].decode()
    assert meaning == COLUMNS[column].meaning
    assert right in meaning and (wrong or "") in meaning


def test_no_number_of_series_leaves_its_statistic_unsaid() -> None:
    silent = [
        field.name
        for field in SERIES.schema
        if pa.types.is_floating(field.type)
        and not re.search(r"\b(differences|returns)\b", field.metadata[b"meaning"].decode())
    ]
    assert silent == ["incoming_weight"]
