"""Versions of one published table, their rows lined up by key.

Belongs here: which row of one version is which of another, and where they differ. Does not belong here: why
they differ (`catalog/changes.py`).
"""

from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc

from contracts.tables import Table


class LinedUp:
    """Versions of a table side by side: row i of each is the same key, or is not there.

    Rows stand in the table's order of key. All masks are (rows,).
    """

    def __init__(self, table: Table, versions: list[pa.Table]) -> None:
        self.table, self.versions = table, versions
        codes = np.zeros(sum(version.num_rows for version in versions), dtype=np.int64)
        for name in table.key:
            chunks = [chunk for version in versions for chunk in version[name].chunks]
            joined = pa.chunked_array(chunks, versions[0][name].type)
            ranks = pc.rank(joined, "ascending", tiebreaker="dense").to_numpy() if len(joined) else codes
            codes = codes * (int(ranks.max(initial=0)) + 1) + ranks.astype(np.int64)
        keys, inverse = np.unique(codes, return_inverse=True)
        self.rows = len(keys)
        self._places = []
        start = 0
        for version in versions:
            place = np.full(self.rows, -1, dtype=np.int64)
            place[inverse[start : start + version.num_rows]] = np.arange(version.num_rows)
            self._places.append(place)
            start += version.num_rows

    def has(self, version: int) -> np.ndarray:
        """Where a version has the row."""
        return self._places[version] >= 0

    def column(self, version: int, name: str) -> pa.Array:
        """A column of a version, null where the row is not there."""
        place = self._places[version]
        values = self.versions[version][name].combine_chunks()
        return values.take(pa.array(np.maximum(place, 0), mask=place < 0))

    def numbers(self, version: int, name: str) -> np.ndarray:
        """A column of numbers or of days as their numbers, NaN where it is null or the row is not there."""
        column = self.column(version, name)
        if pa.types.is_date32(column.type):
            column = column.cast(pa.int32())
        return np.asarray(column.cast(pa.float64()).to_numpy(zero_copy_only=False))

    def differs(self, first: int, second: int, name: str) -> np.ndarray:
        """Where both versions have the row and its value differs; two nulls do not."""
        one, other = self.column(first, name), self.column(second, name)
        same = pc.or_(pc.fill_null(pc.equal(one, other), False), pc.and_(pc.is_null(one), pc.is_null(other)))
        return ~np.asarray(same.to_numpy(zero_copy_only=False)) & self.has(first) & self.has(second)

    def key(self, row: int) -> dict[str, Any]:
        """The key of a row, as plain values."""
        version = next(at for at, place in enumerate(self._places) if place[row] >= 0)
        at = int(self._places[version][row])
        return {name: self.versions[version][name][at].as_py() for name in self.table.key}

    def value(self, version: int, row: int, name: str) -> Any:
        """One value, None where it is null or the row is not there."""
        at = int(self._places[version][row])
        return self.versions[version][name][at].as_py() if at >= 0 else None
