"""Burst kernels that several tests share (each is compiled once), and how to fly them on plain arrays."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from perdure._kernels.cache import burst_kernel
from perdure._kernels.generate import KernelSpec

# Linear system of two Ito equations dx = A x dt + B1 x dW1 + B2 x dW2; B1 and B2 do not commute, and both
# processes act on both components. No unit.
DRIFT = np.array([[0.6, 0.9], [-0.5, 0.8]])
KICK_1 = np.array([[0.6, 0.1], [0.2, 0.3]])
KICK_2 = np.array([[0.1, -0.5], [0.6, 0.2]])


def linear_rows(matrix: np.ndarray) -> tuple[str, str]:
    """Source of matrix @ (x, y)."""
    first, second = (f"{float(a)!r}*v_x + {float(b)!r}*v_y" for a, b in matrix)
    return first, second


def coefficients(*columns: np.ndarray) -> tuple[tuple[tuple[str, frozenset[str]], ...], ...]:
    rows = zip(*(linear_rows(column) for column in columns), strict=True)
    return tuple(tuple((source, frozenset({"x", "y"})) for source in row) for row in rows)


SPECS = {
    # x -> r x (1 - x)
    "logistic": KernelSpec(
        "map",
        ("x",),
        ("r",),
        ("v_r * v_x * (1.0 - v_x)",),
        events=("v_x > 0.9", "(v_x > 0.2) & (v_x < 0.5)"),
        observables=("v_x", "f_log(v_x)"),
    ),
    "doubling": KernelSpec("map", ("x",), (), ("f_mod(2.0*v_x, 1.0)",)),
    # the identity, with functions as observables: their values through the lanes of a kernel
    "functions": KernelSpec(
        "map",
        ("a", "b", "c"),
        (),
        ("v_a", "v_b", "v_c"),
        observables=("f_exp(v_a)", "f_log(v_b)", "f_sin(v_c)", "f_cos(v_c)", "f_mod(v_c, 0.7)"),
    ),
    # the draws themselves: an odd number of normals, so that two steps are filled at once
    "draws": KernelSpec(
        "map",
        ("a", "b", "c", "u"),
        (),
        ("v_e", "v_f", "v_g", "v_h"),
        draws=(("e", "normal"), ("f", "normal"), ("g", "normal"), ("h", "uniform")),
    ),
    # the draws of a step of "noisy-pair": two normals, then a sign as the top bit of a word
    "pair-draws": KernelSpec(
        "map",
        ("a", "b", "u"),
        (),
        ("v_e", "v_f", "v_h"),
        draws=(("e", "normal"), ("f", "normal"), ("h", "uniform")),
    ),
    # a spiral for q = 0; with q > 0 it blows up from large x
    "spiral": KernelSpec(
        "rk4",
        ("x", "y"),
        ("a", "w", "q"),
        ("-v_a*v_x + v_w*v_y + v_q*v_x*v_x", "-v_w*v_x - v_a*v_y"),
        events=("v_x > 0.2", "v_x*v_x + v_y*v_y < 0.3"),
        observables=("v_x", "v_x*v_y"),
    ),
    "euler": KernelSpec(
        "euler-maruyama",
        ("x",),
        ("m", "a", "b", "c"),
        ("v_m + v_a*v_x",),
        noise=((("v_b + v_c*v_x", frozenset({"b", "c", "x"})),),),
    ),
    "weak2": KernelSpec(
        "weak2",
        ("x",),
        ("m", "a", "b", "c"),
        ("v_m + v_a*v_x",),
        noise=((("v_b + v_c*v_x", frozenset({"b", "c", "x"})),),),
    ),
    "ornstein": KernelSpec(
        "weak2", ("x",), ("theta", "sigma"), ("-v_theta*v_x",), noise=((("v_sigma", frozenset({"sigma"})),),)
    ),
    # a hand that goes round at unit speed
    "clock": KernelSpec("rk4", ("a",), (), ("1.0",), periodic=(("a", 0.0, 2.0 * np.pi),)),
    "noisy-pair": KernelSpec("weak2", ("x", "y"), (), linear_rows(DRIFT), noise=coefficients(KICK_1, KICK_2)),
}


@dataclass(frozen=True)
class Flown:
    """What a flight filled: state (n_dim, n), sums (n_sum, n), slots (n_sample, n_dim, n), blown-up lanes."""

    state: np.ndarray
    sums: np.ndarray
    slots: np.ndarray
    blown: int


def kernel(name: str) -> Callable[..., int]:
    return burst_kernel(SPECS[name])


def parameter_array(name: str, parameters: Sequence[float], centres: Sequence[float] | None = None) -> np.ndarray:
    """Parameters of a kernel of `SPECS`, then the centres of its observables (0 if None); at least one number.

    Parameters that the kernel does not have are left off. Compiled kernels do not notice an array that is too short.
    """
    spec = SPECS[name]
    middle = [0.0] * len(spec.observables) if centres is None else list(centres)
    own = list(parameters)[: len(spec.parameters)]
    assert (len(own), len(middle)) == (len(spec.parameters), len(spec.observables)), "one number each is needed"
    return np.array([*own, *middle] or [0.0], dtype=float)


def fly(
    name: str,
    state: Any,
    *,
    parameters: Sequence[float] = (0.0,),
    centres: Sequence[float] | None = None,
    step: float = 1.0,
    n_step: int = 1,
    stream: np.ndarray | None = None,
    axis: tuple[Any, Any, int] | None = None,
    stride: int = 1,
) -> Flown:
    """Fly a kernel of `SPECS` from state (n_dim, n).

    `centres` holds a number per observable, taken off it before summing; None for zeros. `axis` holds lower ends,
    upper ends and the number of intervals of the marginals, which are tallied every `stride` steps; None for no
    marginals.
    """
    out = np.array(state, dtype=float, order="C", ndmin=2)
    n_dim, n = out.shape
    words = np.arange(n, dtype=np.uint64) if stream is None else stream
    lower, upper, n_interval = axis or (np.zeros(n_dim), np.ones(n_dim), 1)
    lower, upper = np.asarray(lower, dtype=float), np.asarray(upper, dtype=float)
    sums = np.full((SPECS[name].n_sum, n), -7.0)
    slots = np.zeros((n_step // stride if axis else 0, n_dim, n), dtype=np.uint16)
    blown = kernel(name)(
        out,
        sums,
        slots,
        words,
        parameter_array(name, parameters, centres),
        float(step),
        n_step,
        stride,
        lower,
        n_interval / (upper - lower),
        float(n_interval + 2),
    )
    return Flown(out, sums, slots, int(blown))
