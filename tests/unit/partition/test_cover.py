"""The cover against a plain set."""

from __future__ import annotations

import numpy as np
from hypothesis import given
from hypothesis import strategies as st

from perdure._kernels.rows import BLOWN, OUTSIDE
from perdure._partition import Cover

KEY = st.one_of(st.integers(0, 40), st.integers(0, 2**56 - 1), st.sampled_from([OUTSIDE, BLOWN]))


@given(st.lists(st.lists(KEY, max_size=60), max_size=8))
def test_cover_grows_as_a_set(waves: list[list[int]]) -> None:
    """New keys come back ascending and once; numbers count the order of discovery."""
    cover, known = Cover(10_000), dict[int, int]()
    for wave in waves:
        fresh = sorted({key for key in wave if key < OUTSIDE} - set(known))
        np.testing.assert_array_equal(cover.add(np.array(wave, dtype=np.int64)), fresh)
        known |= {key: len(known) + k for k, key in enumerate(fresh)}
    asked = np.array([*known, 41, OUTSIDE, BLOWN], dtype=np.int64)
    np.testing.assert_array_equal(cover.ids(asked, -3), [known.get(int(key), -3) for key in asked])
    np.testing.assert_array_equal(cover.keys, list(known))
    assert cover.count == len(known)
    assert not cover.full


def test_many_keys() -> None:
    """Far beyond the first table, in uneven waves."""
    rng = np.random.default_rng(1)
    keys = rng.permutation(np.unique(rng.integers(0, 2**56, 50_000)))
    cover = Cover(10**6)
    for part in np.split(keys, [1, 500, 513, 20_000]):
        assert len(cover.add(part)) == len(part)
    np.testing.assert_array_equal(cover.keys[cover.ids(keys, -1)], keys)
    assert len(cover.add(keys)) == 0


def test_limit() -> None:
    """At the limit the first of the new keys are taken and `full` is set; afterwards none is."""
    cover = Cover(5)
    cover.add(np.array([10, 30, 20]))
    before = cover.full
    np.testing.assert_array_equal(cover.add(np.array([4, 20, 50, 2])), [2, 4])
    assert (before, cover.full) == (False, True)
    assert len(cover.add(np.array([7]))) == 0
    np.testing.assert_array_equal(cover.ids(np.array([2, 4, 50, 7]), -1), [3, 4, -1, -1])


def test_exactly_at_the_limit_is_not_full() -> None:
    cover = Cover(3)
    cover.add(np.array([1, 2, 3]))
    cover.add(np.array([3, 1, OUTSIDE]))
    assert not cover.full
