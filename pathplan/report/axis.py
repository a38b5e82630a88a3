"""The time axis that all plots of a page share: where things stand on it, and what is too narrow to be seen."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

import numpy as np

from pathplan.report.gather import Picture, Run

__all__ = ["LEFT", "RIGHT", "WIDTH", "TimeAxis", "ticks", "visible"]

WIDTH = 1000  # units of a plot, about a pixel each
LEFT, RIGHT = 150, 932  # where the time axis begins and ends
MOST_RUNS = 700


@dataclass(frozen=True)
class TimeAxis:
    """From start to end (s) along LEFT to RIGHT."""

    start: float
    end: float

    @classmethod
    def of(cls, picture: Picture) -> TimeAxis:
        start, end = float(picture.kept_time[0]), float(picture.kept_time[-1])
        return cls(start, end if end > start else start + (picture.cycle or 1.0))

    def x(self, time: float) -> float:
        return LEFT + (time - self.start) / (self.end - self.start) * (RIGHT - LEFT)


def ticks(low: float, high: float, most: int = 10) -> list[float]:
    """Round numbers from low to high, at most `most` + 1 of them, in steps of 1, 2 or 5 times a power of ten."""
    raw = (high - low) / most
    power = 10.0 ** math.floor(math.log10(raw))
    step = next(power * k for k in (1, 2, 5, 10) if power * k >= raw * (1 - 1e-9))
    first = math.ceil(low / step - 1e-9)
    return [k * step for k in range(first, math.floor(high / step + 1e-9) + 1)]


def visible(runs: Sequence[Run], axis: TimeAxis) -> list[Run]:
    """Runs as they are while they are few; else what stands at each pixel of the axis, joined again into runs."""
    if len(runs) <= MOST_RUNS:
        return list(runs)
    edges = np.linspace(axis.start, axis.end, RIGHT - LEFT + 1)
    ends = np.array([run.end for run in runs])
    at = np.minimum(np.searchsorted(ends, (edges[:-1] + edges[1:]) / 2), len(runs) - 1)
    seen = []
    borders = np.concatenate([[0], np.flatnonzero(np.diff(at)) + 1, [len(at)]])
    for first, last in pairwise(borders.tolist()):
        run = runs[at[first]]
        if run.start <= (edges[first] + edges[first + 1]) / 2 <= run.end:
            seen.append(Run(run.first, run.last, float(edges[first]), float(edges[last]), run.value))
    return seen
