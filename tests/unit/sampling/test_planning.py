"""Rules of the plan."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from perdure._records import BurstOptions, CellOptions
from perdure._sampling import Pilot, boxes_per_axis, bursts_per_cell, domain, planning, sobol_base
from unit.sampling.support import system_of


def pilot_of(points: np.ndarray, at_rest: bool = False) -> Pilot:
    return Pilot(points, points[:, -4:], 1.0, 0.05, 8192, 256, at_rest)


@pytest.mark.parametrize(
    ("given", "n_cell", "expected"),
    [
        (64, 100, (64, 8)), (16, 100, (16, 8)), (8, 100, (8, 4)), (4, 100, (4, 2)), (2, 100, (2, 2)),
        (1, 100, (2, 2)), (3, 100, (4, 2)), (5, 100, (6, 2)), (7, 100, (8, 2)), (12, 100, (12, 4)),
        (20, 100, (20, 4)), (63, 100, (64, 2)), (66, 100, (66, 2)), (64, 5000, (64, 4)), (33, 5000, (34, 2)),
    ],
)  # fmt: skip
def test_given_bursts_per_cell(given: int, n_cell: int, expected: tuple[int, int]) -> None:
    """Replicates are equal, at least two, of two bursts where there are so many; an odd number is rounded up."""
    per_cell, n_replicate, why = bursts_per_cell(BurstOptions(per_cell=given), n_cell, 100)
    assert (per_cell, n_replicate) == expected
    assert why == ""
    assert per_cell % n_replicate == 0


@pytest.mark.parametrize("n_cell", [1, 50, 3000, 5000, 10**6])
@pytest.mark.parametrize("n_step", [1, 100, 10**5])
@pytest.mark.parametrize(("reseed", "effort"), [(None, 1.0), (True, 1.0), (None, 4.0), (False, 1.0), (False, 0.25)])
def test_found_bursts_per_cell(n_cell: int, n_step: int, reseed: bool | None, effort: float) -> None:
    """A power of two within the bounds; the largest within the budget, of which reseeded bursts leave a quarter."""
    per_cell, n_replicate, why = bursts_per_cell(BurstOptions(reseed=reseed), n_cell, n_step, effort)
    fewest = planning.FEWEST if reseed is False else planning.FEWEST_BEFORE
    part = effort * (1.0 if reseed is False else planning.PLAIN_PART)
    assert fewest <= per_cell <= planning.MOST
    assert per_cell & (per_cell - 1) == 0
    assert per_cell % n_replicate == 0
    assert n_replicate == (4 if n_cell >= planning.MANY_CELLS else 8)

    def affordable(n: int) -> bool:
        return n * n_cell <= part * min(planning.BURST_BUDGET, planning.STEP_BUDGET / n_step)

    assert affordable(per_cell) or per_cell == fewest
    assert not affordable(2 * per_cell) or per_cell == planning.MOST
    assert f"{fewest} to {planning.MOST} per cell" in why
    assert ("before reseeding" in why) == (reseed is not False)


def test_burst_budget_is_the_scarcer_of_bursts_and_steps() -> None:
    assert planning.burst_budget(1) == planning.BURST_BUDGET
    assert planning.burst_budget(10**6) == pytest.approx(planning.STEP_BUDGET / 1e6)


def test_domain_is_the_range_of_the_pilot() -> None:
    pilot = pilot_of(np.random.default_rng(1).uniform(-1.0, 3.0, (2, 5000)))
    found = domain(system_of("spiral"), CellOptions(lower={"y": -2.0}), pilot)
    np.testing.assert_array_equal(found.lower, [pilot.points[0].min(), -2.0])
    np.testing.assert_array_equal(found.upper, pilot.points.max(axis=1))
    np.testing.assert_array_equal(found.given, [[False, False], [True, False]])
    np.testing.assert_array_equal(found.closed, found.given)


def test_domain_of_heavy_tails_is_closed() -> None:
    """A Cauchy component is cut off at twice its middle 99 percent; what the case gives goes before."""
    rng = np.random.default_rng(2)
    points = np.array([rng.standard_cauchy(20_000), rng.standard_normal(20_000)])
    found = domain(system_of("spiral"), CellOptions(), pilot_of(points))
    low, high = np.quantile(points[0], [0.005, 0.995])
    np.testing.assert_allclose([found.lower[0], found.upper[0]], [1.5 * low - 0.5 * high, 1.5 * high - 0.5 * low])
    np.testing.assert_array_equal(found.closed, [[True, True], [False, False]])
    np.testing.assert_array_equal(found.given, np.zeros((2, 2), dtype=bool))
    given = domain(system_of("spiral"), CellOptions(upper={"x": 9.0}), pilot_of(points))
    assert given.upper[0] == 9.0


def test_domain_of_a_fixed_point_has_a_width() -> None:
    """Half a percent of its size, at least of 1, on either side."""
    found = domain(system_of("spiral"), CellOptions(), pilot_of(np.array([[40.0], [0.0]]) * np.ones((2, 100))))
    np.testing.assert_allclose(found.upper - found.lower, [0.4, 0.01])
    np.testing.assert_allclose(found.upper + found.lower, [80.0, 0.0])


@pytest.mark.parametrize("coarse", [False, True])
@pytest.mark.parametrize("reseeded", [False, True])
@pytest.mark.parametrize(("name", "n_dim"), [("logistic", 1), ("spiral", 2)])
def test_boxes_per_axis(name: str, n_dim: int, reseeded: bool, coarse: bool) -> None:
    """Reseeded bursts take fewer; half of the usual where coarse; a number given goes before."""
    pilot, system = pilot_of(np.zeros((n_dim, 10))), system_of(name)

    def boxes(cells: CellOptions, pilot: Pilot = pilot) -> tuple[np.ndarray, str]:
        return boxes_per_axis(system, cells, pilot, reseeded=reseeded, coarse=coarse)

    usual = (planning.RESEEDED_BOXES if reseeded else planning.AXIS_BOXES)[n_dim] // (2 if coarse else 1)
    counts, why = boxes(CellOptions())
    np.testing.assert_array_equal(counts, [usual] * n_dim)
    assert f"{usual} per axis in {n_dim} dimension" in why
    counts, _ = boxes(CellOptions(), replace(pilot, at_rest=True))
    assert (counts % 2 == 1).all(), "a fixed point in the middle must lie inside a box"
    counts, why = boxes(CellOptions(count=1000, counts={system.state[-1]: 7}))
    np.testing.assert_array_equal(counts, [32, 7] if n_dim == 2 else [7])
    assert why == "from [cells] count"


def test_reseeded_bursts_take_fewer_boxes() -> None:
    assert planning.RESEEDED_BOXES.keys() == planning.AXIS_BOXES.keys()
    assert all(planning.RESEEDED_BOXES[n] < most for n, most in planning.AXIS_BOXES.items())


@pytest.mark.parametrize("size", [1, 2, 8, 13, 16])
def test_sobol_base(size: int) -> None:
    """One point in every piece where the size is a power of two; the same for the same seed."""
    base = sobol_base(5, 3, size)
    assert base.shape == (size, 3)
    np.testing.assert_array_equal(base, sobol_base(5, 3, size))
    assert not np.array_equal(base, sobol_base(6, 3, size))
    if size & (size - 1) == 0:
        piece = base.astype(np.uint64) * np.uint64(size) >> np.uint64(32)
        np.testing.assert_array_equal(np.sort(piece, axis=0), np.repeat(np.arange(size)[:, None], 3, axis=1))
