"""Plain second versions of what the burst kernels do: Python integers for the streams, numpy for the steps."""

from __future__ import annotations

from collections.abc import Callable
from fractions import Fraction

import numpy as np

MASK = 2**64 - 1
GOLDEN = 0x9E3779B97F4A7C15

Function = Callable[[np.ndarray], np.ndarray]


def split_mix(state: int) -> int:
    """Output function of SplitMix64 (G. L. Steele, D. Lea, C. H. Flood, OOPSLA 2014)."""
    z = (state ^ (state >> 30)) * 0xBF58476D1CE4E5B9 & MASK
    z = (z ^ (z >> 27)) * 0x94D049BB133111EB & MASK
    return z ^ (z >> 31)


def rotated(x: int, k: int) -> int:
    return (x << k | x >> (64 - k)) & MASK


class Stream:
    """xoshiro256++ (D. Blackman, S. Vigna, ACM TOMS 47 (2021) 36), its four words from SplitMix64."""

    def __init__(self, word: int) -> None:
        self.s = [split_mix(word + k * GOLDEN & MASK) for k in range(1, 5)]

    def bits(self) -> int:
        s = self.s
        out = (rotated(s[0] + s[3] & MASK, 23) + s[0]) & MASK
        t = s[1] << 17 & MASK
        s[2] ^= s[0]
        s[3] ^= s[1]
        s[1] ^= s[2]
        s[0] ^= s[3]
        s[2] ^= t
        s[3] = rotated(s[3], 45)
        return out

    def uniform(self) -> float:
        """Midpoint of one of 2^52 equal pieces of (0, 1)."""
        return float(Fraction(2 * (self.bits() >> 12) + 1, 2**53))

    def pair(self) -> tuple[float, float]:
        """Two normals (G. E. P. Box, M. E. Muller, Ann. Math. Statist. 29 (1958) 610-611)."""
        radius, turn = np.sqrt(-2.0 * np.log(self.uniform())), 2.0 * np.pi * self.uniform()
        return float(radius * np.cos(turn)), float(radius * np.sin(turn))


def runge_kutta(f: Function, x: np.ndarray, step: float) -> np.ndarray:
    """Classical scheme of order 4."""
    k1 = f(x)
    k2 = f(x + step / 2 * k1)
    k3 = f(x + step / 2 * k2)
    k4 = f(x + step * k3)
    return np.asarray(x + step / 6 * (k1 + 2 * k2 + 2 * k3 + k4))


def weak_two(
    a: Function,
    b: list[Function],
    x: np.ndarray,
    step: float,
    w: np.ndarray,
    v: np.ndarray,
    *,
    cross: bool = True,
) -> np.ndarray:
    """Explicit weak scheme of order 2, for every lane at once.

    P. E. Kloeden and E. Platen, Numerical Solution of Stochastic Differential Equations (Springer 1992), (15.1.3),
    cited from memory. x (n_dim, n); w (n_wiener, n) Wiener increments; v (n_wiener, n_wiener, n) values of V[r, j].
    Without `cross` the terms between different processes are left out, which is wrong for noise like that of the test.
    """
    root = np.sqrt(step)
    kicks = [column(x) for column in b]
    ahead = x + step * a(x)
    out = x + step / 2 * (a(ahead + sum(k * w[j] for j, k in enumerate(kicks))) + a(x))
    for j, column in enumerate(b):
        plus, minus = column(ahead + root * kicks[j]), column(ahead - root * kicks[j])
        out = out + (plus + minus + 2 * kicks[j]) * w[j] / 4 + (plus - minus) * (w[j] ** 2 - step) / (4 * root)
        for r in range(len(b)):
            if cross and r != j:
                plus, minus = column(x + root * kicks[r]), column(x - root * kicks[r])
                out = out + (plus + minus - 2 * kicks[j]) * w[j] / 4
                out = out + (plus - minus) * (w[j] * w[r] + v[r, j]) / (4 * root)
    return np.asarray(out)
