"""Every exception the project raises on purpose, and the shape of a declaration's mistakes.

    RopewalkError
    |-- DeskError        a declaration is wrong; carries every mistake found, not only the first   (exit 2)
    |-- UsageError       a command was asked for something that does not exist                      (exit 2)
    |-- NotationError    a price text that cannot be read
    |-- CalendarError    a day outside what a calendar knows, or a rule that yields no day
    |-- IntakeError      a raw file that cannot be read at all
    |-- IdentityError    a build broke one of its own identities: nothing of that market is published
    `-- StoreError       the store cannot be written or does not hold together                      (exit 4 or 5)
        |-- StoreBusy    another writer holds the store                                             (exit 4)
        `-- StoreUnsound what is published does not match its manifest                              (exit 5)

Belongs here: the tree and nothing else. Does not belong here: messages of a single room.
"""

from dataclasses import dataclass


@dataclass(frozen=True, order=True)
class Mistake:
    """One thing wrong in a declaration: where it stands, what was seen, what was expected, what to do."""

    file: str
    key: str
    seen: str
    expected: str
    line: int | None = None

    def __str__(self) -> str:
        place = f"{self.file}:{self.line}" if self.line else self.file
        return f"{place}: {self.key}: seen {self.seen}; expected {self.expected}"


class RopewalkError(Exception):
    """Anything the project refuses to do, with a message a person can act on."""


class DeskError(RopewalkError):
    """A desk that cannot be used; `mistakes` holds all of them, in order of file and line."""

    def __init__(self, mistakes: list[Mistake]) -> None:
        self.mistakes = sorted(mistakes, key=lambda m: (m.file, m.line or 0, m.key, m.seen))
        count = len(self.mistakes)
        head = f"the desk has {count} mistake{'s' if count != 1 else ''}; nothing was touched"
        super().__init__("\n".join([head, *(f"  {mistake}" for mistake in self.mistakes)]))


class UsageError(RopewalkError):
    """A command was given a market, session, plan or path that is not there."""


class NotationError(RopewalkError):
    """A price text that is not of the notation declared for its market."""


class CalendarError(RopewalkError):
    """A calendar that cannot be built, a day it does not know, or a rule that yields no single day."""


class IntakeError(RopewalkError):
    """A raw file of which no row can be read."""


class IdentityError(RopewalkError):
    """A splice whose published numbers do not add up to the position it says was held."""


class StoreError(RopewalkError):
    """The store could not be read or written; what was published before still stands."""


class StoreBusy(StoreError):
    """Another process is writing this store."""


class StoreUnsound(StoreError):
    """A published file, the manifest or the catalog does not match what was recorded of it."""
