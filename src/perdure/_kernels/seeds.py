"""Seed points of bursts inside boxes, and the random stream of every burst.

A stream belongs to (seed, sweep, box key, burst), never to a thread or a batch: neither the number of workers
nor the order of the work can change a draw. Keys are hashed by the finaliser of SplitMix64.
"""

from __future__ import annotations

import numpy as np

from perdure._kernels.folders import kernel
from perdure._kernels.lane_math import GOLDEN, U11, mixed

U32 = np.uint64(32)
POINT_SALT = np.uint64(0xD1B54A32D192ED03)


@kernel
def box_hash(seed_low, seed_high, sweep, key):  # type: ignore[no-untyped-def]
    """64 bits that belong to a box in a sweep of a run."""
    h = mixed(seed_low + GOLDEN)
    h = mixed((h ^ seed_high) + GOLDEN)
    h = mixed((h ^ sweep) + GOLDEN)
    return mixed((h ^ np.uint64(key)) + GOLDEN)


@kernel
def burst_streams(seed_low, seed_high, sweep, keys, first, stream):  # type: ignore[no-untyped-def]
    """Stream word of each burst.

    keys (n_box,) int64; first (n_box + 1,) int64, offsets of each box's bursts; fills stream (n_burst,) uint64.
    """
    for i in range(keys.shape[0]):
        h = box_hash(seed_low, seed_high, sweep, keys[i])
        for b in range(first[i], first[i + 1]):
            stream[b] = mixed(h + np.uint64(b - first[i] + 1) * GOLDEN)


@kernel
def box_seeds(seed_low, seed_high, sweep, keys, index, first, n_replicate, base, lower, width, ends, state):  # type: ignore[no-untyped-def]
    """Seed points, one row of `state` per component.

    keys (n_box,) int64; index (n_box, n_dim) int64; first (n_box + 1,) int64; base (m, n_dim) uint32: a scrambled
    Sobol set used by every replicate under its own random digital shift (R. Cranley and T. Patterson's idea in
    base 2, as in P. L'Ecuyer and C. Lemieux, 2002, cited from memory), or m = 0 for independent uniform points;
    ends (n_dim, 2): points stay between them in boxes that straddle an end; fills state (n_dim, n_burst). The 32 bits
    of the set are topped up to 53 with random bits.
    """
    n_dim = state.shape[0]
    for i in range(keys.shape[0]):
        h = box_hash(seed_low, seed_high, sweep, keys[i]) ^ POINT_SALT
        size = (first[i + 1] - first[i]) // n_replicate
        for r in range(n_replicate):
            for k in range(n_dim):
                shift = mixed(h + np.uint64(r * n_dim + k + 1) * GOLDEN) >> U32
                inner = mixed(h ^ (np.uint64(r * n_dim + k + 1) * POINT_SALT))
                box = lower[k] + index[i, k] * width[k]
                a, z = max(box, ends[k, 0]), min(box + width[k], ends[k, 1])
                if a >= z:
                    a, z = box, box + width[k]
                for b in range(size):
                    bits = mixed(inner + np.uint64(b + 1) * GOLDEN)
                    if base.shape[0] > 0:
                        bits = ((np.uint64(base[b, k]) ^ shift) << U32) | (bits >> U32)
                    u = np.float64(bits >> U11) * 1.1102230246251565e-16
                    state[k, first[i] + r * size + b] = a + u * (z - a)
