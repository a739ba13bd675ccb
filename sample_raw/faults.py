"""Faults planted into true rows, and true events, each written down in the answer key.

Belongs here: how a fault is done to a row, and the key. Does not belong here: which faults (`planted.py`).
"""

import datetime
from bisect import bisect_right
from decimal import Decimal
from typing import Any

import planted
from answers import Book, plain
from curves import FIRST, LAST
from writers import FIELDS, UNITS, Row, field_text, path_of, price_text, row_text

Date = datetime.date
# What a true event may be noted as; it is never repaired.
EVENT_FINDINGS = {
    "market shock": "market_shock",
    "negative settle": "lone_move",
    "squeeze": "lone_move",
    "locked limit": "limit_locked",
}


def note_events(book: Book, events: list[dict[str, Any]]) -> None:
    """Write the true events into the key."""
    for event in events:
        book.begin()
        market = event["market"]
        for rows in book.rows[market]:
            if "contract" in event and rows[0].contract != event["contract"]:
                continue
            if event["kind"] == "squeeze":
                chosen = rows[-len(event["path"]) :]
            else:
                chosen = [row for row in rows if row.day == event["session"]]
                # The session after a negative settle brings the price back: as true, and as strange.
                chosen += rows[-1:] if event["kind"] == "negative settle" else []
            for row in (row for row in chosen if not row.is_touched):
                settle = book.price(market, row.prices[3])
                book.note(
                    event["kind"], EVENT_FINDINGS[event["kind"]], row, "settle", settle, settle, event["note"], "event"
                )
    for market, session in planted.TRADED_CLOSED_DAYS:
        book.begin()
        for rows in book.rows[market]:
            for row in rows:
                if row.day.isoformat() == session:
                    settle = book.price(market, row.prices[3])
                    kind, finding = "traded on a closed day", "calendar_disagrees"
                    book.note(kind, finding, row, "settle", settle, settle, "", "event")


def plant(book: Book) -> None:
    """Do every fault of the list, those that move lines last."""
    _plant_settles(book)
    _plant_rows(book)
    _plant_odd_texts(book)
    _plant_gaps(book)
    _plant_extra_rows(book)
    _plant_files(book)


def _settle(book: Book, kind: str, finding: str, row: Row, ticks: int, note: str = "") -> None:
    truth = row.prices[3]
    row.prices[3] = ticks
    book.note(kind, finding, row, "settle", book.price(row.market, ticks), book.price(row.market, truth), note)


def _shift(book: Book, row: Row, name: str, power: int) -> str:
    """Misplace the decimal point of one price; returns what is then reported."""
    place = FIELDS.index(name)
    ticks = row.prices[place]
    if ticks is None:
        raise ValueError(f"{row.contract}, {row.day}: no {name} to misplace")
    if power > 0:
        row.prices[place] = ticks * 10**power
    else:
        row.written[name] = price_text(row.market, ticks, row.day, -power)
    return book.price(row.market, ticks, power)


def _plant_settles(book: Book) -> None:
    for market, session, place, power in planted.DECIMAL_SETTLES:
        book.begin()
        row, _, _ = book.take(market, session, place)
        truth = book.price(market, row.prices[3])
        book.note("misplaced decimal", "decimal_shift", row, "settle", _shift(book, row, "settle", power), truth)
    for market, session, place, length, power in planted.DECIMAL_BARS:
        book.begin()
        _, rows, where = book.take(market, session, place)
        for row in rows[where : where + length]:
            for name in FIELDS[:4]:
                truth = book.price(market, row.prices[FIELDS.index(name)])
                shifted = _shift(book, row, name, power)
                book.note("misplaced decimal, whole bar", "decimal_shift", row, name, shifted, truth)
    for market, session, place, share in planted.SPIKES:
        book.begin()
        row, _, _ = book.take(market, session, place)
        _, high, low, settle = (price or 0 for price in row.prices)
        wrong = settle + int(settle * share / 100)
        if low <= wrong <= high:
            raise ValueError(f"{row.contract}, {row.day}: a spike of {share}% stays within the day's own range")
        _settle(book, "spike", "reverting_spike", row, wrong, "the settle alone; back the next session")
    for market, session, place, ticks in planted.SUBTLE:
        book.begin()
        row, _, _ = book.take(market, session, place)
        _, high, low, settle = (price or 0 for price in row.prices)
        if not low <= settle + ticks <= high:
            raise ValueError(f"{row.contract}, {row.day}: {ticks} ticks leave the day's range")
        note = "only a person can know; the desk declares its repair"
        _settle(book, "wrong by a few ticks", "declared_repair", row, settle + ticks, note)
    for market, session, place in planted.ZERO_SETTLES:
        book.begin()
        row, _, _ = book.take(market, session, place)
        _settle(book, "settle of nought", "not_positive", row, 0)


def _plant_rows(book: Book) -> None:
    for market, session, place, length, is_whole in planted.STALE_RUNS:
        book.begin()
        _, rows, where = book.take(market, session, place)
        frozen = rows[where - 1]
        kept = (list(frozen.prices), frozen.volume, frozen.positions)
        for row in rows[where : where + length]:
            truth = book.price(market, row.prices[3])
            if is_whole:
                row.prices, row.volume, row.positions = list(kept[0]), kept[1], kept[2]
            else:
                row.prices[3] = kept[0][3]
            note = "the whole row stands still" if is_whole else "the settle alone stands still"
            book.note("stale run", "stale_price", row, "settle", book.price(market, kept[0][3]), truth, note)
    for market, session, place in planted.SWAPPED_RANGES:
        book.begin()
        row, _, _ = book.take(market, session, place)
        high, low = row.prices[1], row.prices[2]
        if high == low:
            raise ValueError(f"{row.contract}, {row.day}: no range to turn round")
        row.prices[1], row.prices[2] = low, high
        book.note("high below low", "range_broken", row, "high", book.price(market, low), book.price(market, high))
        book.note("high below low", "range_broken", row, "low", book.price(market, high), book.price(market, low))
    for market, session in planted.ZERO_RANGES:
        book.begin()
        at = book.at(market, session)
        contracts = book.data[market].contracts
        live = [n for n, contract in enumerate(contracts) if contract.first <= at <= contract.last]
        idle = [n for n in live if contracts[n].volume[at - contracts[n].first] == 0]
        row = book.row(market, idle[-1], at)
        row.prices[:3] = [0, 0, 0]
        for name in FIELDS[:3]:
            book.note("noughts for missing", "not_positive", row, name, "0", "", "no trade: nought is no price")


def _plant_odd_texts(book: Book) -> None:
    for market, session, place, name, seen, instead in planted.UNREADABLE:
        book.begin()
        row, _, _ = book.take(market, session, place)
        written = field_text(row, name)
        if seen not in written:
            raise ValueError(f"{row.contract}, {row.day}: no {seen!r} in the {name} {written!r}")
        row.written[name] = written.replace(seen, instead, 1)
        truth = {"day": row.day.isoformat(), "volume": str(row.volume), "positions": str(row.positions)}.get(name)
        if truth is None:
            truth = book.price(market, row.prices[FIELDS.index(name)])
        column = {"day": "session", "positions": "open_interest"}.get(name, name)
        book.note("unreadable row", "unreadable_rows", row, column, row.written[name].strip('"'), truth)
    for market, session, place, sixteenths in planted.OFF_TICKS:
        book.begin()
        row, _, _ = book.take(market, session, place)
        settle = row.prices[3] or 0
        truth = book.price(market, settle)
        reported = book.ticks[market] * (Decimal(settle) + Decimal(sixteenths) / 16)
        row.written["settle"] = _finer_text(row, sixteenths)
        book.note("off the tick", "off_tick", row, "settle", plain(reported), truth)


def _finer_text(row: Row, sixteenths: int) -> str:
    """A settle between two ticks, as the row's market would write it."""
    units, decimals = UNITS[row.market]
    scale = 10 if row.market == "NVOL" and row.day < Date(2017, 3, 27) else 1
    value = (Decimal(row.prices[3] or 0) + Decimal(sixteenths) / 16) * units * scale / Decimal(10) ** decimals
    text = plain(value)
    return text.replace(".", ",") if row.market in ("NOIL", "NGAS") else text


def _plant_gaps(book: Book) -> None:
    for market, session, place, length in planted.MISSING_ROWS:
        book.begin()
        _, rows, where = book.take(market, session, place)
        kind = "missing row" if length == 1 else "missing block"
        _drop(book, rows, rows[where : where + length], kind, "contract_missing")
    for contract, length in planted.EARLY_ENDS:
        book.begin()
        rows = next(rows for rows in book.rows[contract[:4]] if rows[0].contract == contract)
        _drop(book, rows, rows[-length:], "early end", "roll_measured_stale")
    for market, session in planted.MISSING_SESSIONS:
        book.begin()
        book.at(market, session)
        for rows in book.rows[market]:
            gone = [row for row in rows if row.day.isoformat() == session]
            _drop(book, rows, gone, "missing session", "session_missing")


def _drop(book: Book, rows: list[Row], gone: list[Row], kind: str, finding: str) -> None:
    if not gone:
        return
    where, last = rows.index(gone[0]), rows.index(gone[-1])
    if not 0 < where <= last < len(rows) - 1 and kind not in ("missing session", "early end"):
        raise ValueError(f"{gone[0].contract}, {gone[0].day}: a gap at the end of a contract's life would not show")
    for row in rows[where : last + 1]:
        if row.is_touched:
            raise ValueError(f"{row.contract}, {row.day}: a row that is to go missing was touched already")
        book.note(kind, finding, row, "settle", "", book.price(row.market, row.prices[3]))
        book.key[-1].row, book.key[-1].path = None, path_of(row)
    for neighbour in rows[max(where - 1, 0) : last + 2]:
        neighbour.is_touched = True
    del rows[where : last + 1]


def _copy(row: Row) -> Row:
    return Row(row.market, row.year, row.month, row.day, list(row.prices), row.volume, row.positions)


def _plant_extra_rows(book: Book) -> None:
    for market, session, place in planted.DUPLICATES:
        book.begin()
        row, rows, where = book.take(market, session, place)
        again = _copy(row)
        rows.insert(where + 1, again)
        settle = book.price(market, row.prices[3])
        book.note("duplicated row", "duplicate_rows", again, "settle", settle, settle)
    for market, session, place, ticks, is_later in planted.CONFLICTS:
        book.begin()
        row, rows, where = book.take(market, session, place)
        wrong = _copy(row)
        truth = book.price(market, row.prices[3])
        wrong.prices[3] = (row.prices[3] or 0) + ticks
        rows.insert(where + is_later, wrong)
        note = "the wrong row comes later" if is_later else "the right row comes later"
        reported = book.price(market, wrong.prices[3])
        book.note("conflicting rows", "conflicting_rows", wrong, "settle", reported, truth, note)
        row.is_touched = True
    for market, session, place, ticks in planted.RESTATED:
        book.begin()
        row, rows, where = book.take(market, session, place)
        right = _copy(row)
        right.file_day = rows[where + 1].day
        rows.insert(where + 1, right)
        note = f"the file of {right.file_day} has it right"
        _settle(book, "restated row", "restated", row, (row.prices[3] or 0) + ticks, note)
    for market, day, place in planted.CLOSED_DAY_ROWS:
        book.begin()
        closed = Date.fromisoformat(day)
        at = bisect_right(book.data[market].days, closed) - 1
        before, rows, where = book.take(market, book.data[market].days[at], place)
        if before.day == closed:
            raise ValueError(f"{market}: {day} is a session")
        extra = _copy(before)
        extra.day = closed
        rows.insert(where + 1, extra)
        settle = book.price(market, extra.prices[3])
        book.note("row on a closed day", "not_a_session", extra, "settle", settle, "")
    for market, session, place in planted.WRONG_YEARS:
        book.begin()
        row, _, _ = book.take(market, session, place)
        dated = row.day.isoformat()
        settle = book.price(market, row.prices[3])
        written = row.day.replace(year=row.day.year + 1).isoformat()
        note = f"the settle {settle} is of {dated}; that session is missing"
        book.note("wrong year", "outside_listing", row, "session", written, dated, note)
        row.written["day"] = _wrong_year(row)


def _wrong_year(row: Row) -> str:
    later = _copy(row)
    later.day = row.day.replace(year=row.day.year + 1)
    separator = ";" if row.market == "NOIL" else ","
    return row_text(later).split(separator)[0]


def _plant_files(book: Book) -> None:
    for path in planted.TORN_FILES:
        book.begin()
        book.torn.append(path)
        book.note_file("torn file", "torn_file", path)
    for path in planted.STRAY_FILES:
        book.begin()
        book.note_file("stray file", "unclaimed_file", path)


def tear(book: Book, files: dict[str, list[str]]) -> dict[str, str]:
    """The text of every file; torn ones lose their last line's end and half of its last number."""
    by_last = {(row.path, row.line): row for market in book.rows.values() for rows in market for row in rows}
    texts = {path: "\n".join(lines) + "\n" for path, lines in files.items()}
    for entry in book.key:
        if entry.path in book.torn:
            row = by_last[(entry.path, len(files[entry.path]))]
            if row.is_touched:
                raise ValueError(f"{row.contract}, {row.day}: the last row of a torn file was touched already")
            row.text = row.text[:-2]
            texts[entry.path] = texts[entry.path][:-3]
            entry.row, entry.market, entry.contract = row, row.market, row.contract
            entry.session, entry.field = row.day.isoformat(), "open_interest"
            entry.reported, entry.truth = str(row.positions)[:-2], str(row.positions)
            entry.note = "the row cannot be told from a whole one; it is held out"
    strange = [row for market in book.rows.values() for rows in market for row in rows if not FIRST <= row.day <= LAST]
    if strange:
        raise ValueError(f"{strange[0].contract}, {strange[0].day}: a row outside the sample's ten years")
    return texts
