"""The desk a snapshot was made with, from the archive, and what another says otherwise.

Belongs here: reading it back, and naming the keys in which two desks differ. Does not belong here: what a key
means (`declarations.py`, `contracts/`).
"""

import tomllib
from typing import Any

from catalog.archive import read_archived
from catalog.declarations import Desk, desk_from_texts
from catalog.manifest import Manifest
from catalog.places import Places
from contracts.errors import StoreUnsound

# What of desk.toml can change a table.
_WEIGHING = ("gates", "quality", "look_backs")


def desk_of(places: Places, manifest: Manifest) -> Desk:
    """The desk a snapshot was made with; raises StoreUnsound where the archive does not have it whole."""
    if not manifest.desk_files:
        raise StoreUnsound(f"snapshot {manifest.name}: was made before desks were kept; name the desk with --desk")
    texts = {name: read_archived(places, sha).decode() for name, sha in manifest.desk_files.items()}
    return desk_from_texts(places.store / "desk", texts)


def changed_keys(old: Desk, new: Desk, file: str) -> list[str]:
    """The keys of one file in which two desks differ, each with both values, in words."""
    before, after = _read(old, file), _read(new, file)
    if before is None or after is None:
        return [f"{file} {'added' if before is None else 'removed'}"] if before != after else []
    if file == "desk.toml":
        before, after = ({key: read.get(key) for key in _WEIGHING} for read in (before, after))
    return [f"{file} {difference}" for difference in _differences("", before, after)]


def changed_desk(old: Desk, new: Desk) -> list[str]:
    """Every key of any file in which two desks differ, in words."""
    return [key for name in sorted({**old.texts, **new.texts}) for key in changed_keys(old, new, name)]


def market_file(desk: Desk, market: str) -> str | None:
    """Name of the file that declares a market; None where the desk does not."""
    for name in desk.texts:
        if name.startswith("markets/") and (read := _read(desk, name)) is not None and read.get("code") == market:
            return name
    return None


def _read(desk: Desk, file: str) -> dict[str, Any] | None:
    text = desk.texts.get(file)
    return None if text is None else tomllib.loads(text)


def _differences(key: str, before: Any, after: Any) -> list[str]:
    if before == after:
        return []
    if isinstance(before, dict) and isinstance(after, dict):
        found = []
        for name in dict.fromkeys([*before, *after]):
            found += _differences(f"{key}.{name}".lstrip("."), before.get(name), after.get(name))
        return found
    if _is_tables(before) and _is_tables(after):
        gone = [entry for entry in before or [] if entry not in (after or [])]
        come = [entry for entry in after or [] if entry not in (before or [])]
        return [*(f"{key} removed: {_show(e)}" for e in gone), *(f"{key} added: {_show(e)}" for e in come)]
    return [f"{key}: {_show(before)} -> {_show(after)}"]


def _is_tables(value: Any) -> bool:
    return value is None or (isinstance(value, list) and all(isinstance(part, dict) for part in value))


def _show(value: Any) -> str:
    if value is None:
        return "not set"
    if isinstance(value, dict):
        return ", ".join(f"{name} = {_show(part)}" for name, part in value.items())
    if isinstance(value, list):
        shown = ", ".join(_show(part) for part in value)
        return f"[{shown}]" if len(shown) < 80 else f"[{len(value)} values]"
    if isinstance(value, bool):
        return "true" if value else "false"
    return repr(value) if isinstance(value, str) else str(value)
