"""Every version of a raw row, and the declared rule behind a number, with file and line.

Belongs here: finding a row again in each version of each file that ever held it, as the layout of its day
reads it, and the place of a key in the desk that made a snapshot. Does not belong here: what is told of them
(`trace.py`).
"""

import datetime
import tomllib
from collections.abc import Iterator
from dataclasses import dataclass
from typing import Any

import numpy as np
import pyarrow as pa

from catalog.archive import read_archived
from catalog.declarations import Desk
from catalog.kept_desk import market_file
from catalog.places import Places
from contracts.declared import line_of
from contracts.errors import IntakeError
from contracts.intake import RawFile, parse_rows, split_file
from contracts.layouts import claim_file
from contracts.sessions import day_number
from contracts.unpack import recall_rows, unpack


@dataclass(frozen=True)
class RawVersion:
    """A raw row as one or more versions of a file have it.

    `taken_in` is the intake that brought the first of them, `versions` how many in a row have this very text;
    `file` is the SHA-256 of the newest of these, in which the row stands on `line`.
    """

    path: str
    file: str
    line: int
    text: str
    taken_in: int
    versions: int


@dataclass(frozen=True)
class Rule:
    """A key of the desk that decided something: file, line in it, key, and what it says."""

    file: str
    line: int | None
    key: str
    says: str


class RawRows:
    """The raw rows behind one market's bars, found again file by file."""

    def __init__(self, places: Places, desk: Desk, market: str, files: pa.Table) -> None:
        """`files` are the rows of the table of that name that may hold rows of the market."""
        self.places, self.desk, self.market = places, desk, desk.markets[market]
        self._files = sorted(files.to_pylist(), key=lambda row: (row["path"], row["taken_in"]))
        self._found: dict[tuple[str, str], dict[tuple[str, int], list[tuple[int, str]]]] = {}

    def versions(self, contract: str, session: datetime.date) -> tuple[RawVersion, ...]:
        """Every text the contract's row of a session ever had, in order of path and arrival."""
        made: list[RawVersion] = []
        for row in self._holding(contract, session):
            for line, text in self._rows(row).get((contract, day_number(session)), ()):
                last = made[-1] if made else None
                if last is not None and (last.path, last.text) == (row["path"], text):
                    made[-1] = RawVersion(last.path, row["file"], line, text, last.taken_in, last.versions + 1)
                else:
                    made.append(RawVersion(row["path"], row["file"], line, text, row["taken_in"], 1))
        return tuple(made)

    def text_at(self, file: str, contract: str, session: datetime.date, line: int) -> tuple[str, str] | None:
        """Path and text of the row that stands on a line of a file; None where it is not there."""
        for row in self._files:
            if row["file"] == file and row["contract"] in (None, contract) and row["layout"] is not None:
                for at, text in self._rows(row).get((contract, day_number(session)), ()):
                    if at == line:
                        return row["path"], text
        return None

    def _holding(self, contract: str, session: datetime.date) -> Iterator[dict[str, Any]]:
        """Versions of files that may hold the contract's row of a session."""
        for row in self._files:
            if row["layout"] is None or row["contract"] not in (None, contract):
                continue
            # A vendor may well send one file a session; reading all of them would take minutes.
            first, last = row["first_session"], row["last_session"]
            if (first is None and row["market"] is None) or (first is not None and first <= session <= last):
                yield row

    def _rows(self, row: dict[str, Any]) -> dict[tuple[str, int], list[tuple[int, str]]]:
        """Line and text of each row of one version of a file, by contract and session."""
        key = (row["path"], row["file"])
        if key not in self._found:
            self._found[key] = self._read(row)
        return self._found[key]

    def _read(self, row: dict[str, Any]) -> dict[tuple[str, int], list[tuple[int, str]]]:
        layout = self.desk.layouts[row["layout"]]
        claim = claim_file(layout, row["path"])
        if claim is None:
            return {}
        try:
            text = unpack(read_archived(self.places, row["file"]), row["path"])
            raw = RawFile(row["path"], row["file"], text, row["layout"], layout, claim, row["taken_in"], row["bytes"])
            split = split_file(raw)
        except IntakeError:
            # Told as a finding of its own; there is no row in it to be shown.
            return {}
        parsed = parse_rows([split], self.market)
        lines = np.unique(parsed.line)
        texts = {line: told for line, _, told in recall_rows(text, layout.encoding, lines.tolist(), split.spans)}
        found: dict[tuple[str, int], list[tuple[int, str]]] = {}
        for contract, session, line in zip(
            parsed.contract.tolist(), parsed.session.tolist(), parsed.line.tolist(), strict=True
        ):
            found.setdefault((parsed.contracts[contract], session), []).append((line, texts[line]))
        return found


def rules_behind(desk: Desk, market: str, plan: str, layouts: set[str], session: datetime.date) -> tuple[Rule, ...]:
    """The keys that decide a price of a plan: the plan, the last-trade rule, a change of scale, the layouts."""
    file = market_file(desk, market)
    if file is None:
        return ()
    text, declared = desk.texts[file], desk.markets[market]
    plan_says = declared.plans[plan].model_dump(mode="json", exclude_defaults=True, by_alias=True)
    says = ", ".join(f"{key} = {_say(value)}" for key, value in plan_says.items())
    rules = [Rule(file, line_of(text, ("plans", plan)), f"plans.{plan}", says)]
    for number, rule in enumerate(declared.last_trade):
        key: tuple[str | int, ...] = ("last_trade", number) if len(declared.last_trade) > 1 else ("last_trade",)
        since = f", from {rule.applies_from}" if rule.applies_from is not None else ""
        rules.append(Rule(file, line_of(text, key), _key(key), f"rule = {rule.rule!r}{since}"))
    for number, change in enumerate(declared.rescaled):
        if session < change.before:
            says = f"prices before {change.before} x {change.multiply:.10g}"
            rules.append(Rule(file, line_of(text, ("rescaled", number)), f"rescaled[{number}]", says))
    for name in sorted(layouts):
        layout = f"layouts/{name}.toml"
        if layout in desk.texts:
            rules.append(Rule(layout, line_of(desk.texts[layout], ("columns",)), "columns", desk.layouts[name].files))
    return tuple(rules)


def repair_rule(desk: Desk, contract: str, session: datetime.date) -> Rule | None:
    """Where a person's repair of a settle is declared; None where there is none."""
    for file in sorted(name for name in desk.texts if name.startswith("repairs/")):
        for number, entry in enumerate(tomllib.loads(desk.texts[file]).get("repair", ())):
            if (entry["contract"], entry["session"], entry["field"]) == (contract, session, "settle"):
                line = line_of(desk.texts[file], ("repair", number))
                return Rule(file, line, f"repair[{number}]", f"by {entry['by']}: {entry['reason']}")
    return None


def _key(parts: tuple[str | int, ...]) -> str:
    return "".join(f"[{part}]" if isinstance(part, int) else part for part in parts)


def _say(value: Any) -> str:
    return f'"{value}"' if isinstance(value, str) else str(value)
