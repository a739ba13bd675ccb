"""Every published column, once: Arrow type, unit, meaning.

Belongs here: one definition a word. Schemas, the catalog's `dictionary` view and the docs are made from it.
Does not belong here: which table has which column (`tables.py`).
"""

from dataclasses import dataclass

import pyarrow as pa

PRICE = "market currency per unit"
RATIO = "1"
COUNT = "contracts"


@dataclass(frozen=True)
class Column:
    """A column's name, Arrow type, unit and meaning."""

    name: str
    type: pa.DataType
    unit: str
    meaning: str


_TEXT, _DAY, _NUMBER, _INT, _BIG, _YES = (
    pa.string(), pa.date32(), pa.float64(), pa.int32(), pa.int64(), pa.bool_(),
)  # fmt: skip

_ALL = (
    Column("market", _TEXT, "", "code of the market"),
    Column("contract", _TEXT, "", "contract, market code with ISO 8601 delivery year and month"),
    Column("session", _DAY, "day", "trading date"),
    Column("open", _NUMBER, PRICE, "opening price: in bars as reported, in series the held contract's own clean one"),
    Column("high", _NUMBER, PRICE, "highest price: in bars as reported, in series the held contract's own clean one"),
    Column("low", _NUMBER, PRICE, "lowest price: in bars as reported, in series the held contract's own clean one"),
    Column("settle", _NUMBER, PRICE, "settlement price: in bars as reported, in series the held contract's own clean one"),
    Column("volume", _BIG, COUNT, "contracts traded on the session, of the row's contract"),
    Column("open_interest", _BIG, COUNT, "open interest printed in the session's row, of the row's contract"),
    Column("clean_settle", _NUMBER, PRICE, "settlement price after repairs, on the market's present scale; null where masked"),
    Column("status", _TEXT, "", "how the price stands: reported, repaired, masked, not a session; in series reported, repaired, carried, missing"),
    Column("file", _TEXT, "", "SHA-256 of the raw bytes"),
    Column("line", _INT, "line", "physical line number in the raw file, the first line is 1"),
    Column("plan", _TEXT, "", "name of the roll plan"),
    Column("nearby", _INT, "", "1 the contract the plan holds, 2 the one after it, ..."),
    Column("incoming", _TEXT, "", "contract that is rolled into; in series only while a roll of several steps is under way"),
    Column("incoming_weight", _NUMBER, RATIO, "share held in the incoming contract through the session"),
    Column("shift", _NUMBER, PRICE, "sum of the gaps of all later rolls"),
    Column("scale", _NUMBER, RATIO, "product of the ratios of all later rolls; null before a roll whose ratio does not exist"),
    Column("back_adjusted", _NUMBER, PRICE, "settle + shift: right for differences, wrong for percentages"),
    Column("ratio_adjusted", _NUMBER, PRICE, "settle x scale: right for returns, wrong for differences in points"),
    Column("change", _NUMBER, PRICE, "change of the held position since the last session that has a price"),
    Column("simple_return", _NUMBER, RATIO, "change of the held position over its value on the last session that has a price; null where either is not above zero"),
    Column("growth", _NUMBER, "index, 100 at its start", "compounded simple_return"),
    Column("rolled", _YES, "", "a roll, or a step of one, takes effect on this session"),
    Column("findings", _INT, "findings", "number of findings on the held contracts on this session"),
    Column("step", _INT, "", "step of the roll, from 1"),
    Column("decided_on", _DAY, "day", "session at whose close the roll was decided"),
    Column("measured_on", _DAY, "day", "session whose settles measure the gap"),
    Column("effective_on", _DAY, "day", "first session through which the new weights are held"),
    Column("outgoing", _TEXT, "", "contract that is left"),
    Column("weight_before", _NUMBER, RATIO, "incoming contract's share before the step"),
    Column("weight_after", _NUMBER, RATIO, "incoming contract's share after the step"),
    Column("outgoing_settle", _NUMBER, PRICE, "outgoing contract's clean settle on measured_on"),
    Column("incoming_settle", _NUMBER, PRICE, "incoming contract's clean settle on measured_on"),
    Column("gap", _NUMBER, PRICE, "(weight_after - weight_before) x (incoming_settle - outgoing_settle)"),
    Column("ratio", _NUMBER, RATIO, "value of the new mix over the old one on measured_on; null where a leg is at or below zero"),
    Column("trigger", _TEXT, "", "what decided the roll: open interest, volume, both, either, backstop, calendar, forced"),
    Column("outgoing_volume", _BIG, COUNT, "outgoing contract's volume on decided_on"),
    Column("incoming_volume", _BIG, COUNT, "incoming contract's volume on decided_on"),
    Column("outgoing_open_interest", _BIG, COUNT, "outgoing contract's open interest as known at the close of decided_on"),
    Column("incoming_open_interest", _BIG, COUNT, "incoming contract's open interest as known at the close of decided_on"),
    Column("last_trade", _DAY, "day", "last trading session by the declared rule; in rolls the outgoing contract's"),
    Column("first_notice", _DAY, "day", "first notice day by the declared rule; in rolls the outgoing contract's"),
    Column("impact_sessions", _INT, "sessions", "sessions whose trend-sign score would differ had the reported price stood (with those of its run), had a kept one been as expected, or the gap been left in"),
    Column("finding", _TEXT, "", "stable identifier of the finding"),
    Column("kind", _TEXT, "", "what was found"),
    Column("severity", _TEXT, "", "note, review or block"),
    Column("field", _TEXT, "", "column of the bar that the finding is about"),
    Column("reported", _NUMBER, "of the field", "value as it arrived"),
    Column("expected", _NUMBER, "of the field", "value the evidence speaks for"),
    Column("score", _NUMBER, RATIO, "strength of the evidence, in units of the check"),
    Column("threshold", _NUMBER, RATIO, "score from which the check reports"),
    Column("action", _TEXT, "", "kept, repaired, masked or rejected"),
    Column("corrected", _NUMBER, "of the field", "value used instead"),
    Column("waived_until", _DAY, "day", "last day of the waiver that covers the finding"),
    Column("message", _TEXT, "", "the finding in a sentence"),
    Column("text", _TEXT, "", "the raw line"),
    Column("offset", _BIG, "byte", "byte of the unpacked text at which the row begins, the first byte is 0"),
    Column("reason", _TEXT, "", "why the row was rejected, or the market held back"),
    Column("path", _TEXT, "", "path of the raw file below the raw folder"),
    Column("bytes", _BIG, "bytes", "size of the raw file as it arrived"),
    Column("layout", _TEXT, "", "layout that reads the file; null where none claims it"),
    Column("rows", _BIG, "rows", "data rows in the file"),
    Column("rejects", _BIG, "rows", "rows that could not be read"),
    Column("first_session", _DAY, "day", "first session"),
    Column("last_session", _DAY, "day", "last session"),
    Column("taken_in", _INT, "", "number of the intake with which the file arrived"),
    Column("sessions", _BIG, "sessions", "sessions in the published series"),
    Column("expected_sessions", _BIG, "sessions", "sessions of the market from its first bar to its last"),
    Column("repaired", _BIG, "sessions", "sessions whose settle is a repaired one"),
    Column("carried", _BIG, "sessions", "sessions that carry an earlier settle"),
    Column("missing", _BIG, "sessions", "sessions without a price"),
    Column("last_good_snapshot", _TEXT, "", "snapshot from which the market's tables are served"),
    Column("state", _TEXT, "", "published or held back"),
    Column("name", _TEXT, "", "the market in words"),
    Column("exchange", _TEXT, "", "exchange, ISO 10383 form"),
    Column("currency", _TEXT, "", "currency, ISO 4217"),
    Column("unit", _TEXT, "", "size of one contract"),
    Column("point_value", _NUMBER, "currency per 1.0 of price per contract", "worth of one point"),
    Column("tick_size", _NUMBER, PRICE, "smallest price step"),
    Column("price_notation", _TEXT, "", "how prices are written: decimal, 32nds, 64ths, 8ths"),
    Column("may_be_negative", _YES, "", "prices at or below zero are possible"),
    Column("daily_limit", _NUMBER, PRICE, "largest change of a session; null where there is none"),
    Column("calendar", _TEXT, "", "calendar the sessions come from"),
    Column("open_interest_lag", _INT, "sessions", "sessions until a session's open interest is known"),
    Column("currency_note", _TEXT, "", "remark on the currency"),
    Column("run", _INT, "", "number of the run"),
    Column("command", _TEXT, "", "command that made the run"),
    Column("started_at", pa.timestamp("us", tz="UTC"), "UTC", "clock time at the start"),
    Column("finished_at", pa.timestamp("us", tz="UTC"), "UTC", "clock time at the end"),
    Column("snapshot", _TEXT, "", "snapshot the run published; null where it published none"),
    Column("outcome", _TEXT, "", "published, nothing new, failed"),
    Column("markets", _INT, "markets", "markets declared"),
    Column("published", _INT, "markets", "markets published"),
    Column("held_back", _INT, "markets", "markets held back"),
)  # fmt: skip

COLUMNS: dict[str, Column] = {column.name: column for column in _ALL}
