"""Time-stepping schemes as source lines: from ``x_NAME`` (and draws) to ``y_NAME``, for one lane.

To add a scheme, write a function that returns its lines, and enter it in `SCHEMES`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from perdure._kernels.generate import KernelSpec

__all__ = ["SCHEMES", "Scheme", "step_lines"]


@dataclass(frozen=True)
class Scheme:
    """A scheme: does it step a map, how many normals and signs does a step need, and its lines."""

    is_map: bool
    random_needs: Callable[[KernelSpec], tuple[int, int]]
    lines: Callable[[KernelSpec, list[str], list[str]], list[str]]


def step_lines(spec: KernelSpec, normal: list[str], sign: list[str]) -> list[str]:
    """Lines of one step; `normal` and `sign` are the lane's draws, one per Wiener process and pair."""
    return SCHEMES[spec.scheme].lines(spec, normal, sign)


def columns(spec: KernelSpec) -> int:
    """Wiener processes."""
    if spec.noise_function is not None:
        return len(spec.state)
    return len(spec.noise[0]) if spec.noise else 0


def is_zero(source: str) -> bool:
    try:
        return float(source.strip("() ")) == 0.0
    except ValueError:
        return False


def rows_of(spec: KernelSpec, column: int) -> list[int]:
    """State components that a Wiener process acts on."""
    if spec.noise_function is not None:
        return [column]
    return [k for k, row in enumerate(spec.noise) if not is_zero(row[column][0])]


def depends_on(spec: KernelSpec, column: int) -> frozenset[str]:
    """State components that the coefficients of a Wiener process depend on."""
    if spec.noise_function is not None:
        return frozenset(spec.state)
    used: frozenset[str] = frozenset().union(*(row[column][1] for row in spec.noise))
    return used & frozenset(spec.state)


def crossed(spec: KernelSpec) -> list[tuple[int, int]]:
    """Ordered pairs (j, r): the coefficients of process j change along process r, r != j."""
    touched = {r: {spec.state[k] for k in rows_of(spec, r)} for r in range(columns(spec))}
    return [(j, r) for j in touched for r in touched if j != r and depends_on(spec, j) & touched[r]]


def drift_lines(spec: KernelSpec, at: list[str], prefix: str) -> list[str]:
    """Lines that set ``{prefix}_NAME`` to the right-hand side at the point given per component."""
    lines = [f"v_{s} = {value}" for s, value in zip(spec.state, at, strict=True)]
    if spec.function is None:
        return lines + [f"{prefix}_{s} = {f}" for s, f in zip(spec.state, spec.drift, strict=True)]
    names = [*spec.state, *spec.parameters, *(name for name, _ in spec.draws)]
    call = f"user_function({', '.join('v_' + name for name in names)})"
    if len(spec.state) == 1:
        return [*lines, f"{prefix}_{spec.state[0]} = {call}"]
    return [*lines, ", ".join(f"{prefix}_{s}" for s in spec.state) + f" = {call}"]


def noise_lines(spec: KernelSpec, at: list[str], column: int, prefix: str) -> list[str]:
    """Lines that set ``{prefix}_ROW`` to the coefficients of one Wiener process at a point."""
    lines = [f"v_{s} = {value}" for s, value in zip(spec.state, at, strict=True)]
    if spec.noise_function is None:
        return lines + [f"{prefix}_{k} = {spec.noise[k][column][0]}" for k in rows_of(spec, column)]
    call = f"user_noise({', '.join('v_' + name for name in (*spec.state, *spec.parameters))})"
    pick = call if len(spec.state) == 1 else f"{call}[{column}]"
    return [*lines, f"{prefix}_{column} = {pick}"]


def old_point(spec: KernelSpec) -> list[str]:
    return [f"x_{s}" for s in spec.state]


def map_lines(spec: KernelSpec, normal: list[str], sign: list[str]) -> list[str]:
    return drift_lines(spec, old_point(spec), "y")


def rk4_lines(spec: KernelSpec, normal: list[str], sign: list[str]) -> list[str]:
    """Classical Runge-Kutta scheme of order 4 (W. Kutta, Z. Math. Phys. 46 (1901) 435-453)."""
    lines = drift_lines(spec, old_point(spec), "k1")
    for stage, weight in ((2, "0.5 * step"), (3, "0.5 * step"), (4, "step")):
        point = [f"x_{s} + {weight} * k{stage - 1}_{s}" for s in spec.state]
        lines += drift_lines(spec, point, f"k{stage}")
    return lines + [f"y_{s} = x_{s} + step / 6.0 * (k1_{s} + 2.0 * (k2_{s} + k3_{s}) + k4_{s})" for s in spec.state]


def three_eighths_lines(spec: KernelSpec, normal: list[str], sign: list[str]) -> list[str]:
    """Runge-Kutta scheme of order 4 by the three-eighths rule (W. Kutta, Z. Math. Phys. 46 (1901) 435-453)."""
    lines = drift_lines(spec, old_point(spec), "k1")
    stages = (
        "x_{s} + step / 3.0 * k1_{s}",
        "x_{s} + step * (k2_{s} - k1_{s} / 3.0)",
        "x_{s} + step * (k1_{s} - k2_{s} + k3_{s})",
    )
    for stage, point in enumerate(stages, start=2):
        lines += drift_lines(spec, [point.format(s=s) for s in spec.state], f"k{stage}")
    return lines + [f"y_{s} = x_{s} + step / 8.0 * (k1_{s} + 3.0 * (k2_{s} + k3_{s}) + k4_{s})" for s in spec.state]


def kicks(spec: KernelSpec, row: int, term: str) -> str:
    """Sum over the Wiener processes that act on a row; {j} is the process, {k} the row."""
    parts = [term.format(j=j, k=row) for j in range(columns(spec)) if row in rows_of(spec, j)]
    return "".join(f" + {part}" for part in parts)


def euler_lines(spec: KernelSpec, normal: list[str], sign: list[str]) -> list[str]:
    """Euler-Maruyama (G. Maruyama, Rend. Circ. Mat. Palermo 4 (1955) 48-90), weak order 1."""
    lines = drift_lines(spec, old_point(spec), "a")
    for j, z in enumerate(normal):
        lines += [f"w{j} = root * {z}", *noise_lines(spec, old_point(spec), j, f"b{j}")]
    return lines + [
        f"y_{s} = x_{s} + step * a_{s}{kicks(spec, k, 'b{j}_{k} * w{j}')}" for k, s in enumerate(spec.state)
    ]


def weak2_lines(spec: KernelSpec, normal: list[str], sign: list[str]) -> list[str]:
    """Explicit weak scheme of order 2 by E. Platen.

    P. E. Kloeden and E. Platen, Numerical Solution of Stochastic Differential Equations (Springer 1992), section
    15.1, equation (1.3), cited from memory. Terms that vanish for the noise at hand are left out: with
    additive noise it is the Heun scheme in the drift with the noise added.
    """
    n = columns(spec)
    lines = drift_lines(spec, old_point(spec), "a")
    for j, z in enumerate(normal):
        lines += [f"w{j} = root * {z}", *noise_lines(spec, old_point(spec), j, f"b{j}")]
    point = [f"x_{s} + step * a_{s}{kicks(spec, k, 'b{j}_{k} * w{j}')}" for k, s in enumerate(spec.state)]
    lines += drift_lines(spec, point, "c")
    for j in range(n):
        lines += [f"n{j}_{k} = b{j}_{k} * w{j}" for k in rows_of(spec, j)]
    own = [j for j in range(n) if depends_on(spec, j) & {spec.state[k] for k in rows_of(spec, j)}]
    moved = [j for j in range(n) if depends_on(spec, j)]
    for j in moved:
        for suffix, side in (("p", "+"), ("m", "-")):
            at = [
                f"x_{s} + step * a_{s}" + (f" {side} root * b{j}_{k}" if k in rows_of(spec, j) and j in own else "")
                for k, s in enumerate(spec.state)
            ]
            lines += noise_lines(spec, at, j, suffix)
            lines += [f"{suffix}{j}_{k} = {suffix}_{k}" for k in rows_of(spec, j)]
        for k in rows_of(spec, j):
            lines.append(
                f"n{j}_{k} = 0.25 * (p{j}_{k} + m{j}_{k} + 2.0 * b{j}_{k}) * w{j}"
                f" + 0.25 * (p{j}_{k} - m{j}_{k}) * (w{j} * w{j} - step) / root"
            )
    pairs = sorted({(min(j, r), max(j, r)) for j, r in crossed(spec)})
    for j, r in crossed(spec):
        for suffix, side in (("p", "+"), ("m", "-")):
            at = [
                f"x_{s}" + (f" {side} root * b{r}_{k}" if k in rows_of(spec, r) else "")
                for k, s in enumerate(spec.state)
            ]
            lines += noise_lines(spec, at, j, suffix)
            lines += [f"{suffix}{j}_{k} = {suffix}_{k}" for k in rows_of(spec, j)]
        # V[r, j] of the book is +-step and antisymmetric in its indices
        v = ("" if r > j else "-") + sign[pairs.index((min(j, r), max(j, r)))]
        for k in rows_of(spec, j):
            lines.append(
                f"n{j}_{k} = n{j}_{k} + 0.25 * (p{j}_{k} + m{j}_{k} - 2.0 * b{j}_{k}) * w{j}"
                f" + 0.25 * (p{j}_{k} - m{j}_{k}) * (w{j} * w{r} + step * {v}) / root"
            )
    return lines + [
        f"y_{s} = x_{s} + 0.5 * step * (a_{s} + c_{s}){kicks(spec, k, 'n{j}_{k}')}" for k, s in enumerate(spec.state)
    ]


def no_needs(spec: KernelSpec) -> tuple[int, int]:
    return 0, 0


def wiener_needs(spec: KernelSpec) -> tuple[int, int]:
    return columns(spec), 0


def weak2_needs(spec: KernelSpec) -> tuple[int, int]:
    return columns(spec), len({(min(j, r), max(j, r)) for j, r in crossed(spec)})


SCHEMES = {
    "map": Scheme(True, no_needs, map_lines),
    "rk4": Scheme(False, no_needs, rk4_lines),
    "three-eighths": Scheme(False, no_needs, three_eighths_lines),
    "euler-maruyama": Scheme(False, wiener_needs, euler_lines),
    "weak2": Scheme(False, weak2_needs, weak2_lines),
}
