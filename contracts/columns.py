"""Every published column, once: Arrow type, unit, meaning.

Belongs here: one definition a word. Schemas, the catalog's `dictionary` view and the docs are made from it.
Does not belong here: which table has which column (`tables.py`).
"""

from dataclasses import dataclass

import pyarrow as pa

PRICE = "market currency per unit"
RATIO = "1"
COUNT = "contracts"
MONEY = "currency per contract"


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
    Column("open", _NUMBER, PRICE, "opening price: in bars as reported, in series the held contract's own clean one; right for differences and returns within one holding only"),
    Column("high", _NUMBER, PRICE, "highest price: in bars as reported, in series the held contract's own clean one; right for differences and returns within one holding only"),
    Column("low", _NUMBER, PRICE, "lowest price: in bars as reported, in series the held contract's own clean one; right for differences and returns within one holding only"),
    Column("settle", _NUMBER, PRICE, "settlement price: in bars as reported, in series the held contract's own clean one; right for levels, and for differences and returns within one holding only, never over a roll"),
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
    Column("shift", _NUMBER, PRICE, "sum of the gaps of all later rolls: makes differences true when added to a price, and percentages wrong"),
    Column("scale", _NUMBER, RATIO, "product of the ratios of all later rolls: makes returns true when a price is multiplied by it, and differences wrong; null before a roll whose ratio does not exist"),
    Column("back_adjusted", _NUMBER, PRICE, "settle + shift: right for differences over any span; wrong for returns and percentages, which mean nothing where it is near, at or below zero"),
    Column("ratio_adjusted", _NUMBER, PRICE, "settle x scale: right for returns over any span, wrong for differences in points; null where scale is"),
    Column("change", _NUMBER, PRICE, "change of the held position since the last session that has a price: right for differences, its sum over a span is back_adjusted's difference; not for returns"),
    Column("simple_return", _NUMBER, RATIO, "change of the held position over its value on the last session that has a price: right for returns, compounded they are ratio_adjusted's; not for differences; null where either value is not above zero"),
    Column("growth", _NUMBER, "index, 100 at its start", "compounded simple_return: right for returns over any span, not for differences in points; null up to a value at or below zero"),
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
    Column("far_nearby", _INT, "", "the later of the two nearbys of a calendar spread"),
    Column("near_contract", _TEXT, "", "in constant_maturity the contract whose last trading session is the last one on or before the maturity, of those with a clean settle on the session; elsewhere what the nearer nearby holds, the outgoing one during a roll of several steps"),
    Column("far_contract", _TEXT, "", "in constant_maturity the contract whose last trading session is the first one on or after the maturity, of those with a clean settle on the session; elsewhere what the farther nearby holds, the outgoing one during a roll of several steps"),
    Column("near_settle", _NUMBER, PRICE, "in constant_maturity the clean settle of near_contract; elsewhere the nearer nearby's settle in series, a mix during a roll of several steps"),
    Column("far_settle", _NUMBER, PRICE, "in constant_maturity the clean settle of far_contract; elsewhere the farther nearby's settle in series, a mix during a roll of several steps"),
    Column("days_between", _NUMBER, "calendar days", "last trading session of what nearby 2 holds less that of what nearby 1 holds, each weighted by the shares held"),
    Column("roll_yield", _NUMBER, RATIO, "near_settle / far_settle - 1, above zero where the nearer contract is dearer, not annualised; null where a settle or days_between is not above zero"),
    Column("annualised_slope", _NUMBER, "1 per year of 365 calendar days", "ln(far_settle / near_settle) x 365 / days_between, above zero where the farther contract is dearer; null where a settle or days_between is not above zero"),
    Column("worse_status", _TEXT, "", "the worse of the two settles' status: missing, carried, repaired, reported; missing too where nearby 2 is not held"),
    Column("days", _INT, "calendar days", "from the session to the maturity: 30, 60 or 90"),
    Column("far_weight", _NUMBER, RATIO, "share of far_settle in price: calendar days from near_contract's last trading session to the maturity over those to far_contract's; 0 where they are the same contract"),
    Column("price", _NUMBER, PRICE, "(1 - far_weight) x near_settle + far_weight x far_settle; right for levels, its differences and returns are no position's; null where there is no contract on both sides"),
    Column("spread", _NUMBER, PRICE, "near_settle - far_settle, of the same session; null where both nearbys hold the same; right for levels, and for differences within one holding only"),
    Column("change_value", _NUMBER, MONEY, "change x point_value: what one contract, held long, gained"),
    Column("back_adjusted_value", _NUMBER, MONEY, "back_adjusted x point_value: only its differences mean anything, the gain of one contract held long in between"),
    Column("spread_value", _NUMBER, MONEY, "spread x point_value: worth of the spread of one contract against one"),
)  # fmt: skip

COLUMNS: dict[str, Column] = {column.name: column for column in _ALL}
