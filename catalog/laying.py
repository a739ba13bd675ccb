"""Which files of each market a night's snapshot is laid out of: tonight's, those of the last one, or none.

Belongs here: keeping, linking, mending and dropping tables in the staging folder. Does not belong here: the
verdict that decides which (`night.py`, `gates.py`), how a table is written or linked (`store.py`).
"""

from pathlib import Path
from typing import Any

from catalog.manifest import HELD_BACK, PUBLISHED, Manifest, StoredFile, Verdict
from catalog.mending import make_again
from catalog.places import Places, table_path
from catalog.standing import check_each
from catalog.store import link_table
from contracts.errors import StoreUnsound, UsageError
from contracts.tables import MARKET_TABLES

# Tables that tell of tonight even where a market's prices are held back.
_TOLD_TONIGHT = ("findings", "rejects", "files")


class Laid:
    """What a snapshot is laid out of: its files by path, the verdicts as they then stand, and notes in words."""

    def __init__(self, verdicts: dict[str, Verdict]) -> None:
        self.files: dict[str, StoredFile] = {}
        self.verdicts = dict(verdicts)
        self.notes: list[str] = []


def lay_files(
    places: Places, staging: Path, verdicts: dict[str, Verdict], results: list[dict[str, Any]], last: Manifest | None
) -> Laid:
    """Keep, link, mend or drop each market's tables.

    A table that would be linked and is damaged is made again from the archive. Where that cannot be, the market is
    held back with nothing of it served: a damaged price goes nowhere, and the other markets go out all the same.
    """
    laid = Laid(verdicts)
    built = {result["market"]: result["files"] for result in results}
    linked: dict[str, StoredFile] = {}
    for code, verdict in verdicts.items():
        fresh = {path: StoredFile(path=path, **entry) for path, entry in built.get(code, {}).items()}
        for table in MARKET_TABLES:
            path = table_path(table.name, code)
            if path in fresh and (verdict.state == PUBLISHED or table.name in _TOLD_TONIGHT):
                laid.files[path] = fresh[path]
                continue
            (staging / path).unlink(missing_ok=True)
            if last is not None and path in last.files:
                linked[path] = last.files[path]
    if last is None:
        return laid
    damaged = check_each(places.snapshot(last.name), linked.values())
    for path in linked.keys() - damaged.keys():
        link_table(staging, places.snapshot(last.name), path)
        laid.files[path] = linked[path]
    for code in verdicts:
        ours = {path: problem for path, problem in damaged.items() if Path(path).stem == code}
        if ours:
            _mend(laid, places, staging, code, ours, linked, last)
    return laid


def _mend(
    laid: Laid, places: Places, staging: Path, market: str, damaged: dict[str, str], linked: dict[str, StoredFile],
    last: Manifest,
) -> None:  # fmt: skip
    """Make a market's damaged tables again, or drop all of it that would have been linked."""
    first = next(iter(damaged.values()))
    seen = f"{len(damaged)} of its tables in {last.name} {'is' if len(damaged) == 1 else 'are'} damaged ({first})"
    try:
        laid.files |= make_again(places, last, market, damaged, staging)
        laid.notes.append(f"{market}: {seen}; made again from the archive as published")
    except (StoreUnsound, UsageError) as error:
        for table in MARKET_TABLES:
            path = table_path(table.name, market)
            if path in linked:
                (staging / path).unlink(missing_ok=True)
                laid.files.pop(path, None)
        verdict = laid.verdicts[market]
        reasons = [verdict.reason] if verdict.state == HELD_BACK else []
        told = f"{seen} and cannot be made again ({error}): nothing sound to serve"
        laid.verdicts[market] = Verdict(
            # No inputs, so that every night tries again.
            state=HELD_BACK, reason="; ".join([*reasons, told]), inputs="", last_good_snapshot=None,
            facts={"findings": verdict.facts.get("findings", {})} if verdict.state == HELD_BACK else {},
        )  # fmt: skip
