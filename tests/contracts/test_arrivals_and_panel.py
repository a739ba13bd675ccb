"""Which of several rows stands, which days are sessions, and which bars are in the panel."""

import numpy as np

from contracts.arrivals import Arrived, Meeting, settle_arrivals
from contracts.intake import RawFile, parse_rows, split_file
from contracts.panel import Panel, lay_panel
from contracts.sessions import day_of
from tests.contracts.small import HEADER, make_market, make_raw


def arrive(files: list[RawFile], is_old: list[bool] | None = None) -> Arrived:
    rows = [split_file(raw) for raw in files]
    return settle_arrivals(parse_rows(rows, make_market()), rows, is_old or [False] * len(files))


def row(day: str, settle: float) -> str:
    return f"{day},,,,{settle},10,100\n"


def bars_of(arrived: Arrived) -> list[tuple[str, float, int]]:
    bars = arrived.bars
    return [
        (str(day_of(s)), float(v), int(line))
        for s, v, line in zip(bars.session, bars.values[:, 3], bars.line, strict=True)
    ]


def test_identical_rows_are_a_duplicate_and_the_later_stands() -> None:
    arrived = arrive([make_raw("NWHT_2024_03.csv", HEADER + row("2024-01-02", 212) * 2)])
    assert bars_of(arrived) == [("2024-01-02", 212.0, 3)]
    assert [m.meeting for m in arrived.superseded] == [Meeting.DUPLICATE]


def test_conflicting_rows_of_one_file_leave_the_later_line() -> None:
    arrived = arrive([make_raw("NWHT_2024_03.csv", HEADER + row("2024-01-02", 212) + row("2024-01-02", 213))])
    assert bars_of(arrived) == [("2024-01-02", 213.0, 3)]
    assert [m.meeting for m in arrived.superseded] == [Meeting.CONFLICT]


def test_newer_version_restates_and_the_old_row_is_named() -> None:
    old = make_raw("NWHT_2024_03.csv", HEADER + row("2024-01-02", 212) + row("2024-01-03", 213), 1, "a" * 64)
    new = make_raw("NWHT_2024_03.csv", HEADER + row("2024-01-02", 212.5) + row("2024-01-03", 213), 2, "b" * 64)
    arrived = arrive([old, new], [True, False])
    assert bars_of(arrived) == [("2024-01-02", 212.5, 2), ("2024-01-03", 213.0, 3)]
    assert [m.meeting for m in arrived.superseded] == [Meeting.RESTATED]
    assert arrived.lost == {}


def test_row_that_only_an_old_version_has_is_lost_and_does_not_stand() -> None:
    old = make_raw("NWHT_2024_03.csv", HEADER + row("2024-01-02", 212) + row("2024-01-03", 213), 1, "a" * 64)
    new = make_raw("NWHT_2024_03.csv", HEADER + row("2024-01-03", 213), 2, "b" * 64)
    arrived = arrive([old, new], [True, False])
    assert bars_of(arrived) == [("2024-01-03", 213.0, 2)]
    assert arrived.lost == {0: 1}


def lay(texts: dict[str, str], extra: str = "") -> Panel:
    rows = [split_file(make_raw(name, HEADER + text)) for name, text in texts.items()]
    market = make_market(extra)
    return lay_panel(market, settle_arrivals(parse_rows(rows, market), rows, [False] * len(rows)).bars)


def days_of(panel: Panel) -> list[str]:
    return [str(day_of(day)) for day in panel.sessions]


def test_bar_of_one_contract_on_a_closed_day_stays_out_of_the_panel() -> None:
    panel = lay(
        {
            "NWHT_2024_03.csv": row("2024-01-04", 212) + row("2024-01-06", 212) + row("2024-01-08", 213),
            "NWHT_2024_05.csv": row("2024-01-04", 215) + row("2024-01-08", 216),
        }
    )
    assert days_of(panel) == ["2024-01-04", "2024-01-05", "2024-01-08"]
    assert len(panel.off_session) == 1
    assert len(panel.disagreeing) == 0


def test_closed_day_on_which_most_contracts_have_a_bar_is_a_session() -> None:
    panel = lay(
        {
            "NWHT_2024_03.csv": row("2024-01-04", 212) + row("2024-01-06", 212) + row("2024-01-08", 213),
            "NWHT_2024_05.csv": row("2024-01-04", 215) + row("2024-01-06", 215) + row("2024-01-08", 216),
            "NWHT_2024_09.csv": row("2024-01-04", 217) + row("2024-01-08", 218),
        }
    )
    assert days_of(panel) == ["2024-01-04", "2024-01-05", "2024-01-06", "2024-01-08"]
    assert panel.disagreeing.tolist() == [2]


def test_half_of_the_live_contracts_is_not_more_than_half() -> None:
    panel = lay(
        {
            "NWHT_2024_03.csv": row("2024-01-04", 212) + row("2024-01-06", 212) + row("2024-01-08", 213),
            "NWHT_2024_05.csv": row("2024-01-04", 215) + row("2024-01-08", 216),
        }
    )
    assert len(panel.disagreeing) == 0


def test_bar_after_the_last_trading_day_is_outside_and_does_not_stretch_the_sessions() -> None:
    panel = lay({"NWHT_2024_03.csv": row("2024-03-13", 212) + row("2024-03-14", 212) + row("2062-03-14", 212)})
    assert days_of(panel) == ["2024-03-13", "2024-03-14"]
    assert len(panel.outside) == 1


def test_prices_before_a_rescaling_are_on_the_present_scale() -> None:
    """138.7, then 13.79 on the scale divided by ten (VX 2007-05, 23 and 26 March 2007), is a change of -0.08."""
    panel = lay(
        {"NWHT_2007_05.csv": row("2007-03-23", 138.7) + row("2007-03-26", 13.79)},
        "[[rescaled]]\nbefore = 2007-03-26\nmultiply = 0.1",
    )
    assert panel.field("settle")[:, 0].tolist() == [13.87, 13.79]
    assert np.round(np.diff(panel.field("settle")[:, 0]), 10).tolist() == [-0.08]
