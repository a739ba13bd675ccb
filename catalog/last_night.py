"""What the last night came to, as one JSON file in the store for whoever watches it.

Belongs here: the file and its place. Does not belong here: gathering it (`summary.py`). It tells of a night
with its clock times; the record that counts is `runs` and the snapshots.
"""

import json
from typing import Any

from catalog.places import Places, store_errors, write_whole


def write_last_night(places: Places, told: dict[str, Any]) -> None:
    """Put what is told in place of what was told of the night before, whole; raises StoreError."""
    text = json.dumps(told, sort_keys=True, indent=1, allow_nan=False, default=str) + "\n"
    with store_errors("what the last night came to could not be written"):
        write_whole(places.last_night, text.encode())
