"""What a night is asked for beyond the ordinary.

Belongs here: the wishes and whether desk and store can grant them. Does not belong here: granting them
(`night.py`), how they are spelled on the command line (`flows/`).
"""

import datetime
from collections.abc import Iterable
from dataclasses import dataclass

from catalog.declarations import Desk
from catalog.manifest import Manifest
from contracts.errors import UsageError


@dataclass(frozen=True)
class Wishes:
    """`rehash`: read every raw file again; `waived`: market, reason and person of gates that hold nothing back;
    `markets`: build only these, empty for all; `until`: leave out bars of later sessions; `is_dry`: publish
    nothing; `known`: build from the archive alone, and say this of what was known.
    """

    rehash: bool = False
    waived: tuple[tuple[str, str, str], ...] = ()
    markets: tuple[str, ...] = ()
    until: datetime.date | None = None
    is_dry: bool = False
    known: str | None = None

    def asked(self, desk: Desk) -> tuple[str, ...]:
        """The markets that may be built."""
        return self.markets or tuple(desk.markets)

    def check(self, desk: Desk, last: Manifest | None) -> None:
        """Raises UsageError for a market the desk does not declare, and where the snapshot that stands would be
        followed by one that ends before it."""
        _insist(desk, (code for code, _, _ in self.waived), "to waive the gate of")
        _insist(desk, self.markets, "to build")
        if self.until is None or self.is_dry or last is None:
            return
        newest = max((verdict.facts.get("last_session", "") for verdict in last.markets.values()), default="")
        if newest > self.until.isoformat():
            raise UsageError(
                f"snapshot {last.name} has data to {newest}; one as of {self.until} would put its readers back; "
                "name a store of its own with --store, or only look with --dry-run"
            )


def _insist(desk: Desk, codes: Iterable[str], purpose: str) -> None:
    for code in codes:
        if code not in desk.markets:
            raise UsageError(f"no market {code!r} {purpose}; there is {', '.join(desk.markets)}")


def until_of(manifest: Manifest, market: str) -> datetime.date | None:
    """The session after which bars were left out of a market's tables; None where none were."""
    text = manifest.markets[market].facts.get("until")
    return None if text is None else datetime.date.fromisoformat(text)
