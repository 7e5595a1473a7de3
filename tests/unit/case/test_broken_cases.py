"""Case files that are wrong: where, what was found, what is allowed, what to do."""

from __future__ import annotations

from collections.abc import Callable

import pytest

Refused = Callable[[str], tuple[str, ...]]

FLOW_HEAD = '[system]\nkind = "flow"\nstate = ["x", "y"]\n'
FLOW = FLOW_HEAD + '[system.equations]\nx = "y"\ny = "-x"\n'
MAP = '[system]\nkind = "map"\nstate = ["x"]\n[system.equations]\nx = "4*x*(1 - x)"\n'
NOISY_FLOW = FLOW.replace('"flow"', '"noisy-flow"')
NOISY_MAP = MAP.replace('"map"', '"noisy-map"').replace("4*x", "e + 4*x")

PARAMETERS = FLOW + "[system.parameters]\n"
NOISE = NOISY_FLOW + "[system.noise]\n"
DRAWS = NOISY_MAP + "[system.draws]\n"
EVENT = FLOW + "[events.s]\n"
OBSERVABLES = FLOW + "[observables]\n"
CELLS = FLOW + "[cells]\n"
BURSTS = FLOW + "[bursts]\n"


def keyed(line: str) -> str:
    """A case with one more line in [system]."""
    return FLOW_HEAD + line + FLOW.removeprefix(FLOW_HEAD)


def named(name: str) -> str:
    """A case with a state component of this name."""
    return f'[system]\nkind = "flow"\nstate = ["x", "{name}"]\n[system.equations]\nx = "-x"\n"{name}" = "-x"\n'


# Text of the file, line, key, and parts of what must be said after it.
BROKEN = [
    # tables
    ("[case]\ntitle = 'a'\n", None, None, ["no table [system]", "write [system]"]),
    (FLOW + "[evnts]\n", 7, "[evnts]", ["unknown table 'evnts'", "did you mean 'events'?"]),
    (FLOW + "[exit]\nwhen = 'x > 1'\n", 7, "[exit]", ["not computed by this version", "remove it"]),
    (FLOW + "[record]\nfile = 'a'\n", 7, "[record]", ["recorded data are not supported", "remove it"]),
    ("cells = 3\n" + FLOW, 1, "[cells]", ["found 3", "allowed: a table"]),
    ("[[bursts]]\n" + FLOW, 1, "[bursts]", ["allowed: a table"]),
    # case
    ("[case]\ntitle = 3\n" + FLOW, 2, "[case] title", ["found 3", "a text on one line"]),
    ('[case]\ntitle = "a\\u0000"\n' + FLOW, 2, "[case] title", ["a text on one line"]),
    ("[case]\nsed = 3\n" + FLOW, 2, "[case] sed", ["unknown key 'sed'", "did you mean 'seed'?"]),
    ("[case]\nseed = -1\n" + FLOW, 2, "[case] seed", ["found -1", "from 0 to 2**128"]),
    ("[case]\nseed = 1.5\n" + FLOW, 2, "[case] seed", ["found 1.5", "a whole number"]),
    (f"[case]\nseed = {2**128 + 1}\n" + FLOW, 2, "[case] seed", ["from 0 to 2**128"]),
    ("[case]\nseed = true\n" + FLOW, 2, "[case] seed", ["found true"]),
    ("[case]\naccuracy = 0\n" + FLOW, 2, "[case] accuracy",
     ["found 0", "between 0 and 1", "accuracy = 0.05"]),
    ("[case]\naccuracy = 1.0\n" + FLOW, 2, "[case] accuracy", ["found 1.0"]),
    ("[case]\naccuracy = nan\n" + FLOW, 2, "[case] accuracy", ["found nan"]),
    ("[case]\naccuracy = false\n" + FLOW, 2, "[case] accuracy", ["found false", "or leave it out"]),
    ('[case]\naccuracy = "0.1"\n' + FLOW, 2, "[case] accuracy", ['found "0.1"']),
    ('[case]\ncaution = "\\u0007"\n' + FLOW, 2, "[case] caution", ["without control characters"]),
    # system
    (FLOW.replace('"flow"', '"flwo"'), 2, "[system] kind",
     ['found "flwo"', "noisy-map", "did you mean 'flow'?"]),
    (FLOW.replace('"flow"', '"record"'), 2, "[system] kind",
     ["not supported by this version yet", "noisy-flow"]),
    (FLOW.replace('kind = "flow"\n', ""), 1, "[system] kind", ["found nothing", 'kind = "flow"']),
    (FLOW.replace('state = ["x", "y"]\n', ""), 1, "[system] state", ["found nothing", "a list of names"]),
    (FLOW.replace('["x", "y"]', '"x"'), 3, "[system] state", ['found "x"', "a list of names"]),
    (FLOW.replace('["x", "y"]', "[]"), 3, "[system] state", ["found []", "a list of names"]),
    (FLOW.replace('["x", "y"]', '["x", 3]'), 3, "[system] state[1]", ["found 3"]),
    (FLOW.replace('["x", "y"]', '["x", "y", "x"]'), 3, "[system] state[2]", ["'x' a second time"]),
    (named("1y"), 3, "[system] state[1]", ["'1y'", "a letter followed by"]),
    (named("é"), 3, "[system] state[1]", ["'é'", "ASCII only"]),
    (named("_y"), 3, "[system] state[1]", ["'_y'", "a letter followed by"]),
    (named("lambda"), 3, "[system] state[1]", ["a reserved word"]),
    (named("sin"), 3, "[system] state[1]", ["which is a function"]),
    (named("pi"), 3, "[system] state[1]", ["which is a constant"]),
    (named("t"), 3, "[system] state[1]", ["reserved for time"]),
    (keyed("unit = 1\n"), 4, "[system] unit", ["did you mean 'units'?"]),
    (keyed("units = ['m']\n"), 4, "[system] units", ["1 entries", "wrong dimension"]),
    (keyed("units = {z = 'm'}\n"), 4, "[system] units.z", ["unknown state name 'z'"]),
    (keyed("units = {x = ' '}\n"), 4, "[system] units.x", ['found " "', "1 to 64"]),
    (keyed('units = {x = "m\\n"}\n'), 4, "[system] units.x", ["printable"]),
    (keyed("units = 3\n"), 4, "[system] units", ["found 3"]),
    (keyed("time_unit = ''\n"), 4, "[system] time_unit", ['found ""']),
    (FLOW + "[system.forcing]\nperiod = 12\n", 7, "[system] forcing", ["not computed by this version"]),
    (PARAMETERS + "a = '3'\n", 8, "[system.parameters] a", ['found "3"', "a finite number", "a = 10.0"]),
    (PARAMETERS + "a = inf\n", 8, "[system.parameters] a", ["found inf", "a finite number"]),
    (PARAMETERS + "a = true\n", 8, "[system.parameters] a", ["found true"]),
    (PARAMETERS + "a = 1979-05-27\n", 8, "[system.parameters] a", ["1979-05-27 (date)"]),
    (PARAMETERS + "a = {unit = 'm'}\n", 8, "[system.parameters] a.value", ["found nothing"]),
    (PARAMETERS + "a = {value = 1, unti = 'm'}\n", 8, "[system.parameters] a.unti", ["'unit'?"]),
    (PARAMETERS + "a = {value = 1, unit = ''}\n", 8, "[system.parameters] a.unit", ['found ""']),
    (PARAMETERS + "exp = 1\n", 8, "[system.parameters] exp", ["which is a function"]),
    (PARAMETERS + "x = 1\n", 8, "[system.parameters] x", ["also the name of a state component"]),
    # equations
    (FLOW_HEAD, 1, "[system] equations", ["no equations", "(x, y)"]),
    (FLOW_HEAD + "[system.equations]\nx = 'y'\n", 4, "[system] equations",
     ["no equation for y", 'y = "..."']),
    (FLOW + "yy = '1'\n", 7, "[system.equations] yy", ["unknown state name 'yy'", "did you mean 'y'?"]),
    (FLOW.replace("-x", "-xx"), 6, "[system.equations] y", ["unknown name 'xx'", "did you mean 'x'?"]),
    (FLOW.replace("-x", "-x + t"), 6, "[system.equations] y", ["'t'", "do not depend on time"]),
    (FLOW.replace("-x", "x > 1"), 6, "[system.equations] y", ["condition 'x > 1' where a number is needed"]),
    (FLOW.replace('"-x"', "true"), 6, "[system.equations] y", ["found true", "an expression in quotes"]),
    (FLOW.replace('"-x"', "nan"), 6, "[system.equations] y", ["found nan", "a finite number"]),
    (FLOW.replace('"-x"', "0x1" + "0" * 400), 6, "[system.equations] y", ["too large for a 64-bit number"]),
    (FLOW.replace("-x", "__import__('os')"), 6, "[system.equations] y", ["unknown function '__import__'"]),
    # not finite
    (FLOW.replace("-x", "x/0"), 6, "[system.equations] y",
     ["division by zero: the divisor 0.0 is 0", "change"]),
    (FLOW.replace("-x", "x % 0"), 6, "[system.equations] y", ["division by zero: the divisor 0.0 is 0"]),
    (FLOW.replace("-x", "x/k") + "[system.parameters]\nk = 0\n", 6, "[system.equations] y", [
        "division by zero: parameter k is 0"]),
    (FLOW.replace("-x", "x/(k - m)") + "[system.parameters]\nk = 2\nm = 2\n", 6, "[system.equations] y", [
        "division by zero", "k - m", "with k = 2.0, m = 2.0"]),
    (FLOW.replace("-x", "x*log(k)") + "[system.parameters]\nk = -1\n", 6, "[system.equations] y", [
        "'log(k)', which is nan with k = -1.0"]),
    (FLOW.replace("-x", "sqrt(-1 - x**2)"), 6, "[system.equations] y",
     ["not finite at any", "[cells] lower"]),
    (FLOW + "[events.e]\nwhen = 'x > 1/0'\n", 7, "[events.e]", ["division by zero"]),
    (FLOW + "[events.e]\nwhen = 'x > 1'\nuntil = 'not (y > 0 and x < 1/0)'\n", 9, "[events.e] until", [
        "division by zero"]),
    (OBSERVABLES + "n = 'x/0'\n", 8, "[observables] n", ["division by zero"]),
    (NOISE + "x = 'y/0'\n", 8, "[system.noise] x", ["division by zero"]),
    # noise
    (NOISY_FLOW, 1, "[system] noise", ["a noisy flow without noise is a flow", 'kind = "flow"']),
    (NOISE + "", 7, "[system] noise", ["an empty table"]),
    (NOISE + "z = 1\n", 8, "[system.noise] z", ["unknown state name 'z'"]),
    (NOISE + "x = [1]\n", 8, "[system.noise] x", ["found [1]", "an expression in quotes"]),
    (NOISE + "matrix = [[1]]\n", 8, "[system.noise] matrix", ["1 rows", "wrong dimension"]),
    (NOISE + "matrix = [[1], [1, 2]]\n", 8, "[system.noise] matrix", ["lengths 1, 2"]),
    (NOISE + "matrix = [[], []]\n", 8, "[system.noise] matrix", ["lengths 0, 0"]),
    (NOISE + "matrix = [1, 2]\n", 8, "[system.noise] matrix", ["a list of rows"]),
    (NOISE + "matrix = [['q'], [1]]\n", 8, "[system.noise] matrix[0][0]", ["name 'q'"]),
    (NOISE + "matrix = [[1], [1]]\nx = 1\n", 9, "[system.noise] x", ["beside matrix"]),
    (FLOW + "[system.noise]\nx = 1\n", 7, "[system] noise", ["noise in a flow", 'kind = "noisy-flow"']),
    (DRAWS + "e='normal'\n[system.noise]\nx = 1\n", 8, "[system] noise", [
        "noise in a noisy-map", "[system.draws]"]),
    # draws
    (MAP.replace('"map"', '"noisy-map"'), 1, "[system] draws", ["a noisy map without draws is a map"]),
    (MAP.replace('"map"', '"noisy-map"') + "[system.draws]\n", 6, "[system] draws", ["an empty table"]),
    (DRAWS + "e = 'gauss'\n", 7, "[system.draws] e", ['found "gauss"', "normal, uniform"]),
    (DRAWS + "e = 'normal'\nu = 'uniform'\n", 8, "[system.draws] u", ["no equation uses"]),
    (DRAWS + "e = 'normal'\nx = 'normal'\n", 8, "[system.draws] x", ["also the name"]),
    (FLOW + "[system.draws]\ne = 'normal'\n", 7, "[system] draws",
     ["draws in a flow", "only in a noisy-map"]),
    (NOISE + "x = 1\n[system.draws]\ne = 'normal'\n", 9, "[system] draws", ["use [system.noise]"]),
    # events
    (FLOW + "[events]\nstorm = 'x > 1'\n", 8, "[events.storm]",
     ['found "x > 1"', "a table with ball, box or when"]),
    (FLOW + "[events.storm]\n", 7, "[events.storm]", ["no region", "exactly one of ball, box and when"]),
    (EVENT + "when = 'x > 1'\nbox = {x = [0, 1]}\n", 7, "[events.s]", ["box and when"]),
    (EVENT + "until = 'x > 1'\n", 7, "[events.s]", ["no region"]),
    (EVENT + "whn = 'x > 1'\n", 8, "[events.s] whn", ["did you mean 'when'?"]),
    (EVENT + "when = 3\n", 8, "[events.s] when", ["found 3", "a condition in quotes"]),
    (EVENT + "when = 'x'\n", 8, "[events.s] when", ["number 'x' where a condition is needed"]),
    (EVENT + "when = '1 > 2'\n", 8, "[events.s] when", ["the same everywhere", "a condition on x, y"]),
    (EVENT + "when = 'x > 1'\nuntil = '1 > 2'\n", 9, "[events.s] until", ["the same everywhere"]),
    (EVENT + "when = 'k > 2'\n[system.parameters]\nk = 1\n", 8, "[events.s] when", ["same everywhere"]),
    (DRAWS + "e = 'normal'\n[events.s]\nwhen = 'x > e'\n", 9, "[events.s] when", ["name 'e'"]),
    (EVENT + "ball = {centre = [1], radius = 1}\n", 8, "[events.s] ball.centre", ["wrong dimension"]),
    (EVENT + "ball = {centre = [1, 2], radius = -1}\n", 8, "[events.s] ball.radius", [
        "found -1", "allowed: a number above 0", "write for example radius = 5.0"]),
    (EVENT + "ball = {centre = [1, 2]}\n", 8, "[events.s] ball.radius", ["found nothing"]),
    (EVENT + "ball = {centre = [1, nan], radius = 1}\n", 8, "[events.s] ball.centre[1]", ["found nan"]),
    (EVENT + "ball = {center = [1, 2], radius = 1}\n", 8, "[events.s] ball.center", ["'centre'?"]),
    (EVENT + "ball = {centre = [1, 2], radius = 1, scale = [1]}\n", 8, "[events.s] ball.scale", [
        "wrong dimension"]),
    (EVENT + "ball = {centre = [1, 2], radius = 1, scale = [1, 0]}\n", 8, "[events.s] ball.scale[1]", [
        "found 0", "above 0"]),
    (EVENT + "ball = 3\n", 8, "[events.s] ball", ["found 3", "a table with centre and radius"]),
    (EVENT + "box = {x = [2, 1]}\n", 8, "[events.s] box.x", ["lower 2.0 above upper 1.0", "swap them"]),
    (EVENT + "box = {x = [inf, inf]}\n", 8, "[events.s] box.x", ["lower inf"]),
    (EVENT + "box = {x = [nan, 1]}\n", 8, "[events.s] box.x[0]", ["found nan", "inf for no bound"]),
    (EVENT + "box = {x = [1]}\n", 8, "[events.s] box.x", ["found [1]", "[lower, upper]"]),
    (EVENT + "box = {z = [1, 2]}\n", 8, "[events.s] box.z", ["unknown state name 'z'"]),
    (EVENT + "box = {}\n", 8, "[events.s] box", ["without a finite end"]),
    (EVENT + "box = {x = [-inf, inf]}\n", 8, "[events.s] box", ["without a finite end"]),
    (CELLS + "lower=[0, 0]\nupper=[6, 6]\nperiodic=['x']\n[events.s]\nbox = {x = [1, 8]}\n", 12,
     "[events.s] box.x", ["a whole period"]),
    (FLOW + "[events.'a/b']\nwhen = 'x > 1'\n", 7, '[events."a/b"]', ["'a/b'", "without '/'"]),
    (FLOW + "[events.' a']\nwhen = 'x > 1'\n", 7, '[events." a"]', ["no space at either end"]),
    (FLOW + "[events.'']\nwhen = 'x > 1'\n", 7, '[events.""]', ["0 characters"]),
    (FLOW + f"[events.{'n' * 65}]\nwhen = 'x > 1'\n", 7, f"[events.{'n' * 65}]", ["65 characters"]),
    (FLOW + '[events."a\\u0007"]\nwhen = "x > 1"\n', 7, '[events."a\\u0007"]', ["printable"]),
    # observables
    (OBSERVABLES + "n = 3\n", 8, "[observables] n", ["the same everywhere", "use a state component"]),
    (OBSERVABLES + "n = '2*3'\n", 8, "[observables] n", ["the same everywhere"]),
    (OBSERVABLES + "n = 'x > 1'\n", 8, "[observables] n", ["condition 'x > 1'"]),
    (OBSERVABLES + "n = ['x']\n", 8, "[observables] n", ["an expression in quotes"]),
    (OBSERVABLES + "n = {unit = 'm'}\n", 8, "[observables] n.expression", ["found nothing"]),
    (OBSERVABLES + "n = {expression = 'x', uni = 'm'}\n", 8, "[observables] n.uni", ["'unit'?"]),
    (OBSERVABLES + "'a/b' = 'x'\n", 8, '[observables] "a/b"', ["without '/'"]),
    # cells
    (CELLS + "method = 'kmeans'\n", 8, "[cells] method", ["not available in this version yet", '"boxes"']),
    (CELLS + "method = 'box'\n", 8, "[cells] method", ['found "box"', '"boxes"']),
    (CELLS + "lower = [1]\n", 8, "[cells] lower", ["1 entries", "wrong dimension", "(x, y)"]),
    (CELLS + "uper = [1, 1]\n", 8, "[cells] uper", ["did you mean 'upper'?"]),
    (CELLS + "lower = {z = 1}\n", 8, "[cells] lower.z", ["unknown state name 'z'"]),
    (CELLS + "lower = [1, 'a']\n", 8, "[cells] lower.y", ['found "a"', "finite numbers"]),
    (CELLS + "lower = [0, -inf]\n", 8, "[cells] lower.y", ["found -inf"]),
    (CELLS + "lower = [0, 2]\nupper = [1, 2]\n", 8, "[cells] lower.y", ["lower 2.0, upper 2.0"]),
    (CELLS + "lower = [0, -1e308]\nupper = [1, 1e308]\n", 8, "[cells] lower.y", ["a finite width"]),
    (CELLS + "counts = [0, 3]\n", 8, "[cells] counts.x", ["found 0", "whole numbers above 0"]),
    (CELLS + "counts = [1.0, 3]\n", 8, "[cells] counts.x", ["found 1.0"]),
    (CELLS + "counts = [4294967296, 1073741824]\n", 8, "[cells] counts", ["4.61e+18 cells", "2**62"]),
    (CELLS + "counts = [2, 2]\ncount = 4\n", 9, "[cells] count", ["beside counts"]),
    (CELLS + "count = 0\n", 8, "[cells] count", ["found 0"]),
    (CELLS + "periodic = ['z']\n", 8, "[cells] periodic[0]", ["unknown state name 'z'"]),
    (CELLS + "lower = [0, 0]\nperiodic = ['x']\n", 9, "[cells] periodic[0]", ["without both ends"]),
    (CELLS + "lower=[0,0]\nupper=[1,1]\nperiodic = ['x', 'x']\n", 10, "[cells] periodic[1]", ["second time"]),
    # bursts
    (BURSTS + "steps = 3\n", 8, "[bursts] steps", ["steps in a flow", "allowed: duration"]),
    (MAP + "[bursts]\nduration = 3\n", 7, "[bursts] duration", ["duration in a map", "allowed: steps"]),
    (MAP + "[bursts]\nstep = 3\n", 7, "[bursts] step", ["step in a map"]),
    (BURSTS + "duration = 0\n", 8, "[bursts] duration", ["found 0", "above 0"]),
    (BURSTS + "step = -0.1\n", 8, "[bursts] step", ["found -0.1", "above 0"]),
    (BURSTS + "duration = 0.1\nstep = 0.2\n", 9, "[bursts] step", ["0.2 above duration 0.1"]),
    (MAP + "[bursts]\nsteps = 0\n", 7, "[bursts] steps", ["found 0"]),
    (BURSTS + "per_cell = 1\n", 8, "[bursts] per_cell", ["found 1", "from 2"]),
    (BURSTS + "per_cell = 64.0\n", 8, "[bursts] per_cell", ["found 64.0"]),
    (BURSTS + "seeds = 'sobl'\n", 8, "[bursts] seeds", ["uniform, sobol", "did you mean 'sobol'?"]),
    (BURSTS + "scheme = 'weak2'\n", 8, "[bursts] scheme", ['found "weak2"', "allowed: rk4"]),
    (MAP + "[bursts]\nscheme = 'rk4'\n", 7, "[bursts] scheme", ["no scheme in a map"]),
    (NOISE + "x=1\n[bursts]\nscheme = 'rk4'\n", 10, "[bursts] scheme", ["euler-maruyama, weak2"]),
    (BURSTS + "reseed = 1\n", 8, "[bursts] reseed", ["found 1", "true or false", "reseed = true, or leave it out"]),
    (BURSTS + "sweeps = 0\n", 8, "[bursts] sweeps", ["found 0", "from 1"]),
    (BURSTS + "sweeps = 2.0\n", 8, "[bursts] sweeps", ["found 2.0", "a whole number"]),
    (BURSTS + "reseed = false\nsweeps = 4\n", 9, "[bursts] sweeps",
     ["sweeps beside reseed = false", "reseed = true, or remove sweeps"]),
    # the rest
    (FLOW + "[crosscheck]\nstarts = 1\n", 8, "[crosscheck] starts", ["found 1", "from 4 to 16384"]),
    (FLOW + "[crosscheck]\nduration = 0\n", 8, "[crosscheck] duration", ["above 0"]),
    (FLOW + "[crosscheck]\nstart = 2\n", 8, "[crosscheck] start", ["did you mean 'starts'?"]),
    ("study = 3\n" + FLOW, 1, "[study]", ["found 3", "a table"]),
    (FLOW + "[output]\nmatrix = 1\n", 8, "[output] matrix", ["found 1", "true or false"]),
    (FLOW + "[output]\nintervals = 1\n", 8, "[output] intervals", ["found 1", "from 2 to 10000"]),
    (FLOW + "[output]\nintervals = 10001\n", 8, "[output] intervals", ["found 10001"]),
]  # fmt: skip


@pytest.mark.parametrize(("text", "line", "key", "parts"), BROKEN, ids=range(len(BROKEN)))
def test_one_mistake_is_one_problem(
    refused: Refused, text: str, line: int | None, key: str | None, parts: list[str]
) -> None:
    problems = refused(text)
    assert len(problems) == 1
    place = "loop.toml" + (f", line {line}" if line else "") + (f", {key}" if key else "")
    head, separator, finding = problems[0].partition(": found ")
    assert (head, separator) == (place, ": found ")
    for part in [*parts, "; "]:
        assert part in "found " + finding
    assert "; allowed: " in finding or "not computed" in finding


def test_steps_and_duration_exclude_each_other(refused: Refused) -> None:
    problems = refused(BURSTS + "steps = 3\nduration = 1\n")
    assert any("found steps beside duration; allowed: one of the two" in problem for problem in problems)


def test_all_mistakes_are_found_in_one_pass_in_the_order_of_the_file(refused: Refused) -> None:
    problems = refused(
        '[case]\nseed = -1\nacuracy = 0.1\n[system]\nkind = "flow"\nstate = ["x", "y"]\n[system.parameters]\n'
        'a = "1"\n[system.equations]\nx = "b*y"\ny = "sine(x)"\n[cells]\nlower = [0, 0]\nupper = [1, -1]\n'
        '[events.e]\nball = {centre = [1], radius = -1}\n[events.f]\nwhen = "x"\n[observables]\nn = 3\n'
        "[bursts]\nper_cell = 1\n[output]\nintervals = 1\n[crosscheck]\nstarts = 0\n[nonsense]\n"
    )
    lines = [int(problem.split("line ")[1].split(",")[0]) for problem in problems]
    assert lines == [2, 3, 8, 10, 11, 13, 16, 16, 18, 20, 22, 24, 26, 27]


def test_a_wrong_table_hides_no_mistake_of_another(refused: Refused) -> None:
    problems = refused(FLOW.replace('"flow"', '"flwo"').replace("-x", "-q") + "[events.e]\nwhen = 'r > 1'\n")
    assert [problem.split("found ")[1][:18] for problem in problems] == [
        '"flwo"; allowed: m', "the unknown name '", "the unknown name '",
    ]  # fmt: skip


def test_without_a_state_the_shape_of_events_and_options_is_still_checked(refused: Refused) -> None:
    problems = refused(
        "[system]\nkind = 'flow'\n[events.a]\nwhen = 'x > 1'\n[events.b]\nball = {centre = [1], radius = 1}\n"
        "[events.c]\n[cells]\nlower = [1, 2]\ncount = 0\n[observables]\nn = 'x'\n"
    )
    assert [problem.split(": found")[0] for problem in problems] == [
        "loop.toml, line 1, [system] state",
        "loop.toml, line 7, [events.c]",
        "loop.toml, line 10, [cells] count",
    ]


def test_the_list_of_mistakes_is_cut(refused: Refused) -> None:
    problems = refused(OBSERVABLES + "" + "".join(f"n{k} = 3\n" for k in range(60)))
    assert len(problems) == 51
    assert problems[-1] == "loop.toml: 10 more mistakes are not shown"
    problems = refused(OBSERVABLES + "" + "".join(f"n{k} = 3\n" for k in range(3000)))
    assert problems[-1] == "loop.toml: 150 or more mistakes are not shown"
