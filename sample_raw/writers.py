"""Rows of the sample exchange as text, in the many ways in which they are delivered.

Belongs here: notation, columns, file names, packing. Does not belong here: whether a row is right.
"""

import datetime
import gzip
import io
import zipfile
from collections.abc import Callable, Iterable
from dataclasses import dataclass, field
from pathlib import Path

import pyarrow as pa

MONTH_LETTERS = "FGHJKMNQUVXZ"
RESCALED = datetime.date(2017, 3, 27)
FIELDS = ("open", "high", "low", "settle", "volume", "positions")
# Hundredths, thousandths ... of the written price in one tick, and how many decimals are written.
UNITS = {
    "NWHT": (25, 2), "NOIL": (1, 2), "NGAS": (1, 3), "NCOP": (5, 2), "NEQX": (25, 2), "NKRN": (1, 4),
    "NCOC": (1, 0), "NVOL": (5, 2),
}  # fmt: skip


@dataclass(eq=False)
class Row:
    """One line to be: prices in ticks or None, lots; `written` holds fields whose text is given outright."""

    market: str
    year: int
    month: int
    day: datetime.date
    prices: list[int | None]
    volume: int
    positions: int
    written: dict[str, str] = field(default_factory=dict)
    file_day: datetime.date | None = None
    is_touched: bool = False
    path: str = ""
    line: int = 0
    text: str = ""

    @property
    def contract(self) -> str:
        """The identifier, e.g. NWHT-2025-03."""
        return f"{self.market}-{self.year}-{self.month:02d}"


def decimal_text(units: int, decimals: int) -> str:
    """An integer count of the last decimal place as text."""
    sign, size = ("-" if units < 0 else ""), abs(units)
    if decimals == 0:
        return f"{sign}{size}"
    whole, part = divmod(size, 10**decimals)
    return f"{sign}{whole}.{part:0{decimals}d}"


def price_text(market: str, ticks: int, day: datetime.date, fewer: int = 0) -> str:
    """A price as the exchange wrote it on that day; `fewer` moves its decimal point so many places to the left."""
    if market == "NBND":
        whole, halves = divmod(ticks, 64)
        return f"{whole}'{halves // 2:02d}{'05'[halves % 2]}"
    units, decimals = UNITS[market]
    if market == "NVOL" and day < RESCALED:
        units *= 10
    text = decimal_text(ticks * units, decimals + fewer)
    return text.replace(".", ",") if market in ("NOIL", "NGAS") else text


def day_text(market: str, day: datetime.date) -> str:
    """A date as the market's files have it."""
    if market in ("NOIL", "NGAS"):
        return f"{day.day:02d}.{day.month:02d}.{day.year}"
    if market == "NCOC":
        return f"{day.day:02d}/{day.month:02d}/{day.year}"
    if market == "NCOP":
        return f"{day.year}{day.month:02d}{day.day:02d}"
    return day.isoformat()


def lots_text(market: str, lots: int) -> str:
    """A number of contracts, with the market's thousands mark."""
    if market == "NBND":
        return f"{lots:,}".replace(",", " ")
    if market == "NCOP" and lots >= 1000:
        return f'"{lots:,}"'
    return str(lots)


# What stands for a price that is not there. NVOL writes noughts.
MISSING = {"NOIL": "-", "NGAS": "-", "NCOP": "NA", "NBND": "NA", "NCOC": "-", "NVOL": "0.00"}
DELIMITERS = {"NOIL": ";", "NGAS": ";", "NBND": "|"}
HEADERS = {
    "NWHT": "session,open,high,low,settle,volume,open interest",
    "NOIL": "trading day;first;highest;lowest;settlement;traded;open positions",
    "NGAS": "trading day;first;highest;lowest;settlement;traded;open positions",
    "NCOP": 'day,"open, cents","high, cents","low, cents","settle, cents",lots,open lots',
    "NBND": "date|open|high|low|settle|volume|open interest",
    "NEQX": "market,year,month,session,open,high,low,settle,volume,open_interest",
    "NKRN": "market,year,month,session,open,high,low,settle,volume,open_interest",
    "NCOC": "Date,Open,High,Low,Settle,Volume,Open interest",
    "NVOL": "date,open,high,low,settle,volume,oi",
}


def field_text(row: Row, name: str) -> str:
    """One field of a row as it is written."""
    if name in row.written:
        return row.written[name]
    if name == "day":
        return day_text(row.market, row.day)
    if name == "volume":
        return lots_text(row.market, row.volume)
    if name == "positions":
        return lots_text(row.market, row.positions)
    ticks = row.prices[FIELDS.index(name)]
    return MISSING.get(row.market, "") if ticks is None else price_text(row.market, ticks, row.day)


def row_text(row: Row) -> str:
    """The whole line of a row, without its end."""
    fields = [field_text(row, "day"), *(field_text(row, name) for name in FIELDS)]
    if row.market in ("NEQX", "NKRN"):
        fields = [row.market, str(row.year), str(row.month), *fields]
    return DELIMITERS.get(row.market, ",").join(fields)


def path_of(row: Row) -> str:
    """Where a row is delivered, below the raw folder; a zip's member follows its archive."""
    year, month = row.year, f"{row.month:02d}"
    day = row.file_day or row.day
    paths: dict[str, Callable[[], str]] = {
        "NWHT": lambda: f"grains/NWHT_{year}_{month}.csv",
        "NOIL": lambda: f"energy/NOIL_{MONTH_LETTERS[row.month - 1]}{year % 100:02d}.csv.gz",
        "NGAS": lambda: f"energy/NGAS_{MONTH_LETTERS[row.month - 1]}{year % 100:02d}.csv.gz",
        "NCOP": lambda: f"metals/NCOP-{year}-{month}.csv.zst",
        "NBND": lambda: f"rates/NBND {year} {month}.csv",
        "NEQX": lambda: f"sessions/{day.year}/{day.isoformat()}.csv",
        "NKRN": lambda: f"sessions/{day.year}/{day.isoformat()}.csv",
        "NCOC": lambda: f"soft/NCOC.zip/NCOC_{year}_{month}.csv",
        "NVOL": lambda: f"volatility/NVOL_{year}{month}.csv.zst",
    }
    return paths[row.market]()


def lay_lines(rows: Iterable[Row]) -> dict[str, list[str]]:
    """The lines of every file, in order of path; each row learns its path, line number and text."""
    files: dict[str, list[str]] = {}
    years: dict[str, int] = {}
    for row in rows:
        path = path_of(row)
        lines = files.get(path)
        if lines is None:
            lines = files[path] = _opening(row)
        if row.market == "NCOP" and years.get(path, row.day.year) != row.day.year:
            lines.append(f"# {row.day.year}")
        years[path] = row.day.year
        row.path, row.text = path, row_text(row)
        lines.append(row.text)
        row.line = len(lines)
    return dict(sorted(files.items()))


def _opening(row: Row) -> list[str]:
    delivery = f"{row.year}-{row.month:02d}"
    if row.market == "NCOP":
        title = "Northmark copper, settlement by session"
        return [title, f"delivery {delivery}, cents by the kilogram", HEADERS["NCOP"]]
    if row.market == "NBND":
        title = f"* Northmark Börse, ten-year bond, delivery {delivery}"
        return [title, "* last figure: 5 is half a 32nd", HEADERS["NBND"]]
    return [HEADERS[row.market]]


def write_files(root: Path, files: dict[str, str]) -> None:
    """Write text files below `root`, packed as their names say; nothing of the clock goes into them."""
    archives: dict[str, list[tuple[str, bytes]]] = {}
    for path, text in files.items():
        data = text.encode("cp1252" if path.startswith("rates/") else "utf-8")
        if ".zip/" in path:
            archive, member = path.split(".zip/")
            archives.setdefault(f"{archive}.zip", []).append((member, data))
            continue
        target = root / path
        target.parent.mkdir(parents=True, exist_ok=True)
        target.write_bytes(pack(path, data))
    for path, members in archives.items():
        buffer = io.BytesIO()
        with zipfile.ZipFile(buffer, "w", zipfile.ZIP_DEFLATED, compresslevel=9) as zipped:
            for name, data in members:
                info = zipfile.ZipInfo(name, date_time=(1980, 1, 1, 0, 0, 0))
                info.compress_type, info.create_system, info.external_attr = zipfile.ZIP_DEFLATED, 3, 0o644 << 16
                zipped.writestr(info, data, compresslevel=9)
        target = root / path
        target.parent.mkdir(parents=True, exist_ok=True)
        target.write_bytes(buffer.getvalue())


def pack(path: str, data: bytes) -> bytes:
    """The bytes of a file as its ending asks."""
    if path.endswith(".gz"):
        buffer = io.BytesIO()
        # Unlike gzip.compress, GzipFile writes no operating system into its header.
        with gzip.GzipFile("", "wb", 9, buffer, mtime=0) as packed:
            packed.write(data)
        return buffer.getvalue()
    if path.endswith(".zst"):
        return bytes(pa.Codec("zstd", compression_level=19).compress(data, asbytes=True))
    return data
