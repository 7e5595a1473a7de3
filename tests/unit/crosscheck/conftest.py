"""Bare trajectory kernels of small systems with known answers."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import replace

import numpy as np
import pytest

from kernels.support import SPECS
from perdure._crosscheck.tangents import Bare
from perdure._kernels.cache import trajectory_kernel
from perdure._kernels.generate import KernelSpec
from perdure._kernels.trajectory import steps_together

BareOf = Callable[..., Bare]

KERNELS = {
    "logistic": replace(SPECS["logistic"], events=(), observables=()),
    "spiral": replace(SPECS["spiral"], scheme="three-eighths", events=(), observables=()),
    "ornstein": SPECS["ornstein"],
    # x -> m x mod 1
    "multiples": KernelSpec("map", ("x",), ("m",), ("f_mod(v_m*v_x, 1.0)",)),
    "cat": KernelSpec("map", ("x", "y"), (), ("f_mod(2.0*v_x + v_y, 1.0)", "f_mod(v_x + v_y, 1.0)")),
    # a branch onto all of (0, 1) on either side of p, where it jumps
    "branches": KernelSpec("map", ("x",), ("p",), ("v_x/v_p if v_x < v_p else (v_x - v_p)/(1.0 - v_p)",)),
    # a cycle of radius 1, to which all but 0 goes (E. Hopf's normal form)
    "cycle": KernelSpec(
        "three-eighths",
        ("x", "y"),
        (),
        ("v_x - v_y - v_x*(v_x*v_x + v_y*v_y)", "v_x + v_y - v_y*(v_x*v_x + v_y*v_y)"),
    ),
}


def make_bare(
    name: str,
    parameters: Sequence[float] = (),
    *,
    step: float = 1.0,
    scale: float | Sequence[float] = 1.0,
    middle: float | Sequence[float] = 0.5,
    period: float | Sequence[float] = 0.0,
    magnitude: float = 1.0,
    stirred: bool = False,
    moved: float = 2.0**-49,
) -> Bare:
    """A kernel of `KERNELS` as the room takes it."""
    spec = KERNELS[name]
    n_dim = len(spec.state)
    values = np.array(list(parameters) or [0.0])
    assert len(spec.parameters) in (0, len(values)), "one number each is needed"
    return Bare(
        follow=trajectory_kernel(spec),
        parameters=values,
        step=step,
        together=steps_together(spec),
        scale=np.broadcast_to(np.asarray(scale, dtype=float), n_dim).copy(),
        middle=np.broadcast_to(np.asarray(middle, dtype=float), n_dim).copy(),
        period=np.broadcast_to(np.asarray(period, dtype=float), n_dim).copy(),
        magnitude=magnitude,
        stirred=stirred,
        moved=moved,
    )


@pytest.fixture(scope="session")
def bare_of() -> BareOf:
    """Makes the `Bare` of a system by its name."""
    return make_bare
