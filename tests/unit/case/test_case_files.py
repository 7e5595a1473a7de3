"""Case files that are right: every table, its shapes and its defaults."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from perdure._case import Case, load_case
from perdure._case.expressions import evaluate
from perdure._records import BurstOptions, CellOptions, OutputOptions

Load = Callable[[str], Case]

MAP = """
[system]
kind = "map"
state = ["x"]
[system.equations]
x = "4*x*(1 - x)"
"""
FLOW = """
[system]
kind = "flow"
state = ["x", "y"]
[system.equations]
x = "y"
y = "-x"
"""
NOISY_FLOW = """
[system]
kind = "noisy-flow"
state = ["x", "y"]
[system.parameters]
s = 0.5
[system.equations]
x = "y"
y = "-x - y"
"""
FULL = """# An invented rotor.
[case]
title = "Rotor, ρ"
seed = 340282366920938463463374607431768211456
accuracy = 0.1
caution = "Screening only.\\nAsk an engineer."

[system]
kind = "flow"
state = ["theta", "omega"]
units = ["rad", "rad/s"]
time_unit = "s"

[system.parameters]
k = { value = 2, unit = "1/s2", doc = "stiffness" }
c = 0.25

[system.equations]
theta = "omega"
omega = "-k*sin(theta) - c*omega"

[cells]
method = "boxes"
lower = [-3.0, -5]
upper = { omega = 5, theta = 3.5 }
counts = [64, 32]
periodic = ["theta"]

[bursts]
duration = 2
step = 0.01
per_cell = 64
seeds = "uniform"
scheme = "rk4"
reseed = true
sweeps = 3

[events.fast]
when = "omega > 2 and k > 1"
until = "omega < 1"

[events."coût élevé"]
box = { theta = [-1, 1.5], omega = [-inf, 2] }

[observables]
energy = { expression = "omega**2/2 - k*cos(theta)", unit = "1/s2" }
speed = "abs(omega)"

[crosscheck]
starts = 8
duration = 1000

[study]
design = "sobol"
c = { low = 0.2, high = 0.3 }

[output]
matrix = false
intervals = 20
"""


def test_every_table_is_read(load: Load) -> None:
    case = load(FULL)
    system = case.system
    assert (case.title, case.seed, case.accuracy) == ("Rotor, ρ", 2**128, 0.1)
    assert case.caution == "Screening only.\nAsk an engineer."
    assert (system.kind, system.state, system.units) == ("flow", ("theta", "omega"), ("rad", "rad/s"))
    assert system.time_unit == "s"
    assert {name: (p.value, p.unit, p.doc) for name, p in system.parameters.items()} == {
        "k": (2.0, "1/s2", "stiffness"),
        "c": (0.25, "1", ""),
    }
    assert [e.source for e in system.equations] == [
        "v_omega",
        "(((-v_k) * f_sin(v_theta)) - (v_c * v_omega))",
    ]
    assert case.cells == CellOptions(
        lower={"theta": -3.0, "omega": -5.0},
        upper={"theta": 3.5, "omega": 5.0},
        counts={"theta": 64, "omega": 32},
        periodic=("theta",),
    )
    assert case.bursts == BurstOptions(
        duration=2.0, step=0.01, per_cell=64, seeds="uniform", scheme="rk4", reseed=True, sweeps=3
    )
    assert [event.name for event in case.events] == ["fast", "coût élevé"]
    assert [(o.name, o.unit) for o in case.observables] == [("energy", "1/s2"), ("speed", "1")]
    assert case.crosscheck == {"starts": 8, "duration": 1000}
    assert case.study == {"design": "sobol", "c": {"low": 0.2, "high": 0.3}}
    assert case.output == OutputOptions(matrix=False, intervals=20)
    assert case.source_name == "loop.toml"
    assert isinstance(case, Case)


def test_defaults(load: Load) -> None:
    case = load(FLOW)
    assert (case.title, case.seed, case.accuracy, case.caution) == ("loop", 0, None, "")
    assert (case.system.units, case.system.time_unit) == (("1", "1"), "1")
    assert (case.cells, case.bursts, case.output) == (CellOptions(), BurstOptions(), OutputOptions())
    assert (case.events, case.crosscheck, case.study) == ((), {}, {})
    assert load(MAP).system.time_unit == "step"


@pytest.mark.parametrize(
    ("lines", "expected"),
    [
        ("", (None, None)),
        ("reseed = true", (True, None)),
        ("reseed = false", (False, None)),
        ("sweeps = 1", (None, 1)),
        ("reseed = true\nsweeps = 40", (True, 40)),
    ],
)
def test_reseeding_is_chosen_or_left_to_the_program(
    load: Load, lines: str, expected: tuple[bool | None, int | None]
) -> None:
    bursts = load(f"{FLOW}[bursts]\n{lines}\n").bursts
    assert (bursts.reseed, bursts.sweeps) == expected


def test_text_is_kept_to_the_byte(load: Load) -> None:
    text = "\ufeff" + FULL.replace("\n", "\r\n")
    assert load(text).text == text


def test_seed_of_the_caller_wins(tmp_path: Path) -> None:
    path = tmp_path / "a.toml"
    path.write_text("[case]\nseed = 3\n" + MAP)
    assert (load_case(path).seed, load_case(str(path), seed=0).seed) == (3, 0)
    assert load_case(path, seed=9).text == path.read_text()


def test_units_by_name_leave_the_rest_without(load: Load) -> None:
    assert load(FLOW.replace("[system.eq", 'units = {y = "m"}\n[system.eq')).system.units == ("1", "m")


def test_equations_come_in_state_order_whatever_their_order_in_the_file(load: Load) -> None:
    text = FLOW.replace('x = "y"\ny = "-x"', 'y = "-x"\nx = "y"')
    assert [equation.text for equation in load(text).system.equations] == ["y", "-x"]


def test_numbers_may_stand_for_expressions(load: Load) -> None:
    case = load(NOISY_FLOW.replace('x = "y"', "x = -2") + "[system.noise]\nx = 0.3\n")
    assert [case.system.equations[0].source, case.system.noise[0][0].source] == ["(-2.0)", "0.3"]


def test_diagonal_noise_has_a_column_per_listed_component(load: Load) -> None:
    both = load(NOISY_FLOW + '[system.noise]\ny = "s*x"\nx = 0.3\n').system.noise
    assert [[entry.source for entry in row] for row in both] == [["0.3", "0.0"], ["0.0", "(v_s * v_x)"]]
    one = load(NOISY_FLOW + '[system.noise]\ny = "s"\n').system.noise
    assert [[entry.source for entry in row] for row in one] == [["0.0"], ["v_s"]]


def test_noise_matrix_has_a_row_per_component(load: Load) -> None:
    noise = load(NOISY_FLOW + '[system.noise]\nmatrix = [["s", 0, 1], [0.5, "x", "y"]]\n').system.noise
    assert [[entry.source for entry in row] for row in noise] == [
        ["v_s", "0.0", "1.0"],
        ["0.5", "v_x", "v_y"],
    ]


def test_a_state_component_may_be_called_matrix(load: Load) -> None:
    text = '[system]\nkind = "noisy-flow"\nstate = ["matrix"]\n[system.equations]\nmatrix = "-matrix"\n'
    assert load(text + "[system.noise]\nmatrix = 0.5\n").system.noise[0][0].source == "0.5"
    assert load(text + "[system.noise]\nmatrix = [[0.5, 1]]\n").system.noise[0][1].source == "1.0"


def test_draws_are_names_of_the_equations(load: Load) -> None:
    text = MAP.replace('"map"', '"noisy-map"').replace("4*x", "u + e + 4*x")
    case = load(text + '[system.draws]\ne = "normal"\nu = "uniform"\n')
    assert case.system.draws == (("e", "normal"), ("u", "uniform"))
    assert case.system.equations[0].names == {"x", "e", "u"}


def test_without_observables_there_is_one_per_component(load: Load) -> None:
    case = load(FLOW.replace("[system.eq", 'units = ["m", "m/s"]\n[system.eq'))
    assert [(o.name, o.expression.source, o.unit) for o in case.observables] == [
        ("x", "v_x", "m"),
        ("y", "v_y", "m/s"),
    ]
    assert load(FLOW + "[observables]\n").observables == ()


def test_domain_may_be_given_on_some_sides_only(load: Load) -> None:
    cells = load(FLOW + "[cells]\nlower = {y = -1}\nupper = {x = 2}\ncount = 5000\n").cells
    assert (cells.lower, cells.upper, cells.counts, cells.count) == ({"y": -1.0}, {"x": 2.0}, {}, 5000)


@pytest.mark.parametrize("scheme", ["euler-maruyama", "weak2"])
def test_schemes_of_a_noisy_flow(load: Load, scheme: str) -> None:
    text = NOISY_FLOW + f'[system.noise]\nx = "s"\n[bursts]\nscheme = "{scheme}"\n'
    assert load(text).bursts.scheme == scheme


def test_bursts_of_a_map_are_counted_in_steps(load: Load) -> None:
    assert load(MAP + "[bursts]\nsteps = 4\n").bursts.steps == 4


# ------------------------------------------------------------------------------------------- events


def inside(case: Case, **state: float | list[float]) -> list[bool]:
    values = {name: np.asarray(value, dtype=float) for name, value in state.items()}
    return list(np.atleast_1d(evaluate(case.events[0].condition, values)))


def test_ball(load: Load) -> None:
    case = load(FLOW + "[events.e]\nball = {centre = [8, -2.5], radius = 5}\n")
    assert case.events[0].condition.text == "ball of radius 5 around (8, -2.5)"
    assert inside(case, x=[8, 13, 13.001, 12, 11], y=[-2.5, -2.5, -2.5, 1.5, 1.5]) == [
        True, True, False, False, True,
    ]  # fmt: skip


def test_ball_with_scale(load: Load) -> None:
    case = load(FLOW + "[events.e]\nball = {centre = [0, 0], radius = 2, scale = [1, 10]}\n")
    assert case.events[0].condition.text == "ball of radius 2 around (0, 0) with scale (1, 10)"
    assert inside(case, x=[1.9, 2.1, 0, 0], y=[0, 0, 19, 21]) == [True, False, True, False]


def test_ball_reaches_across_the_seam_of_a_periodic_component(load: Load) -> None:
    cells = "[cells]\nlower = [0, -1]\nupper = [6, 1]\n"
    ball = "[events.e]\nball = {centre = [5.75, 0], radius = 1}\n"
    x, y = [0.25, 0.74, 0.76, 4.76, 4.74, 6.5, -0.5], [0.0] * 7
    wrapped = load(FLOW + cells + 'periodic = ["x"]\n' + ball)
    assert inside(wrapped, x=x, y=y) == [True, True, False, True, False, True, True]
    plain = load(FLOW + cells + ball)
    assert inside(plain, x=x, y=y) == [False, False, False, True, False, True, False]


def test_ball_in_many_dimensions_is_not_bound_by_the_limits_of_user_text(load: Load) -> None:
    names = [f"component_{k}" for k in range(100)]
    equations = "\n".join(f'{name} = "-{name}"' for name in names)
    text = f'[system]\nkind = "flow"\nstate = {names}\n[system.equations]\n{equations}\n'.replace("'", '"')
    case = load(text + f"[events.e]\nball = {{centre = {[1.0] * 100}, radius = 10}}\n")
    assert inside(case, **dict.fromkeys(names, 0.01)) == [True]
    assert inside(case, **dict.fromkeys(names, -0.01)) == [False]


def test_box(load: Load) -> None:
    case = load(FLOW + "[events.e]\nbox = {y = [-1, inf], x = [1, 5.5]}\n")
    assert case.events[0].condition.text == "1 <= x <= 5.5 and y >= -1"
    assert inside(case, x=[1, 0.9, 5.5, 3], y=[0, 0, -1, -1.1]) == [True, False, True, False]
    case = load(FLOW + "[events.e]\nbox = {y = [-inf, 2], x = [-inf, inf]}\n")
    assert case.events[0].condition.text == "y <= 2"
    assert case.events[0].condition.names == {"y"}


def test_box_across_the_seam_of_a_periodic_component(load: Load) -> None:
    cells = '[cells]\nlower = [0, -1]\nupper = [360, 1]\nperiodic = ["x"]\n'
    case = load(FLOW + cells + "[events.e]\nbox = {x = [350, 370]}\n")
    assert inside(case, x=[351, 5, 11, 349]) == [True, True, False, False]
    case = load(FLOW + cells + "[events.e]\nbox = {x = [10, 20]}\n")
    assert case.events[0].condition.source == "(((10.0) <= (v_x)) & ((v_x) <= (20.0)))"


def test_condition_with_parameters_and_until(load: Load) -> None:
    text = NOISY_FLOW + '[system.noise]\nx = "s"\n[events.storm]\nwhen = "x > 2*s"\nuntil = "x < s"\n'
    event = load(text).events[0]
    assert event.condition.names == {"x", "s"}
    assert event.until is not None
    assert event.until.source == "((v_x) < (v_s))"


@pytest.mark.parametrize("name", ["a", "n" * 64, "coût élevé", "東京", "a.b c", "x"])
def test_names_of_events(load: Load, name: str) -> None:
    case = load(FLOW + f'[events."{name}"]\nwhen = "x > 0"\n[observables]\n"{name}" = "x"\n')
    assert (case.events[0].name, case.observables[0].name) == (name, name)


# ---------------------------------------------------------------------------- finite almost nowhere


@pytest.mark.parametrize(
    "equation",
    [
        "1/x",
        "log(x)",
        "sqrt(-x)",
        "sqrt(x*(1 - x))",
        "asin(x)",
        "log(x - 500)",
        "1/(1 - x)",
        "exp(x)",
        "0/x + 1",
    ],
)
def test_expressions_that_are_finite_somewhere_are_allowed(load: Load, equation: str) -> None:
    assert load(MAP.replace("4*x*(1 - x)", equation)).system.equations[0].text == equation


def test_expressions_for_positive_states_only_are_allowed(load: Load) -> None:
    """A trial state with 30 random signs is all positive once in 1e9."""
    names = [f"n{k}" for k in range(30)]
    equations = "\n".join(f'{name} = "{" + ".join(f"log({n})" for n in names)}"' for name in names)
    state = ", ".join(f'"{name}"' for name in names)
    text = f'[system]\nkind = "map"\nstate = [{state}]\n[system.equations]\n{equations}\n'
    assert len(load(text).system.equations) == 30


def test_a_narrow_region_is_found_with_its_domain(load: Load) -> None:
    text = MAP.replace("4*x*(1 - x)", "sqrt(x - 300)*sqrt(300.001 - x)")
    assert load(text + "[cells]\nlower = [300]\nupper = [300.001]\n").system.state == ("x",)
