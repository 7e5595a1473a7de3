"""Reseeded bursts: a weighted ensemble of states that starts where earlier bursts arrived.

Every state carries a weight. A sweep flies all of them for one burst; then, cell by cell, their number is brought back
to what the cell is given, and the weight of the cell is kept exactly: the weighted ensemble of G. A. Huber and
S. Kim, Biophys. J. 70 (1996) 97-110 (cited from memory). Resampling that keeps weights is unbiased, so that the
mean over sweeps of the weights, and of what bursts find, has the long-run law whatever the size of the cells and
however few states they hold; only the first sweeps remember the start. The matrix of the weighted bursts gives back
what slow modes had no time to do (D. Bhatt, B. W. Zhang and D. M. Zuckerman, J. Chem. Phys. 133 (2010) 014110, cited
from memory).

Copies of a state stay together where nothing but noise parts them. With noise a cell that is rarely reached is filled
up with copies; without noise states are only merged, never copied.
"""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from perdure._kernels.ensemble import grouped, resample, weigh_rows, weigh_slots, weigh_sums
from perdure._kernels.rows import BLOWN, OUTSIDE
from perdure._records import Floats, Integers
from perdure._sampling.bursts import LANES_PER_BLOCK, STEPS_PER_BLOCK, BurstSampler

__all__ = ["Ensemble", "Known", "Starts", "WeightedRows", "seeds_in"]

# Part of the way to a neighbour that a state may move when it is reseeded, in a system without noise: a map that drops
# a bit a step would otherwise run out of bits (the doubling map reaches 0 after 53 steps).
BLUR = 2.0**-20
# Sweeps are numbered from here: their random streams are those of no other bursts.
FIRST_SWEEP = 2**20
# States that a cell may hold without noise, over those that its weight gives it.
SLACK = 1.5
# States that stand outside the domain, in all replicates together.
OUTSIDE_STATES = 8192


class Known(Protocol):
    """The cells in use, numbered in the order of discovery."""

    @property
    def keys(self) -> Integers: ...
    @property
    def count(self) -> int: ...
    def add(self, keys: Integers) -> Integers: ...
    def ids(self, keys: Integers, missing: int) -> NDArray[np.int32]: ...


@dataclass(frozen=True)
class WeightedRows:
    """Rows of a sweep: `keys` of the cells that sent bursts, ascending, OUTSIDE last if it is among them.

    Attributes
    ----------
    pointer, column, total
        Compressed rows: `column` holds keys, ascending; total (n_entry, n_replicate) float32 the weights that went.
    sums : ndarray, shape (n_row, n_replicate, n_sum)
        Weighted sums along the bursts.
    weight : ndarray, shape (n_row, n_replicate)
        Weight that flew, in double precision.
    slot_pointer, slot, slot_total
        Compressed rows of the weighted marginal counts.
    bursts : ndarray of int64, shape (n_row,)
        Bursts sent from each cell.
    n_blown : int
        Bursts that blew up; they are in no row.
    """

    keys: Integers
    pointer: Integers
    column: Integers
    total: NDArray[np.float32]
    sums: Floats
    weight: Floats
    slot_pointer: Integers
    slot: NDArray[Any]
    slot_total: NDArray[np.float32]
    bursts: Integers
    n_blown: int = 0


@dataclass(frozen=True)
class Starts:
    """Points that bursts start from: state (n_dim, n), weight, key of the cell and replicate `owner`, (n,) each."""

    state: Floats
    weight: Floats
    key: Integers
    owner: Integers


class Ensemble:
    """States with weights, in groups: one group per cell and replicate, cells in the order of their keys.

    Parameters
    ----------
    sampler : BurstSampler
    known : Known
        The cover; it grows by arrivals.
    n_replicate : int
        Independent ensembles flown side by side.
    n_most : int
        States of a replicate, about; every cell reached keeps one in any case.
    copies : bool
        Fill groups up with copies of their states (systems with noise).
    salt : uint64
        Keys the draws of the resampling.

    Attributes
    ----------
    state : ndarray, shape (n_dim, n_state)
    weight : ndarray, shape (n_state,)
        Sums to one over a replicate and regime.
    place, owner : ndarray of int64, shape (n_state,)
        Position of the cell in the order of keys (the number of cells: outside), ascending, and replicate.
    """

    def __init__(
        self,
        sampler: BurstSampler,
        known: Known,
        n_replicate: int,
        n_most: int,
        *,
        copies: bool,
        salt: np.uint64,
    ) -> None:
        self.sampler, self.known, self.n_replicate = sampler, known, n_replicate
        self.n_most, self.copies, self.salt = n_most, copies, salt
        self.number = FIRST_SWEEP
        self.share = np.zeros(0)
        self._sort()

    def start(self, keys: Integers, mass: Floats, share: Floats) -> None:
        """Uniform seeds in the cells keys (n,), ascending, of weights mass (n,); share (n,) as in `allot`."""
        self.allot(keys, share)
        number = np.maximum(1, np.round(self.n_most * (share if self.copies else mass / mass.sum()))).astype(np.int64)
        self.state, cell, self.owner = seeds_in(self.sampler, keys, number, self.n_replicate, self.number)
        self.weight = (mass / number)[cell]
        self.place = self._rank[self.known.ids(keys, -1)][cell]

    def allot(self, keys: Integers, share: Floats) -> None:
        """Give the cells keys (n,) these shares of the states; systems without noise go by weight instead."""
        self.share = np.zeros(self.known.count)
        self.share[self.known.ids(keys, -1)] = share

    @property
    def n_state(self) -> int:
        return len(self.weight)

    def keys_at(self, place: Integers) -> Integers:
        """Keys of positions in the order of cells; OUTSIDE for the one behind the last."""
        return np.append(self._ordered, OUTSIDE)[place]

    def _sort(self) -> None:
        """Order of the cells by key, after the cover has grown."""
        keys = self.known.keys
        order = np.argsort(keys, kind="stable")
        self._ordered = keys[order]
        self._rank = np.empty(len(keys), dtype=np.int64)
        self._rank[order] = np.arange(len(keys))
        outside = np.full((self.sampler.cells.n_dim, 1), np.nan)
        self._centres = np.concatenate([self.sampler.cells.centres(self._ordered), outside], axis=1)

    def sweep(self, workers: int) -> WeightedRows:
        """Fly all states for one burst, reseed; the rows of the sweep."""
        cuts = np.flatnonzero(np.diff(self.place)) + 1
        begins = np.concatenate([[0], cuts, [self.n_state]])
        key = np.empty(self.n_state, dtype=np.int64)
        blocks = list(self._blocks(begins))

        def work(block: tuple[int, int]) -> WeightedRows:
            return self._fly(begins[block[0] : block[1] + 1], key)

        if workers == 1 or len(blocks) < 2:
            rows = [work(block) for block in blocks]
        else:
            with ThreadPoolExecutor(workers) as pool:
                rows = list(pool.map(work, blocks))
        self._reseed(key)
        self.number += 1
        return stacked(rows)

    def _blocks(self, begins: Integers) -> Iterator[tuple[int, int]]:
        """Ranges of cells with about as many bursts as a block may have."""
        lanes = max(1, int(min(LANES_PER_BLOCK, STEPS_PER_BLOCK / self.sampler.plan.n_step)))
        at = 0
        while at < len(begins) - 1:
            to = max(at + 1, int(np.searchsorted(begins, begins[at] + lanes, side="right")) - 1)
            yield at, to
            at = to

    def _fly(self, begins: Integers, key: Integers) -> WeightedRows:
        """Rows of a range of cells; their states move on, `key` takes the cells that they reach."""
        sampler, n_rep = self.sampler, self.n_replicate
        a, z = int(begins[0]), int(begins[-1])
        first = begins - a
        cells = self.keys_at(self.place[begins[:-1]])
        state = np.ascontiguousarray(self.state[:, a:z])
        weight, owner = self.weight[a:z], self.owner[a:z]
        sums, slots, n_blown = sampler.flown(cells, first, state, self.number)
        self.state[:, a:z] = state
        reached = np.empty(z - a, dtype=np.int64)
        sampler.cells.locate(state, reached)
        blown = reached == BLOWN
        if n_blown:
            weight = np.where(blown, 0.0, weight)
        key[a:z] = reached
        n_box = len(cells)
        pointer, column = np.empty(n_box + 1, dtype=np.int64), np.empty(z - a, dtype=np.int64)
        total = np.empty((z - a, n_rep))
        n_entry = weigh_rows(reached, weight, owner, first, pointer, column, total)
        added, whole = np.zeros((n_box, n_rep, sampler.n_sum)), np.zeros((n_box, n_rep))
        weigh_sums(sums, weight, owner, first, added, whole)
        n_slot, (n_sample, n_dim, _) = sampler.n_interval + 2, slots.shape
        most = min(n_box * n_dim * n_slot, n_sample * n_dim * (z - a))
        board = np.zeros((n_dim * n_slot, n_rep))
        slot_pointer = np.empty(n_box + 1, dtype=np.int64)
        slot = np.empty(most, dtype=np.min_scalar_type(max(n_dim * n_slot, 256)))
        slot_total = np.empty((most, n_rep))
        n_slots = weigh_slots(slots, weight, owner, first, n_slot, board, slot_pointer, slot, slot_total)
        return WeightedRows(
            cells,
            pointer,
            column[:n_entry].copy(),
            total[:n_entry].astype(np.float32),
            added,
            whole,
            slot_pointer,
            slot[:n_slots].copy(),
            slot_total[:n_slots].astype(np.float32),
            np.diff(first),
            n_blown,
        )

    def _reseed(self, key: Integers) -> None:
        """States of the next sweep from the arrivals, whose keys are key (n_state,)."""
        n_rep = self.n_replicate
        if len(self.known.add(key)):
            self._sort()
        ids = self.known.ids(key, -1)
        place = np.where(ids >= 0, self._rank[ids], self.known.count)
        fine = key != BLOWN
        weight = np.where(fine, self.weight, 0.0)
        # a state that blew up leaves its weight to the others of its replicate
        kept = np.bincount(self.owner, weights=weight, minlength=n_rep)
        before = np.bincount(self.owner, weights=self.weight, minlength=n_rep)
        weight *= (before / np.where(kept > 0.0, kept, 1.0))[self.owner]
        n_group = (self.known.count + 1) * n_rep
        group = np.where(fine, place * n_rep + self.owner, n_group)
        first, order = np.empty(n_group + 2, dtype=np.int64), np.empty(len(group), dtype=np.int64)
        grouped(group, first, order)
        first = first[:-1]
        held = np.diff(first)
        inside = np.bincount(group[fine], weights=weight[fine], minlength=n_group).astype(float)
        wanted = self._wanted(inside)
        number = np.where(held > 0, wanted if self.copies else np.minimum(held, wanted), 0)
        out_first = np.concatenate([[0], np.cumsum(number)])
        state, out_weight = np.empty((len(self.state), int(out_first[-1]))), np.empty(int(out_first[-1]))
        word = np.empty(n_group, dtype=np.uint64)
        cells = np.append(self._ordered, OUTSIDE)
        offsets = np.arange(len(cells) + 1, dtype=np.int64) * n_rep
        self.sampler.cells.fill_streams(cells, offsets, self.number, word)
        # the same words start the streams of bursts
        word ^= self.salt
        blur = 0.0 if self.copies else BLUR
        source = np.empty(len(out_weight), dtype=np.int64)
        resample(
            self.state, weight, order, first, word, blur, n_rep, self._centres, out_first, state, out_weight, source
        )
        group = np.repeat(np.arange(n_group), number)
        self.state, self.weight = state, out_weight
        self.place, self.owner = group // n_rep, group % n_rep

    def thinned(self, n_most: int) -> Starts:
        """States of about the same law, at most `n_most`, a few from every group where that is enough."""
        n_rep = self.n_replicate
        group = self.place * n_rep + self.owner
        cuts = np.concatenate([[0], np.flatnonzero(np.diff(group)) + 1, [self.n_state]])
        # states were put down group by group: of each group the first, or all that are left of one replicate
        few = n_most // (len(cuts) - 1)
        if few == 0:
            order = np.argsort(self.owner, kind="stable")
            first = np.searchsorted(self.owner[order], np.arange(n_rep + 1))
            number = np.full(n_rep, n_most // n_rep)
        else:
            order, first = np.arange(self.n_state), cuts
            number = np.minimum(np.diff(cuts), few)
        out_first = np.concatenate([[0], np.cumsum(number)])
        n = int(out_first[-1])
        state, weight, at = np.empty((len(self.state), n)), np.empty(n), np.empty(n, dtype=np.int64)
        word = np.full(len(number), self.salt ^ np.uint64(self.number)) ^ (
            np.arange(len(number), dtype=np.uint64) << np.uint64(32)
        )
        none = np.zeros((len(self.state), 0))
        resample(self.state, self.weight, order, first, word, 0.0, 1, none, out_first, state, weight, at)
        return Starts(state, weight, self.keys_at(self.place[at]), self.owner[at])

    def _wanted(self, weight: Floats) -> Integers:
        """States that every group may hold, shape ((n_cell + 1) * n_replicate,); weight (same shape) is what it holds.

        Without noise nothing is won by copies, and states of even weight are best: merging takes away only what is
        beyond that, with room for the scatter of arrivals.
        """
        n_rep = self.n_replicate
        if self.copies:
            share = np.zeros(self.known.count + 1)
            ids = self.known.ids(self._ordered, -1)
            old = ids < len(self.share)
            share[:-1][old] = self.share[ids[old]]
            wanted = np.repeat(np.maximum(np.round(self.n_most * share), 1), n_rep)
        else:
            wanted = np.maximum(np.ceil(SLACK * self.n_most * weight * n_rep / weight.sum()), 2)
        wanted[-n_rep:] = np.maximum(wanted[-n_rep:], OUTSIDE_STATES // n_rep)
        return np.asarray(wanted.astype(np.int64))


def seeds_in(
    sampler: BurstSampler, keys: Integers, number: Integers, n_replicate: int, sweep: int
) -> tuple[Floats, Integers, Integers]:
    """Uniform seeds, number[i] per replicate in the cell keys[i]: points (n_dim, n), cell (its place in keys), owner.

    Cells ascend. The seeds of a sweep number are a set of as many points as plain bursts have: more of them are taken
    from the numbers that follow.
    """
    most = max(1, sampler.plan.per_cell // sampler.plan.n_replicate)
    parts = []
    for turn in range(-(-int(number.max()) // most)):
        part = np.clip(number - turn * most, 0, most)
        cell = np.flatnonzero(part)
        first = np.concatenate([[0], np.cumsum(part[cell] * n_replicate)])
        state = np.empty((sampler.cells.n_dim, int(first[-1])))
        sampler.cells.fill_seeds(keys[cell], first, n_replicate, sweep + turn, state)
        owner = np.tile(np.arange(n_replicate), len(cell))
        parts.append(
            (state, np.repeat(cell, part[cell] * n_replicate), np.repeat(owner, np.repeat(part[cell], n_replicate)))
        )
    state = np.concatenate([part[0] for part in parts], axis=1)
    cell, owner = (np.concatenate([part[k] for part in parts]) for k in (1, 2))
    order = np.lexsort((owner, cell))
    return np.ascontiguousarray(state[:, order]), cell[order], owner[order]


def stacked(rows: list[WeightedRows]) -> WeightedRows:
    """Blocks of rows one below the other."""

    def pointers(parts: list[Integers]) -> Integers:
        lengths = np.concatenate([np.diff(part) for part in parts])
        return np.concatenate([[0], np.cumsum(lengths)])

    return WeightedRows(
        np.concatenate([r.keys for r in rows]),
        pointers([r.pointer for r in rows]),
        np.concatenate([r.column for r in rows]),
        np.concatenate([r.total for r in rows]),
        np.concatenate([r.sums for r in rows]),
        np.concatenate([r.weight for r in rows]),
        pointers([r.slot_pointer for r in rows]),
        np.concatenate([r.slot for r in rows]),
        np.concatenate([r.slot_total for r in rows]),
        np.concatenate([r.bursts for r in rows]),
        sum(r.n_blown for r in rows),
    )
