"""The assertion that all statistical tests use."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.special import erfc

from helpers.statistics import STANDARD_ERRORS, assert_agrees


def test_five_standard_errors_are_rare() -> None:
    assert erfc(STANDARD_ERRORS / np.sqrt(2.0)) == pytest.approx(1.0 / 1.74e6, rel=0.01)


def test_close_values_pass() -> None:
    assert_agrees(1.049, 1.0, 0.01)
    assert_agrees(1.0, 1.0, 0.0)
    assert_agrees(1.14, 1.0, 0.01, allowance=0.1)
    assert_agrees([1.0, 2.04], [1.0, 2.0], 0.01)


@pytest.mark.parametrize(
    ("estimate", "exact", "error", "allowance"),
    [
        (1.051, 1.0, 0.01, 0.0),
        (0.949, 1.0, 0.01, 0.0),
        (1.16, 1.0, 0.01, 0.1),
        (np.nan, 1.0, 0.01, 0.0),
        (1.0, np.nan, 0.01, 0.0),
        (np.inf, 1.0, 0.01, 0.0),
        (1.0, 1.0, np.nan, 0.0),
        (1.0, 1.0, np.inf, 0.0),
        (1.0, 1.0, -0.1, 0.0),
        (1.0, 1.0, 0.1, np.inf),
        ([1.0, 2.051], [1.0, 2.0], 0.01, 0.0),
        ([], [], 0.1, 0.0),
    ],
)
def test_others_fail(estimate: object, exact: object, error: float, allowance: float) -> None:
    """Negative control: too far on either side, not finite, or nothing compared."""
    with pytest.raises(AssertionError):
        assert_agrees(estimate, exact, error, allowance=allowance)  # type: ignore[arg-type]


def test_message_shows_everything() -> None:
    with pytest.raises(AssertionError, match=r"2\.5.*1\.25.*entry 1 of 2.*12\.50 standard errors of 0\.1"):
        assert_agrees([1.0, 2.5], [1.0, 1.25], 0.1)


def test_false_alarms_do_not_occur_in_a_sample_of_means() -> None:
    """400 means of normal samples agree with the truth; with a truth shifted by a fifth none does."""
    sample = np.random.default_rng(3).standard_normal((400, 2500))
    error = sample.std(axis=1) / 50.0
    assert_agrees(sample.mean(axis=1), 0.0, error)
    for mean, e in zip(sample.mean(axis=1), error, strict=True):
        with pytest.raises(AssertionError):
            assert_agrees(mean, 0.2, e)
