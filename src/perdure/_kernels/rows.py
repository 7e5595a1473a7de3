"""From burst end points to finished rows: locate, sort a row's few dozen integers in place, count runs.

The list of all samples is never formed: a block of boxes at a time comes in, its rows go out.
"""

from __future__ import annotations

import numpy as np

from perdure._kernels.folders import kernel

__all__ = ["BLOWN", "OUTSIDE", "count_rows", "count_slots", "find_ids", "insert_keys", "locate", "sum_rows"]

# Beyond every box key; they sort last in a row. Keys stay below 2**56, so that key * replicates fits in 64 bits.
OUTSIDE = 2**56
BLOWN = 2**56 + 1
GOLDEN = np.uint64(0x9E3779B97F4A7C15)
EMPTY = -1


@kernel
def locate(state, lower, width, counts, periodic, key):  # type: ignore[no-untyped-def]
    """Box key of each point: state (n_dim, n), fills key (n,); OUTSIDE beyond the lattice, BLOWN for nan."""
    n_dim, n = state.shape
    for p in range(n):
        key[p] = 0
    for k in range(n_dim):
        inverse = 1.0 / width[k]
        count = counts[k]
        for p in range(n):
            x = state[k, p]
            slot = np.floor((x - lower[k]) * inverse)
            if periodic[k]:
                slot -= count * np.floor(slot / count)
            inside = (slot >= 0.0) & (slot < count)
            if key[p] < OUTSIDE:
                key[p] = key[p] * count + np.int64(slot) if inside else OUTSIDE
            if x != x:
                key[p] = BLOWN


@kernel
def count_rows(key, first, n_replicate, code, pointer, column, count):  # type: ignore[no-untyped-def]
    """Rows of counts of a block.

    key (n_burst,) int64; first (n_box + 1,) int64; a box's bursts are `n_replicate` equal runs.
    code (n_burst,) int64: work space. Fills pointer (n_box + 1,), column (n_burst,) and count (n_burst,
    n_replicate), ascending columns, duplicates summed; returns the number of entries. Cost: n log n in a row.
    """
    at = 0
    pointer[0] = 0
    for i in range(first.shape[0] - 1):
        a, z = first[i], first[i + 1]
        size = (z - a) // n_replicate
        for r in range(n_replicate):
            for b in range(a + r * size, a + (r + 1) * size):
                code[b] = key[b] * n_replicate + r
        row = code[a:z]
        if z - a <= 48:
            for b in range(1, z - a):
                v = row[b]
                c = b - 1
                while c >= 0 and row[c] > v:
                    row[c + 1] = row[c]
                    c -= 1
                row[c + 1] = v
        else:
            row.sort()
        last = np.int64(-1)
        for b in range(z - a):
            target = row[b] // n_replicate
            if target != last:
                column[at] = target
                for r in range(n_replicate):
                    count[at, r] = 0
                at += 1
                last = target
            count[at - 1, row[b] - target * n_replicate] += 1
        pointer[i + 1] = at
    return at


@kernel
def count_slots(slots, first, n_replicate, n_slot, board, pointer, column, count):  # type: ignore[no-untyped-def]
    """Rows of marginal counts of a block, as `count_rows`.

    slots (n_sample, n_dim, n_burst) uint16; the column of component k, slot s is k * n_slot + s; board
    (n_dim * n_slot, n_replicate) int64, zero on entry and exit. Returns the number of entries, or -1 if
    `column` is too short.
    """
    n_sample, n_dim, _ = slots.shape
    at = 0
    pointer[0] = 0
    for i in range(first.shape[0] - 1):
        a, z = first[i], first[i + 1]
        size = (z - a) // n_replicate
        for s in range(n_sample):
            for k in range(n_dim):
                for r in range(n_replicate):
                    for b in range(a + r * size, a + (r + 1) * size):
                        board[k * n_slot + slots[s, k, b], r] += 1
        for c in range(n_dim * n_slot):
            total = 0
            for r in range(n_replicate):
                total += board[c, r]
            if total == 0:
                continue
            if at == column.shape[0]:
                return -1
            column[at] = c
            for r in range(n_replicate):
                count[at, r] = board[c, r]
                board[c, r] = 0
            at += 1
        pointer[i + 1] = at
    return at


@kernel
def sum_rows(sums, first, n_replicate, out):  # type: ignore[no-untyped-def]
    """Sums over the bursts of each box and replicate: sums (n_sum, n_burst), fills out (n_box, n_replicate, n_sum)."""
    for i in range(first.shape[0] - 1):
        size = (first[i + 1] - first[i]) // n_replicate
        for r in range(n_replicate):
            a = first[i] + r * size
            for g in range(sums.shape[0]):
                total = 0.0
                for b in range(a, a + size):
                    total += sums[g, b]
                out[i, r, g] = total


@kernel
def insert_keys(table_key, table_id, keys, start):  # type: ignore[no-untyped-def]
    """Enter keys (n,) with ids start, start + 1, ... into an open-addressing table (size a power of two)."""
    mask = table_key.shape[0] - 1
    for i in range(keys.shape[0]):
        h = np.int64((np.uint64(keys[i]) * GOLDEN) >> np.uint64(20)) & mask
        while table_key[h] != EMPTY:
            h = (h + 1) & mask
        table_key[h] = keys[i]
        table_id[h] = start + i


@kernel
def find_ids(table_key, table_id, keys, missing, out):  # type: ignore[no-untyped-def]
    """Ids of keys, `missing` where a key is not in the table; OUTSIDE and BLOWN are not."""
    mask = table_key.shape[0] - 1
    for i in range(keys.shape[0]):
        h = np.int64((np.uint64(keys[i]) * GOLDEN) >> np.uint64(20)) & mask
        while table_key[h] != EMPTY and table_key[h] != keys[i]:
            h = (h + 1) & mask
        out[i] = table_id[h] if table_key[h] == keys[i] else missing
