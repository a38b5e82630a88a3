"""Which limit sets the pace of each step, and for what part of its time."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
from numpy.typing import NDArray

from pathplan.auditing.model import Pacing, StepPacing
from pathplan.auditing.shares import Array
from pathplan.table import tick_times

__all__ = ["PACING", "StepClock"]

PACING = 0.9  # a limit used to less than this share holds nothing back


class StepClock:
    """Goes over a table in pieces and sums, step by step, the time that each limit paces.

    A row stands for the time since the row before. Its pacing limit is the one of which it uses
    the largest share, if that is 90 % or more.
    """

    def __init__(self, labels: Sequence[tuple[str | None, str]], cycle: float | None) -> None:
        self.labels = [*labels, (None, "none")]
        self.cycle = cycle
        self._sums: dict[int, Array] = {}

    def add(self, shares: Array, step: NDArray[np.int64], times: Array) -> None:
        """Shares (N, L) of the labels' limits, the step of each row, and the time it stands for (N,).

        Times are in cycles, whose sums are exact, or in s where there is no cycle.
        """
        largest = np.full(len(step), len(self.labels) - 1)
        if shares.shape[1]:
            known = np.where(np.isnan(shares), 0.0, shares)
            largest = np.where(known.max(axis=1) >= PACING, np.argmax(known, axis=1), largest)
        steps, place = np.unique(step, return_inverse=True)
        sums = np.zeros((len(steps), len(self.labels)))
        np.add.at(sums, (place, largest), times)
        for number, mine in zip(steps.tolist(), sums, strict=True):
            self._sums[number] = self._sums[number] + mine if number in self._sums else mine

    def pacing(self, names: Mapping[int, str]) -> tuple[StepPacing, ...]:
        """The steps in order, each with its limits by the part of its time that they pace."""
        found = []
        for step, sums in sorted(self._sums.items()):
            total = float(sums.sum())
            parts = [
                Pacing(joint, quantity, float(mine / total) if total > 0 else 0.0)
                for (joint, quantity), mine in zip(self.labels, sums, strict=True)
                if mine > 0
            ]
            parts.sort(key=lambda part: (-part.part, part.quantity, part.joint or ""))
            found.append(StepPacing(step, names.get(step, ""), self._seconds(total), tuple(parts)))
        return tuple(found)

    def seconds(self) -> dict[int, float]:
        """Step -> time of its rows."""
        return {step: self._seconds(float(sums.sum())) for step, sums in self._sums.items()}

    def _seconds(self, total: float) -> float:
        return total if self.cycle is None else float(tick_times(round(total), self.cycle))
