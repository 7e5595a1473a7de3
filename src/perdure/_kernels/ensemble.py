"""Reseeded bursts: weighted rows of a sweep, and the states that the next sweep starts from.

A state carries a weight, the probability that it stands for, and belongs to one replicate. Arrays of a block: cell i
owns bursts first[i] to first[i + 1]; weight (n_burst,), owner (n_burst,) the replicate of each.
"""

from __future__ import annotations

import numpy as np

from perdure._kernels.folders import kernel
from perdure._kernels.lane_math import GOLDEN, U11, mixed

__all__ = ["grouped", "merge_rows", "resample", "weigh_rows", "weigh_slots", "weigh_sums"]


@kernel
def weigh_rows(key, weight, owner, first, pointer, column, total):  # type: ignore[no-untyped-def]
    """Rows of weights of a block: key (n_burst,) int64 says where each burst ended.

    Fills pointer (n_box + 1,), column (n_burst,) ascending in a row, total (n_burst, n_replicate); returns the
    number of entries. Cost: n log n in a row.
    """
    at = 0
    pointer[0] = 0
    for i in range(first.shape[0] - 1):
        a, z = first[i], first[i + 1]
        order = np.argsort(key[a:z])
        last = np.int64(-1)
        for b in range(z - a):
            burst = a + order[b]
            if key[burst] != last:
                last = key[burst]
                column[at] = last
                for r in range(total.shape[1]):
                    total[at, r] = 0.0
                at += 1
            total[at - 1, owner[burst]] += weight[burst]
        pointer[i + 1] = at
    return at


@kernel
def weigh_slots(slots, weight, owner, first, n_slot, board, pointer, column, total):  # type: ignore[no-untyped-def]
    """Rows of marginal weights of a block, as `weigh_rows`.

    slots (n_sample, n_dim, n_burst) uint16; the column of component k, slot s is k * n_slot + s; board
    (n_dim * n_slot, n_replicate), zero on entry and exit. Returns the number of entries.
    """
    n_sample, n_dim, _ = slots.shape
    at = 0
    pointer[0] = 0
    for i in range(first.shape[0] - 1):
        for s in range(n_sample):
            for k in range(n_dim):
                for b in range(first[i], first[i + 1]):
                    board[k * n_slot + slots[s, k, b], owner[b]] += weight[b]
        for c in range(n_dim * n_slot):
            whole = 0.0
            for r in range(board.shape[1]):
                whole += board[c, r]
            if whole == 0.0:
                continue
            column[at] = c
            for r in range(board.shape[1]):
                total[at, r] = board[c, r]
                board[c, r] = 0.0
            at += 1
        pointer[i + 1] = at
    return at


@kernel
def weigh_sums(sums, weight, owner, first, out, whole):  # type: ignore[no-untyped-def]
    """Weighted sums over bursts: sums (n_sum, n_burst), adds to out (n_box, n_replicate, n_sum); weights to whole."""
    for i in range(first.shape[0] - 1):
        for b in range(first[i], first[i + 1]):
            whole[i, owner[b]] += weight[b]
        for g in range(sums.shape[0]):
            for b in range(first[i], first[i + 1]):
                out[i, owner[b], g] += weight[b] * sums[g, b]


@kernel
def merge_rows(pointer, column, total, more_pointer, more_column, more_total, out_pointer, out_column, out_total):  # type: ignore[no-untyped-def]
    """Sum of two sets of rows of one length, each row ascending; returns the number of entries.

    Fills out_pointer (n + 1,), out_column and out_total, long enough for both.
    """
    at = 0
    out_pointer[0] = 0
    n_replicate = total.shape[1]
    for i in range(pointer.shape[0] - 1):
        a, b = pointer[i], more_pointer[i]
        while a < pointer[i + 1] or b < more_pointer[i + 1]:
            left = column[a] if a < pointer[i + 1] else more_column[b]
            right = more_column[b] if b < more_pointer[i + 1] else column[a]
            out_column[at] = min(left, right)
            for r in range(n_replicate):
                out_total[at, r] = 0.0
            if a < pointer[i + 1] and left <= right:
                for r in range(n_replicate):
                    out_total[at, r] += total[a, r]
                a += 1
            if b < more_pointer[i + 1] and right <= left:
                for r in range(n_replicate):
                    out_total[at, r] += more_total[b, r]
                b += 1
            at += 1
        out_pointer[i + 1] = at
    return at


@kernel
def grouped(group, first, order):  # type: ignore[no-untyped-def]
    """Stable order by group: group (n,) int64 below n_group; fills first (n_group + 1,) and order (n,)."""
    first[:] = 0
    for p in range(group.shape[0]):
        first[group[p] + 1] += 1
    for g in range(first.shape[0] - 1):
        first[g + 1] += first[g]
    at = first[:-1].copy()
    for p in range(group.shape[0]):
        order[at[group[p]]] = p
        at[group[p]] += 1


@kernel
def resample(state, weight, order, first, word, blur, span, centre, out_first, out_state, out_weight, out_source):  # type: ignore[no-untyped-def]
    """States of the next sweep, by group (a cell and a replicate): a group keeps its weight exactly.

    state (n_dim, n), weight (n,); group g owns order[first[g]:first[g + 1]] and gets out_first[g] to
    out_first[g + 1] states. As many as before: they stay as they are. Otherwise systematic resampling with equal
    weights (J. Carpenter, P. Clifford and P. Fearnhead, IEE Proc. Radar Sonar Navig. 146 (1999) 2-7, cited from
    memory), each state expected in proportion to its weight. word (n_group,) uint64 is the group's randomness. With
    blur above 0 a state moves by up to that part of its distance to another state of its cell (`span` groups make a
    cell), failing that, to the centre (n_dim, n_cell), nan for none: a map that drops bits does not run out of them,
    and copies part ways. Fills out_source (n_out,) too: where each state comes from.
    """
    n_dim = state.shape[0]
    for g in range(first.shape[0] - 1):
        a, z = first[g], first[g + 1]
        to, n_out = out_first[g], out_first[g + 1] - out_first[g]
        n = z - a
        if n_out == 0:
            continue
        bits = mixed(word[g] + GOLDEN)
        whole = 0.0
        for b in range(a, z):
            whole += weight[order[b]]
        share = whole / n_out
        mark = share * np.float64(bits >> U11) * 1.1102230246251565e-16
        passed, b = weight[order[a]], a
        for c in range(n_out):
            if n == n_out:
                b = a + c
                out_weight[to + c] = weight[order[b]]
            else:
                while passed < mark and b < z - 1:
                    b += 1
                    passed += weight[order[b]]
                mark += share
                out_weight[to + c] = share
            source = order[b]
            for k in range(n_dim):
                out_state[k, to + c] = state[k, source]
            out_source[to + c] = source
            if blur == 0.0:
                continue
            bits = mixed(bits + GOLDEN)
            cell_a, cell_z = first[g // span * span], first[min(g // span * span + span, first.shape[0] - 1)]
            other = source
            if cell_z - cell_a > 1:
                # any other state of the cell but this one
                n_other = np.uint64(cell_z - cell_a - 1)
                other = order[cell_a + (b - cell_a + 1 + np.int64(bits % n_other)) % (cell_z - cell_a)]
            for k in range(n_dim):
                bits = mixed(bits + GOLDEN)
                distance = state[k, other] - state[k, source]
                if other == source:
                    distance = centre[k, g // span] - state[k, source]
                if distance != distance:
                    continue
                out_state[k, to + c] += blur * 1.1102230246251565e-16 * np.float64(bits >> U11) * distance
