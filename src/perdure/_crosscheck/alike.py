"""Are the starts alike, and if not, what is likelier: several regimes, or too short a run?"""

from __future__ import annotations

from perdure._crosscheck.evidence import N_BATCH, Evidence, Matrix
from perdure._crosscheck.flight import N_PART
from perdure._crosscheck.numbers import Named
from perdure._crosscheck.starts import Dispersed, orders_differ
from perdure._crosscheck.verdicts import uneven
from perdure._records import Starts

__all__ = ["FORGETS", "starts_of"]

# Memory times that a trajectory must be long for its starts to be forgotten, and beyond which starts that still
# differ are no longer a matter of length.
FORGETS, LONG = 16.0, 30.0
# Variance between starts over that along them, per batch, from which starts stay where they are.
APART = 4.0


def label(regime: int, n_regime: int, named: Named) -> str:
    place = f"regime {regime + 1}, " if n_regime > 1 else ""
    return f"{place}{named.name}, {named.number.replace('_', ' ')}"


def starts_of(evidence: Evidence, chance: float, matrix: Matrix, begun: Dispersed) -> Starts:
    """What the starts say: alike, several regimes, or too short a run."""
    flight, n_regime = evidence.flight, len(evidence.regimes)
    found = [(named.found.ratio, named.found.ratio_p, r, named) for r, named in evidence.named]
    ratio, p_value, regime, worst = max(found, key=lambda item: item[0]) if found else (1.0, 1.0, 0, None)
    unlike = [named for _, named in evidence.named if uneven(named.found, chance)]
    visits = flight.kept_visits()
    counts = [len(lanes) for lanes in evidence.lanes]
    return Starts(
        n_tried=begun.n_tried,
        n_lost=begun.n_lost + evidence.n_gone,
        n_trajectory=flight.n,
        twins_apart=evidence.apart,
        orders_differ=orders_differ(evidence.batches, len(evidence.case.events), flight.n // 2),
        equal=not unlike,
        worst="" if worst is None else label(regime, n_regime, worst),
        ratio=float(ratio),
        p_value=float(p_value),
        in_regime=(*counts, flight.n - sum(counts)),
        moved=int(evidence.moved.sum()),
        elsewhere=float(visits[:, -1].sum() / max(visits.sum(), 1)),
        message=starts_message(evidence, unlike, matrix, counts),
    )


def stays_apart(named: Named) -> bool:
    """Whether a number differs between starts so much that no start has been where another is."""
    return named.found.ratio > APART * N_BATCH


def starts_message(evidence: Evidence, unlike: list[Named], matrix: Matrix, counts: list[int]) -> str:
    """A sentence on the starts: what they show, which cause is likelier, what to do."""
    flight = evidence.flight
    kept = flight.steps * (1.0 - 1.0 / N_PART) * flight.setting.step
    told = []
    if len(counts) > 1:
        ends = ", ".join(f"{n} in regime {k}" for k, n in enumerate(counts, 1))
        told.append(f"several regimes, as the density says: of {flight.n} trajectories {ends}")
        if evidence.moved.any():
            told.append(
                f"{int(evidence.moved.sum())} passed from one regime to another, which closed regimes do not allow: "
                "they are one slow regime; run again with longer bursts or smaller cells"
            )
    if not unlike:
        told.append("starts are alike" + (" within each regime" if len(counts) > 1 else ""))
        return "; ".join(told)
    memory, name = matrix.memory.value, unlike[0].name
    apart = any(stays_apart(named) for named in unlike)
    if apart and memory is not None and kept > LONG * memory:
        told.append(
            f"starts differ ({name}) and stay apart for {kept / memory:.2g} memory times of the matrix: likelier a "
            "second regime that the density has not; look at where the starts end, and give [cells] lower and upper so "
            "that the pilot starts in both"
        )
    elif memory is None:
        told.append(
            f"starts differ ({name}): the run is too short, or there is more than one regime; fly longer to tell"
        )
    else:
        need = FORGETS * memory / (1.0 - 1.0 / N_PART)
        told.append(
            f"starts differ ({name}), and each trajectory is {kept / memory:.2g} memory times of the matrix long: "
            f"likelier too short a run than several regimes; trajectories of {max(need, 2 * kept):.3g} would tell"
        )
    return "; ".join(told)
