"""Proposed layouts: what they read of files nobody declared, and what they say they cannot tell."""

import gzip
import io
import zipfile
from collections.abc import Sequence
from pathlib import Path

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from contracts.intake import RawFile, parse_rows, split_file
from contracts.layouts import Layout, claim_file, parse_layout
from contracts.markets import Market, parse_market
from contracts.proposal import Proposal, propose_layouts
from contracts.proposal_text import LOOKED_AT
from contracts.sessions import day_of
from contracts.unpack import list_members, unpack
from tests.contracts.small import MARKET

ROOT = Path(__file__).resolve().parent.parent.parent
RAW = ROOT / "sample_raw"
DESK = ROOT / "catalog" / "desk"

Row = tuple[str, str, float | None, float | None, float | None, float | None, float | None, float | None]
Files = list[tuple[str, bytes]]


def texts_of(files: Files) -> dict[str, bytes]:
    """Unpacked bytes by path, a member of an archive below the archive's own."""
    found = {}
    for path, data in files:
        members = list_members(data, path) if path.endswith(".zip") else [("", data)]
        for member, inner in members:
            whole = f"{path}/{member}" if member else path
            found[whole] = unpack(inner, whole)
    return found


def read_all(
    layout: Layout, texts: dict[str, bytes], markets: Sequence[Market]
) -> tuple[list[tuple[object, ...]], int]:
    """Every row of the markets as the layout reads it, with path and line, and how many rows the files have."""
    found: list[tuple[object, ...]] = []
    total = 0
    for number, market in enumerate(markets):
        split = []
        for path, text in sorted(texts.items()):
            claim = claim_file(layout, path)
            assert claim is not None, path
            if claim.market in (None, market.code):
                split.append(split_file(RawFile(path, "0" * 64, text, "proposed", layout, claim, 1, len(text))))
        total += sum(rows.row_count for rows in split if number == 0 or rows.raw.claim.market is not None)
        parsed = parse_rows(split, market)
        for index in range(len(parsed.line)):
            values = [None if np.isnan(value) else float(value) for value in parsed.values[index]]
            place = (split[parsed.source[index]].raw.path, int(parsed.line[index]))
            contract = parsed.contracts[parsed.contract[index]]
            found.append((*place, contract, day_of(parsed.session[index]).isoformat(), *values))
    return found, total


def market_of(code: str, notation: str = "decimal") -> Market:
    months = "delivery_months = [1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11, 12]"
    text = MARKET.format(extra=f'price_notation = "{notation}"').replace("delivery_months = [3, 5, 9, 12]", months)
    return parse_market(text.replace('"NWHT"', f'"{code}"'), f"markets/{code.lower()}.toml")


def propose_one(files: Files) -> tuple[Proposal, Layout]:
    """The only proposal for the files, and its layout, loaded."""
    proposals = propose_layouts(files)
    assert len(proposals) == 1, [(proposal.files, proposal.unsure) for proposal in proposals]
    assert proposals[0].is_made, proposals[0].unsure
    return proposals[0], parse_layout(proposals[0].layout_toml, "layouts/proposed.toml")


def read_rows(files: Files, *markets: Market) -> list[Row]:
    """Rows of all files as the one proposal for them reads them; every row of the files has to be among them."""
    _, layout = propose_one(files)
    rows, total = read_all(layout, texts_of(files), markets)
    assert len(rows) == total
    return [row[2:] for row in rows]  # type: ignore[misc]


def doubts(files: Files) -> str:
    return "\n".join(propose_one(files)[0].unsure)


def evidence(files: Files, key: str) -> str:
    return next(item.text for item in propose_one(files)[0].evidence if item.key == key)


SAMPLE = {
    "energy": (
        ["energy/NGAS_Z16.csv.gz", "energy/NOIL_J18.csv.gz", "energy/NOIL_M19.csv.gz"],
        ["ngas", "noil"],
    ),
    "grains": (["grains/NWHT_2015_03.csv", "grains/NWHT_2016_09.csv", "grains/NWHT_2022_12.csv"], ["nwht"]),
    "metals": (["metals/NCOP-2015-01.csv.zst", "metals/NCOP-2022-01.csv.zst", "metals/NCOP-2016-07.csv.zst"], ["ncop"]),
    "rates": (["rates/NBND 2015 03.csv", "rates/NBND 2019 06.csv", "rates/NBND 2025 12.csv"], ["nbnd"]),
    "session_files": (
        ["sessions/2015/2015-01-02.csv", "sessions/2017/2017-08-22.csv", "sessions/2024/2024-11-05.csv"],
        ["neqx", "nkrn"],
    ),
    "soft": (["soft/NCOC.zip"], ["ncoc"]),
    "volatility": (
        ["volatility/NVOL_201501.csv.zst", "volatility/NVOL_201804.csv.zst", "volatility/NVOL_202003.csv.zst"],
        ["nvol"],
    ),
}


@pytest.mark.parametrize("name", sorted(SAMPLE))
def test_a_proposal_for_the_sample_reads_the_very_rows_that_its_declared_layout_reads(name: str) -> None:
    paths, codes = SAMPLE[name]
    files = [(f"northmark/{path}", (RAW / "northmark" / path).read_bytes()) for path in paths]
    markets = [parse_market((DESK / "markets" / f"{code}.toml").read_text(), code) for code in codes]
    declared = parse_layout((DESK / "layouts" / f"{name}.toml").read_text(), name)
    _, proposed = propose_one(files)
    expected, _ = read_all(declared, texts_of(files), markets)
    assert len(expected) > 20
    assert read_all(proposed, texts_of(files), markets)[0] == expected


def test_german_table_with_a_title_and_a_total() -> None:
    text = (
        "Stand: 13.01.2025\r\n"
        "Handelstag;Eröffnung;Hoch;Tief;Abrechnungspreis;Umsatz;Offene Kontrakte\r\n"
        "02.01.2025;1.212,25;1.213,50;1.210,00;1.212,75;12.345;98.765\r\n"
        "03.01.2025;1.213,00;1.214,00;1.211,25;1.213,25;987;98.111\r\n"
        "13.01.2025;n.a.;n.a.;n.a.;1.213,00;0;98.000\r\n"
        "Summe;;;;;13.332;\r\n"
    )
    files = [("weizen/NWHT_MAR25.txt", text.encode("cp1252"))]
    assert read_rows(files, market_of("NWHT")) == [
        ("NWHT-2025-03", "2025-01-02", 1212.25, 1213.5, 1210.0, 1212.75, 12345.0, 98765.0),
        ("NWHT-2025-03", "2025-01-03", 1213.0, 1214.0, 1211.25, 1213.25, 987.0, 98111.0),
        ("NWHT-2025-03", "2025-01-13", None, None, None, 1213.0, 0.0, 98000.0),
    ]
    layout = propose_one(files)[1]
    assert (layout.encoding, layout.skip_lines, layout.decimal, layout.thousands) == ("cp1252", 1, ",", ".")
    assert (layout.missing, layout.not_rows) == (("", "n.a."), "Summe")
    assert "'Summe;;;;;13.332;'" in doubts(files)


def test_wide_text_with_tabs_month_first_dates_and_only_a_close() -> None:
    text = (
        "Trade Date\tOpen\tHigh\tLow\tClose\tVol\tOI\r\n"
        "1/2/2025\t4.10\t4.20\t4.00\t4.15\t100\t2000\r\n"
        "1/15/2025\t4.15\t4.25\t4.05\t4.20\t110\t2100\r\n"
    )
    files = [("eod/NGAS H25.tsv", text.encode("utf-16"))]
    assert read_rows(files, market_of("NGAS")) == [
        ("NGAS-2025-03", "2025-01-02", 4.1, 4.2, 4.0, 4.15, 100.0, 2000.0),
        ("NGAS-2025-03", "2025-01-15", 4.15, 4.25, 4.05, 4.2, 110.0, 2100.0),
    ]
    assert evidence(files, "date_format") == (
        "2 of 2 values parse as month-first (%m/%d/%Y); 1 cannot be day-first (%d/%m/%Y)"
    )
    assert "'Close' is taken for it; a closing price need not be the settlement" in doubts(files)


def test_daily_files_of_two_markets_with_codes_of_contracts_and_a_total() -> None:
    header = b"Contract,Date,Settlement,Volume,Open Int\n"
    files = [
        ("daily/2025-01-02.csv", header + b"NWHTH25,2025-01-02,212.25,100,2000\nNOILG25,2025-01-02,71.05,900,15000\n"),
        ("daily/2025-01-03.csv", header + b"NWHTK25,2025-01-03,213.75,90,1500\nTotal,,,990,16500\n"),
    ]
    assert read_rows(files, market_of("NOIL"), market_of("NWHT")) == [
        ("NOIL-2025-02", "2025-01-02", None, None, None, 71.05, 900.0, 15000.0),
        ("NWHT-2025-03", "2025-01-02", None, None, None, 212.25, 100.0, 2000.0),
        ("NWHT-2025-05", "2025-01-03", None, None, None, 213.75, 90.0, 1500.0),
    ]
    assert propose_one(files)[1].files == r"daily/\d{4}-\d{2}-\d{2}\.csv"


def test_contract_months_as_names_in_a_column_and_the_market_as_a_folder() -> None:
    text = (
        b"Trade Date|Delivery|O|H|L|Sett|Vol|Open Int\n"
        b"20250102|MAR-25|212.0|213.5|211.0|212.25|100|2000\n"
        b"20250102|MAY-25|214.0|214.5|213.0|213.25|90|1500\n"
    )
    assert read_rows([("NWHT/all.csv", text)], market_of("NWHT")) == [
        ("NWHT-2025-03", "2025-01-02", 212.0, 213.5, 211.0, 212.25, 100.0, 2000.0),
        ("NWHT-2025-05", "2025-01-02", 214.0, 214.5, 213.0, 213.25, 90.0, 1500.0),
    ]


def test_contract_months_as_digits_beside_a_column_of_markets() -> None:
    text = (
        b"product;month;date;settle;vol;oi\n"
        b"NWHT;202503;2025-01-02;212,25;100;2000\n"
        b"NOIL;202502;2025-01-02;71,05;900;15000\n"
    )
    files = [("prices_20250102.csv", text)]
    assert read_rows(files, market_of("NOIL"), market_of("NWHT")) == [
        ("NOIL-2025-02", "2025-01-02", None, None, None, 71.05, 900.0, 15000.0),
        ("NWHT-2025-03", "2025-01-02", None, None, None, 212.25, 100.0, 2000.0),
    ]
    assert propose_one(files)[1].files == r"prices_\d{8}\.csv"


@pytest.mark.parametrize("code", ["March 2025", "3/25", "MAR25", "2025-03", "NWHT/H5", "03.2025", "25H"])
def test_codes_of_contracts_are_read_in_many_forms(code: str) -> None:
    text = f"market,expiry,session,settle\nNWHT,{code},2025-01-02,1.5\n"
    assert [row[0] for row in read_rows([("all.csv", text.encode())], market_of("NWHT"))] == ["NWHT-2025-03"]


def test_apostrophes_part_thousands_and_are_no_fractions() -> None:
    text = b"Date;Settle;Volume\n02.01.2025;1'234;12'345\n13.01.2025;1'235;987\n"
    rows = read_rows([("NEQX_H25.csv", text)], market_of("NEQX"))
    assert [row[5:7] for row in rows] == [(1234.0, 12345.0), (1235.0, 987.0)]


def test_a_line_of_units_below_the_header_is_no_row_and_a_row_without_a_date_is_no_comment() -> None:
    text = "Date;Settle;Volume\n;EUR/t;lots\n2025-01-02;\N{MINUS SIGN}2,5;10\n--;2,5;10\n2025-01-06;12¼;10\n"
    files = [("NWHT_H25.csv", text.encode())]
    layout = propose_one(files)[1]
    assert (layout.not_rows, layout.comment) == (";EUR", "")
    rows, total = read_all(layout, texts_of(files), [market_of("NWHT")])
    assert [row[7] for row in rows] == [-2.5, 12.25]
    assert total == 3


def test_a_short_line_that_begins_with_the_delimiter_makes_no_comment_mark_of_it() -> None:
    files = [("NWHT_H25.csv", b"Date;Settle;Volume\n;EUR/t\n2025-01-02;2,5;10\n")]
    assert propose_one(files)[1].comment == ""


def test_a_note_that_begins_like_quoted_rows_is_not_taken_for_a_footer() -> None:
    text = b'"Date","Settle"\n"Jan 02, 2025","1.5"\n"Jan 32, 2025","1.5"\n"Jan 06, 2025","1.75"\n'
    files = [("NWHT_H25.csv", text)]
    layout = propose_one(files)[1]
    assert layout.not_rows is None
    assert len(read_all(layout, texts_of(files), [market_of("NWHT")])[0]) == 2


def test_years_of_one_digit_are_told_by_their_sessions() -> None:
    text = b"date,contract,settle,oi\n2025-01-02,H5,212.25,10\n2025-01-02,K6,213.25,20\n2029-12-28,H0,220.0,30\n"
    assert [row[:2] for row in read_rows([("NWHT.csv", text)], market_of("NWHT"))] == [
        ("NWHT-2025-03", "2025-01-02"),
        ("NWHT-2026-05", "2025-01-02"),
        ("NWHT-2030-03", "2029-12-28"),
    ]


def test_thirty_seconds_with_plus_in_a_packed_file() -> None:
    text = b"Date,Settle,Volume\n2025-01-02,117-16+,1000\n2025-01-03,117-31,2000\n2025-01-06,118-02,1500\n"
    files = [("NBND_U2025.csv.gz", gzip.compress(text))]
    assert [row[5] for row in read_rows(files, market_of("NBND", "32nds"))] == [117.515625, 117.96875, 118.0625]
    assert 'price_notation = "32nds"' in doubts(files)


def test_eighths_in_a_zstd_file() -> None:
    text = b"Date,Open,High,Low,Settle,Vol\n2025-01-02,450'2,452'6,449'0,451'4,1000\n"
    files = [("NCRN_Z25.csv.zst", pa.compress(text, codec="zstd", asbytes=True))]
    assert read_rows(files, market_of("NCRN", "8ths")) == [
        ("NCRN-2025-12", "2025-01-02", 450.25, 452.75, 449.0, 451.5, 1000.0, None)
    ]
    assert "open_interest: no column found for it" in doubts(files)


def test_columns_without_a_telling_name_are_told_by_their_values() -> None:
    text = (
        b"d;a;b;c;e;f;g\n"
        b"2025-01-02;212.00;213.50;211.00;212.25;1000;20000\n"
        b"2025-01-03;212.50;214.00;211.50;213.75;1100;21000\n"
        b"2025-01-06;213.00;213.25;210.00;210.50;900;21500\n"
    )
    files = [("NWHT_2025_03.csv", text)]
    assert read_rows(files, market_of("NWHT"))[0] == (
        "NWHT-2025-03", "2025-01-02", 212.0, 213.5, 211.0, 212.25, 1000.0, 20000.0,
    )  # fmt: skip
    assert "high: the header 'b' does not say so" in doubts(files)


def test_french_table_with_narrow_blanks_and_a_nameless_date_column() -> None:
    text = (
        ";Ouverture;Plus haut;Plus bas;Cours de compensation;Volume;Position ouverte\n"
        "2025-01-02;1\u202f493,75;1\u202f499,75;1\u202f486,25;1\u202f497,50;286\u202f437;434\u202f797\n"
    )
    assert read_rows([("NEQX_202506.csv", text.encode())], market_of("NEQX")) == [
        ("NEQX-2025-06", "2025-01-02", 1493.75, 1499.75, 1486.25, 1497.5, 286437.0, 434797.0)
    ]


def test_quoted_thousands_comments_and_columns_left_aside() -> None:
    text = (
        b'# delayed\n"Date","Open","High","Low","Last","Settle","Change","Volume"\n'
        b'"Jan 02, 2025","3,001.5","3,010","2,990","3,000","3,002.25","-","1,234"\n# end\n'
    )
    files = [("gas/NGAS 2025 M.csv", text)]
    assert read_rows(files, market_of("NGAS")) == [
        ("NGAS-2025-06", "2025-01-02", 3001.5, 3010.0, 2990.0, 3002.25, 1234.0, None)
    ]
    assert "# columns left aside: Last, Change" in propose_one(files)[0].layout_toml


def test_members_of_an_archive_in_folders_by_year() -> None:
    packed = io.BytesIO()
    with zipfile.ZipFile(packed, "w") as archive:
        archive.writestr("2025/H.csv", "date,settle,volume\n2025-01-02,212.5,100\n")
        archive.writestr("2026/H.csv", "date,settle,volume\n2025-01-02,222.5,10\n")
    assert [row[0] for row in read_rows([("NWHT.zip", packed.getvalue())], market_of("NWHT"))] == [
        "NWHT-2025-03",
        "NWHT-2026-03",
    ]


def test_noughts_on_days_without_trade_are_missing_and_a_nought_once_in_a_thousand_rows_is_a_price() -> None:
    header, quiet = b"date,open,high,low,settle\n", b"2025-01-02,0.00,0.00,0.00,20.5\n"
    traded = b"2025-01-03,20.1,20.9,20.0,20.6\n"
    assert propose_one([("NVOL_202503.csv", header + quiet + traded)])[1].zero_is_missing == ("open", "high", "low")
    rare = [("NVOL_202503.csv", header + quiet + traded * 999)]
    assert propose_one(rare)[1].zero_is_missing == ()
    assert "open, high, low are 0 in 1 of 1,000 rows" in doubts(rare)


def test_prices_named_in_cents_are_divided_by_a_hundred_and_it_is_said() -> None:
    files = [("NCOP_202503.csv", b'day,"settle, cents",lots\n20250102,598.10,104\n')]
    assert read_rows(files, market_of("NCOP"))[0][5] == 5.981
    assert "prices are divided by 100" in doubts(files)


def test_dates_that_could_be_either_are_told_by_weekends_and_said_to_be_so() -> None:
    """3 to 5 February 2025 are weekdays; 2 March, 2 April and 2 May hold a Sunday."""
    text = b"date,settle\n03/02/2025,212.25\n04/02/2025,212.50\n05/02/2025,213.00\n"
    files = [("NWHT_2025_12.csv", text)]
    assert propose_one(files)[1].date_format == "%d/%m/%Y"
    assert "parses as month-first (%m/%d/%Y) too; chosen by weekends" in doubts(files)


def test_dates_that_nothing_decides_are_said_to_be_a_guess() -> None:
    files = [("NWHT_2025_12.csv", b"date,settle\n05/05/2025,212.25\n06/06/2025,212.50\n")]
    assert "neither weekends nor order of rows decide" in doubts(files)


def test_day_first_is_told_by_the_values_that_cannot_be_month_first() -> None:
    text = "date,settle\n" + "".join(f"{day:02d}/01/2025,212.25\n" for day in range(2, 32))
    assert evidence([("NWHT_2025_12.csv", text.encode())], "date_format") == (
        "30 of 30 values parse as day-first (%d/%m/%Y); 19 cannot be month-first (%m/%d/%Y)"
    )


def test_a_decimal_mark_that_was_never_seen_is_said_to_be_a_guess() -> None:
    files = [("NCOC_2025_03.csv", b"date,settle\n2025-01-02,2397\n")]
    assert "decimal: a decimal mark was never seen; '.' is a guess" in doubts(files)


@pytest.mark.parametrize(("volume", "is_told"), [(b"12431", True), (b"124", False)])
def test_a_comma_before_three_digits_is_told_by_unmarked_thousands_or_said_to_be_open(
    volume: bytes, is_told: bool
) -> None:
    files = [("NGAS_F26.csv", b"date;settle;oi\n02.01.2025;3,829;5\n15.01.2025;3,830;" + volume + b"\n")]
    assert [row[5] for row in read_rows(files, market_of("NGAS"))] == [3.829, 3.83]
    assert ("every number also reads with decimal mark '.' and thousands mark ','" in doubts(files)) is not is_told


def test_files_that_read_alike_share_a_proposal_and_others_have_their_own() -> None:
    files = [
        ("a/NWHT_2025_03.csv", b"date,settle\n2025-01-02,212.25\n"),
        ("a/NKRN_2025_05.csv", b"date,settle\n2025-01-02,1.25\n"),
        ("b/NOIL_G25.csv", b"day;settlement\n20250102;71,05\n"),
    ]
    proposals = propose_layouts(files)
    assert [proposal.files for proposal in proposals] == [
        ("a/NKRN_2025_05.csv", "a/NWHT_2025_03.csv"),
        ("b/NOIL_G25.csv",),
    ]
    assert parse_layout(proposals[0].layout_toml, "x").files == (
        r"a/(?P<market>NKRN|NWHT)_(?P<year>\d{4})_(?P<month>\d{2})\.csv"
    )
    assert len({proposal.name for proposal in proposals}) == 2


def test_files_of_one_name_and_two_ways_of_writing_are_not_both_claimed_by_both() -> None:
    files = [
        ("NWHT_2025_03.csv", b"date,settle\n13/01/2025,212.25\n"),
        ("NWHT_2025_05.csv", b"date,settle\n01/14/2025,212.25\n"),
    ]
    proposals = propose_layouts(files)
    claimed = [
        [path for path, _ in files if claim_file(parse_layout(proposal.layout_toml, "x"), path) is not None]
        for proposal in proposals
    ]
    assert claimed == [["NWHT_2025_03.csv"], ["NWHT_2025_05.csv"]]
    assert "written otherwise" in "\n".join(proposals[0].unsure)


def test_two_digit_years_before_1970_move_the_window() -> None:
    files = [("NWHT_H65.csv", b"date,settle\n1964-12-01,2.125\n")]
    assert read_rows(files, market_of("NWHT"))[0][0] == "NWHT-1965-03"


def test_rows_that_will_be_refused_are_counted_with_the_first_reason() -> None:
    text = b"date,settle\n2025-01-02,212.25\n2025-01-03,21x\n2025-01-06,213\n"
    said = doubts([("NWHT_2025_03.csv", text)])
    assert "settle: '21x' stands in 1 row; neither a number nor a known mark" in said
    assert "NWHT_2025_03.csv:3: 1 of 3 rows refused, the first: settle: seen '21x'" in said


def test_a_large_file_is_looked_at_in_part_and_that_is_said() -> None:
    row = b"2025-01-02,212.25,100\n"
    text = b"date,settle,volume\n" + row * (LOOKED_AT // len(row) // 8) + b" " * LOOKED_AT + b"\n"
    assert "only its first 4 MiB were looked at" in doubts([("NWHT_2025_03.csv", text)])


@pytest.mark.parametrize(
    ("path", "data", "why"),
    [
        ("NWHT_2025_03.csv", b"", "the file is empty"),
        ("NWHT_2025_03.csv", b"2025-01-02,1,2\n2025-01-03,1,2\n", "no header"),
        ("NWHT_2025_03.csv", bytes(range(256)) * 20, "are no text"),
        ("NWHT_2025_03.csv", b"Dear desk,\nplease find attached nothing.\n", "no line of it reads as a header"),
        ("NWHT_2025_03.csv", b"date,volume\n2025-01-02,100\n", "no column with the settlement"),
        ("NWHT_2025_03.csv", b"account,contract,lots\n1,H25,100\n", "no column holds dates"),
        ("NWHT_2025_03.csv", b"date,settle\n", "a header, and no line after it"),
        ("NWHT_2025_03.csv", b"date,settle,settle\n2025-01-02,1,2\n", "the header 'settle' stands twice"),
        ("NWHT_2010_03.csv", b"date,settle\n2025-01-02,1.5\n", "does not say the delivery month"),
        ("2025_03.csv", b"date,settle\n2025-01-02,1.5\n", "does not say the market"),
        ("NWHT_2025_03.csv.gz", b"date,settle\n", "cannot be unpacked"),
        ("NWHT.zip", b"PK\x03\x04 and no more", "cannot be unpacked as zip"),
    ],
)
def test_what_nothing_can_be_made_of_is_said_with_the_reason(path: str, data: bytes, why: str) -> None:
    good = ("x/NKRN_2025_03.csv", b"day,settle\n2025-01-02,212.25\n")
    refused, made = propose_layouts([(path, data), good])
    assert (refused.files, refused.layout_toml, refused.sample) == ((path,), "", ())
    assert len(refused.unsure) == 1 and why in refused.unsure[0] and path in refused.unsure[0]
    assert made.is_made and made.files == ("x/NKRN_2025_03.csv",)


def test_a_name_with_marks_that_mean_something_to_an_expression_is_matched_as_it_stands() -> None:
    files = [("a+b (1)/NWHT[x]_2025_03.csv", b"date,settle\n2025-01-02,212.25\n")]
    assert len(read_rows(files, market_of("NWHT"))) == 1


def test_a_column_name_with_quotes_and_control_characters_survives_the_toml() -> None:
    files = [("NWHT_2025_03.csv", b'date,settle,"open ""interest\x7f"\n2025-01-02,1.5,1000\n')]
    assert propose_one(files)[1].columns.open_interest == 'open "interest\x7f'


_SEEDS = (
    b"date,open,high,low,settle,volume,oi\n2025-01-02,1,2,0.5,1.5,100,5\n2025-01-03,1,2,0.5,1.25,100,5\n",
    b'Contract;Day;Settle\n"H25";02.01.2025;1.212,25\nK25;13.01.2025;-\nTotal;;\n',
    "Stand\r\nDatum|Schluss|Umsatz\r\n02.01.25|117'165|1 000\r\n".encode("utf-16"),
)
_NAMES = ("NWHT_2025_03.csv", "NWHT/H25.txt", "x.csv.gz", "y.zip", "", "(?P<market>", "é\n.csv", "it's NWHT 202503")


@st.composite
def damaged_files(draw: st.DrawFn) -> Files:
    files = []
    for _ in range(draw(st.integers(1, 3))):
        data = bytearray(draw(st.one_of(st.sampled_from(_SEEDS), st.binary(max_size=200))))
        for _ in range(draw(st.integers(0, 12))):
            at = draw(st.integers(0, len(data)))
            mark = st.sampled_from([b",", b";", b'"', b"\n", b"2025-01-02", b"-"])
            piece = draw(st.one_of(st.binary(max_size=3), mark))
            data[at : at + draw(st.integers(0, 4))] = piece
        files.append((draw(st.sampled_from(_NAMES)), bytes(data)))
    return files


@settings(max_examples=300, deadline=None)
@given(damaged_files())
def test_a_proposal_loads_and_reads_or_says_why_there_is_none(files: Files) -> None:
    proposals = propose_layouts(files)
    if any(not path.endswith(".zip") for path, _ in files):
        assert proposals
    for proposal in proposals:
        if proposal.is_made:
            layout = parse_layout(proposal.layout_toml, "layouts/proposed.toml")
            assert all(claim_file(layout, path) is not None for path in proposal.files)
            assert proposal.sample
        else:
            assert proposal.unsure and proposal.unsure[0]
