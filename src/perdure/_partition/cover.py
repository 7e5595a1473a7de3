"""The cells in use: found by the pilot, grown by the arrivals of bursts."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from perdure._kernels.rows import OUTSIDE, find_ids, insert_keys
from perdure._records import Integers

__all__ = ["Cover"]


class Cover:
    """Keys of the cells in use, numbered in the order of discovery.

    Memory is proportional to the cells used, not to the lattice: an open-addressing table from key to number.
    """

    def __init__(self, most: int) -> None:
        self.most = most
        self.count = 0
        self.full = False
        self._keys: list[Integers] = []
        self._table_key = np.full(1024, -1, dtype=np.int64)
        self._table_id = np.zeros(1024, dtype=np.int32)

    @property
    def keys(self) -> Integers:
        """All keys in the order of discovery, shape (count,)."""
        return np.concatenate(self._keys) if self._keys else np.zeros(0, dtype=np.int64)

    def add(self, keys: Integers) -> Integers:
        """Enter those of `keys` that are new, ascending; returns them. At the limit `full` is set instead."""
        keys = np.unique(keys)
        keys = keys[keys < OUTSIDE]
        new = keys[self.ids(keys, -1) < 0]
        if len(new) > self.most - self.count:
            self.full = True
            new = new[: self.most - self.count]
        if len(new):
            self._make_room(self.count + len(new))
            insert_keys(self._table_key, self._table_id, new, self.count)
            self._keys.append(new)
            self.count += len(new)
        return new

    def ids(self, keys: Integers, missing: int) -> NDArray[np.int32]:
        """Number of each key, `missing` for keys not in the cover."""
        out = np.empty(len(keys), dtype=np.int32)
        find_ids(self._table_key, self._table_id, keys, missing, out)
        return out

    def _make_room(self, count: int) -> None:
        size = len(self._table_key)
        if 2 * count <= size:
            return
        while size < 4 * count:
            size *= 2
        self._table_key = np.full(size, -1, dtype=np.int64)
        self._table_id = np.zeros(size, dtype=np.int32)
        insert_keys(self._table_key, self._table_id, self.keys, 0)
