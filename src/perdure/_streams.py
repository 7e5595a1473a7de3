"""From the one seed of a case to independent random streams, by purpose."""

from __future__ import annotations

import numpy as np

__all__ = ["generator", "seed_words"]

# Purposes keep their number for ever: a new purpose takes the next one, so that no old result changes.
PURPOSES = {"bursts": 0, "pilot": 1, "sobol": 2, "signs": 3, "sample": 4, "outside": 5, "reseed": 6, "crosscheck": 7}


def sequence(seed: int, purpose: str) -> np.random.SeedSequence:
    return np.random.SeedSequence(seed, spawn_key=(PURPOSES[purpose],))


def generator(seed: int, purpose: str) -> np.random.Generator:
    """numpy generator for work outside the kernels; the same for the same seed and purpose."""
    return np.random.Generator(np.random.PCG64DXSM(sequence(seed, purpose)))


def seed_words(seed: int, purpose: str) -> tuple[np.uint64, np.uint64]:
    """128 bits that key the streams drawn inside kernels."""
    low, high = sequence(seed, purpose).generate_state(2, np.uint64)
    return low, high
