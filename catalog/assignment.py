"""Which file belongs to which market, and what decides a market's tables.

Belongs here: matching arrivals to layouts and markets, and the digest of a market's inputs. Does not belong
here: reading prices, writing a snapshot.
"""

import contextlib
import datetime
import hashlib
import importlib.metadata
import json
from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path
from typing import Any

from catalog.archive import Arrival, Intake, read_archived
from catalog.declarations import Desk
from catalog.places import Places, write_whole
from contracts.build import Inputs
from contracts.errors import IntakeError
from contracts.findings import Finding, Kind, Severity
from contracts.intake import RawFile, split_file
from contracts.layouts import Claim, Layout, claim_file
from contracts.markets import OF_THE_CLOCK
from contracts.unpack import unpack

# Packages whose version can change the bytes of a table.
_PACKAGES = ("numpy", "pandas", "pyarrow", "duckdb", "exchange_calendars", "python-dateutil", "pydantic")


@dataclass(frozen=True)
class FileOfMarket:
    """One version of one raw file, as a market reads it."""

    path: str
    file: str
    size: int
    taken_in: int
    layout: str
    is_old: bool
    is_told_here: bool
    # The hash of the version that came after it under the same path; None for the newest.
    followed_by: str | None


@dataclass(frozen=True)
class Assignment:
    """Files by market, and findings about files that belong to none."""

    files: dict[str, tuple[FileOfMarket, ...]]
    findings: tuple[Finding, ...]
    unclaimed: int


def assign_files(desk: Desk, intake: Intake, places: Places) -> Assignment:
    """Match every arrival to a layout and its markets; what belongs to none becomes a finding."""
    versions: dict[str, list[Arrival]] = {}
    for arrival in intake.arrivals:
        if not arrival.container:
            versions.setdefault(arrival.path, []).append(arrival)
    files: dict[str, list[FileOfMarket]] = {code: [] for code in desk.markets}
    findings = [
        Finding(Kind.REFUSED_PATH, Severity.REVIEW, f"{problem.path}: {problem.reason}", detail=problem.path)
        for problem in intake.problems
    ]
    unclaimed = 0
    memory = _MarketMemory(places)
    for path, arrivals in sorted(versions.items()):
        try:
            name, claim = _claim(desk, path)
            markets = _markets_of(desk, name, claim, arrivals, places, memory)
        except ValueError as error:
            unclaimed += 1
            findings.append(_unclaimed(path, str(error), arrivals[-1]))
            continue
        except IntakeError as error:
            findings.append(Finding(Kind.UNREADABLE_FILE, Severity.BLOCK, str(error), detail=path))
            continue
        for market in markets:
            files[market] += _versions(name, arrivals, is_told_here=market == markets[0])
    memory.save()
    return Assignment({code: tuple(found) for code, found in files.items()}, tuple(findings), unclaimed)


def _versions(layout: str, arrivals: list[Arrival], is_told_here: bool) -> list[FileOfMarket]:
    made = []
    for number, arrival in enumerate(arrivals):
        following = arrivals[number + 1].file if number + 1 < len(arrivals) else None
        made.append(
            FileOfMarket(
                arrival.path, arrival.file, arrival.bytes, arrival.taken_in, layout, following is not None,
                is_told_here, following,
            )
        )  # fmt: skip
    return made


def _unclaimed(path: str, reason: str, arrival: Arrival) -> Finding:
    message = f"{path}: {reason}; nothing of it is read (kept as {arrival.file[:12]})"
    return Finding(Kind.UNCLAIMED_FILE, Severity.REVIEW, message, detail=path)


def _claim(desk: Desk, path: str) -> tuple[str, Claim]:
    """The one layout that claims a path; raises ValueError for none, several, or a market nobody declared."""
    claims: dict[str, Claim] = {}
    for name, layout in desk.layouts.items():
        claim = claim_file(layout, path)
        if claim is not None:
            claims[name] = claim
    if not claims:
        raise ValueError("no layout claims it")
    if len(claims) > 1:
        raise ValueError(f"the layouts {', '.join(claims)} all claim it; expected one")
    name, claim = next(iter(claims.items()))
    if claim.market is not None and claim.market not in desk.markets:
        raise ValueError(
            f"layout {name} reads the market {claim.market} from its path, which the desk does not declare"
        )
    if (
        claim.market is not None
        and claim.month is not None
        and claim.month not in desk.markets[claim.market].delivery_months
    ):
        months = list(desk.markets[claim.market].delivery_months)
        raise ValueError(
            f"layout {name} reads the delivery month {claim.month} from its path; {claim.market} delivers in {months}"
        )
    return name, claim


def _markets_of(
    desk: Desk, name: str, claim: Claim, arrivals: list[Arrival], places: Places, memory: "_MarketMemory"
) -> list[str]:
    """The declared markets with rows in a file; raises ValueError where there is none."""
    if claim.market is not None:
        return [claim.market]
    layout = desk.layouts[name]
    found: set[str] = set()
    for arrival in arrivals:
        found |= set(memory.markets(arrival, name, layout, places))
    known = sorted(found & set(desk.markets))
    if not known:
        seen = ", ".join(sorted(found))[:80] or "none"
        raise ValueError(f"no row of it is of a declared market (seen: {seen})")
    return known


class _MarketMemory:
    """Which markets the files of several markets hold, remembered between nights by content and layout."""

    def __init__(self, places: Places) -> None:
        self.path = places.intake / "markets.json"
        self.known: dict[str, list[str]] = {}
        self.is_changed = False
        try:
            self.known = json.loads(self.path.read_text(encoding="utf-8"))
        except (OSError, ValueError):
            # Only a memory: without it the files are looked at again.
            self.known = {}

    def markets(self, arrival: Arrival, name: str, layout: Layout, places: Places) -> list[str]:
        key = f"{arrival.file} {_digest(layout.model_dump(mode='json'))[:16]}"
        if key not in self.known:
            raw = _raw_file(arrival.path, arrival.file, arrival.bytes, arrival.taken_in, name, layout, places)
            rows = split_file(raw)
            self.known[key] = sorted({text.strip() for text in rows.columns["market"]})
            self.is_changed = True
        return self.known[key]

    def save(self) -> None:
        # Only a memory, and a reader of the store may not be allowed to write it.
        if self.is_changed:
            with contextlib.suppress(OSError):
                self.path.parent.mkdir(parents=True, exist_ok=True)
                write_whole(self.path, json.dumps(self.known, sort_keys=True).encode())


def _raw_file(
    path: str, file: str, size: int, taken_in: int, name: str, layout: Layout, places: Places, is_told_here: bool = True
) -> RawFile:
    claim = claim_file(layout, path)
    if claim is None:
        raise IntakeError(f"{path}: layout {name} no longer claims it")
    text = unpack(read_archived(places, file), path)
    return RawFile(path, file, text, name, layout, claim, taken_in, size, is_told_here)


def gather_inputs(desk: Desk, market: str, files: tuple[FileOfMarket, ...], places: Places) -> Inputs:
    """Read a market's files from the archive.

    An older version that the next one only appends to says nothing of its own and is not read.
    """
    raw_files: list[RawFile] = []
    is_old: list[bool] = []
    failures: list[tuple[str, str | None, str]] = []
    texts: dict[str, bytes] = {}
    for entry in sorted(files, key=lambda entry: (entry.path, -entry.taken_in)):
        layout = desk.layouts[entry.layout]
        try:
            raw = _raw_file(
                entry.path, entry.file, entry.size, entry.taken_in, entry.layout, layout, places, entry.is_told_here
            )
        except IntakeError as error:
            claim = claim_file(layout, entry.path)
            if not entry.is_old:
                failures.append((entry.path, claim.contract if claim else None, str(error)))
            continue
        following = texts.get(entry.path)
        texts = {entry.path: raw.text}
        if entry.is_old and following is not None and following.startswith(raw.text):
            continue
        raw_files.append(raw)
        is_old.append(entry.is_old)
    return Inputs(
        desk.markets[market], tuple(raw_files), tuple(is_old), tuple(failures), desk.repairs_of(market),
        desk.waivers_for(market), desk.quality, desk.gates, desk.look_backs,
    )  # fmt: skip


def declarations_digest(desk: Desk, market: str, layouts: list[str]) -> str:
    """SHA-256 of all that is declared of a market; the same while nothing that concerns it changes."""
    return _digest(
        {
            "market": desk.markets[market].model_dump(mode="json", by_alias=True, exclude=set(OF_THE_CLOCK)),
            # Which plan is the first one matters, and a digest sorts.
            "plans": list(desk.markets[market].plans),
            "layouts": {name: desk.layouts[name].model_dump(mode="json") for name in layouts},
            "repairs": [repair.model_dump(mode="json") for repair in desk.repairs_of(market)],
            "waivers": [waiver.model_dump(mode="json", by_alias=True) for waiver in desk.waivers_for(market)],
            "quality": desk.quality.model_dump(mode="json"),
            "gates": desk.gates.model_dump(mode="json"),
            "look_backs": desk.look_backs,
        }
    )


def table_stamp(desk: Desk, market: str, files: tuple[FileOfMarket, ...]) -> dict[str, str]:
    """What a market's tables say of where they came from; nothing in it depends on the clock or the night."""
    layouts = sorted({entry.layout for entry in files})
    return {"desk": declarations_digest(desk, market, layouts), "code": code_digest()}


def inputs_digest(desk: Desk, market: str, files: tuple[FileOfMarket, ...], until: datetime.date | None = None) -> str:
    """SHA-256 of all that decides a market's tables: code, packages, declarations, the files' content, and the
    session after which bars are left out."""
    return _digest(
        {
            **({} if until is None else {"until": until.isoformat()}),
            **table_stamp(desk, market, files),
            "packages": package_versions(),
            "files": [[e.path, e.file, e.taken_in, e.is_old, e.is_told_here] for e in files],
        }
    )


def _digest(value: Any) -> str:
    return hashlib.sha256(json.dumps(value, sort_keys=True).encode()).hexdigest()


@lru_cache(maxsize=1)
def code_digest() -> str:
    """SHA-256 of the code that makes tables: every Python and SQL file of `contracts` and `catalog`."""
    root = Path(__file__).resolve().parent.parent
    digest = hashlib.sha256()
    for room in ("contracts", "catalog"):
        for file in sorted((root / room).rglob("*")):
            if file.suffix in (".py", ".sql"):
                digest.update(f"{file.relative_to(root).as_posix()}\0".encode() + file.read_bytes())
    return digest.hexdigest()


@lru_cache(maxsize=1)
def package_versions() -> dict[str, str]:
    """Versions of the packages that can change a table's bytes."""
    return {name: importlib.metadata.version(name) for name in _PACKAGES}
