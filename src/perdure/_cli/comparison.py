"""A crosscheck as text: a few lines beside the results, and the whole table."""

from __future__ import annotations

from typing import TYPE_CHECKING

from perdure._cli.numbers import EVENT_NUMBERS, OBSERVABLE_NUMBERS, aligned, percent, quantity_cells
from perdure._cli.rounding import seconds_text

if TYPE_CHECKING:
    from perdure._records import Comparison, Crosscheck, Distance, Growth, Predictability
    from perdure._result import DensityFile, Result

__all__ = ["crosscheck_text", "summary_lines", "verdict_line"]

NAMES = EVENT_NUMBERS | OBSERVABLE_NUMBERS


def verdict_line(found: Crosscheck) -> str:
    """The verdict, and what it means to be wrong."""
    n = len(found.comparisons) + len(found.marginals)
    return (
        f'crosscheck by long trajectories: {found.verdict} ({n} comparisons; chance of a false "disagrees" '
        f"{percent(found.level)} in all)"
    )


def summary_lines(found: Crosscheck, time_unit: str) -> list[str]:
    """Verdict, messages, trajectories, starts, exponents: a few lines."""
    lines = [verdict_line(found), *(f"  {message}" for message in found.messages)]
    lines += [f"  {line}" for line in (_flight(found, time_unit), _starts(found))]
    for item in found.predictability:
        lines += [f"  {line}" for line in _exponents(item, len(found.predictability))]
    return lines


def crosscheck_text(result: Result | DensityFile) -> str:
    """Everything of a crosscheck: the summary, a row per number, the marginals, what has to hold.

    The result has one.
    """
    found = result.crosscheck
    assert found is not None, "the caller makes sure that there is a crosscheck"
    blocks = [[result.title], summary_lines(found, result.time_unit)]
    several = len(found.starts.in_regime) > 2
    rows = [_comparison_row(row, several) for row in found.comparisons]
    if rows:
        head = ("number", "density", "trajectories", "distance", "effective size", "verdict")
        blocks.append(aligned(rows, head))
    blocks.append(_marginals(found, several))
    blocks.append(_notes(found))
    return "\n\n".join("\n".join(block) for block in blocks if block)


def _flight(found: Crosscheck, time_unit: str) -> str:
    unit = "" if time_unit == "1" else f" {time_unit}"
    arbiter = ""
    if found.arbiter is not None:
        arbiter = f"; {found.arbiter.deviation:.1g} standard deviations from an integrator of order 8"
    is_map = found.scheme == "map"
    how = "" if is_map else f", scheme {found.scheme}, step {found.step:.3g}{unit}"
    return (
        f"{found.starts.n_trajectory} trajectories of {found.duration:.4g}{unit} (first quarter dropped){how}, "
        f"{found.steps:.3g} steps, time {seconds_text(found.seconds)}{arbiter}"
    )


def _starts(found: Crosscheck) -> str:
    starts = found.starts
    told = f"starts: {starts.n_lost} of {starts.n_tried} left all bounds; " if starts.n_lost else "starts: "
    twins = f"{percent(starts.twins_apart)} of the almost identical pairs parted"
    if starts.orders_differ:
        twins += f", {percent(starts.orders_differ)} met the events in another order"
    return f"{told}{twins}; {starts.message}"


def _exponents(item: Predictability, n_regime: int) -> list[str]:
    place = f"regime {item.regime + 1}, " if n_regime > 1 else ""
    values = ", ".join(quantity_cells(exponent)[0] for exponent in item.exponents[:6])
    more = f" and {len(item.exponents) - 6} more" if len(item.exponents) > 6 else ""
    lines = [f"{place}Lyapunov exponents: {values}{more}"]
    total, density = (quantity_cells(number)[0] for number in (item.total, item.total_density))
    lines.append(f"{place}their sum: {total}; change of volumes by the density: {density}; {item.verdict}")
    entropy, dimension = (quantity_cells(number)[0] for number in (item.entropy, item.dimension))
    lines.append(f"{place}entropy (Pesin): {entropy}; Kaplan-Yorke dimension: {dimension}")
    lines.append(f"{place}{_growth(item.growth)}")
    return lines


def _growth(growth: Growth) -> str:
    if growth.time.value is None:
        return f"growth of errors: none timed ({growth.time.reason})"
    ends = [f"{end:.3g}" for end in (growth.early, growth.late) if end is not None]
    spread = f" (5 to 95 percent: {' to '.join(ends)})" if len(ends) == 2 else ""
    return (
        f"growth of errors from {growth.begin:g} to {growth.end:g} of the distance of unrelated states: median time "
        f"{quantity_cells(growth.time)[0]}{spread}"
    )


def _comparison_row(row: Comparison, several: bool) -> list[str]:
    place = f"regime {row.regime + 1}, " if several else ""
    distance = "" if row.distance is None else f"{row.distance:+.1f}"
    sizes = [f"{size:.2g}" for size in row.effective.values()]
    verdict = row.verdict
    if row.length is not None:
        verdict += f" (length {row.length:.3g} would do)"
    if row.reason:
        verdict += f": {row.reason}"
    return [
        f"{place}{row.name}, {NAMES.get(row.number, row.number)}",
        quantity_cells(row.density)[0],
        quantity_cells(row.trajectories)[0],
        distance,
        " / ".join(sizes),
        verdict,
    ]


def _marginals(found: Crosscheck, several: bool) -> list[str]:
    rows = []
    for m in found.marginals:
        place = f"regime {m.regime + 1}, " if several else ""
        distances = [_distance(d) for d in (m.total_variation, m.kolmogorov_smirnov, m.wasserstein)]
        rows.append([f"{place}{m.component}", *distances, m.verdict + (f": {m.reason}" if m.reason else "")])
    rows.append(["cells", _distance(found.cells), "", "", ""])
    return aligned(rows, ("marginal", "total variation", "Kolmogorov-Smirnov", "Wasserstein", "verdict"))


def _distance(distance: Distance) -> str:
    return f"{distance.value:.2g} ({distance.expected:.2g})"


def _notes(found: Crosscheck) -> list[str]:
    notes = [
        "distance: difference over its standard error",
        "effective size: independent states that give the same error, by batch means / by the matrix",
        "marginals: distance (what sampling alone gives on average); for the cells that of the trajectories alone",
    ]
    if found.memory.value is not None:
        notes.append(f"memory of the slowest mode of the matrix: {found.memory.value:.3g}")
    hypotheses = dict.fromkeys(line for item in found.predictability for line in item.hypotheses)
    return [*notes, *hypotheses]
