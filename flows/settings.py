"""Which desk, raw folder and store a command works on.

Belongs here: the defaults and which of option and declaration wins. Does not belong here: what a desk
declares (`catalog/declarations.py`).
"""

import importlib.util
import os
from dataclasses import dataclass
from pathlib import Path

from contracts.errors import DeskError, Mistake

DEFAULT_STORE = "published"


@dataclass(frozen=True)
class Where:
    """The folders of one command, absolute, and what it asks of a night.

    `raw` is None where the desk's own declaration counts; the others are those of `catalog.wishes.Wishes`, with
    `until` as written.
    """

    desk: Path
    raw: Path | None
    store: Path
    rehash: bool = False
    waived: tuple[tuple[str, str, str], ...] = ()
    markets: tuple[str, ...] = ()
    until: str | None = None
    is_dry: bool = False
    known: str | None = None


def find_where(desk: str | None, raw: str | None, store: str | None) -> Where:
    """Turn the options --desk, --raw and --store into folders.

    Without --desk it is the sample desk that comes with the package, published to ./published. With --desk,
    raw folder and store are the ones desk.toml names. --raw and --store always win.

    Raises DeskError where desk.toml has to be asked for the store and cannot be read.
    """
    folder = find_desk(desk)
    if store is not None:
        target = Path(os.path.abspath(store))
    elif desk is None:
        target = Path(os.path.abspath(DEFAULT_STORE))
    else:
        target = declared_store(folder)
    return Where(folder, None if raw is None else Path(os.path.abspath(raw)), target)


def find_desk(desk: str | None) -> Path:
    """The desk that --desk names, else the sample desk."""
    return sample_desk() if desk is None else Path(os.path.abspath(desk))


def sample_desk() -> Path:
    """The folder of the sample desk inside the installed package."""
    found = importlib.util.find_spec("catalog")
    if found is None or not found.submodule_search_locations:
        raise DeskError([Mistake("catalog", "(package)", "no such package", "the package this program came with")])
    return Path(next(iter(found.submodule_search_locations))) / "desk"


def declared_store(desk: Path) -> Path:
    """The store that desk.toml names; no other declaration is read, so that a desk with a mistake in a market
    can still be asked for what is published.

    Raises DeskError where desk.toml is absent, unreadable, or names no store.
    """
    from contracts.declared import line_of, read_toml

    file = desk / "desk.toml"
    try:
        text = file.read_text(encoding="utf-8")
    except FileNotFoundError:
        raise DeskError(
            [Mistake(str(file), "(file)", "no such file", "a desk: a folder with desk.toml in it")]
        ) from None
    except (OSError, UnicodeDecodeError) as error:
        raise DeskError([Mistake(str(file), "(file)", str(error), "a readable UTF-8 file")]) from None
    data, mistakes = read_toml(text, str(file))
    store = data.get("store")
    if not isinstance(store, str) or not store:
        seen = "nothing" if store is None else repr(store)
        wanted = "the path of the store, relative to the desk"
        raise DeskError(mistakes or [Mistake(str(file), "store", seen, wanted, line_of(text, ("store",)))])
    return Path(os.path.abspath(desk / store))
