"""Reference systems as cases. Events and values stand in values.toml, with their sources."""

from __future__ import annotations

from typing import Any

from perdure import Case

GOLDEN = (1 + 5**0.5) / 2


def flat_map(
    equation: str, events: dict[str, str], observables: dict[str, str] | None = None, **more: Any
) -> dict[str, Any]:
    """Tables of a map in one variable; its first two moments unless other observables are given."""
    return {
        "system": {"kind": "map", "state": ["x"], "equations": {"x": equation}} | more,
        "events": {name: {"when": when} for name, when in events.items()},
        "observables": observables or {"x": "x", "x2": "x**2"},
    }


def plane_map(
    x: str, y: str, events: dict[str, dict[str, Any]], observables: dict[str, str] | None = None, **more: Any
) -> dict[str, Any]:
    """Tables of a map in two variables; the first two moments of both are always observed."""
    return {
        "system": {"kind": "map", "state": ["x", "y"], "equations": {"x": x, "y": y}} | more,
        "events": events,
        "observables": {"x": "x", "y": "y", "x2": "x**2", "y2": "y**2"} | (observables or {}),
    }


def noisy(
    equations: dict[str, str],
    noise: dict[str, Any],
    events: dict[str, str],
    observables: dict[str, str],
    **more: Any,
) -> dict[str, Any]:
    """Tables of a noisy flow."""
    system = {"kind": "noisy-flow", "state": list(equations), "equations": equations, "noise": noise} | more
    return {
        "system": system,
        "events": {name: {"when": when} for name, when in events.items()},
        "observables": observables,
    }


def ball(centre: list[float], radius: float) -> dict[str, Any]:
    return {"ball": {"centre": centre, "radius": radius}}


TABLES: dict[str, dict[str, Any]] = {
    "P01-logistic": flat_map(
        "r*x*(1 - x)",
        {
            "A": "0 <= x <= 0.1",
            "B": "0.45 <= x <= 0.55",
            "C": "0.9 <= x <= 1",
            "D": "0.25 <= x <= 0.75",
            "E": "0.001 <= x <= 0.01",
        },
        {"x": "x", "x2": "x**2", "x3": "x**3"},
        parameters={"r": 4.0},
    ),
    "P02-skew-tent": flat_map(
        "x/c if x < c else (1 - x)/(1 - c)",
        {"A": "0.2 <= x <= 0.3", "B": "0 <= x <= 0.05", "C": "0.68 <= x <= 0.72"},
        parameters={"c": 0.7},
    ),
    "P03-gauss": flat_map(
        "1/x - floor(1/x) if x > 0 else 0",
        {"A": "0 <= x <= 0.1", "B": "0.2 <= x <= 0.3", "C": "0.9 <= x <= 1", "D": "1/3 < x <= 1/2"}
        | {f"digit{k}": f"1/{k + 1} < x <= 1/{k}" for k in (1, 3, 4, 5)},
        {"x": "x", "x2": "x**2", "digit": "log(floor(1/x)) if x > 0 else 0"},
    ),
    "P04-golden-beta": flat_map(
        "(beta*x) % 1",
        {"A": "0 <= x < 0.3", "B": "0.5 <= x < 0.7", "C": "0.9 <= x < 1", "R": "x >= 1/beta"},
        parameters={"beta": GOLDEN},
    ),
    "P05-chebyshev3": flat_map(
        "4*x**3 - 3*x",
        {"A": "0.5 <= x <= 1", "B": "-0.1 <= x <= 0.1", "C": "-1 <= x <= -0.9", "D": "0.2 <= x <= 0.6"},
        {"x": "x", "x2": "x**2", "x4": "x**4"},
    ),
    "P06-cusp": flat_map(
        "1 - 2*sqrt(abs(x))",
        {"A": "-1 <= x <= -0.8", "B": "-0.1 <= x <= 0.1", "C": "0.8 <= x <= 1", "D": "0 <= x <= 0.5"},
    )
    | {"cells": {"lower": {"x": -1.0}, "upper": {"x": 1.0}}},
    "P07-two-blocks": flat_map(
        "0.5*((1 if floor(18*x) >= 8 else 0) if x < 0.5 else (0 if floor(18*(x - 0.5)) >= 7 else 1))"
        " + 0.5*((18*x) % 1)",
        {"L": "x < 0.5", "R": "x >= 0.5", "Q": "0.4 <= x < 0.6"},
    ),
    "P08-doubling-events": flat_map("(2*x) % 1", {"A": "0 <= x < 1/8", "B": "3/8 <= x < 1/2", "C": "3/4 <= x < 7/8"}),
    "P09-boole-cauchy": flat_map(
        "alpha*x - beta/x",
        {"A": "-1 <= x <= 1", "B": "2 <= x <= 5", "D": "-0.2 <= x <= 0.1", "C": "x > 10"},
        {"lnx": "log(abs(x))"},
        parameters={"alpha": 0.5, "beta": 0.5},
    ),
    "P10-boole-infinite": flat_map("x - 1/x", {"A": "-1 <= x <= 1"}),
    "P11-noisy-ricker": {
        "system": {
            "kind": "noisy-map",
            "state": ["y"],
            "parameters": {"r": 2.9, "s": 0.15},
            "equations": {"y": "y + r*(1 - exp(y)) + s*w"},
            "draws": {"w": "normal"},
        },
        "events": {
            "A": {"when": "exp(y) < 0.2"},
            "B": {"when": "0.6 < exp(y) < 1.0"},
            "C": {"when": "exp(y) > 1.5"},
            "E": {"when": "exp(y) < 0.1"},
        },
        "observables": {"x": "exp(y)", "x2": "exp(2*y)", "lnx": "y"},
    },
    "P12-cat": plane_map(
        "(2*x + y) % 1",
        "(x + y) % 1",
        {
            "A": {"when": "0 <= x < 0.5 and 0 <= y < 0.5"},
            "B": ball([0.5, 0.5], 0.2),
            "D": {"when": "0.1 <= x < 0.4 and 0.2 <= y < 0.9"},
        },
    ),
    "P13-henon": plane_map(
        "1 - a*x**2 + y",
        "b*x",
        {
            "A": {"when": "x > 0.9"},
            "B": ball([0.3, 0.2], 0.15),
            "C": {"when": "x < -0.8"},
            "D": {"when": "0.4 < x < 0.8 and -0.2 < y < 0.2"},
            "E": ball([-0.6, 0.2], 0.2),
        },
        {"ax": "abs(x)"},
        parameters={"a": 1.4, "b": 0.3},
    ),
    "P14-lozi": plane_map(
        "1 - a*abs(x) + y",
        "b*x",
        {
            "A": {"when": "x > 0.9"},
            "B": ball([0.3, 0.3], 0.2),
            "C": {"when": "x < -0.8"},
            "D": {"when": "0.4 < x < 0.8 and -0.4 < y < 0"},
            "E": ball([-0.4, 0.4], 0.25),
        },
        {"ax": "abs(x)"},
        parameters={"a": 1.7, "b": 0.5},
    ),
    "P15-baker": plane_map(
        "la*x if y < p else (1 - lb) + lb*x",
        "y/p if y < p else (y - p)/(1 - p)",
        {
            "A": {"when": "x <= 0.3"},
            "B": {"when": "x <= 0.09"},
            "D": {"when": "0.55 <= x <= 0.685"},
            "E": {"when": "x <= 0.3 and y < 0.5"},
            "F": {"when": "0.2 <= y < 0.45"},
        },
        parameters={"p": 0.4, "la": 0.3, "lb": 0.45},
    ),
    "P16-ou": noisy(
        {"x": "-theta*(x - mu)"},
        {"x": "sigma"},
        {"A": "x > 1", "B": "0 < x < 0.5", "D": "x < -0.6", "E": "abs(x - 0.4) > 1.5", "far": "x > 4.5"},
        {"x": "x"},
        parameters={"theta": 1.5, "mu": 0.4, "sigma": 0.9},
    ),
    "P17-ou2": noisy(
        {"x1": "-0.6*x1 + 1.5*x2", "x2": "-x1 - 0.4*x2"},
        {"matrix": [[0.7, 0], [0.2, 0.5]]},
        {
            "A": "x1 > 0.5",
            "B": "x1 > 0 and x2 > 0",
            # one standard deviation: x . inverse(covariance) x < 1, covariance [[s11, s12], [s12, s22]]
            "D": "(s22*x1**2 - 2*s12*x1*x2 + s11*x2**2)/(s11*s22 - s12**2) < 1",
            "E": "0 < x1 < 0.6 and -0.5 < x2 < 0.2",
        },
        {"x11": "x1**2", "x12": "x1*x2", "x22": "x2**2"},
        parameters={"s11": 0.5033045977011494, "s12": 0.037988505747126436, "s22": 0.26752873563218393},
    ),
    "P18-double-well": noisy(
        {"x": "x - x**3"},
        {"x": "sigma"},
        {"A": "x > 1", "B": "-0.3 < x < 0.3", "D": "0.5 < x < 1.5", "E": "x > 1.6"},
        {"x2": "x**2", "x4": "x**4"},
        parameters={"sigma": 0.5},
    ),
    "P19-underdamped": noisy(
        {"x": "v", "v": "-gamma*v + x - x**3"},
        {"v": "sqrt(2*gamma*T)"},
        {
            "A": "x > 1",
            "B": "abs(v) > 0.8",
            "D": "-0.3 < x < 0.3",
            "E": "v**2/2 + x**4/4 - x**2/2 < 0",
            "F": "x > 0 and v > 0",
            "G": "x > 0",
        },
        {"x2": "x**2", "v2": "v**2"},
        parameters={"gamma": 0.6, "T": 0.2},
    ),
    "P20-stuart-landau": noisy(
        {"x": "mu*x - omega*y - (x**2 + y**2)*x", "y": "omega*x + mu*y - (x**2 + y**2)*y"},
        {"x": "sigma", "y": "sigma"},
        {
            "A": "sqrt(x**2 + y**2) < 0.5",
            "B": "sqrt(x**2 + y**2) > 1.2",
            "D": "x > 0.5",
            "E": "0.8 < sqrt(x**2 + y**2) < 1.1 and x > 0 and y > 0",
        },
        {"r2": "x**2 + y**2", "r4": "(x**2 + y**2)**2"},
        parameters={"mu": 1.0, "omega": 2.0, "sigma": 0.5},
    ),
    "P21-cir": noisy(
        {"x": "kappa*(theta - x)"},
        {"x": "sigma*sqrt(x)"},
        {"A": "x > 1.2", "B": "x < 0.5", "D": "0.7 < x < 0.9"},
        {"x": "x"},
        parameters={"kappa": 2.0, "theta": 0.8, "sigma": 0.7},
    ),
    "P22-lorenz63": {
        "system": {
            "kind": "flow",
            "state": ["x", "y", "z"],
            "parameters": {"sigma": 10.0, "rho": 28.0, "beta": 8 / 3},
            "equations": {"x": "sigma*(y - x)", "y": "x*(rho - z) - y", "z": "x*y - beta*z"},
        },
        "events": {
            "A": {"when": "x > 10"},
            "B": {"when": "x < -10"},
            "C": ball([0, 0, 15], 5),
            "D": ball([-5, -5, 20], 3),
            "E": {"when": "z > 40"},
            "F": {"box": {"x": [1, 5], "y": [1, 7], "z": [15, 25]}},
        },
        "observables": {"x": "x", "z": "z", "x2": "x**2", "z2": "z**2", "y2": "y**2", "x2z": "x**2*z"},
    },
    "P23-roessler": {
        "system": {
            "kind": "flow",
            "state": ["x", "y", "z"],
            "parameters": {"a": 0.2, "b": 0.2, "c": 5.7},
            "equations": {"x": "-y - z", "y": "x + a*y", "z": "b + z*(x - c)"},
        },
        "events": {
            "A": {"when": "x < -5"},
            "B": ball([0, -6, 0], 2.5),
            "C": {"when": "x > 0 and z > 5"},
            "D": ball([4, 4, 0], 2),
        },
        "observables": {"x": "x", "y": "y", "z": "z", "x2": "x**2", "y2": "y**2", "z2": "z**2"},
    },
    "P29-triple-gradient": {
        "system": {"kind": "flow", "state": ["x"], "equations": {"x": "-x*(x**2 - 1)*(x**2 - 4)"}},
        "events": {"right": {"when": "x > 1"}},
        "observables": {"x": "x"},
    },
    "P30-two-logistic": flat_map(
        "4*x*(1 - 2*x) if x < 0.5 else 0.5 + 2*(2*x - 1)*(2 - 2*x)",
        {"A": "0.1 <= x <= 0.2", "B": "0.9 <= x <= 1"},
    )
    | {"cells": {"lower": {"x": 0.0}, "upper": {"x": 1.0}}},
    "P32-tilted-response": noisy(
        {"x": "x - x**3 + h"},
        {"x": "sigma"},
        {"A": "x > 0", "B": "x > 1.2"},
        {"x": "x"},
        parameters={"h": 0.1, "sigma": 0.6},
    ),
}


def reference_case(name: str, **changes: Any) -> Case:
    """Case of a reference system; keyword tables replace or add to its own."""
    return Case(title=name, **(TABLES[name] | changes))
