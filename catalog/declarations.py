"""Read and validate a whole desk, all mistakes at once.

Belongs here: which files make a desk, and what has to agree between them. Does not belong here: what one
market or layout may say (`contracts/markets.py`, `contracts/layouts.py`).
"""

import hashlib
import json
import zoneinfo
from dataclasses import dataclass, field
from enum import StrEnum
from functools import lru_cache
from pathlib import Path
from typing import Annotated, Any

from pydantic import AfterValidator, BeforeValidator, Field, model_validator

from catalog.cron import cron_mistake
from contracts.calendar_table import calendar_mistakes
from contracts.declared import Declared, Model, line_of, read_declaration, read_toml
from contracts.errors import CalendarError, DeskError, Mistake
from contracts.findings import Waiver
from contracts.layouts import Layout, read_layout
from contracts.markets import Market, read_market
from contracts.quality import Gates, Quality
from contracts.repairs import DeclaredRepair

SAMPLE_DESK = Path(__file__).resolve().parent / "desk"


class Workers(StrEnum):
    """What carries the markets of a night."""

    THREADS = "threads"
    PROCESSES = "processes"
    DASK = "dask"


def _workers(value: object) -> Workers:
    try:
        return Workers(str(value))
    except ValueError:
        raise ValueError(f"seen {value!r}; expected one of {', '.join(repr(str(w)) for w in Workers)}") from None


def _timezone(value: str) -> str:
    try:
        zoneinfo.ZoneInfo(value)
    except (zoneinfo.ZoneInfoNotFoundError, ValueError, OSError):
        raise ValueError(f"seen {value!r}; expected a time zone such as 'Europe/Oslo'") from None
    return value


def _cron(value: str) -> str:
    parts = value.split()
    if len(parts) != 5 or not all(set(part) <= set("0123456789*/,-") for part in parts):
        raise ValueError(
            f"seen {value!r}; expected five fields of minute, hour, day, month, weekday, such as '30 19 * * 1-5'"
        )
    return value


def _look_backs(value: Any) -> Any:
    if not isinstance(value, list) or not value or not all(type(part) is int and part > 0 for part in value):
        raise ValueError(f"seen {value!r}; expected whole numbers of sessions above zero")
    if value != sorted(set(value)):
        raise ValueError(f"seen {value!r}; expected rising numbers, none twice")
    return tuple(value)


class Schedule(Declared):
    """When the night runs."""

    cron: Annotated[str, AfterValidator(_cron)] = "30 19 * * 1-5"
    timezone: Annotated[str, AfterValidator(_timezone)] = "UTC"

    @model_validator(mode="after")
    def _once_a_night(self) -> "Schedule":
        seen = cron_mistake(self.cron, self.timezone)
        if seen is not None:
            raise ValueError(f"seen {seen}; expected a time that comes once every night, outside 01:00 to 03:00")
        return self


class Run(Declared):
    """What carries it."""

    workers: Annotated[Workers, BeforeValidator(_workers)] = Workers.THREADS
    dask_address: str = ""
    # How long a night waits for files that are overdue by their market's own clock; 0 does not wait.
    wait_minutes: Annotated[int, Field(ge=0, le=1440)] = 0


class DeskFile(Declared):
    """`desk.toml`."""

    raw: str
    store: str
    look_backs: Annotated[tuple[int, ...], BeforeValidator(_look_backs)] = (5, 10, 21, 42)
    schedule: Schedule = Field(default_factory=Schedule)
    run: Run = Field(default_factory=Run)
    gates: Gates = Field(default_factory=Gates)
    quality: Quality = Field(default_factory=Quality)


class RepairsFile(Declared):
    """A file under `repairs/`."""

    repair: Annotated[
        tuple[DeclaredRepair, ...], BeforeValidator(lambda v: tuple(v) if isinstance(v, list) else v)
    ] = ()


class WaiversFile(Declared):
    """`waivers.toml`."""

    waiver: Annotated[tuple[Waiver, ...], BeforeValidator(lambda v: tuple(v) if isinstance(v, list) else v)] = ()


@dataclass(frozen=True)
class Desk:
    """Everything declared.

    `digest` is the SHA-256 of all of it that can change what is published: where files lie, when the night
    runs and on what workers plays no part. `texts` are its files as read, by name below the folder.
    """

    path: Path
    raw: Path
    store: Path
    schedule: Schedule
    run: Run
    gates: Gates
    quality: Quality
    look_backs: tuple[int, ...]
    markets: dict[str, Market]
    layouts: dict[str, Layout]
    repairs: tuple[DeclaredRepair, ...]
    waivers: tuple[Waiver, ...]
    digest: str
    texts: dict[str, str] = field(default_factory=dict)

    def repairs_of(self, market: str) -> tuple[DeclaredRepair, ...]:
        """The declared repairs of one market's contracts."""
        return tuple(repair for repair in self.repairs if repair.contract[:-8] == market)

    def waivers_for(self, market: str) -> tuple[Waiver, ...]:
        """The waivers that may cover a finding of one market."""
        return tuple(waiver for waiver in self.waivers if waiver.market in (market, None))


@dataclass
class _Reading:
    """Texts of a desk by relative name, and the mistakes met so far."""

    texts: dict[str, str]
    mistakes: list[Mistake] = field(default_factory=list)
    # Codes of all market files, those with mistakes too: what speaks of them is no mistake of its own.
    codes: set[str] = field(default_factory=set)

    def names(self, folder: str) -> list[str]:
        return [name for name in self.texts if name.startswith(f"{folder}/")]

    def model(self, kind: type[Model], name: str) -> Model | None:
        """One file read against a model; its mistakes are kept."""
        made, _, mistakes = read_declaration(kind, self.texts[name], name)
        self.mistakes += mistakes
        return made


def load_desk(path: Path) -> Desk:
    """Read a desk folder; raises DeskError with every mistake in any of its files."""
    texts, mistakes = _read_texts(Path(path))
    if mistakes:
        raise DeskError(mistakes)
    return _load(Path(path).resolve(), tuple(texts.items()))


def desk_from_texts(path: Path, texts: dict[str, str]) -> Desk:
    """The desk whose files had these texts, as if they lay in the folder `path`; raises DeskError."""
    return _load(path, tuple(texts.items()))


def _read_texts(path: Path) -> tuple[dict[str, str], list[Mistake]]:
    """Every file of a desk by its name below it, and the files that cannot be read."""
    texts: dict[str, str] = {}
    mistakes: list[Mistake] = []
    if not path.is_dir():
        expected = "a folder with desk.toml, markets/ and layouts/"
        return {}, [Mistake(str(path), "(desk)", "no such folder", expected)]
    files = [path / "desk.toml", path / "waivers.toml"]
    for folder in ("markets", "layouts", "repairs"):
        files += sorted((path / folder).glob("*.toml"))
    for file in files:
        name = file.relative_to(path).as_posix()
        if not file.exists():
            if name == "desk.toml":
                mistakes.append(Mistake(name, "(file)", "no such file", "a desk.toml with raw and store"))
            continue
        try:
            texts[name] = file.read_bytes().decode("utf-8")
        except (OSError, UnicodeDecodeError) as error:
            mistakes.append(Mistake(name, "(file)", str(error), "a readable UTF-8 file"))
    return texts, mistakes


def _digest(texts: dict[str, str], head: DeskFile) -> str:
    weighing = head.model_dump(mode="json", include={"look_backs", "gates", "quality"})
    parts = {**{name: text for name, text in texts.items() if name != "desk.toml"}, "desk.toml": weighing}
    return hashlib.sha256(json.dumps(parts, sort_keys=True).encode()).hexdigest()


@lru_cache(maxsize=4)
def _load(path: Path, items: tuple[tuple[str, str], ...]) -> Desk:
    reading = _Reading(dict(items))
    head = reading.model(DeskFile, "desk.toml")
    markets = _load_markets(reading)
    layouts: dict[str, Layout] = {}
    for name in reading.names("layouts"):
        layout, mistakes = read_layout(reading.texts[name], name)
        reading.mistakes += mistakes
        if layout is not None:
            layouts[Path(name).stem] = layout
    if not reading.names("layouts"):
        reading.mistakes.append(Mistake("layouts/", "(folder)", "no layout", "at least one layouts/<name>.toml"))
    repairs = _load_repairs(reading)
    waivers = _load_waivers(reading)
    if reading.mistakes or head is None:
        raise DeskError(reading.mistakes)
    return Desk(
        path, (path / head.raw).resolve(), (path / head.store).resolve(), head.schedule, head.run, head.gates,
        head.quality, head.look_backs, dict(sorted(markets.items())), dict(sorted(layouts.items())), repairs,
        waivers, _digest(reading.texts, head), reading.texts,
    )  # fmt: skip


def _load_markets(reading: _Reading) -> dict[str, Market]:
    markets: dict[str, Market] = {}
    where: dict[str, str] = {}
    for name in reading.names("markets"):
        market, mistakes = read_market(reading.texts[name], name)
        reading.mistakes += mistakes
        reading.codes.add(market.code if market else str(read_toml(reading.texts[name], name)[0].get("code")))
        if market is None:
            continue
        if market.code in where:
            line = line_of(reading.texts[name], ("code",))
            reading.mistakes.append(
                Mistake(name, "code", f"{market.code}, as in {where[market.code]}", "each code once", line)
            )
            continue
        where[market.code] = name
        markets[market.code] = market
        if not mistakes:
            try:
                reading.mistakes += calendar_mistakes(market, name)
            except CalendarError as error:
                reading.mistakes.append(Mistake(name, "calendar", str(error), "a calendar that covers the market"))
    if not reading.names("markets"):
        reading.mistakes.append(Mistake("markets/", "(folder)", "no market", "at least one markets/<name>.toml"))
    return markets


def _load_repairs(reading: _Reading) -> tuple[DeclaredRepair, ...]:
    repairs: list[DeclaredRepair] = []
    seen: dict[tuple[object, ...], str] = {}
    for name in reading.names("repairs"):
        file = reading.model(RepairsFile, name)
        for index, repair in enumerate(file.repair if file else ()):
            key = (repair.contract, repair.session, repair.field)
            if repair.contract[:-8] not in reading.codes:
                key_name = f"repair[{index}].contract"
                reading.mistakes.append(_unknown_market(name, key_name, repair.contract, reading.codes))
            if key in seen:
                reading.mistakes.append(
                    Mistake(
                        name,
                        f"repair[{index}]",
                        f"a second repair of {key[0]} {key[1]} {key[2]}, as in {seen[key]}",
                        "one",
                    )
                )
            seen[key] = name
            repairs.append(repair)
    return tuple(repairs)


def _load_waivers(reading: _Reading) -> tuple[Waiver, ...]:
    if "waivers.toml" not in reading.texts:
        return ()
    file = reading.model(WaiversFile, "waivers.toml")
    waivers = file.waiver if file else ()
    for index, waiver in enumerate(waivers):
        if waiver.market is not None and waiver.market not in reading.codes:
            key = f"waiver[{index}].market"
            reading.mistakes.append(_unknown_market("waivers.toml", key, waiver.market, reading.codes))
    return waivers


def _unknown_market(file: str, key: str, seen: str, codes: set[str]) -> Mistake:
    return Mistake(file, key, f"{seen!r}, a market the desk does not declare", f"one of {', '.join(sorted(codes))}")
