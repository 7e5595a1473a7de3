"""Independent streams from one seed."""

from __future__ import annotations

import numpy as np
import pytest

from perdure import _streams
from perdure._streams import generator, seed_words

PURPOSES = ("bursts", "pilot", "sobol", "signs", "sample", "outside")


def test_same_seed_and_purpose_same_draws() -> None:
    np.testing.assert_array_equal(generator(5, "pilot").random(9), generator(5, "pilot").random(9))
    assert seed_words(5, "bursts") == seed_words(5, "bursts")


def test_others_differ() -> None:
    """By seed, zero and large ones included, and by purpose."""
    words = {seed_words(seed, purpose) for seed in (0, 1, 2**64, 2**200) for purpose in PURPOSES}
    assert len(words) == 4 * len(PURPOSES)
    assert all(isinstance(word, np.uint64) for pair in words for word in pair)


def test_streams_of_purposes_are_not_correlated() -> None:
    """Five standard errors of independent samples; a stream with itself is far off (negative control)."""
    draws = np.array([generator(0, purpose).standard_normal(40_000) for purpose in PURPOSES])
    apart = np.abs(np.corrcoef(draws)) * 200.0
    off = ~np.eye(len(PURPOSES), dtype=bool)
    assert apart[off].max() < 5.0
    assert apart[~off].min() > 5.0


def test_purposes_keep_their_numbers() -> None:
    """A number that moved would change old results; a new purpose takes the next one."""
    assert [_streams.PURPOSES[purpose] for purpose in PURPOSES] == list(range(len(PURPOSES)))


def test_negative_seeds_and_unknown_purposes_are_refused() -> None:
    with pytest.raises(ValueError, match="non-negative"):
        generator(-1, "pilot")
    with pytest.raises(KeyError, match="nothing"):
        generator(1, "nothing")
