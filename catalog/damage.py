"""Published tables that can no longer be linked on.

Belongs here: telling damage by its bytes, for those who can mend it. Does not belong here: the report of all that
is wrong with a store (`verify.py`).
"""

from pathlib import PurePosixPath

from catalog.manifest import Manifest
from catalog.places import Places, hash_file


def damaged_owners(places: Places, manifest: Manifest) -> frozenset[str]:
    """Markets (and `_desk`) of whose tables in a snapshot one is gone or holds other bytes than were published.

    Reads every file of the snapshot.
    """
    owners = set()
    for path, file in manifest.files.items():
        try:
            is_whole = hash_file(places.snapshot(manifest.name) / path) == (file.bytes, file.sha256)
        except OSError:
            is_whole = False
        if not is_whole:
            owners.add(PurePosixPath(path).stem)
    return frozenset(owners)
