"""The three-variable convection system of E. N. Lorenz (J. Atmos. Sci. 20 (1963) 130-141) with default settings.

Its long run lies on thin sheets, so that plain Ulam, which spreads mass over whole cells, is off for small events;
smooth averages over the whole attractor are not much.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest

import perdure
from helpers.statistics import assert_agrees
from perdure import Result
from reference.cases import reference_case
from reference.known import known, quantity, sampling

NAME = "P22-lorenz63"


@cache
def result() -> Result:
    return perdure.estimate(reference_case(NAME))


def value(number: str) -> float:
    found = quantity(result(), number).value
    assert found is not None
    return found


def reference(number: str) -> float:
    (item,) = [item for item in known(NAME) if item.number == number]
    return float(item.value)


def test_one_regime_that_nothing_leaves() -> None:
    assert result().outcome == "one-regime"
    assert result().checks_passed
    assert result().outside_share.value == 0.0


def test_mean_height_and_mean_square_agree() -> None:
    """Half a percent: cells of 1/72 of the range blur the sheets by about that part of it."""
    assert value("mean z") == pytest.approx(reference("mean z"), rel=5e-3)
    assert value("mean x2") == pytest.approx(reference("mean x2"), rel=5e-3)


def test_mean_square_and_mean_height_obey_the_equation_of_z() -> None:
    """Mean of dz/dt is zero and mean xy = mean x^2 (from dx^2/dt), hence mean x^2 = beta mean z."""
    beta = result().case.system.parameters["beta"].value
    assert value("mean x2") == pytest.approx(beta * value("mean z"), rel=1e-2)
    # negative control: another beta would not do
    assert value("mean x2") != pytest.approx(1.05 * beta * value("mean z"), rel=1e-2)


def density_at(component: str, place: float) -> float:
    """Marginal density there, per unit of the component."""
    marginal = result().marginals[component]
    k = int(np.searchsorted(marginal.edges, place)) - 1
    return float(marginal.mass[k] / (marginal.edges[1] - marginal.edges[0]))


@pytest.mark.parametrize(("event", "component", "edge"), [("A", "x", 10.0), ("B", "x", -10.0), ("E", "z", 40.0)])
def test_shares_beyond_an_edge_are_off_by_the_mass_near_it_at_most(event: str, component: str, edge: float) -> None:
    """Uniform seeds move states within their cell: what crosses the edge lies within half a width of it."""
    share = result().events[event].share
    assert share.value is not None
    width = float(result().grid.width[result().state.index(component)])
    allowance = 0.5 * width * density_at(component, edge)
    assert allowance < 0.2 * share.value
    assert_agrees(share.value, reference(f"share {event}"), sampling(share), allowance=allowance)


def test_the_symmetry_of_the_equations_is_that_of_the_result() -> None:
    """(x, y, z) to (-x, -y, z); the two shares have independent errors at worst."""
    one, two = (result().events[name].share for name in ("A", "B"))
    assert one.value is not None
    assert two.value is not None
    width = float(result().grid.width[0])
    allowance = 0.5 * width * (density_at("x", 10.0) + density_at("x", -10.0))
    assert_agrees(one.value, two.value, float(np.hypot(sampling(one), sampling(two))), allowance=allowance)
