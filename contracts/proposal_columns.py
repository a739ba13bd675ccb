"""Which column of an unknown file holds what, told from header names, and from values where names say nothing.

Belongs here: spellings of header names, the relations that prices and counts keep. Does not belong here: how
dates and numbers are written (`proposal_marks.py`), which line is the header (`proposal_text.py`).
"""

import re
import statistics
import unicodedata
from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import lru_cache

from contracts.errors import NotationError
from contracts.layouts import PRICE_FIELDS
from contracts.markets import PriceNotation
from contracts.notation import parse_price
from contracts.proposal_marks import ALL_MARKS, best_formats, is_missing, is_parted, reads_number, shape_of

# Header names in the languages trade files come in, the surest first: common practice, no source.
SPELLINGS: dict[str, tuple[str, ...]] = {
    "session": (
        "session", "session date", "trading day", "trading date", "trade date", "tradedate", "trade day",
        "business date", "business day", "market date", "date", "day", "handelstag", "handelsdatum", "datum", "tag",
        "date de seance", "seance", "jour", "fecha", "fecha de sesion", "sesion", "data", "data pregao", "giorno",
        "dato", "dag", "datetime", "date time", "timestamp", "as of", "asof", "as of date",
    ),
    "open": (
        "open", "opening", "opening price", "open price", "first", "o", "op", "eroffnung", "eroeffnung", "anfang",
        "ouverture", "premier", "apertura", "abertura", "apert",
    ),
    "high": (
        "high", "highest", "hi", "h", "high price", "day high", "hoch", "hochst", "tageshoch", "haut", "plus haut",
        "maximum", "max", "maximo", "alto", "massimo",
    ),
    "low": (
        "low", "lowest", "lo", "l", "low price", "day low", "tief", "tiefst", "tagestief", "bas", "plus bas",
        "minimum", "min", "minimo", "bajo", "baixo",
    ),
    "settle": (
        "settle", "settlement", "sett", "settl", "stl", "settlement price", "settle price", "daily settlement",
        "final settlement", "official settlement", "abrechnung", "abrechnungspreis", "abrechnungskurs", "compensation",
        "cours de compensation", "prix de compensation", "liquidacion", "precio de liquidacion", "ajuste",
        "preco de ajuste", "regolamento", "prezzo di regolamento",
    ),
    "close": (
        "close", "closing", "closing price", "close price", "official close", "schluss", "schlusskurs", "cloture",
        "cierre", "fechamento", "chiusura", "c", "last", "last price", "dernier",
    ),
    "volume": (
        "volume", "vol", "v", "total volume", "volume traded", "traded volume", "traded", "lots", "lots traded",
        "contracts", "contracts traded", "quantity", "qty", "turnover", "umsatz", "volumen", "gehandelt", "negocie",
        "volume negocie", "volumen negociado", "negociados",
    ),
    "open_interest": (
        "open interest", "openinterest", "oi", "o i", "open int", "openint", "opint", "op int", "interest",
        "open positions", "open position", "open lots", "open contracts", "offene positionen", "offene kontrakte",
        "offenes interesse", "position ouverte", "positions ouvertes", "interet ouvert", "interes abierto",
        "posiciones abiertas", "contratos em aberto", "posizioni aperte",
    ),
    "market": (
        "market", "market code", "product", "product code", "commodity", "commodity code", "root", "symbol root",
        "markt", "produkt", "marche", "produit", "mercado", "producto", "symbol", "instrument", "code",
    ),
    "contract": (
        "contract", "contract code", "contract month", "contract date", "delivery", "delivery date", "delivery month",
        "expiry", "expiry month", "expiration", "maturity", "month year", "kontrakt", "kontraktmonat", "liefermonat",
        "falligkeit", "verfall", "contrat", "echeance", "contrato", "vencimiento", "vencimento", "scadenza",
        "symbol", "instrument", "code", "month", "mes", "mois", "monat",
    ),
    "year": ("year", "delivery year", "contract year", "expiry year", "yr", "jahr", "lieferjahr", "annee", "ano"),
    "month": (
        "month", "delivery month", "contract month", "expiry month", "month code", "mth", "monat", "liefermonat",
        "mois", "mes",
    ),
}  # fmt: skip
_RANKS: dict[str, dict[str, int]] = {}
for _name, _phrases in SPELLINGS.items():
    for _rank, _phrase in enumerate(_phrases):
        _RANKS.setdefault(_phrase, {}).setdefault(_name, _rank)
# Words that tell how a value is counted, not what it is.
_UNITS = frozenset(
    ("price", "prices", "preis", "kurs", "cours", "prix", "precio", "cents", "cent", "ct", "pence", "hundredths",
     "points", "eur", "usd", "gbp", "chf", "in", "per", "by", "the", "of", "kg", "kilogram", "tonne", "ton", "bushel",
     "bbl", "barrel", "lb", "pound", "number", "no", "nr", "total", "daily")
)  # fmt: skip
_CONTRACT_LIKE = frozenset(("market", "contract", "year", "month"))
_ROWS_LOOKED_AT = 4000
_COLUMNS_COMPARED = 30
# Prices of one contract on one session lie this close together: a wide guess, from memory.
_CLOSE = 0.3


@dataclass
class Columns:
    """Which header cell holds which field, by position, with what speaks for it and what remains open."""

    places: dict[str, int]
    evidence: dict[str, str] = field(default_factory=dict)
    unsure: list[str] = field(default_factory=list)


def normalise(name: str) -> str:
    """A header name as plain words: without case, accents, marks; parted where capitals part it."""
    parted = re.sub(r"(?<=[a-z])(?=[A-Z])", " ", name)
    plain = "".join(c for c in unicodedata.normalize("NFKD", parted) if not unicodedata.combining(c)).casefold()
    return " ".join(re.findall(r"[^\W_]+", plain))


@lru_cache(maxsize=50_000)
def _meanings(name: str) -> dict[str, int]:
    """The fields that a header name may mean, each with how surely: 0 the surest."""
    phrase = normalise(name)
    bare = " ".join(word for word in phrase.split() if word not in _UNITS)
    found = dict(_RANKS.get(phrase, {}))
    for wanted, rank in _RANKS.get(bare, {}).items():
        found[wanted] = min(rank, found.get(wanted, rank))
    return found


def columns_by_name(header: Sequence[str]) -> Columns:
    """The columns that their names give away; a name that stands twice is not used."""
    names = [name.strip() for name in header]
    # A letter alone means a price only beside its sisters.
    has_letters = {"o", "h", "l"} <= {name.casefold() for name in names}
    single = [
        at for at, name in enumerate(names) if names.count(name) == 1 and (has_letters or len(normalise(name)) != 1)
    ]
    columns = Columns({})
    for wanted in SPELLINGS:
        ranked = sorted((_meanings(names[at])[wanted], at) for at in single if wanted in _meanings(names[at]))
        if not ranked:
            twice = sorted({name for name in names if names.count(name) > 1 and wanted in _meanings(name)})
            if twice:
                columns.unsure.append(f"{wanted}: the header {twice[0]!r} stands twice; it cannot be named")
            continue
        columns.places[wanted] = ranked[0][1]
        columns.evidence[wanted] = f"the header {names[ranked[0][1]]!r} says so"
        if len(ranked) > 1 and wanted not in _CONTRACT_LIKE:
            others = ", ".join(repr(names[at]) for _, at in ranked[1:])
            columns.unsure.append(f"{wanted}: {others} could be it too; {names[ranked[0][1]]!r} is taken")
    close = columns.places.pop("close", None)
    columns.evidence.pop("close", None)
    if close is not None and "settle" not in columns.places:
        columns.places["settle"] = close
        columns.evidence["settle"] = f"no settlement column; {names[close]!r} stands in for it"
        columns.unsure.append(f"settle: {names[close]!r} is taken for it; a closing price need not be the settlement")
    return columns


def column_count(header: Sequence[str]) -> int:
    """How many different columns of a line bear a known name: what makes it a header."""
    if sum(bool(_meanings(name.strip())) for name in header) < 2:
        return 0
    return len(set(columns_by_name(header).places.values()))


def fill_by_content(columns: Columns, header: Sequence[str], rows: Sequence[Sequence[str]]) -> None:
    """Find session, prices and counts among the columns that no name gives away, by what their values do."""
    names = [name.strip() for name in header]
    looked = rows[:_ROWS_LOOKED_AT]
    free = [at for at in range(len(names)) if at not in columns.places.values() and names.count(names[at]) == 1]
    texts = {at: [row[at].strip() for row in looked] for at in range(len(names))}
    _find_session(columns, names, texts, free)
    free = [at for at in free if at != columns.places.get("session")]
    numbers = {at: _numbers(texts[at]) for at in free}
    free = [at for at in free if sum(v is not None for v in numbers[at]) * 2 > len(looked) > 0]
    if len(free) > _COLUMNS_COMPARED:
        columns.unsure.append(f"columns: of {len(free)} columns of numbers the first {_COLUMNS_COMPARED} were compared")
        free = free[:_COLUMNS_COMPARED]
    _find_prices(columns, names, texts, numbers, free)
    _find_counts(columns, names, numbers, [at for at in free if at not in columns.places.values()])


def _find_session(columns: Columns, names: list[str], texts: dict[int, list[str]], free: list[int]) -> None:
    given = columns.places.get("session")
    if given is not None and best_formats(texts[given]):
        return
    order = sorted(set(free) | set(columns.places.values()))
    for at in order:
        filled = [text for text in texts[at] if text]
        if names.count(names[at]) == 1 and len(filled) * 2 > len(texts[at]) and best_formats(filled):
            for wanted in [name for name, place in columns.places.items() if place == at]:
                del columns.places[wanted]
            columns.places["session"] = at
            columns.evidence["session"] = f"the values of {names[at]!r} are dates"
            return
    columns.places.pop("session", None)


def _numbers(texts: Sequence[str]) -> list[float | None]:
    """Values under the marks that read most of the texts; only good enough to compare columns with each other."""
    given = [text for text in texts if not is_missing(text)]
    if sum(is_parted(text) for text in given) * 2 > len(given):
        return [_parts(text) for text in texts]
    best = max(ALL_MARKS, key=lambda m: sum(reads_number(shape_of(t), *m, False) for t in given[:500]))
    values: list[float | None] = []
    for text in texts:
        try:
            values.append(parse_price(text, PriceNotation.DECIMAL, *best))
        except NotationError:
            values.append(None)
    return values


def _parts(text: str) -> float | None:
    match = re.fullmatch(r"(-?\d+)['\-](\d+)\+?", text)
    return float(f"{match[1]}.{match[2]}") if match else None


def _find_prices(
    columns: Columns,
    names: list[str],
    texts: dict[int, list[str]],
    numbers: dict[int, list[float | None]],
    free: list[int],
) -> None:
    missing = [name for name in PRICE_FIELDS if name not in columns.places]
    if not missing or not free:
        return
    known = [columns.places[name] for name in PRICE_FIELDS if name in columns.places]
    values = {**numbers, **{at: _numbers(texts[at]) for at in known}}
    priced = _close_together(values, sorted([*known, *free]), known)
    if len(priced) < 2 and not known:
        fractional = [at for at in free if any(v is not None and v != int(v) for v in values[at])]
        priced = fractional[:1] or (free[:1] if len(free) == 1 else [])
    priced = [at for at in priced if at in free]
    rows = _complete(values, [*known, *priced])
    if "high" in missing and len(priced) + len(known) >= 3:
        _take_extreme(columns, names, rows, priced, "high")
    if "low" in missing and len(priced) + len(known) >= 3:
        _take_extreme(columns, names, rows, priced, "low")
    left = [at for at in priced if at not in columns.places.values()]
    if "settle" in missing and left:
        # Tables print the opening price before, and the settlement after the range of the day.
        why = "the last price column within the range of each row" if len(priced) > 1 else "the only column of prices"
        _take(columns, names, "settle", left[-1], why)
        if len(left) > 1 and "open" in missing:
            _take(columns, names, "open", left[0], "the first price column within the range of each row")
        if len(left) > 2:
            columns.unsure.append(f"settle: {len(left)} price columns could be it; the last of them is taken")


def _close_together(values: dict[int, list[float | None]], order: list[int], known: list[int]) -> list[int]:
    """The largest set of columns whose values are of one size, row by row."""
    best: list[int] = []
    for anchor in known[:1] or order:
        group = [anchor]
        for at in order:
            pairs = [(a, b) for a, b in zip(values[anchor], values[at], strict=True) if a and b]
            if at == anchor or not pairs:
                continue
            if sum(abs(a - b) <= _CLOSE * abs(a) for a, b in pairs) >= 0.9 * len(pairs):
                group.append(at)
        best = max(best, sorted(group), key=len)
    return best


def _complete(values: dict[int, list[float | None]], columns: list[int]) -> list[dict[int, float]]:
    made = []
    for index in range(len(values[columns[0]]) if columns else 0):
        row = {at: values[at][index] for at in columns}
        if all(row.values()):
            made.append({at: value for at, value in row.items() if value is not None})
    return made


def _take_extreme(
    columns: Columns, names: list[str], rows: list[dict[int, float]], free: list[int], wanted: str
) -> None:
    pick = max if wanted == "high" else min
    left = [at for at in free if at not in columns.places.values()]
    fitting = {at: sum(row[at] == pick(row.values()) for row in rows) for at in left}
    if not fitting or not rows:
        return
    best = max(fitting, key=lambda at: fitting[at])
    if fitting[best] >= 0.95 * len(rows):
        kind = "largest" if wanted == "high" else "smallest"
        _take(columns, names, wanted, best, f"the {kind} price of its row in {fitting[best]:,} of {len(rows):,} rows")


def _take(columns: Columns, names: list[str], wanted: str, at: int, why: str) -> None:
    columns.places[wanted] = at
    columns.evidence[wanted] = why
    columns.unsure.append(f"{wanted}: the header {names[at]!r} does not say so; told from its values ({why})")


def _find_counts(columns: Columns, names: list[str], numbers: dict[int, list[float | None]], free: list[int]) -> None:
    whole = []
    for at in free:
        given = [value for value in numbers[at] if value is not None]
        if all(value >= 0 and value == int(value) for value in given) and statistics.median(given) >= 20:
            whole.append(at)
    wanted = [name for name in ("volume", "open_interest") if name not in columns.places]
    for name, at in zip(wanted, whole, strict=False):
        _take(columns, names, name, at, "whole numbers; volume commonly stands before open interest")
