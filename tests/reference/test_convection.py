"""The three-variable convection system of E. N. Lorenz (J. Atmos. Sci. 20 (1963) 130-141) with default settings.

Its long run lies on thin sheets. Plain Ulam, which spreads mass over whole cells, is off for small events; reseeded
bursts start where bursts ended, on the sheets, and are not.
"""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest

import perdure
from helpers.statistics import assert_agrees
from perdure import Result
from reference.cases import reference_case
from reference.known import Known, known, quantity, sampling

NAME = "P22-lorenz63"


@cache
def result() -> Result:
    return perdure.estimate(reference_case(NAME))


def value(number: str) -> float:
    found = quantity(result(), number).value
    assert found is not None
    return found


def item(number: str) -> Known:
    """Reference value with its uncertainty."""
    (found,) = [found for found in known(NAME) if found.number == number]
    return found


def reference(number: str) -> float:
    return float(item(number).value)


def test_one_regime_that_nothing_leaves() -> None:
    assert result().outcome == "one-regime"
    assert result().checks_passed
    assert result().outside_share.value == 0.0


def test_mean_height_and_mean_square_agree() -> None:
    """Five standard errors; a blur of 3e-4, as of plain Ulam with some 10^4 cells, is noticed."""
    for number in ("mean z", "mean x2"):
        found, truth = quantity(result(), number), item(number)
        error = float(np.hypot(found.error, truth.uncertainty))
        assert_agrees(found.value, truth.value, error)
        with pytest.raises(AssertionError):
            assert_agrees(found.value, (1.0 + 3e-4) * truth.value, error)


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
def test_shares_beyond_an_edge_have_no_error_of_the_cells(event: str, component: str, edge: float) -> None:
    """Five standard errors, and those of the reference, without any allowance for the width of the cells.

    Negative control: seeds uniform in their cells would move what lies within half a width of the edge across it;
    a share that is off by so much is noticed.
    """
    share, truth = result().events[event].share, item(f"share {event}")
    width = float(result().grid.width[result().state.index(component)])
    error = float(np.hypot(share.error, truth.uncertainty))
    assert_agrees(share.value, truth.value, error)
    with pytest.raises(AssertionError):
        assert_agrees(share.value, truth.value + 0.5 * width * density_at(component, edge), error)


def test_the_symmetry_of_the_equations_is_that_of_the_result() -> None:
    """(x, y, z) to (-x, -y, z); the errors of the two shares add up at worst, as one ensemble has both."""
    one, two = (result().events[name].share for name in ("A", "B"))
    assert one.value is not None
    assert two.value is not None
    assert_agrees(one.value, two.value, sampling(one) + sampling(two))
    with pytest.raises(AssertionError):
        assert_agrees(one.value, 1.03 * two.value, sampling(one) + sampling(two))
