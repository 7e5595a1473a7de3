"""Source text of the burst kernel of one case.

The text is a self-contained module: mathematics, random draws, one time step and the loop over lanes. Bursts
are held in lanes, one row of a flat buffer per coordinate; the loop over steps is outside, the loop over lanes
inside, and everything of a step (right-hand side, event tests, sums) stands in that inner loop without a branch,
so that the compiler turns it into vector instructions. A flat buffer with rows of constant length, rather than
an array per coordinate, spares the run-time overlap tests that would stop it from doing so.

Sums are taken from the second step of a burst on (unless it has but one): the seed, laid uniformly in its cell, is not
a state of the long run, and neither is an entry from it. Observables are summed about a centre, which follows the
parameters in their array: a variance beside a large mean keeps its digits.

A halved kernel makes two steps of half the length out of every step, on the same noise. The increment of a Wiener
process over a step, root(step) z with the normal z that the ordinary kernel draws, is split at its middle by the
construction of P. Levy (Processus stochastiques et mouvement brownien, Gauthier-Villars 1948, cited from memory): the
halves are root(step / 2) (z + b) / root(2) and root(step / 2) (z - b) / root(2) with a normal b independent of z. The b
come from a second generator per lane, so that the z stay those of the ordinary kernel.
"""

from __future__ import annotations

import inspect
import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from typing import Any

from perdure._kernels import lane_math
from perdure._kernels.schemes import SCHEMES, step_lines

__all__ = ["LANES", "SALT", "TEMPLATE_VERSION", "KernelSpec", "module_source"]

TEMPLATE_VERSION = 2
LANES = 64
MARKER = "# --- copied from here ---\n"
# Sets the second generator of a halved kernel apart: first 64 bits of the fractional part of the square root of 2.
SALT = 0x6A09E667F3BCC908


@dataclass(frozen=True)
class KernelSpec:
    """What a burst kernel is made from; every text is source over names with the prefix ``v_``.

    Attributes
    ----------
    scheme : str
        A key of `SCHEMES`.
    state, parameters : tuple of str
        Names without prefix.
    drift : tuple of str
        dx/dt, or the next value of a map, per state component. Empty when `function` is given.
    noise : tuple of tuple of (str, frozenset of str)
        Source and names used, a row per state component, a column per Wiener process.
    draws : tuple of (str, str)
        Name and law of each draw of a noisy map.
    events : tuple of str
        Conditions.
    observables : tuple of str
    periodic : tuple of (str, float, float)
        Name, lower end and period of each component that wraps around; it is wrapped after every step.
    function, noise_function : callable or None
        Compiled or compilable scalar functions used in place of `drift` and `noise`.
    halved : bool
        Make every step as two steps of half the length on the same noise. The arguments of the kernel and the scale
        of its sums stay those of the ordinary one: `step`, `n_step` and `stride` are of whole steps, marginals are
        tallied at whole steps. Events and observables are evaluated at half steps, each of which counts half in time
        inside and in the sums of observables; entries are counted as they are. Sums start with the second whole step.
        Not for maps.
    """

    scheme: str
    state: tuple[str, ...]
    parameters: tuple[str, ...]
    drift: tuple[str, ...] = ()
    noise: tuple[tuple[tuple[str, frozenset[str]], ...], ...] = ()
    draws: tuple[tuple[str, str], ...] = ()
    events: tuple[str, ...] = ()
    observables: tuple[str, ...] = ()
    periodic: tuple[tuple[str, float, float], ...] = ()
    function: Callable[..., Any] | None = None
    noise_function: Callable[..., Any] | None = None
    lanes: int = field(default=LANES)
    halved: bool = False

    @property
    def n_sum(self) -> int:
        """Rows of the sums: in and entries per event, sum and sum of squares per observable."""
        return 2 * len(self.events) + 2 * len(self.observables)

    @property
    def is_map(self) -> bool:
        return SCHEMES[self.scheme].is_map


# Expressions of the normals, signs and uniforms of one step of one lane.
Draws = tuple[list[str], list[str], list[str]]


class Rows:
    """Hands out rows of a lane buffer."""

    def __init__(self, lanes: int, buffer: str = "buf") -> None:
        self.lanes = lanes
        self.buffer = buffer
        self.count = 0

    def take(self, n: int = 1) -> list[str]:
        first, self.count = self.count, self.count + n
        return [f"{self.buffer}[{k * self.lanes} + lane]" for k in range(first, first + n)]


def indented(lines: Sequence[str], depth: int) -> list[str]:
    return [" " * (4 * depth) + line for line in lines]


def random_layout(spec: KernelSpec) -> tuple[int, int, int, int]:
    """Normals, signs and uniforms needed per step, and the steps filled at once (2 if normals are odd)."""
    n_normal, n_sign = SCHEMES[spec.scheme].random_needs(spec)
    n_normal += sum(law == "normal" for _, law in spec.draws)
    n_uniform = sum(law == "uniform" for _, law in spec.draws)
    return n_normal, n_sign, n_uniform, 2 if n_normal % 2 else 1


def seed_lines(spec: KernelSpec, word: str, words: str) -> list[str]:
    """Statements that seed the generator of one lane, whose state stands in the array `words`, from a word."""
    lines = [f"seed = {word}"]
    return lines + [
        f"seed = seed + GOLDEN\n            {words}[{k * spec.lanes} + lane] = mixed(seed)" for k in range(4)
    ]


def fill_lines(spec: KernelSpec, rows: list[str], words: str) -> list[str]:
    """Statements that fill the random rows of one group of steps, for one lane, from the generator in `words`."""
    n_normal, n_sign, n_uniform, group = random_layout(spec)
    word = ", ".join(f"{k * spec.lanes} + lane" for k in range(4))
    lines, at = [], 0
    for _ in range(n_normal * group // 2):
        lines += [
            f"radius = radius_of(unit_open(next_bits({words}, {word})))",
            f"turn = unit_open(next_bits({words}, {word}))",
            f"{rows[at]} = radius * turn_cos(turn)",
            f"{rows[at + 1]} = radius * turn_sin(turn)",
        ]
        at += 2
    for _ in range(n_sign * group):
        lines.append(f"{rows[at]} = 1.0 if (next_bits({words}, {word}) >> U63) == U1 else -1.0")
        at += 1
    for _ in range(n_uniform * group):
        lines.append(f"{rows[at]} = unit_open(next_bits({words}, {word}))")
        at += 1
    return lines


def named_random_rows(spec: KernelSpec, rows: list[str], member: int) -> Draws:
    """Expressions of the normals, signs and uniforms of step `member` of a group."""
    n_normal, n_sign, n_uniform, group = random_layout(spec)
    base_sign = n_normal * group
    base_uniform = base_sign + n_sign * group
    normal = rows[n_normal * member : n_normal * (member + 1)]
    sign = rows[base_sign + n_sign * member : base_sign + n_sign * (member + 1)]
    uniform = rows[base_uniform + n_uniform * member : base_uniform + n_uniform * (member + 1)]
    return normal, sign, uniform


def halved_draws(spec: KernelSpec, rows: list[str], bridge: list[str], member: int) -> tuple[list[str], Draws]:
    """Statements that make the draws of a half step from those of the step and the bridging ones; and their names.

    `side` is 1 in the first half of the step and -1 in the second. The sign of the step goes to the first half.
    """
    normal, sign, _ = named_random_rows(spec, rows, member)
    bridge_normal, bridge_sign, _ = named_random_rows(spec, bridge, member)
    lines = [
        f"normal_{k} = {math.sqrt(0.5)!r} * ({z} + side * {b})"
        for k, (z, b) in enumerate(zip(normal, bridge_normal, strict=True))
    ]
    lines += [
        f"sign_{k} = 0.5 * ((1.0 + side) * {v} + (1.0 - side) * {b})"
        for k, (v, b) in enumerate(zip(sign, bridge_sign, strict=True))
    ]
    return lines, ([f"normal_{k}" for k in range(len(normal))], [f"sign_{k}" for k in range(len(sign))], [])


def lane_body(spec: KernelSpec, state: list[str], before: list[str], sums: list[str], draws: Draws) -> list[str]:
    """One step of one lane: new state, event tests, sums."""
    normal, sign, uniform = draws
    lines = [f"x_{s} = {row}" for s, row in zip(spec.state, state, strict=True)]
    n_wiener = SCHEMES[spec.scheme].random_needs(spec)[0]
    spare, loose = iter(normal[n_wiener:]), iter(uniform)
    for name, law in spec.draws:
        lines.append(f"v_{name} = {next(spare) if law == 'normal' else next(loose)}")
    lines += step_lines(spec, normal[:n_wiener], sign)
    for s, low, period in spec.periodic:
        lines.append(f"y_{s} = y_{s} - {period!r} * np.floor((y_{s} - {low!r}) * {1.0 / period!r})")
    lines += [f"v_{s} = y_{s}" for s in spec.state]
    lines += [f"{row} = y_{s}" for s, row in zip(spec.state, state, strict=True)]
    for k, condition in enumerate(spec.events):
        lines += [
            f"inside = 1.0 if {condition} else 0.0",
            f"{sums[2 * k]} += keep * inside",
            f"{sums[2 * k + 1]} += keep * inside * (1.0 - {before[k]})",
            f"{before[k]} = inside",
        ]
    at = 2 * len(spec.events)
    for k, source in enumerate(spec.observables):
        lines += [
            f"value = ({source} - centre_{k}) if keep > 0.0 else 0.0",
            f"{sums[at + 2 * k]} += value",
            f"{sums[at + 2 * k + 1]} += value * value",
        ]
    return lines


def step_loop(
    spec: KernelSpec, state: list[str], before: list[str], sums: list[str], random: list[str], bridge: list[str]
) -> list[str]:
    """The loop over lanes of one step, for each member of a group of steps; gone through twice if steps are halved."""
    group, lines = random_layout(spec)[3], []
    for member in range(group):
        body, draws = list[str](), named_random_rows(spec, random, member)
        if spec.halved:
            body, draws = halved_draws(spec, random, bridge, member)
        body += lane_body(spec, state, before, sums, draws)
        head = [f"if at % {group} == {member}:"] if group > 1 else ["if True:"]
        lines += [*head, f"    for lane in range({spec.lanes}):", *indented(body, 2)]
    return ["for side in (1.0, -1.0):", *indented(lines, 1)] if spec.halved else lines


def sum_scale(spec: KernelSpec, row: int) -> str:
    """Factor of a row of the sums: a half step is half a step of time, but an entry is an entry."""
    is_entry = row < 2 * len(spec.events) and row % 2 == 1
    return "0.5 * " if spec.halved and not is_entry else ""


def module_source(spec: KernelSpec) -> str:
    """Text of the module; the same spec gives the same text.

    Raises
    ------
    ValueError
        A halved map.
    """
    if spec.halved and spec.is_map:
        raise ValueError(f"scheme {spec.scheme!r} cannot be halved: a map has no half step; allowed: schemes of flows")
    rows = Rows(spec.lanes)
    state = rows.take(len(spec.state))
    before = rows.take(len(spec.events))
    sums = rows.take(spec.n_sum)
    n_normal, n_sign, n_uniform, group = random_layout(spec)
    random = rows.take((n_normal + n_sign + n_uniform) * group)
    bridge = rows.take(len(random)) if spec.halved else []
    generators = {"words": ("stream[source]", random)} if random else {}
    if bridge:
        generators["bridge_words"] = ("mixed(stream[source] ^ SALT)", bridge)
    constants = [f"v_{p} = parameters[{k}]" for k, p in enumerate(spec.parameters)]
    n_parameter = len(spec.parameters)
    constants += [f"centre_{k} = parameters[{n_parameter + k}]" for k in range(len(spec.observables))]
    constants += ["step = 0.5 * step"] if spec.halved else []
    constants += ["root = math.sqrt(step)", f"buf = np.zeros({max(rows.count, 1) * spec.lanes})"]
    constants += [f"{words} = np.zeros({4 * spec.lanes}, dtype=np.uint64)" for words in generators]
    lanes = spec.lanes
    load = [f"{row} = state[{k}, source]" for k, row in enumerate(state)]
    load += [f"v_{s} = {row}" for s, row in zip(spec.state, state, strict=True)]
    load += [f"{before[k]} = 1.0 if {condition} else 0.0" for k, condition in enumerate(spec.events)]
    load += [f"{row} = 0.0" for row in sums]
    fill = []
    for words, (word, filled) in generators.items():
        load += seed_lines(spec, word, words)
        head = [f"if at % {group} == 0:"] if group > 1 else ["if True:"]
        fill += [*head, f"    for lane in range({lanes}):", *indented(fill_lines(spec, filled, words), 2)]
    tally = [
        f"slot = buf[{k * lanes} + lane] * axis_scale[{k}] - axis_lower[{k}] * axis_scale[{k}] + 1.0\n"
        "                    slot = slot if slot > 0.0 else 0.0\n"
        "                    slot = slot if slot < n_slot - 1.0 else n_slot - 1.0\n"
        f"                    slots[sample, {k}, first + lane] = np.uint16(slot)"
        for k in range(len(spec.state))
    ]
    finite = " & ".join(f"(abs({row}) < 1e100)" for row in state)
    store = [f"fine = {finite}", "blown += 0 if fine else 1"]
    store += [f"state[{k}, first + lane] = {row} if fine else np.nan" for k, row in enumerate(state)]
    store += [f"sums[{k}, first + lane] = {sum_scale(spec, k)}{row} if fine else 0.0" for k, row in enumerate(sums)]
    text = [
        f'"""Burst kernel generated by perdure (template {TEMPLATE_VERSION}); made anew when it is missing."""',
        mathematics(),
        *([f"SALT = np.uint64(0x{SALT:X})", ""] if bridge else []),
        "",
        "@njit(cache=CACHED, **LANE_OPTIONS)",
        "def advance(state, sums, slots, stream, parameters, step, n_step, stride, axis_lower, axis_scale, n_slot):",
        *indented(constants, 1),
        "    blown = 0",
        "    n_lane = state.shape[1]",
        f"    for first in range(0, n_lane, {lanes}):",
        f"        used = min({lanes}, n_lane - first)",
        f"        for lane in range({lanes}):",
        "            source = first + min(lane, used - 1)",
        *indented(load, 3),
        "        sample = 0",
        "        for at in range(n_step):",
        "            keep = 0.0 if at == 0 and n_step > 1 else 1.0",
        *indented(fill, 3),
        *indented(step_loop(spec, state, before, sums, random, bridge), 3),
        "            if (at + 1) % stride == 0 and sample < slots.shape[0]:",
        "                for lane in range(used):",
        *indented(tally, 5),
        "                sample += 1",
        "        for lane in range(used):",
        *indented(store, 3),
        "    return blown",
        "",
    ]
    return "\n".join(text)


def mathematics() -> str:
    """The part of `lane_math` that goes into every module."""
    return inspect.getsource(lane_math).split(MARKER, 1)[1]
