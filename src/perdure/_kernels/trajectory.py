"""Source text of the trajectory kernel of one case: long runs that check the bursts.

The module shares the text of the equations with the burst kernel, and nothing of its loop: it has a time-stepping
scheme of its own for flows, its own event logic, sums, and histograms. Trajectories are held in lanes as bursts are,
for the same reason. What a call leaves in `state` is where the next call goes on.

A few steps are made, each into rows of its own; then one loop over lanes goes through their states, tests events and
adds to the sums, which stay in registers meanwhile. The counters of a few events share a 64-bit word. Both save stores,
of which a core makes fewest.

Binary arithmetic does what a map without noise does not: a rounded state hits an unstable point and stays there (the
logistic map goes 0.5, 1, 0), long orbits close into cycles, a map that doubles ends at 0. So a step of a map can begin
a tiny random part of the way and of the state nearer the middle of the histograms: inwards at either end of the long
run; and with low bits drawn anew, for maps that lose bits. Where the step ends is not touched, since a state may rest
on an edge that an event asks for.
"""

from __future__ import annotations

from perdure._kernels.generate import (
    Draws,
    KernelSpec,
    Rows,
    fill_lines,
    indented,
    mathematics,
    named_random_rows,
    random_layout,
    seed_lines,
)
from perdure._kernels.schemes import SCHEMES, step_lines

__all__ = ["MOST_STEPS", "OWN_SCHEMES", "TOGETHER", "TRAJECTORY_VERSION", "steps_together", "trajectory_source"]

TRAJECTORY_VERSION = 1
# Scheme of the trajectories for each scheme of bursts: another one where there is one of the same order and cost.
OWN_SCHEMES = {"rk4": "three-eighths"}
# Steps whose states are tested in one go. Even, since normal draws come in pairs.
TOGETHER = 8
# Events that share a word, and the bits of the counter of each: they bound the steps of a call.
PACKED, FIELD = 3, 21
MOST_STEPS = 2**FIELD - TOGETHER


def steps_together(spec: KernelSpec) -> int:
    """The steps of a call, and those between two points of its histograms and samples, must be multiples of this."""
    tested = bool(spec.events or spec.observables)
    return TOGETHER if tested else random_layout(spec)[3]


def is_stirred(spec: KernelSpec) -> bool:
    """Whether states are moved against what rounding does."""
    return spec.is_map and not spec.draws


def stir_lines(spec: KernelSpec) -> list[str]:
    """Statements that move where a step of one lane begins, and draw the low bits of that anew."""
    word = ", ".join(f"{k * spec.lanes} + lane" for k in range(4))
    lines = [f"fresh = next_bits(words, {word})", "stir = moved * unit_open(fresh)"]
    for k, s in enumerate(spec.state):
        away = f"abs(x_{s}) if x_{s} < middle_{s} else -abs(x_{s})"
        lines += [
            f"held = as_bits(x_{s})",
            f"drawn = (held & ~stirred) | (mixed(fresh + np.uint64({k})) & stirred)",
            # one block of the low bits down where the draw has grown the magnitude; never through 0
            "drawn = drawn - stirred - np.uint64(1) if drawn > held else drawn",
            f"x_{s} = as_float(drawn) if abs(x_{s}) > 1e-300 else x_{s}",
            f"x_{s} = x_{s} + stir * (middle_{s} - x_{s} + ({away}))",
        ]
    return lines


def step_body(spec: KernelSpec, old: list[str], new: list[str], draws: Draws) -> list[str]:
    """One step of one lane, from the rows `old` to the rows `new`."""
    normal, sign, uniform = draws
    n_wiener = SCHEMES[spec.scheme].random_needs(spec)[0]
    lines = [f"x_{s} = {row}" for s, row in zip(spec.state, old, strict=True)]
    lines += stir_lines(spec) if is_stirred(spec) else []
    spare, loose = iter(normal[n_wiener:]), iter(uniform)
    lines += [f"v_{name} = {next(spare) if law == 'normal' else next(loose)}" for name, law in spec.draws]
    lines += step_lines(spec, normal[:n_wiener], sign)
    for s, low, period in spec.periodic:
        lines.append(f"y_{s} = y_{s} - {period!r} * np.floor((y_{s} - {low!r}) / {period!r})")
    return lines + [f"{row} = y_{s}" for s, row in zip(spec.state, new, strict=True)]


def test_body(spec: KernelSpec, state: list[str], words: list[list[str]], sums: list[str]) -> list[str]:
    """Events and observables at one state of one lane.

    A row of `words` stands for a few events: where the state was, time steps inside so far, entries so far.
    """
    lines = [f"v_{s} = {row}" for s, row in zip(spec.state, state, strict=True)]
    for k, condition in enumerate(spec.events):
        mark = f"np.int64({1 << FIELD * (k % PACKED)}) if {condition} else np.int64(0)"
        lines.append(f"here = {mark}" if k % PACKED == 0 else f"here += {mark}")
        if k % PACKED == PACKED - 1 or k == len(spec.events) - 1:
            was, inside, entries = words[k // PACKED]
            # a step is an entry if the state is inside and was not
            lines += [f"{inside} += here", f"{entries} += here & ~{was}", f"{was} = here"]
    for k, source in enumerate(spec.observables):
        lines += [
            f"apart_{k} = {source} - centre_{k}",
            f"{sums[2 * k]} += apart_{k}",
            f"{sums[2 * k + 1]} += apart_{k} * apart_{k}",
        ]
    return lines


def trajectory_source(spec: KernelSpec) -> str:
    """Text of the module; the same spec gives the same text.

    Its function `follow` takes

    - state (n_dim, n): where the trajectories stand; replaced by where they end, nan once they left all bounds;
    - sums (n_sum, n): time steps inside and entries of each event, then sum and sum of squares of each observable about
      its centre; added to. Entries are those between two steps, from the given state on;
    - counts (n, n_dim, n_slot) of int64: histograms, slot 0 below and the last above; one more every `stride` steps, of
      one of the states of the go that ends there, in turn;
    - samples (n_sample, n_dim, n): filled every `every` steps in the same way, as far as it goes;
    - stream (n,) of uint64, parameters (with the centres after them), step, n_step (at most `MOST_STEPS`), stride,
      every, lower (n_dim,) and scale (n_dim,), intervals of the histogram per unit of the state;
    - stirred and moved: a step of a map begins with the bits of the mask `stirred` (uint64) drawn anew, and a random
      part, at most `moved`, nearer the middle of the histograms;

    and returns the number of trajectories that left all bounds. n_step, stride and every are multiples of
    `steps_together`.
    """
    lanes, n_event, n_parameter, together = spec.lanes, len(spec.events), len(spec.parameters), steps_together(spec)
    rows, tags = Rows(lanes), Rows(lanes, "tag")
    states = [rows.take(len(spec.state)) for _ in range(together)]
    sums = rows.take(2 * len(spec.observables))
    words = [tags.take(3) for _ in range(-(-n_event // PACKED))]
    n_normal, n_sign, n_uniform, group = random_layout(spec)
    n_draw = (n_normal + n_sign + n_uniform) * group
    random = [rows.take(n_draw) for _ in range(together // group if n_draw else 0)]
    last = states[-1]
    constants = [f"v_{p} = parameters[{k}]" for k, p in enumerate(spec.parameters)]
    constants += [f"centre_{k} = parameters[{n_parameter + k}]" for k in range(len(spec.observables))]
    constants += ["root = math.sqrt(step)", f"buf = np.zeros({rows.count * lanes})"]
    constants += [f"tag = np.zeros({tags.count * lanes}, dtype=np.int64)"] if words else []
    load = [f"{row} = state[{k}, source]" for k, row in enumerate(last)]
    load += [f"v_{s} = {row}" for s, row in zip(spec.state, last, strict=True)]
    load += [f"{row} = 0" for word in words for row in word]
    for k, condition in enumerate(spec.events):
        load.append(f"{words[k // PACKED][0]} += np.int64({1 << FIELD * (k % PACKED)}) if {condition} else np.int64(0)")
    load += [f"{row} = 0.0" for row in sums]
    go: list[str] = []
    if is_stirred(spec):
        constants += [f"middle_{s} = lower[{k}] + 0.5 * (n_slot - 2.0) / scale[{k}]" for k, s in enumerate(spec.state)]
    if random or is_stirred(spec):
        constants.append(f"words = np.zeros({4 * lanes}, dtype=np.uint64)")
        load += seed_lines(spec, "stream[source]", "words")
    if random:
        go.append(f"for lane in range({lanes}):")
        for drawn in random:
            go += indented(fill_lines(spec, drawn, "words"), 1)
    for member in range(together):
        draws: Draws = ([], [], [])
        if random:
            draws = named_random_rows(spec, random[member // group], member % group)
        go += [f"for lane in range({lanes}):", *indented(step_body(spec, states[member - 1], states[member], draws), 1)]
    if words or sums:
        # in names of their own: the compiler cannot know that the two buffers do not overlap
        held = {row: f"held_{k}" for k, row in enumerate([*(row for word in words for row in word), *sums])}
        go.append(f"for lane in range({lanes}):")
        go += [f"    {name} = {row}" for row, name in held.items()]
        for state in states:
            go += indented(test_body(spec, state, [[held[r] for r in w] for w in words], [held[r] for r in sums]), 1)
        go += [f"    {row} = {name}" for row, name in held.items()]
    turned = [f"buf[(member * {len(spec.state)} + {k}) * {lanes} + lane]" for k in range(len(spec.state))]
    histogram = ["# in turn, since cycles would be met in one phase otherwise", f"member = (at // stride) % {together}"]
    for k, row in enumerate(turned):
        histogram += [
            f"place = ({row} - lower[{k}]) * scale[{k}] + 1.0",
            # nan goes to the first
            "place = place if place > 0.0 else 0.0",
            "place = place if place < n_slot - 1.0 else n_slot - 1.0",
            f"counts[first + lane, {k}, int(place)] += 1",
        ]
    finite = " & ".join(f"(abs({row}) < 1e100)" for row in last)
    store = [f"fine = {finite}", "lost += 0 if fine else 1"]
    store += [f"state[{k}, first + lane] = {row} if fine else np.nan" for k, row in enumerate(last)]
    for k in range(n_event):
        for offset, row in enumerate(words[k // PACKED][1:]):
            counter = f"({row} >> {FIELD * (k % PACKED)}) & {2**FIELD - 1}"
            store.append(f"sums[{2 * k + offset}, first + lane] += np.float64({counter})")
    store += [f"sums[{2 * n_event + k}, first + lane] += {row}" for k, row in enumerate(sums)]
    text = [
        f'"""Trajectory kernel generated by perdure (template {TRAJECTORY_VERSION}); made anew when it is missing."""',
        mathematics(),
        "",
        "@njit(cache=CACHED, **LANE_OPTIONS)",
        "def follow(state, sums, counts, samples, stream, parameters, step, n_step, stride, every, lower, scale,"
        " stirred, moved):",
        "    lost = 0",
        "    n_lane, n_slot = state.shape[1], counts.shape[2]",
        *indented(constants, 1),
        f"    for first in range(0, n_lane, {lanes}):",
        f"        used = min({lanes}, n_lane - first)",
        f"        for lane in range({lanes}):",
        "            source = first + min(lane, used - 1)",
        *indented(load, 3),
        "        taken = 0",
        f"        for at in range({together}, n_step + 1, {together}):",
        *indented(go, 3),
        "            if at % stride == 0:",
        "                for lane in range(used):",
        *indented(histogram, 5),
        "            if at % every == 0 and taken < samples.shape[0]:",
        f"                member = taken % {together}",
        "                for lane in range(used):",
        *(f"                    samples[taken, {k}, first + lane] = {row}" for k, row in enumerate(turned)),
        "                taken += 1",
        "        for lane in range(used):",
        *indented(store, 3),
        "    return lost",
        "",
    ]
    return "\n".join(text)
