"""Random draws inside kernels: the exact stream, the law, independence between lanes, steps and streams."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.stats import kstest, norm

from kernels.plain import GOLDEN, MASK, Stream, split_mix
from kernels.support import fly
from perdure._kernels.lane_math import mixed
from perdure._kernels.seeds import burst_streams

N = 200_000
# Kolmogorov's limit law passes this with probability 2 exp(-2 * 2.7**2) = 9e-7 (A. N. Kolmogorov, 1933).
LARGEST = 2.7


def streams(n: int) -> np.ndarray:
    """Words as a run has them: 64 bursts each of many boxes."""
    first = np.arange(0, n + 1, 64, dtype=np.int64)
    out = np.zeros(n, dtype=np.uint64)
    keys = np.arange(len(first) - 1, dtype=np.int64)
    burst_streams(np.uint64(7), np.uint64(8), np.uint64(0), keys, first, out)
    return out


@pytest.fixture(scope="module")
def draws() -> dict[str, np.ndarray]:
    """Three normals and a uniform of each of two steps, for streams of a run and for the words 0, 1, 2, ..."""
    zero = np.zeros((4, N))
    return {
        f"{kind} {n_step}": fly("draws", zero, n_step=n_step, stream=words).state
        for kind, words in (("run", streams(N)), ("counted", np.arange(N, dtype=np.uint64)))
        for n_step in (1, 2)
    }


KINDS = ["run 1", "run 2", "counted 1", "counted 2"]


def distance(sample: np.ndarray, law: str) -> float:
    """Kolmogorov-Smirnov distance times the root of the size."""
    return float(kstest(sample, law).statistic * np.sqrt(sample.size))


def moment_scores(sample: np.ndarray) -> np.ndarray:
    """First four moments against those of a standard normal, in standard errors."""
    exact, spread = np.array([0.0, 1.0, 0.0, 3.0]), np.sqrt([1.0, 2.0, 15.0, 96.0])
    found = np.array([np.mean(sample**k) for k in range(1, 5)])
    return np.asarray(np.abs(found - exact) / spread * np.sqrt(sample.size))


def correlation_score(one: np.ndarray, two: np.ndarray) -> float:
    """Correlation coefficient in standard errors of independent samples."""
    return float(abs(np.corrcoef(one, two)[0, 1]) * np.sqrt(one.size))


def test_finaliser() -> None:
    for word in (0, 1, GOLDEN, MASK, 0x0123456789ABCDEF):
        assert int(mixed(np.uint64(word))) == split_mix(word)


@pytest.mark.parametrize("word", [0, 1, 2**63, MASK])
def test_stream_is_that_of_the_plain_version(word: int) -> None:
    """Uniform draws to the last bit, normal draws to rounding; of two steps with an odd number of normals."""
    stream = Stream(word)
    normal = [v for _ in range(3) for v in stream.pair()]
    uniform = [stream.uniform() for _ in range(2)]
    for step in (0, 1):
        words = np.array([word], dtype=np.uint64)
        found = fly("draws", np.zeros((4, 1)), n_step=step + 1, stream=words).state[:, 0]
        np.testing.assert_allclose(found[:3], normal[3 * step : 3 * step + 3], rtol=0.0, atol=1e-14)
        assert found[3] == uniform[step]


@pytest.mark.parametrize("kind", KINDS)
def test_laws(draws: dict[str, np.ndarray], kind: str) -> None:
    *normal, uniform = draws[kind]
    for sample in normal:
        assert distance(sample, "norm") < LARGEST
        assert moment_scores(sample).max() < 5.0
    assert distance(uniform, "uniform") < LARGEST
    assert moment_scores(norm.ppf(uniform)).max() < 5.0


def test_wrong_laws_are_noticed(draws: dict[str, np.ndarray]) -> None:
    """Negative control: a spread off by 4 percent, a shift of 0.015, a bounded sum of uniforms, bent uniforms."""
    normal, uniform = draws["run 1"][0], draws["run 1"][3]
    for wrong in (1.04 * normal, normal + 0.015):
        assert distance(wrong, "norm") > LARGEST
        assert moment_scores(wrong).max() > 5.0
    sums = np.random.default_rng(5).uniform(-0.5, 0.5, (12, N)).sum(axis=0)
    assert moment_scores(sums).max() > 5.0
    assert distance(uniform**1.03, "uniform") > LARGEST


@pytest.mark.parametrize("kind", KINDS)
def test_lanes_are_independent(draws: dict[str, np.ndarray], kind: str) -> None:
    """Neighbours, and lanes a vector or a block of lanes apart, in value and in size."""
    for row in draws[kind]:
        for shift in (1, 2, 8, 64):
            assert correlation_score(row[shift:], row[:-shift]) < 5.0
            assert correlation_score(row[shift:] ** 2, row[:-shift] ** 2) < 5.0


@pytest.mark.parametrize("kind", ["run", "counted"])
def test_draws_of_a_lane_are_independent(draws: dict[str, np.ndarray], kind: str) -> None:
    """All six normals and two uniforms of two steps: every pair, in value and in size."""
    rows = np.concatenate([draws[f"{kind} 1"], draws[f"{kind} 2"]])
    for i in range(len(rows)):
        for j in range(i):
            assert correlation_score(rows[i], rows[j]) < 5.0
            assert correlation_score(rows[i] ** 2, rows[j] ** 2) < 5.0


def test_streams_of_boxes_and_sweeps_are_independent() -> None:
    """The same bursts of the same boxes in the next sweep, and under the next seed."""
    first = np.array([0, N], dtype=np.int64)
    found = []
    for seed, sweep, key in ((1, 0, 5), (1, 1, 5), (2, 0, 5), (1, 0, 6)):
        words = np.zeros(N, dtype=np.uint64)
        burst_streams(np.uint64(seed), np.uint64(0), np.uint64(sweep), np.array([key]), first, words)
        found.append(fly("draws", np.zeros((4, N)), stream=words).state[0])
    for i in range(len(found)):
        for j in range(i):
            assert correlation_score(found[i], found[j]) < 5.0


def test_dependence_is_noticed(draws: dict[str, np.ndarray]) -> None:
    """Negative control: every lane pair on one stream, and a mixture of two percent of another row."""
    words = np.repeat(streams(N)[::2], 2)
    same = fly("draws", np.zeros((4, N)), stream=words).state[0]
    assert correlation_score(same[1:], same[:-1]) > 5.0
    one, two = draws["run 1"][:2]
    assert correlation_score(one, two + 0.02 * one) > 5.0
