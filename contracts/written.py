"""Arrays and lists of a build -> the published tables of one market.

Belongs here: laying numbers into rows. Does not belong here: computing any of them.
"""

import datetime
import math
from typing import Any

import numpy as np
import pyarrow as pa

from contracts.arrivals import Arrived
from contracts.deliveries import delivery_of
from contracts.intake import FileRows, ParsedRows
from contracts.layouts import BAR_FIELDS, PRICE_FIELDS
from contracts.panel import Panel
from contracts.repairs import Clean
from contracts.rolls import NEVER, Held
from contracts.sessions import day_of, first_notice_day, last_trade_day
from contracts.splice import MISSING, STATUS_NAMES, Series, mix
from contracts.tables import BARS, FILES, REJECTS, ROLLS, SERIES, TERMS, make_table
from contracts.unpack import Reject


def _days(numbers: np.ndarray) -> pa.Array:
    return pa.array(np.asarray(numbers, dtype=np.int64).astype("datetime64[D]"))


def _whole(values: np.ndarray) -> pa.Array:
    return pa.array(np.asarray(values, dtype=np.float64), from_pandas=True).cast(pa.int64())


def _names(names: tuple[str, ...], places: np.ndarray) -> pa.Array:
    """Names by index; null where the index is negative."""
    indices = pa.array(np.asarray(places, dtype=np.int64), mask=np.asarray(places) < 0)
    return pa.array(names, type=pa.string()).take(indices)


def _same(text: str, count: int) -> pa.Array:
    return pa.repeat(pa.scalar(text, pa.string()), count)


def bars_table(panel: Panel, arrived: Arrived, files: list[FileRows], clean: Clean) -> pa.Table:
    """Every bar as reported, with the settle that is used and how it stands."""
    bars = arrived.bars
    count = len(bars.line)
    status = np.full(count, 3, dtype=np.int64)
    clean_settle = np.full(count, np.nan)
    inside = panel.bar >= 0
    at = panel.bar[inside]
    clean_settle[at] = clean.settle[inside]
    status[at] = np.where(clean.is_masked[inside], 2, np.where(clean.is_repaired[inside], 1, 0))
    columns: dict[str, object] = {
        "market": _same(panel.market.code, count),
        "contract": _names(bars.contracts, bars.contract),
        "session": _days(bars.session),
        "clean_settle": clean_settle,
        "status": _names(("reported", "repaired", "masked", "not a session"), status),
        "file": _names(tuple(rows.raw.file for rows in files), bars.source),
        "line": bars.line,
    }
    for place, name in enumerate(BAR_FIELDS):
        columns[name] = bars.values[:, place] if name in PRICE_FIELDS else _whole(bars.values[:, place])
    return make_table(BARS, columns)


def series_table(
    panel: Panel, clean: Clean, laid: list[tuple[str, Held, Series | None]], counts: dict[tuple[str, Any], int]
) -> pa.Table:
    """All series of a market under one another."""
    parts = [_one_series(panel, clean, name, held, series, counts) for name, held, series in laid if series is not None]
    if not parts:
        return make_table(SERIES, {})
    return pa.concat_tables(parts).combine_chunks()


def _one_series(
    panel: Panel, clean: Clean, name: str, held: Held, series: Series, counts: dict[tuple[str, Any], int]
) -> pa.Table:
    start, count = series.start, len(series.settle)
    contract, incoming = held.contract[start:], held.incoming[start:]
    rows = np.arange(start, panel.shape[0])
    has_bar = series.status < 2
    columns: dict[str, object] = {
        "market": _same(panel.market.code, count),
        "plan": _same(name, count),
        "nearby": np.full(count, held.nearby, dtype=np.int32),
        "session": _days(panel.sessions[start:]),
        "contract": _names(panel.contracts, contract),
        "incoming": _names(panel.contracts, incoming),
        "incoming_weight": held.weight[start:],
        "volume": _whole(clean.volume[rows, contract]),
        "open_interest": _whole(clean.open_interest[rows, contract]),
        "rolled": series.rolled,
        "status": _names(tuple(STATUS_NAMES.tolist()), series.status),
        "findings": _count_findings(panel, contract, incoming, start, counts),
    }
    for field in ("open", "high", "low"):
        columns[field] = np.where(has_bar, mix(held, clean.prices[PRICE_FIELDS.index(field)]), np.nan)
    is_known = series.status < MISSING
    for field in ("settle", "back_adjusted", "ratio_adjusted", "change", "simple_return", "growth"):
        columns[field] = np.where(is_known, getattr(series, field), np.nan)
    columns["shift"], columns["scale"] = series.shift, series.scale
    return make_table(SERIES, columns)


def _count_findings(
    panel: Panel, contract: np.ndarray, incoming: np.ndarray, start: int, counts: dict[tuple[str, Any], int]
) -> np.ndarray:
    total = np.zeros(len(contract), dtype=np.int32)
    places = {day_of(day): at for at, day in enumerate(panel.sessions[start:])}
    numbers = {name: at for at, name in enumerate(panel.contracts)}
    for (name, day), count in counts.items():
        at, number = places.get(day), numbers.get(name)
        if at is not None and number is not None and number in (contract[at], incoming[at]):
            total[at] += count
    return total


def rolls_table(panel: Panel, laid: list[tuple[str, Held, list[int]]]) -> pa.Table:
    """The ledger of every plan and nearby."""
    volume, interest = panel.field("volume"), panel.field("open_interest")
    lag = panel.market.open_interest_lag
    rows: list[dict[str, object]] = []
    for name, held, impacts in laid:
        for step, impact in zip(held.steps, impacts, strict=True):
            outgoing, incoming, decided = step.decision.outgoing, step.incoming, step.decision.decided
            known = decided - lag
            rows.append(
                {
                    "market": panel.market.code,
                    "plan": name,
                    "nearby": held.nearby,
                    "step": step.step,
                    "decided_on": day_of(panel.sessions[decided]),
                    "measured_on": None if step.measured == NEVER else day_of(panel.sessions[step.measured]),
                    "effective_on": day_of(panel.sessions[step.effective]),
                    "outgoing": panel.contracts[outgoing],
                    "incoming": panel.contracts[incoming],
                    "weight_before": step.weight_before,
                    "weight_after": step.weight_after,
                    "outgoing_settle": _real(step.outgoing_settle),
                    "incoming_settle": _real(step.incoming_settle),
                    "gap": _real(step.gap),
                    "ratio": _real(step.ratio),
                    "trigger": step.decision.trigger,
                    "outgoing_volume": _count(volume[decided, outgoing]),
                    "incoming_volume": _count(volume[decided, incoming]),
                    "outgoing_open_interest": _count(interest[known, outgoing]) if known >= 0 else None,
                    "incoming_open_interest": _count(interest[known, incoming]) if known >= 0 else None,
                    "last_trade": _contract_day(panel, outgoing, last_trade_day),
                    "first_notice": _contract_day(panel, outgoing, first_notice_day),
                    "impact_sessions": impact,
                }
            )
    return make_table(ROLLS, {column: [row[column] for row in rows] for column in ROLLS.columns})


def _contract_day(panel: Panel, contract: int, rule: Any) -> datetime.date | None:
    day: datetime.date | None = rule(panel.market, delivery_of(panel.contracts[contract]))
    return day


def _real(value: float) -> float | None:
    return None if math.isnan(value) else float(value)


def _count(value: float) -> int | None:
    return None if math.isnan(value) else int(value)


def rejects_table(market: str, files: list[FileRows], is_old: list[bool]) -> pa.Table:
    """Rejected rows of the newest version of every file."""
    seen: dict[tuple[str, int], Reject] = {}
    for rows, old in zip(files, is_old, strict=True):
        for reject in () if old else rows.rejects:
            seen.setdefault((rows.raw.file, reject.line), reject)
    rejects = list(seen.values())
    return make_table(
        REJECTS,
        {
            "market": [market] * len(seen),
            "contract": [reject.contract for reject in rejects],
            "file": [file for file, _ in seen],
            "line": [reject.line for reject in rejects],
            "text": [reject.text for reject in rejects],
            "reason": [reject.reason for reject in rejects],
            "offset": [reject.offset for reject in rejects],
        },
    )


def files_table(market: str, files: list[FileRows], parsed: ParsedRows) -> pa.Table:
    """Every file read for the market; a file of several markets is told under one of them, without a market."""
    rows: list[dict[str, object]] = []
    for source, file in enumerate(files):
        raw = file.raw
        if not raw.is_told_here:
            continue
        sessions = parsed.session[parsed.source == source]
        rows.append(
            {
                "path": raw.path,
                "file": raw.file,
                "bytes": raw.size,
                "layout": raw.layout_name,
                "market": market if raw.claim.market is not None else None,
                "contract": raw.claim.contract,
                "rows": file.row_count,
                "rejects": len(file.rejects),
                "first_session": day_of(sessions.min()) if len(sessions) else None,
                "last_session": day_of(sessions.max()) if len(sessions) else None,
                "taken_in": raw.taken_in,
            }
        )
    return make_table(FILES, {column: [row[column] for row in rows] for column in FILES.columns})


def terms_table(panel: Panel) -> pa.Table:
    """The declared terms, a row a contract."""
    market, count = panel.market, len(panel.contracts)
    columns: dict[str, object] = {"market": [market.code] * count, "contract": list(panel.contracts)}
    for name in TERMS.columns[2:-2]:
        value = getattr(market, name)
        columns[name] = [str(value) if isinstance(value, str) else value] * count
    columns["last_trade"] = [_contract_day(panel, contract, last_trade_day) for contract in range(count)]
    columns["first_notice"] = [_contract_day(panel, contract, first_notice_day) for contract in range(count)]
    return make_table(TERMS, columns)
