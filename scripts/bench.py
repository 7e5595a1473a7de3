"""Speed of the burst sampler against plain loops, as ratios of one run: .venv/bin/python scripts/bench.py

Both sides of a ratio are timed in turn, several times, on one core, and the least time of each counts, so that the
state of the machine is the same for both. Seconds are not compared between machines.
"""

from __future__ import annotations

import argparse
import ctypes
import dataclasses
import json
import math
import os
import shutil
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable
from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numba import njit

from perdure import Case
from perdure._partition import Boxes
from perdure._records import BoxGrid, CaseRecord, Plan
from perdure._sampling import BurstSampler, kernel_for, parameter_values, sobol_base, trajectories_for
from perdure._streams import seed_words

STEP = 0.005
CONVECTION = (10.0, 28.0, 8.0 / 3.0)
# Lanes of one call: what the sampler flies at once.
N_LANE = 16384

ONE_BY_ONE = "a C loop (gcc -O3 -march=native), one trajectory at a time, without events or tallies"
IN_LANES = "a C loop (gcc -O3 -march=native) over 64 trajectories held as arrays, without events or tallies"
NUMPY_LOOP = "a numba loop over one trajectory at a time that calls numpy's normal generator at every step"
BARE = "a bare Python process"
BARE_TRAJECTORIES = "the same kernel and scheme without events and tallies"
TALLY = "one Runge-Kutta step of the sampler without events: the ratio is steps per burst"


@dataclass(frozen=True)
class Line:
    """One line of the table: `value` in `unit`, and its ratio to the yardstick; `met` is None without a target."""

    name: str
    value: float
    unit: str
    yardstick: str
    yardstick_value: float
    ratio: float
    target: float | None
    met: bool | None


def line(
    name: str, value: float, unit: str, yardstick: tuple[str, float], target: float | None, most: bool = False
) -> Line:
    """A line whose ratio should be at least the target, or at most with `most`."""
    ratio = value / yardstick[1]
    met = None if target is None else (ratio <= target if most else ratio >= target)
    return Line(name, value, unit, *yardstick, ratio, target, met)


def least(works: dict[str, Callable[[], float]], repeats: int) -> dict[str, float]:
    """Least seconds of each work, all of them in turn; a work returns its own seconds. One turn to warm up."""
    best = dict.fromkeys(works, math.inf)
    for turn in range(repeats + 1):
        for name, work in works.items():
            seconds = work()
            if turn:
                best[name] = min(best[name], seconds)
    return best


def clocked(work: Callable[[], Any]) -> float:
    begun = time.perf_counter()
    work()
    return time.perf_counter() - begun


def convection_case(events: bool) -> Case:
    names = ("x", "y", "z")
    sigma, rho, beta = CONVECTION
    system = {
        "kind": "flow",
        "state": list(names),
        "parameters": {"sigma": sigma, "rho": rho, "beta": beta},
        "equations": {"x": "sigma*(y - x)", "y": "x*(rho - z) - y", "z": "x*y - beta*z"},
    }
    three = {
        "ball": {"ball": {"centre": [8.0, 8.0, 27.0], "radius": 5.0}},
        "high": {"when": "z > 40"},
        "box": {"box": {"x": [1.0, 5.0], "y": [1.0, 7.0], "z": [15.0, 25.0]}},
    }
    return Case(title="convection", system=system, events=three if events else {})


class Timed:
    """A burst kernel that adds up the seconds spent in it."""

    def __init__(self, advance: Callable[..., int]) -> None:
        self.advance = advance
        self.seconds = 0.0

    def __call__(self, *arguments: Any) -> int:
        begun = time.perf_counter()
        blown = self.advance(*arguments)
        self.seconds += time.perf_counter() - begun
        return blown


class Run:
    """Bursts of 100 steps from 4 x 256 boxes of the convection flow, 64 each, by the sampler."""

    def __init__(self, events: bool, marginals: bool) -> None:
        case = convection_case(events)
        advance, n_sum = kernel_for(case)
        self.timed = Timed(advance)
        grid = BoxGrid(
            np.array([-22.0, -30.0, 0.0]), np.array([44.0, 60.0, 52.0]) / 32, np.full(3, 32), np.zeros(3, bool)
        )
        self.n_step, self.per_cell = 100, 64
        self.keys = self.boxes_of(grid)
        upper = grid.lower + grid.counts * grid.width
        plan = Plan(
            grid=grid, bounded=False, seed_keys=self.keys, seed_share=np.ones(len(self.keys)) / len(self.keys),
            step=STEP, n_step=self.n_step, per_cell=self.per_cell, n_replicate=2,
            stride=self.n_step // 8 if marginals else self.n_step + 1, scheme="rk4",
            axis_lower=grid.lower, axis_upper=upper, found={}, pilot={},
        )  # fmt: skip
        ends = np.stack([grid.lower, upper], axis=1)
        cells = Boxes(grid, seed_words(1, "bursts"), sobol_base(1, 3, self.per_cell // 2), ends)
        self.sampler = BurstSampler(self.timed, cells, plan, parameter_values(case), n_sum, 50)

    @staticmethod
    def boxes_of(grid: BoxGrid) -> np.ndarray:
        """Boxes that plain trajectories visit, 1024 of them."""
        sigma, rho, beta = CONVECTION
        x = np.random.default_rng(1).uniform(-8.0, 8.0, (3, 1024)) + np.array([[0.0], [0.0], [25.0]])
        for _ in range(4000):
            dx = np.array([sigma * (x[1] - x[0]), x[0] * (rho - x[2]) - x[1], x[0] * x[1] - beta * x[2]])
            x = x + 0.002 * dx
        index = np.clip(np.floor((x - grid.lower[:, None]) / grid.width[:, None]), 0, 31).astype(int)
        keys = np.ravel_multi_index(tuple(index), (32, 32, 32))
        return np.resize(np.unique(keys), 1024).astype(np.int64)

    @property
    def n_burst(self) -> int:
        return len(self.keys) * self.per_cell

    def whole(self) -> float:
        """Seconds of all blocks."""
        return clocked(lambda: list(self.sampler.run(self.keys)))

    def around(self) -> float:
        """Seconds of all blocks outside the kernel: seeds, streams, places, counting, sums."""
        self.timed.seconds = 0.0
        return self.whole() - self.timed.seconds

    def inside(self) -> float:
        """Seconds in the kernel."""
        self.timed.seconds = 0.0
        self.whole()
        return self.timed.seconds


class Parameters(ctypes.Structure):
    _fields_ = [(name, ctypes.c_double) for name in ("sigma", "rho", "beta")]


def c_library(folder: Path) -> ctypes.CDLL | None:
    """The loops of bench_rk4.c, compiled; None, with a line that says so, where that is not possible."""
    gcc = shutil.which("gcc")
    if gcc is None:
        print("gcc was not found: the ratios to C loops are left out")
        return None
    target = folder / "bench_rk4.so"
    source = Path(__file__).with_name("bench_rk4.c")
    command = [gcc, "-O3", "-march=native", "-shared", "-fPIC", str(source), "-o", str(target)]
    done = subprocess.run(command, capture_output=True, text=True)
    if done.returncode != 0:
        print(f"gcc could not compile bench_rk4.c: the ratios to C loops are left out\n{done.stderr.strip()}")
        return None
    library = ctypes.CDLL(str(target))
    column = np.ctypeslib.ndpointer(np.float64, flags="C_CONTIGUOUS")
    for name in ("one_by_one", "in_lanes"):
        function = getattr(library, name)
        function.argtypes = [*(column,) * 3, ctypes.c_long, ctypes.c_long, ctypes.c_double, Parameters]
        function.restype = None
    return library


def c_loop(function: Callable[..., None], n: int, n_step: int) -> Callable[[], float]:
    start = np.random.default_rng(2).uniform(1.0, 9.0, (3, n)) + np.array([[0.0], [0.0], [15.0]])

    def work() -> float:
        x, y, z = start.copy()
        seconds = clocked(lambda: function(x, y, z, n, n_step, STEP, Parameters(*CONVECTION)))
        if not np.isfinite(x).all():
            raise RuntimeError("the C loop left all bounds: its time means nothing")
        return seconds

    return work


def bench_flow(repeats: int, folder: Path) -> list[Line]:
    """Sampler steps per second on one core, without and with events and marginals."""
    bare, full = Run(False, False), Run(True, True)
    works = {"bare": bare.whole, "inside": bare.inside, "full": full.whole}
    library, n_step = c_library(folder), 400
    if library is not None:
        works["one"] = c_loop(library.one_by_one, N_LANE // 4, n_step)
        works["lanes"] = c_loop(library.in_lanes, N_LANE, n_step)
    best = least(works, repeats)
    rate = {
        "bare": bare.n_burst * bare.n_step / best["bare"],
        "inside": bare.n_burst * bare.n_step / best["inside"],
        "full": full.n_burst * full.n_step / best["full"],
    }
    if library is None:
        return []
    one = (ONE_BY_ONE, N_LANE // 4 * n_step / best["one"])
    lanes = (IN_LANES, N_LANE * n_step / best["lanes"])
    unit = "steps/s"
    return [
        line("flow", rate["bare"], unit, one, 2.0),
        line("flow, three events, marginals", rate["full"], unit, one, 1.0),
        line("flow, kernel alone (lanes)", rate["inside"], unit, lanes, None),
        line("flow (lanes)", rate["bare"], unit, lanes, None),
        line("flow, three events, marginals (lanes)", rate["full"], unit, lanes, None),
    ]


@njit(error_model="numpy", fastmath={"contract", "arcp"})
def normal_loop(x, theta, sigma, step, n_step):  # type: ignore[no-untyped-def]
    """The same scheme as the kernel's, state by state; x (n,) is advanced in place."""
    root = math.sqrt(step)
    for i in range(x.shape[0]):
        v = x[i]
        for _ in range(n_step):
            kick = sigma * root * np.random.standard_normal()
            slope = -theta * v
            ahead = v + step * slope + kick
            v = v + 0.5 * step * (slope - theta * ahead) + kick
        x[i] = v


def bench_noisy(repeats: int, folder: Path) -> list[Line]:
    """Steps of a noisy flow with additive noise, scheme of weak order 2."""
    case = Case(
        title="noisy",
        system={
            "kind": "noisy-flow",
            "state": ["x"],
            "parameters": {"theta": 1.5, "sigma": 0.9},
            "equations": {"x": "-theta*x"},
            "noise": {"x": "sigma"},
        },
    )
    advance, n_sum = kernel_for(case)
    n, n_step = N_LANE, 200
    stream = np.random.default_rng(3).integers(0, 2**63, n).astype(np.uint64)

    def kernel() -> float:
        state = np.ones((1, n))
        sums, slots = np.zeros((n_sum, n)), np.zeros((0, 1, n), dtype=np.uint16)
        ends = np.zeros(1), np.ones(1)
        return clocked(
            lambda: advance(state, sums, slots, stream, parameter_values(case), 0.01, n_step, n_step, *ends, 3.0)
        )

    def plain() -> float:
        x = np.ones(n // 4)
        return clocked(lambda: normal_loop(x, 1.5, 0.9, 0.01, n_step))

    best = least({"kernel": kernel, "plain": plain}, repeats)
    yardstick = (NUMPY_LOOP, n // 4 * n_step / best["plain"])
    return [line("noisy", n * n_step / best["kernel"], "steps/s", yardstick, 2.0)]


def bench_trajectories(repeats: int, folder: Path) -> list[Line]:
    """Steps of the long trajectories of a crosscheck: three events tested at every step, marginals tallied."""
    case = convection_case(True)
    fields = {field.name: getattr(case, field.name) for field in dataclasses.fields(CaseRecord)}
    alone = CaseRecord(**{**fields, "observables": ()})
    n, n_step, stride = 256, 16384, 64
    lower, width = np.array([-22.0, -30.0, 0.0]), np.array([44.0, 60.0, 52.0])
    start = np.random.default_rng(4).uniform(1.0, 9.0, (3, n)) + np.array([[0.0], [0.0], [15.0]])
    words = np.arange(n, dtype=np.uint64)

    def work(of: CaseRecord, bare: bool) -> Callable[[], float]:
        kernel = trajectories_for(of, bare=bare)
        counts = np.zeros((n, 3, 52), dtype=np.int64)
        samples = np.empty((0 if bare else n_step // 256, 3, n))
        sums, every = np.zeros((kernel.n_sum, n)), n_step + 1 if bare else stride

        def run() -> float:
            state = start.copy()
            return clocked(
                lambda: kernel.follow(
                    state, sums, counts, samples, words, parameter_values(of), STEP, n_step, every, 256,
                    lower, 50.0 / width, np.uint64(0), 0.0,
                )
            )  # fmt: skip

        return run

    best = least({"bare": work(alone, True), "events": work(alone, False), "full": work(case, False)}, repeats)
    yardstick = (BARE_TRAJECTORIES, n * n_step / best["bare"])
    what, rate = "trajectories, three events, marginals, cells", {k: n * n_step / best[k] for k in ("events", "full")}
    return [
        line(what, rate["events"], "steps/s", yardstick, 0.6),
        line(f"{what}, means of all components", rate["full"], "steps/s", yardstick, None),
    ]


def bench_tally(repeats: int, folder: Path) -> list[Line]:
    """Everything of a burst but its steps: seed, stream, cell of the end, counts, sums, marginals."""
    bare, full = Run(False, False), Run(True, True)
    best = least({"step": bare.inside, "bare": bare.around, "full": full.around}, repeats)
    yardstick = (TALLY, best["step"] / (bare.n_burst * bare.n_step))
    return [
        line("tally", best["bare"] / bare.n_burst, "s/burst", yardstick, None, most=True),
        line("tally, three events, marginals", best["full"] / full.n_burst, "s/burst", yardstick, None, most=True),
    ]


def bench_start(repeats: int, folder: Path) -> list[Line]:
    """Whole processes: the help of the command, and reading a case file."""

    def process(*arguments: str) -> Callable[[], float]:
        return lambda: clocked(lambda: subprocess.run([sys.executable, *arguments], check=True, capture_output=True))

    case = Path(__file__).resolve().parents[1] / "cases" / "loop.toml"
    load = f"import perdure; perdure.load_case({str(case)!r})"
    works = {"bare": process("-c", "pass"), "help": process("-m", "perdure", "--help"), "load": process("-c", load)}
    best = least(works, max(5, repeats // 2))
    yardstick = (BARE, best["bare"])
    return [
        line("perdure --help", best["help"], "s", yardstick, None, most=True),
        line("read a case file", best["load"], "s", yardstick, None, most=True),
    ]


BENCHES = {
    "flow": bench_flow,
    "noisy": bench_noisy,
    "trajectories": bench_trajectories,
    "tally": bench_tally,
    "start": bench_start,
}


def shown(lines: list[Line]) -> str:
    """The table, and under it each yardstick in words."""
    words = list(dict.fromkeys(item.yardstick for item in lines))
    rows = [("what", "value", "yardstick", "ratio", "target")]
    for item in lines:
        number = f"[{words.index(item.yardstick) + 1}] {item.yardstick_value:.3g}"
        target = "" if item.target is None else f"{item.target:g} {'met' if item.met else 'NOT MET'}"
        rows.append((item.name, f"{item.value:.3g} {item.unit}", number, f"{item.ratio:.2f}", target))
    widths = [max(len(row[k]) for row in rows) for k in range(5)]
    table = ["  ".join(cell.ljust(width) for cell, width in zip(row, widths, strict=True)).rstrip() for row in rows]
    return "\n".join([*table, "", *(f"[{k + 1}] {text}" for k, text in enumerate(words))])


def main(arguments: list[str]) -> int:
    """0 if every target was met, else 1."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--json", metavar="FILE", type=Path, help="write the lines as a list of objects")
    parser.add_argument("--only", metavar="NAME", choices=list(BENCHES), help=f"one of {', '.join(BENCHES)}")
    parser.add_argument("--short", action="store_true", help="fewer repeats")
    options = parser.parse_args(arguments)
    names = [options.only] if options.only else list(BENCHES)
    with tempfile.TemporaryDirectory() as folder:
        lines = [item for name in names for item in BENCHES[name](3 if options.short else 15, Path(folder))]
    print(f"one core of {os.cpu_count()}; least of several times; ratios of this run\n")
    if lines:
        print(shown(lines))
    if options.json:
        options.json.write_text(json.dumps([asdict(item) for item in lines], indent=1) + "\n", encoding="utf-8")
    return int(any(item.met is False for item in lines))


if __name__ == "__main__":
    sys.exit(main(sys.argv[1:]))
