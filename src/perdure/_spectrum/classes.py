"""Which cells lead where: closed classes and their periods, before any eigen-solve."""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.sparse import csr_array
from scipy.sparse.csgraph import connected_components, dijkstra

from perdure._records import Floats, Integers, Tally

__all__ = ["Classes", "closed_classes", "lasting", "parts_without", "period_of"]


# Least part of the weight that a set of cells without a way back must hold to be a regime.
STRAY = 0.01


@dataclass(frozen=True)
class Classes:
    """Closed (recurrent) classes of cells.

    Attributes
    ----------
    members : tuple of ndarray of int64
        Cells of each closed class, ascending; the class with most cells first.
    leaks : ndarray of bool, shape (n_cell,)
        Cells from which a burst ended outside or blew up.
    """

    members: tuple[Integers, ...]
    leaks: NDArray[np.bool_]


def pattern(tally: Tally) -> csr_array:
    """Graph of the cells and, as two last nodes without a way back, outside and blown up."""
    n = tally.n_cell
    pointer = np.concatenate([tally.pointer, [tally.pointer[-1]] * 2])
    if pointer[-1] < np.iinfo(np.int32).max:
        pointer = pointer.astype(np.int32)
    return csr_array((np.ones(len(tally.column)), tally.column, pointer), shape=(n + 2, n + 2))


def closed_classes(tally: Tally) -> Classes:
    """Strongly connected components without a way out (R. Tarjan's theorem on condensations; by scipy)."""
    n = tally.n_cell
    _, label = connected_components(pattern(tally), directed=True, connection="strong")
    origin = np.repeat(label[:n], np.diff(tally.pointer))
    is_open = np.zeros(label.max() + 1, dtype=bool)
    is_open[origin[origin != label[tally.column]]] = True
    is_open[label[n:]] = True
    leaks = np.zeros(n, dtype=bool)
    leaks[np.searchsorted(tally.pointer, np.flatnonzero(tally.column >= n), side="right") - 1] = True
    order = np.argsort(label[:n], kind="stable")
    cuts = np.flatnonzero(np.diff(label[:n][order])) + 1
    groups = [np.sort(group) for group in np.split(order, cuts) if len(group) and not is_open[label[group[0]]]]
    groups.sort(key=lambda group: (-len(group), int(group[0])))
    return Classes(tuple(group.astype(np.int64) for group in groups), leaks)


def lasting(pointer: Integers, place: Integers, weight: Floats) -> NDArray[np.bool_]:
    """Rows of weighted bursts that can stand for the long run, shape (n,).

    Not among them are cells that sent nothing, cells that lead nowhere else, and sets of cells without a way back that
    hold less than `STRAY` of all weight: what the last sweeps had no time to leave.

    Parameters
    ----------
    pointer : ndarray of int64, shape (n + 1,)
        Compressed rows.
    place : ndarray of int64, shape (n_entry,)
        Row that an entry leads to; -1 where there is none.
    weight : ndarray, shape (n_entry,)
    """
    n = len(pointer) - 1
    row = np.repeat(np.arange(n), np.diff(pointer))
    whole = np.bincount(row, weights=weight, minlength=n)
    keep = whole > 0.0
    while True:
        live = (place >= 0) & (weight > 0.0) & keep[row] & keep[place]
        a, z = row[live], place[live]
        graph = csr_array((np.ones(len(a)), (a, z)), shape=(n, n))
        count, label = connected_components(graph, directed=True, connection="strong")
        is_open = np.zeros(count, dtype=bool)
        is_open[label[a[label[a] != label[z]]]] = True
        held = np.bincount(label, weights=whole * keep, minlength=count)
        stray = ~is_open & (held < STRAY * whole.sum())
        dead = keep & (np.bincount(a, minlength=n) == 0)
        drop = dead | (keep & stray[label])
        if np.array_equal(drop, keep):
            # nothing but light sets is left: none of them is more of a stray than another
            drop = dead
        if not drop.any():
            return keep
        keep = keep & ~drop


def parts_without(tally: Tally, members: Integers, mass: Floats, cell: int) -> Floats:
    """Masses of the parts into which a closed class falls when one of its cells is taken out, largest first.

    mass (n_cell,). A part is a strongly connected component of the cells that are left.
    """
    rest = members[members != cell]
    count, label = connected_components(pattern(tally)[rest][:, rest], directed=True, connection="strong")
    return np.asarray(np.sort(np.bincount(label, weights=mass[rest], minlength=count))[::-1], dtype=float)


def period_of(tally: Tally, members: Integers) -> int:
    """Greatest common divisor of the lengths of the cycles of a closed class.

    For any spanning levels d it is the gcd of d[i] + 1 - d[j] over the edges (E. V. Denardo, Manag. Sci. 24
    (1977) 83-91, cited from memory).
    """
    graph = pattern(tally)[members][:, members]
    rows = np.repeat(np.arange(len(members)), np.diff(graph.indptr))
    if np.any(rows == graph.indices):
        return 1
    level = dijkstra(graph, directed=True, indices=0, unweighted=True).astype(np.int64)
    return math.gcd(*np.unique(np.abs(level[rows] + 1 - level[graph.indices])).tolist())
