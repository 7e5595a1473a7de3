"""Tangent vectors along trajectories, from copies that are a little apart."""

from __future__ import annotations

import numpy as np

from perdure._kernels.folders import kernel

__all__ = ["orthonormalise"]


@kernel
def orthonormalise(joint, scale, period, apart, low, growth, lost):  # type: ignore[no-untyped-def]
    """QR step of the tangent vectors of each trajectory, by modified Gram-Schmidt.

    joint (n_dim, 1 + k, n): the trajectories, then k copies that stand a little way along a tangent vector each; these
    are put back at the distance `apart` along the orthonormal vectors, in units of scale (n_dim,). period (n_dim,) is 0
    for components that do not wrap. Adds ln |R_jj| to growth (k, n). A vector that is shorter than `low` after
    the earlier ones are taken out is lost in rounding: ln(low) is added, it gets a new direction, and lost (k,) counts.
    """
    n_dim, k, n = joint.shape[0], joint.shape[1] - 1, joint.shape[2]
    v = np.empty((k, n_dim))
    for i in range(n):
        for j in range(k):
            for d in range(n_dim):
                gap = joint[d, j + 1, i] - joint[d, 0, i]
                if period[d] > 0.0:
                    gap -= period[d] * np.floor(gap / period[d] + 0.5)
                v[j, d] = gap / (apart * scale[d])
        for j in range(k):
            for earlier in range(j):
                dot = 0.0
                for d in range(n_dim):
                    dot += v[earlier, d] * v[j, d]
                for d in range(n_dim):
                    v[j, d] -= dot * v[earlier, d]
            size = 0.0
            for d in range(n_dim):
                size += v[j, d] * v[j, d]
            size = np.sqrt(size)
            if size > low:
                growth[j, i] += np.log(size)
            elif size <= low:
                lost[j] += 1
                growth[j, i] += np.log(low)
                size = fresh(v, j)
            else:
                # the trajectory left all bounds
                growth[j, i] = np.nan
            for d in range(n_dim):
                v[j, d] /= size
                joint[d, j + 1, i] = joint[d, 0, i] + apart * scale[d] * v[j, d]


@kernel
def fresh(v, j):  # type: ignore[no-untyped-def]
    """Put into v[j] the axis that is furthest from the vectors before it, less its part along them; its length."""
    n_dim = v.shape[1]
    best, at = -1.0, 0
    for axis in range(n_dim):
        rest = 1.0
        for earlier in range(j):
            rest -= v[earlier, axis] * v[earlier, axis]
        if rest > best:
            best, at = rest, axis
    for d in range(n_dim):
        v[j, d] = 1.0 if d == at else 0.0
    for earlier in range(j):
        dot = v[earlier, at]
        for d in range(n_dim):
            v[j, d] -= dot * v[earlier, d]
    size = 0.0
    for d in range(n_dim):
        size += v[j, d] * v[j, d]
    return np.sqrt(size)
