from __future__ import annotations

from pathlib import Path

import pytest

from helpers.synthetic_estimate import EVENTS, make_estimate, make_steered
from perdure._cli.budget import budget_text
from perdure._cli.numbers import aligned, percent, quantity_cells
from perdure._cli.table import CAUTION, results_text
from perdure._records import EventResult, ObservableResult, Quantity, Regime, Stage, Target
from perdure._result import Result, open_file
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
        (Quantity(None, 3391.0, float("inf"), {}, "s", "no entry seen: lower bound"), ("> 3300 s (no entry seen)", "")),
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
        "errors and intervals include: sampling; not in them: cell size, time step",
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


def with_parts() -> Regime:
    """A share with all parts, a return period without the time step, a spell and observables with sampling alone."""
    share = Quantity(0.2, 0.1, 0.3, {"step": 0.02, "sampling": 0.03, "cells": 0.04})
    period = Quantity(12.3456, 11.5, 13.2, {"sampling": 0.3, "cells": 0.4}, "s")
    event = EventResult(share, SEEN.entry_rate, period, SEEN.mean_spell)
    return regime(quantity(1.0, 0.0), events={"reversal": event, "flood": NEVER})


def test_parts_of_the_error_have_columns() -> None:
    lines = results_text(FakeResult(regimes=(with_parts(),))).split("\n")
    assert lines[3:14] == [
        "event                    value            95 percent interval  sampling  cell size  time step",
        "reversal  share of time  0.200 ± 0.054    0.100 to 0.300       0.030     0.040      0.020",
        "          return period  12.35 ± 0.50 s   11.50 to 13.20       0.30      0.40       -",
        "          mean spell     0.267 ± 0.011 s  0.245 to 0.289       0.011     -          -",
        "flood     share of time  < 0.00030 (never seen in 1e+04 effective bursts)",
        "          return period  > 3300 s (no entry seen)",
        "          mean spell     none: no entry seen",
        "",
        "observable            value               95 percent interval  sampling  cell size  time step",
        "height      mean      23.551 ± 0.020 m    23.511 to 23.591     0.020     -          -",
        "            variance  74.30 ± 0.50 (m)^2  73.30 to 75.30       0.50      -          -",
    ]


def test_parts_that_are_missing_somewhere_are_named() -> None:
    lines = results_text(FakeResult(regimes=(with_parts(),))).split("\n")
    assert (
        "errors and intervals include: sampling, cell size (missing in: entry rate, mean spell, mean, variance), "
        "time step (missing in: entry rate, return period, mean spell, mean, variance)"
    ) in lines


def complete(number: Quantity) -> Quantity:
    """The same with all parts."""
    parts = {"sampling": 0.1, "cells": 0.1, "step": 0.1}
    return Quantity(number.value, number.low, number.high, parts, number.unit)


@pytest.mark.parametrize("kind", ["flow", "noisy-flow", "map", "noisy-map"])
def test_nothing_is_missing_where_all_parts_are_in_all_numbers(kind: str) -> None:
    event = EventResult(*(complete(q) for q in (SEEN.share, SEEN.entry_rate, SEEN.return_period, SEEN.mean_spell)))
    height = ObservableResult(complete(quantity(1.0, 0.1)), complete(quantity(1.0, 0.1)))
    only = regime(quantity(1.0, 0.0), events={"reversal": event}, observables={"height": height})
    lines = results_text(FakeResult(kind=kind, regimes=(only,))).split("\n")
    assert "errors and intervals include: sampling, cell size, time step" in lines


def test_a_map_misses_no_time_step() -> None:
    lines = results_text(FakeResult(kind="map")).split("\n")
    assert "errors and intervals include: sampling; not in them: cell size" in lines


def test_table_of_the_budget() -> None:
    lines = budget_text(FakeResult(regimes=(with_parts(),))).split("\n")
    assert lines[:14] == [
        "Convection loop",
        "",
        "number                   value                half-width  sampling  cell size  time step",
        "reversal, share of time  0.200 ± 0.054        0.10        0.030     0.040      0.020",
        "reversal, entry rate     0.0810 ± 0.0010 1/s  0.0020      0.0010    -          -",
        "reversal, return period  12.35 ± 0.50 s       0.85        0.30      0.40       -",
        "reversal, mean spell     0.267 ± 0.011 s      0.022       0.011     -          -",
        "flood, share of time     < 0.00030 (never seen in 1e+04 effective bursts)",
        "flood, entry rate        < 0.0012 1/s (no entry seen)",
        "flood, return period     > 3300 s (no entry seen)",
        "flood, mean spell        none: no entry seen",
        "height, mean             23.551 ± 0.020 m     0.040       0.020     -          -",
        "height, variance         74.30 ± 0.50 (m)^2   1.0         0.50      -          -",
        "outside share            0                    6.0e-5      0         -          -",
    ]
    assert any(line.startswith("errors and intervals include: sampling, cell size (missing in: ") for line in lines)


def test_budget_of_several_regimes_has_their_weights() -> None:
    text = budget_text(FakeResult(regimes=tuple(regime(quantity(weight, 0.01)) for weight in (0.7, 0.3))))
    assert "regime 1, weight                   0.700 ± 0.010" in text
    assert "regime 2, reversal, share of time  0.02165 ± 0.00043" in text


TARGETS = (
    Target("reversal", "share", 0.02, 0.01951, True),
    Target("reversal", "return_period", 0.02, 0.0341, False, "the budget of steps is spent"),
    Target("flood", "share", 0.02, None, False, "never seen"),
)


def test_targets_have_a_section() -> None:
    lines = results_text(FakeResult(targets=TARGETS)).split("\n")
    begin = lines.index("accuracy of event                 wanted  reached")
    assert lines[begin : begin + 5] == [
        "accuracy of event                 wanted  reached",
        "reversal           share of time  0.02    0.020     met",
        "reversal           return period  0.02    0.035     not met: the budget of steps is spent",
        "flood              share of time  0.02    no value  not met: never seen",
        "",
    ]
    assert "accuracy" not in results_text(FakeResult())


EFFORT = (
    Stage("pilot", 1, 20, 1000, 0.5),
    Stage("cover", 3, 1980, 50_000, 3.0),
    Stage("reseeded", 24, 8000, 400_000, 700.0),
)


def test_a_line_tells_where_the_bursts_went() -> None:
    lines = results_text(FakeResult(effort=EFFORT, focus=(0.031, (0.482,)))).split("\n")
    assert lines[-3:] == [
        "cells 3, bursts 192, steps 9600, time 61 s",
        "bursts by stage: pilot 0.2 %, cover 20 %, reseeded 80 %",
        "half of the bursts went to 3.1 % of the cells, which hold 48 % of the mass",
    ]
    assert not any("half of the bursts" in line for line in results_text(FakeResult()).split("\n"))


def test_stages_in_detail() -> None:
    text = results_text(FakeResult(effort=EFFORT), verbose=True)
    assert text.endswith("\n  reseeded: sweeps 24, bursts 8000, steps 400000, time 12 min")


def test_a_file_gives_the_same_text_as_the_run(tmp_path: Path) -> None:
    made = Result(make_steered(make_estimate(n_regime=2)))
    made.save(tmp_path / "out.h5")
    with open_file(tmp_path / "out.h5") as opened:
        for text in (results_text, budget_text):
            assert text(opened) == text(made)
    lines = results_text(made).split("\n")
    assert "bursts by stage: pilot 0.1 %, cover 12 %, reseeded 62 %, half step 25 %" in lines
    (focus,) = (line for line in lines if line.startswith("half of the bursts went to "))
    assert " of the mass of regime 1 and " in focus
    assert f"{EVENTS[1]:<17}  share of time  0.02    no value  not met: never seen" in lines


@pytest.mark.parametrize(
    ("masses", "rest"),
    [
        ((), ""),
        ((0.5, 0.251), ", which hold 50 % of the mass of regime 1 and 25 % of the mass of regime 2"),
    ],
)
def test_mass_of_the_favoured_cells_by_regime(masses: tuple[float, ...], rest: str) -> None:
    lines = results_text(FakeResult(focus=(0.5, masses))).split("\n")
    assert lines[-1] == f"half of the bursts went to 50 % of the cells{rest}"


@pytest.mark.parametrize(
    ("part", "text"), [(0.0, "0 %"), (0.00021, "0.021 %"), (0.994, "99 %"), (0.996, "100 %"), (1.0, "100 %")]
)
def test_percent(part: float, text: str) -> None:
    assert percent(part) == text


def test_only_a_text_with_nothing_after_it_runs_on() -> None:
    rows = [("a", "a long reason", "", ""), ("b", "1", "", "2")]
    assert aligned(rows, ("", "v", "i", "p")) == ["   v  i  p", "a  a long reason", "b  1     2"]
