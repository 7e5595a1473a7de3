"""Mathematics for lanes: branch-free functions that vectorise, and random draws inside a kernel.

The text below the marker is copied into every generated module, so that a burst kernel and all it calls
stand in one file: numba's cache cannot see changes in another file. Errors, measured against long double
arithmetic over the stated ranges: `f_exp` 1 ulp; `f_log` 2 ulp; `f_sin`, `f_cos` 2 ulp of 1 for |x| < 1e6.
"""

from __future__ import annotations

# --- copied from here ---
import math

import numpy as np
from numba import njit, types
from numba.extending import intrinsic

LANE_OPTIONS = {
    "nogil": True,
    "error_model": "numpy",
    "fastmath": {"contract", "arcp"},
    "boundscheck": False,
}
U1 = np.uint64(1)
U11 = np.uint64(11)
U12 = np.uint64(12)
U17 = np.uint64(17)
U19 = np.uint64(19)
U23 = np.uint64(23)
U27 = np.uint64(27)
U30 = np.uint64(30)
U31 = np.uint64(31)
U41 = np.uint64(41)
U45 = np.uint64(45)
U52 = np.uint64(52)
U63 = np.uint64(63)
ONE_BITS = np.uint64(0x3FF0000000000000)
MANTISSA = np.uint64(0x000FFFFFFFFFFFFF)
GOLDEN = np.uint64(0x9E3779B97F4A7C15)
MIX_A = np.uint64(0xBF58476D1CE4E5B9)
MIX_B = np.uint64(0x94D049BB133111EB)


@intrinsic
def as_float(typingctx, bits):  # type: ignore[no-untyped-def]
    """Float whose IEEE 754 bits are those of an unsigned integer."""

    def codegen(context, builder, signature, args):  # type: ignore[no-untyped-def]
        return builder.bitcast(args[0], context.get_value_type(types.float64))

    return types.float64(types.uint64), codegen


@intrinsic
def as_bits(typingctx, value):  # type: ignore[no-untyped-def]
    """IEEE 754 bits of a float as an unsigned integer."""

    def codegen(context, builder, signature, args):  # type: ignore[no-untyped-def]
        return builder.bitcast(args[0], context.get_value_type(types.uint64))

    return types.uint64(types.float64), codegen


@njit(forceinline=True, **LANE_OPTIONS)
def f_exp(x):  # type: ignore[no-untyped-def]
    """exp: x = k ln 2 + r, |r| <= ln 2 / 2, Taylor to r^13; 0 below -708, inf above 709.78; nan passes."""
    t = min(max(x, -708.0), 709.782712893384)
    k = np.floor(t * 1.4426950408889634 + 0.5)
    r = (t - k * 0.6931471803691238) - k * 1.9082149292705877e-10
    p = 1.6059043836821613e-10
    p = p * r + 2.08767569878681e-09
    p = p * r + 2.505210838544172e-08
    p = p * r + 2.755731922398589e-07
    p = p * r + 2.7557319223985893e-06
    p = p * r + 2.48015873015873e-05
    p = p * r + 0.0001984126984126984
    p = p * r + 0.001388888888888889
    p = p * r + 0.008333333333333333
    p = p * r + 0.041666666666666664
    p = p * r + 0.16666666666666666
    p = p * r + 0.5
    p = p * r + 1.0
    p = p * r + 1.0
    # two factors: 2**1024 itself is not a double
    h = np.floor(k * 0.5)
    p = p * as_float(np.uint64(np.int64(h) + 1023) << U52) * as_float(np.uint64(np.int64(k - h) + 1023) << U52)
    p = np.inf if x > 709.782712893384 else p
    p = 0.0 if x < -708.0 else p
    return p if x == x else x


@njit(forceinline=True, **LANE_OPTIONS)
def f_log(x):  # type: ignore[no-untyped-def]
    """log: x = 2^k m, m in [sqrt(1/2), sqrt 2), log m = 2 artanh((m - 1)/(m + 1)); log 0 = -inf, x < 0 nan."""
    tiny = x < 2.2250738585072014e-308
    y = x * 1.8014398509481984e16 if tiny else x
    b = as_bits(y)
    k = np.float64(np.int64(b >> U52)) - 1023.0
    m = as_float((b & MANTISSA) | ONE_BITS)
    big = m > 1.4142135623730951
    m = m * 0.5 if big else m
    k = k + 1.0 if big else k
    k = k - 54.0 if tiny else k
    f = m - 1.0
    s = f / (m + 1.0)
    z = s * s
    p = 0.10526315789473684
    p = p * z + 0.11764705882352941
    p = p * z + 0.13333333333333333
    p = p * z + 0.15384615384615385
    p = p * z + 0.18181818181818182
    p = p * z + 0.2222222222222222
    p = p * z + 0.2857142857142857
    p = p * z + 0.4
    p = p * z + 0.6666666666666666
    # f - (f^2/2 - s (f^2/2 + z p)) keeps the digits near 1 (form of W. J. Cody and W. Waite, 1980)
    q = 0.5 * f * f
    r = k * 0.6931471803691238 + (f - (q - (s * (q + z * p) + k * 1.9082149292705877e-10)))
    r = x if x > 1.7976931348623157e308 else r
    r = -np.inf if x == 0.0 else r
    return r if x >= 0.0 else np.nan


@njit(forceinline=True, **LANE_OPTIONS)
def sine_of_reduced(r, k):  # type: ignore[no-untyped-def]
    """(-1)^k sin r for |r| <= pi/2, Taylor to r^21."""
    z = r * r
    p = 1.9572941063391263e-20
    p = p * z - 8.22063524662433e-18
    p = p * z + 2.8114572543455206e-15
    p = p * z - 7.647163731819816e-13
    p = p * z + 1.6059043836821613e-10
    p = p * z - 2.505210838544172e-08
    p = p * z + 2.7557319223985893e-06
    p = p * z - 0.0001984126984126984
    p = p * z + 0.008333333333333333
    p = p * z - 0.16666666666666666
    s = r + r * z * p
    return s * (1.0 - 2.0 * (k - 2.0 * np.floor(k * 0.5)))


@njit(forceinline=True, **LANE_OPTIONS)
def f_sin(x):  # type: ignore[no-untyped-def]
    """sin, argument reduced by multiples of pi in three parts."""
    k = np.floor(x * 0.3183098861837907 + 0.5)
    r = ((x - k * 3.141592651605606) - k * 1.9841871583270443e-09) - k * 1.034036596358821e-18
    return sine_of_reduced(r, k)


@njit(forceinline=True, **LANE_OPTIONS)
def f_cos(x):  # type: ignore[no-untyped-def]
    """cos x = sin(x + pi/2), reduced to odd multiples of pi/2."""
    k = np.floor(x * 0.3183098861837907) + 1.0
    h = k - 0.5
    r = ((x - h * 3.141592651605606) - h * 1.9841871583270443e-09) - h * 1.034036596358821e-18
    return sine_of_reduced(r, k)


@njit(forceinline=True, **LANE_OPTIONS)
def f_sqrt(x):  # type: ignore[no-untyped-def]
    return math.sqrt(x) if x >= 0.0 else np.nan


@njit(forceinline=True, **LANE_OPTIONS)
def f_abs(x):  # type: ignore[no-untyped-def]
    return abs(x)


@njit(forceinline=True, **LANE_OPTIONS)
def f_floor(x):  # type: ignore[no-untyped-def]
    return np.floor(x)


@njit(forceinline=True, **LANE_OPTIONS)
def f_mod(x, y):  # type: ignore[no-untyped-def]
    """Floored modulo: the sign of y, as Python's %."""
    return x - y * np.floor(x / y)


@njit(forceinline=True, **LANE_OPTIONS)
def f_min2(x, y):  # type: ignore[no-untyped-def]
    """Smaller of two; nan if either is."""
    return x if (x < y) | (x != x) else y


@njit(forceinline=True, **LANE_OPTIONS)
def f_max2(x, y):  # type: ignore[no-untyped-def]
    """Larger of two; nan if either is."""
    return x if (x > y) | (x != x) else y


@njit(forceinline=True, **LANE_OPTIONS)
def f_sign(x):  # type: ignore[no-untyped-def]
    s = 1.0 if x > 0.0 else 0.0
    s = -1.0 if x < 0.0 else s
    return s if x == x else x


@njit(forceinline=True, **LANE_OPTIONS)
def f_not(c):  # type: ignore[no-untyped-def]
    return c == False  # noqa: E712 - `not` would branch


@njit(**LANE_OPTIONS)
def f_pow(x, y):  # type: ignore[no-untyped-def]
    return x**y


@njit(**LANE_OPTIONS)
def f_tan(x):  # type: ignore[no-untyped-def]
    return math.tan(x)


@njit(**LANE_OPTIONS)
def f_tanh(x):  # type: ignore[no-untyped-def]
    return math.tanh(x)


@njit(**LANE_OPTIONS)
def f_sinh(x):  # type: ignore[no-untyped-def]
    return math.sinh(x)


@njit(**LANE_OPTIONS)
def f_cosh(x):  # type: ignore[no-untyped-def]
    return math.cosh(x)


@njit(**LANE_OPTIONS)
def f_atan(x):  # type: ignore[no-untyped-def]
    return math.atan(x)


@njit(**LANE_OPTIONS)
def f_atan2(y, x):  # type: ignore[no-untyped-def]
    return math.atan2(y, x)


@njit(**LANE_OPTIONS)
def f_asin(x):  # type: ignore[no-untyped-def]
    return math.asin(x)


@njit(**LANE_OPTIONS)
def f_acos(x):  # type: ignore[no-untyped-def]
    return math.acos(x)


@njit(forceinline=True, **LANE_OPTIONS)
def mixed(z):  # type: ignore[no-untyped-def]
    """Finaliser of SplitMix64 (G. L. Steele, D. Lea, C. H. Flood, OOPSLA 2014)."""
    z = (z ^ (z >> U30)) * MIX_A
    z = (z ^ (z >> U27)) * MIX_B
    return z ^ (z >> U31)


@njit(forceinline=True, **LANE_OPTIONS)
def next_bits(s, o0, o1, o2, o3):  # type: ignore[no-untyped-def]
    """One step of xoshiro256++ (D. Blackman, S. Vigna, ACM TOMS 47 (2021) 36) on lane words s[o0..o3]."""
    a = s[o0]
    b = s[o1]
    c = s[o2] ^ a
    d = s[o3] ^ b
    t = a + s[o3]
    out = ((t << U23) | (t >> U41)) + a
    s[o1] = b ^ c
    s[o0] = a ^ d
    s[o2] = c ^ (b << U17)
    s[o3] = (d << U45) | (d >> U19)
    return out


@njit(forceinline=True, **LANE_OPTIONS)
def unit_open(bits):  # type: ignore[no-untyped-def]
    """Uniform on (0, 1) from the top 52 bits: midpoints of 2^52 equal pieces."""
    return as_float((bits >> U12) | ONE_BITS) - 0.9999999999999999


@njit(forceinline=True, **LANE_OPTIONS)
def radius_of(u):  # type: ignore[no-untyped-def]
    """Box-Muller radius sqrt(-2 ln u)."""
    return math.sqrt(-2.0 * f_log(u))


@njit(forceinline=True, **LANE_OPTIONS)
def turn_cos(u):  # type: ignore[no-untyped-def]
    """cos(2 pi u), 0 <= u < 1."""
    k = np.floor(2.0 * u) + 1.0
    return sine_of_reduced((2.0 * u - (k - 0.5)) * 3.141592653589793, k)


@njit(forceinline=True, **LANE_OPTIONS)
def turn_sin(u):  # type: ignore[no-untyped-def]
    """sin(2 pi u), 0 <= u < 1."""
    k = np.floor(2.0 * u + 0.5)
    return sine_of_reduced((2.0 * u - k) * 3.141592653589793, k)
