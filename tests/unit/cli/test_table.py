from __future__ import annotations

import pytest

from perdure._cli.table import CAUTION, quantity_cells, results_text
from perdure._records import EventResult, Quantity
from unit.cli.fakes import NEVER, SEEN, FakeResult, quantity, regime


@pytest.mark.parametrize(
    ("number", "expected"),
    [
        (quantity(0.021653, 0.00043), ("0.02165 ± 0.00043", "0.02079 to 0.02251")),
        (quantity(12.3456, 0.21, "s"), ("12.35 ± 0.21 s", "11.93 to 12.77")),
        (Quantity(1.0, 1.0, 1.0, {"sampling": 0.0}), ("1", "")),
        (Quantity(0.0, 0.0, 0.00012, {"sampling": 0.0}), ("0", "0 to 0.000120")),
        (NEVER.share, ("< 0.00030 (never seen in 1e+04 effective bursts)", "")),
        (Quantity(None, 0.0, 0.0003), ("< 0.00030 (never seen)", "")),
        (NEVER.return_period, ("> 3300 s (no entry seen)", "")),
        (NEVER.mean_spell, ("none: no entry seen", "")),
        (
            Quantity(2.0, 1.8, 2.2, {"sampling": 0.1}, "1", "first of two"),
            ("2.00 ± 0.10 (first of two)", "1.80 to 2.20"),
        ),
    ],
)
def test_quantity_cells(number: Quantity, expected: tuple[str, str]) -> None:
    assert quantity_cells(number) == expected


def test_upper_bound_is_never_below_the_number() -> None:
    text, _ = quantity_cells(Quantity(None, 0.0, 0.0003000001))
    assert text == "< 0.00031 (never seen)"


def test_one_regime() -> None:
    assert results_text(FakeResult()).split("\n") == [
        "Convection loop",
        "outcome: one regime",
        "",
        "event                    value              95 percent interval",
        "reversal  share of time  0.02165 ± 0.00043  0.02079 to 0.02251",
        "          return period  12.35 ± 0.21 s     11.93 to 12.77",
        "          mean spell     0.267 ± 0.011 s    0.245 to 0.289",
        "flood     share of time  < 0.00030 (never seen in 1e+04 effective bursts)",
        "          return period  > 3300 s (no entry seen)",
        "          mean spell     none: no entry seen",
        "",
        "observable            value               95 percent interval",
        "height      mean      23.551 ± 0.020 m    23.511 to 23.591",
        "            variance  74.30 ± 0.50 (m)^2  73.30 to 75.30",
        "",
        "               value  95 percent interval",
        "outside share  0      0 to 0.000120",
        "",
        "errors and intervals are those of sampling alone; not in them: cell size and time step",
        "",
        "cells 3, bursts 192, steps 9600, time 61 s",
    ]


def test_caution_closes_the_text() -> None:
    assert results_text(FakeResult(caution="Not for design.")).endswith(f"\n\nNot for design.\n{CAUTION}")
    assert CAUTION not in results_text(FakeResult())


def test_messages_and_failed_check() -> None:
    text = results_text(FakeResult(messages=("the cover did not close",), checks_passed=False))
    assert text.split("\n")[2:4] == [
        "  the cover did not close",
        "  a stated check failed: do not rely on the numbers before the messages above are dealt with",
    ]


def test_several_regimes_have_a_title_each() -> None:
    regimes = tuple(regime(quantity(weight, 0.01), observables={}) for weight in (0.7, 0.3))
    lines = results_text(FakeResult(outcome="several-regimes", regimes=regimes)).split("\n")
    assert "outcome: several regimes" in lines
    titles = [line for line in lines if line.startswith("regime ")]
    assert titles == [
        "regime 1 of 2: weight 0.700 ± 0.010, 95 percent interval 0.680 to 0.720",
        "regime 2 of 2: weight 0.300 ± 0.010, 95 percent interval 0.280 to 0.320",
    ]
    assert not any(line.startswith("observable") for line in lines)


def test_no_regime() -> None:
    outside = Quantity(None, None, None, {}, "1", "every class of cells leaks")
    text = results_text(FakeResult(outcome="leaking", regimes=(), outside_share=outside))
    assert "outside share  none: every class of cells leaks" in text.split("\n")


def test_details() -> None:
    counts = {"bursts": 192, "steps": 9600, "blown_up": 5}
    assert "blown up 5, time 61 s" in results_text(FakeResult(counts=counts))
    assert results_text(FakeResult(), verbose=True).endswith("\n  pilot: 0.4 s\n  bursts: 60 s")


def test_parts_of_the_budget_are_named() -> None:
    share = Quantity(0.2, 0.1, 0.3, {"sampling": 0.03, "cells": 0.04})
    event = EventResult(share, SEEN.entry_rate, SEEN.return_period, SEEN.mean_spell)
    only = regime(quantity(1.0, 0.0), events={"reversal": event})
    lines = results_text(FakeResult(regimes=(only,))).split("\n")
    assert "errors and intervals include: cells, sampling; not in them: time step" in lines
    # both parts in quadrature
    assert "reversal  share of time  0.200 ± 0.050    0.100 to 0.300" in lines
