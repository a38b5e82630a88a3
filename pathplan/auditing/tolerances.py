"""How far the tool left its programmed orientation where a step tolerates that, against the tolerance."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pathplan.auditing.model import TOLERANCE, Finding
from pathplan.auditing.shares import Array
from pathplan.units import format_quantity

__all__ = ["TurnedAside", "turn_findings", "worst_turns"]

_FOLLOWED = 1e-6  # rad: what every path may miss


@dataclass(frozen=True)
class TurnedAside:
    """The largest angle (rad) between the tool and its programmed orientation in a step, when, and what it may be."""

    step: int
    angle: float
    time: float
    allowed: float


def worst_turns(
    found: dict[int, TurnedAside],
    allowed: Mapping[int, float],
    actual: Array,
    programmed: Array,
    step: NDArray[np.int64],
    time: Array,
) -> None:
    """Keep in `found`, by step, the worst of tool poses (N, 4, 4) against programmed ones; step and time (N,)."""
    from pathplan.auditing.planned import deviations

    angle = deviations(actual, programmed)[1] if len(step) else np.zeros(0)
    for index in np.unique(step).tolist():
        if index not in allowed:
            continue
        mine = np.flatnonzero(step == index)
        worst = mine[np.argmax(angle[mine])]
        if index not in found or angle[worst] > found[index].angle:
            found[index] = TurnedAside(index, float(angle[worst]), float(time[worst]), allowed[index])


def turn_findings(turns: Iterable[TurnedAside]) -> Iterator[Finding]:
    """A note for each step, an exceedance where the tolerance is passed."""
    for turn in turns:
        used, most = (format_quantity(value, "angle", 3) for value in (turn.angle, turn.allowed))
        text = f"step {turn.step + 1}: the tool leaves its orientation by up to {used}, {most} are allowed"
        over = turn.angle > turn.allowed * (1 + TOLERANCE) + _FOLLOWED
        if turn.angle <= _FOLLOWED:
            text = f"step {turn.step + 1}: the tool keeps its orientation, nothing of {most} would save time"
        yield Finding("exceedance" if over else "note", text, turn.time, turn.step)
