"""QR step of tangent vectors against numpy's, with vectors that are lost and components that wrap."""

from __future__ import annotations

import numpy as np
import pytest

from perdure._kernels.tangent import orthonormalise

APART, LOW = 1e-7, 4e-9


def joint_of(state: np.ndarray, vectors: np.ndarray, scale: np.ndarray, apart: float = APART) -> np.ndarray:
    """Trajectories (n_dim, n) and a copy along each of the vectors (n_dim, k, n)."""
    copies = state[:, None, :] + apart * scale[:, None, None] * vectors
    return np.ascontiguousarray(np.concatenate([state[:, None, :], copies], axis=1))


def vectors_of(joint: np.ndarray, scale: np.ndarray, apart: float = APART) -> np.ndarray:
    return np.asarray((joint[:, 1:] - joint[:, :1]) / (apart * scale[:, None, None]))


def stepped(
    joint: np.ndarray, scale: np.ndarray, period: np.ndarray | None = None, low: float = LOW, apart: float = APART
) -> tuple[np.ndarray, np.ndarray]:
    """Growth (k, n) and lost (k,) of one step; `joint` is changed in place."""
    n_dim, copies, n = joint.shape
    growth, lost = np.zeros((copies - 1, n)), np.zeros(copies - 1, dtype=np.int64)
    orthonormalise(joint, scale, np.zeros(n_dim) if period is None else period, apart, low, growth, lost)
    return growth, lost


def numpy_step(vectors: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """ln |R_jj| (k, n) and orthonormal vectors (n_dim, k, n) with R_jj > 0, by numpy."""
    q, r = np.linalg.qr(np.moveaxis(vectors, 2, 0))
    diagonal = np.diagonal(r, axis1=1, axis2=2)
    q = q * np.sign(diagonal)[:, None, :]
    return np.log(np.abs(diagonal)).T, np.moveaxis(q, 0, 2)


@pytest.mark.parametrize(("n_dim", "k"), [(1, 1), (2, 2), (3, 3), (3, 2), (6, 6)])
def test_a_step_is_that_of_numpy(n_dim: int, k: int) -> None:
    """At a distance of 1 and states near 0, where differences are exact to rounding."""
    rng = np.random.default_rng(n_dim * 10 + k)
    n, scale = 50, rng.uniform(0.5, 3.0, n_dim)
    vectors = rng.standard_normal((n_dim, k, n)) * 10.0 ** rng.uniform(-2.0, 2.0, (1, k, n))
    state = np.zeros((n_dim, n))
    joint = joint_of(state, vectors, scale, 1.0)
    growth, lost = stepped(joint, scale, apart=1.0)
    expected, q = numpy_step(vectors)
    np.testing.assert_allclose(growth, expected, rtol=0.0, atol=1e-10)
    np.testing.assert_allclose(vectors_of(joint, scale, 1.0), q, rtol=0.0, atol=1e-10)
    np.testing.assert_array_equal(joint[:, 0], state)
    np.testing.assert_array_equal(lost, 0)
    if k > 1:
        # negative control: the lengths of the vectors alone, and the vectors in another order
        assert np.abs(growth - np.log(np.linalg.norm(vectors, axis=0))).max() > 0.1
        assert np.abs(growth - numpy_step(vectors[:, ::-1])[0]).max() > 0.1


def test_at_the_distance_of_copies_a_step_is_exact_to_what_differences_hold() -> None:
    """States of order 1, copies 1e-7 away: differences keep nine digits."""
    rng = np.random.default_rng(2)
    scale = np.array([0.5, 2.0, 1.0])
    state, vectors = rng.uniform(-1.0, 1.0, (3, 200)), rng.standard_normal((3, 3, 200))
    joint = joint_of(state, vectors, scale)
    growth, _ = stepped(joint, scale)
    made = vectors_of(joint_of(state, vectors, scale), scale)
    np.testing.assert_allclose(growth, numpy_step(made)[0], rtol=0.0, atol=1e-10)
    found = vectors_of(joint, scale)
    gram = np.einsum("djn,dkn->njk", found, found)
    np.testing.assert_allclose(gram, np.broadcast_to(np.eye(3), gram.shape), rtol=0.0, atol=5e-9)
    np.testing.assert_array_equal(joint[:, 0], state)


def test_growth_and_losses_are_added_to() -> None:
    joint = joint_of(np.zeros((2, 4)), np.tile(np.array([[2.0, 0.0], [0.0, 0.5]])[:, :, None], 4), np.ones(2), 1.0)
    growth, lost = np.full((2, 4), 10.0), np.array([3, 5], dtype=np.int64)
    orthonormalise(joint, np.ones(2), np.zeros(2), 1.0, LOW, growth, lost)
    np.testing.assert_allclose(growth, [[10.0 + np.log(2.0)] * 4, [10.0 - np.log(2.0)] * 4])
    np.testing.assert_array_equal(lost, [3, 5])


def test_a_vector_along_an_earlier_one_is_lost() -> None:
    """The second and the third lie along the first: both get new directions, at right angles, and the least growth."""
    first = np.array([0.6, -0.48, 0.64])
    vectors = np.stack([2.0 * first, -3.0 * first, first], axis=1)[:, :, None]
    scale = np.array([1.0, 2.0, 4.0])
    joint = joint_of(np.zeros((3, 1)), vectors, scale, 1.0)
    growth, lost = stepped(joint, scale, apart=1.0)
    np.testing.assert_allclose(growth[:, 0], [np.log(2.0), np.log(LOW), np.log(LOW)], rtol=1e-12)
    np.testing.assert_array_equal(lost, [0, 1, 1])
    q = vectors_of(joint, scale, 1.0)[:, :, 0]
    np.testing.assert_allclose(q.T @ q, np.eye(3), atol=1e-12)
    np.testing.assert_allclose(q[:, 0], first, atol=1e-12)


@pytest.mark.parametrize("axis", [0, 1, 2])
def test_vectors_of_no_length_get_the_axes_that_are_left(axis: int) -> None:
    vectors = np.zeros((3, 3, 2))
    vectors[axis, 0] = 1.0
    joint = joint_of(np.zeros((3, 2)), vectors, np.ones(3), 1.0)
    growth, lost = stepped(joint, np.ones(3), apart=1.0)
    np.testing.assert_array_equal(lost, [0, 2, 2])
    np.testing.assert_allclose(growth, np.log([[1.0] * 2, [LOW] * 2, [LOW] * 2]))
    q = vectors_of(joint, np.ones(3), 1.0)
    np.testing.assert_allclose(np.abs(q).sum(axis=1), 1.0, atol=1e-14)
    np.testing.assert_allclose(np.abs(q).sum(axis=0), 1.0, atol=1e-14)


def test_only_vectors_shorter_than_the_least_are_lost() -> None:
    """The part of the second at right angles to the first decides, not its length."""
    short = LOW * np.array([0.5, 0.999, 1.001, 2.0])
    vectors = np.zeros((2, 2, 4))
    vectors[0, 0], vectors[0, 1], vectors[1, 1] = 1.0, 5.0, short
    growth, lost = stepped(joint_of(np.zeros((2, 4)), vectors, np.ones(2), 1.0), np.ones(2), apart=1.0)
    np.testing.assert_array_equal(lost, [0, 2])
    np.testing.assert_allclose(growth[1], np.log(np.maximum(short, LOW)), rtol=1e-12)
    _, none = stepped(joint_of(np.zeros((2, 4)), vectors, np.ones(2), 1.0), np.ones(2), low=1e-12, apart=1.0)
    np.testing.assert_array_equal(none, [0, 0])


def test_components_that_wrap_are_told_apart_the_short_way() -> None:
    """A copy beyond the end of an angle has come round; the other component does not wrap."""
    period, scale = np.array([2.0 * np.pi, 0.0]), np.array([1.8, 0.7])
    rng = np.random.default_rng(3)
    vectors = rng.standard_normal((2, 2, 300))
    state = np.array([rng.choice([1e-9, 2.0 * np.pi - 1e-9, 3.0], 300), rng.uniform(-1.0, 1.0, 300)])
    plain = joint_of(state, vectors, scale)
    wrapped = plain.copy()
    wrapped[0] %= 2.0 * np.pi
    crossed = np.abs(wrapped - plain).max(axis=(0, 1)) > 1.0
    assert 50 < crossed.sum() < 250
    unaware = wrapped.copy()
    expected, _ = stepped(plain, scale)
    growth, lost = stepped(wrapped, scale, period)
    np.testing.assert_allclose(growth, expected, rtol=0.0, atol=1e-7)
    np.testing.assert_array_equal(lost, 0)
    # copies are put back beside their trajectory
    assert np.abs(vectors_of(wrapped, scale)).max() < 1.0 + 1e-7
    # negative control: without the period those that came round seem stretched
    growth, _ = stepped(unaware, scale)
    assert np.all(growth[:, crossed].max(axis=0) > 10.0)


def test_a_component_far_from_its_trajectory_by_whole_turns_is_near() -> None:
    period = np.array([2.5])
    joint = np.array([[[0.3], [0.3 + 3 * 2.5 + 1e-7], [0.3 - 2 * 2.5 + 1e-7]]])
    growth, lost = stepped(joint[:, :2].copy(), np.ones(1), period)
    assert growth[0, 0] == pytest.approx(0.0, abs=1e-7)
    growth, _ = stepped(np.ascontiguousarray(joint[:, [0, 2]]), np.ones(1), period)
    assert growth[0, 0] == pytest.approx(0.0, abs=1e-7)
    np.testing.assert_array_equal(lost, 0)


def test_a_lost_trajectory_does_not_touch_the_others() -> None:
    rng = np.random.default_rng(4)
    state, vectors = rng.uniform(-1.0, 1.0, (2, 5)), rng.standard_normal((2, 2, 5))
    good = joint_of(state, vectors, np.ones(2))
    bad = good.copy()
    bad[:, :, 2] = np.nan
    expected, _ = stepped(good, np.ones(2))
    growth, _ = stepped(bad, np.ones(2))
    others = [0, 1, 3, 4]
    np.testing.assert_array_equal(growth[:, others], expected[:, others])
    np.testing.assert_array_equal(bad[:, :, others], good[:, :, others])
    assert np.isnan(bad[:, :, 2]).all()
