"""Exceedances gathered row by row, and told once for each joint, quantity and step."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from pathplan.auditing.model import TOLERANCE, Finding, Peak
from pathplan.auditing.shares import Array, Rows, shares_of
from pathplan.auditing.words import apart, dimension_of, shown

__all__ = ["SLACK", "Exceedance", "clock", "exceedances", "finding_of", "gather", "percent"]

SLACK = 1e-9  # rad or m beyond a position limit: the rounding of a start or goal that lies on it
Key = tuple[str, int, int]  # quantity, limit row, step


@dataclass(frozen=True)
class Exceedance:
    """The worst of the rows of one step in which one joint exceeds one limit."""

    worst: Peak
    count: int
    first: float  # s
    last: float

    def joined(self, later: Exceedance) -> Exceedance:
        worst = later.worst if later.worst.share > self.worst.share else self.worst
        return Exceedance(worst, self.count + later.count, self.first, later.last)


def exceedances(
    quantity: str,
    values: Array,
    limits: Array,
    shares: Array,
    rows: Rows,
    *,
    over: NDArray[np.bool_] | None = None,
    rounded: Array | float = 0.0,
    numbers: NDArray[np.intp] | None = None,
) -> Iterator[tuple[Key, Exceedance]]:
    """What exceeds limits (R, 2), or (N, R, 2) where they differ from row to row, in values (N, R) of these shares.

    Shares above 1 + TOLERANCE do; of positions, what lies beyond the limit by more than SLACK; where `over`
    (N, R) is given, what is true there. `rounded` (R,) is how far each value may be off by rounding. `numbers` (N,)
    are the rows' numbers where they do not follow one another.
    """
    if over is None:
        beyond = (values > limits[..., 1] + SLACK + rounded) | (values < limits[..., 0] - SLACK - rounded)
        over = beyond
        if quantity != "position":
            over = shares > 1 + TOLERANCE
            if np.any(rounded):
                over &= shares_of(np.sign(values) * np.maximum(np.abs(values) - rounded, 0.0), limits) > 1 + TOLERANCE
    for r in np.flatnonzero(over.any(axis=0)):
        at = np.flatnonzero(over[:, r])
        for step in np.unique(rows.step[at]):
            mine = at[rows.step[at] == step]
            i = mine[np.argmax(shares[mine, r])]
            value = values[i, r]
            low, high = limits[i, r] if limits.ndim == 3 else limits[r]
            if quantity == "position":
                limit = high if value > high else low
                margin = -abs(float(value - limit))
                worst = rows.peak(i, value, limit, shares[i, r], margin)
            else:
                worst = rows.peak(i, value, high if value >= 0 else low, shares[i, r])
            if numbers is not None:
                worst = replace(worst, row=int(numbers[i]))
            times = float(rows.time[mine[0]]), float(rows.time[mine[-1]])
            yield (quantity, int(r), int(step)), Exceedance(worst, len(mine), *times)


def gather(found: dict[Key, Exceedance], more: Iterator[tuple[Key, Exceedance]]) -> None:
    """Add to what earlier rows gave."""
    for key, exceedance in more:
        found[key] = found[key].joined(exceedance) if key in found else exceedance


def finding_of(key: Key, found: Exceedance, names: Sequence[str], kinds: Sequence[str], *, how: str = "") -> Finding:
    """An exceedance in words: joint, quantity, value, limit, time, step. `how` says how it was measured."""
    quantity, r, step = key
    peak = found.worst
    tool = quantity.startswith("tool")
    name = "tool" if tool else names[r]
    what = quantity.removeprefix("tool ")
    dimension = dimension_of("" if tool else kinds[r], quantity)
    value, limit = apart(peak.peak, peak.limit, dimension)
    row = None if "between rows" in how else peak.row
    place = f"at {clock(peak.time)}" + ("" if row is None else f" (row {row + 1})") + f" in step {step + 1}"
    if quantity == "position":
        beyond = shown(abs(peak.peak - peak.limit), dimension)
        text = f"{name}: {what} {value} {place} lies beyond the limit {limit} by {beyond}"
    else:
        text = f"{name}: {what} {value} {place} exceeds the limit {limit}, {percent(peak.share)}"
    if found.count > 1:
        text += f"; {found.count} rows from {clock(found.first)} to {clock(found.last)}"
    where = (peak.time, step, None if tool else name, quantity)
    return Finding("exceedance", text + how, *where, value=peak.peak, limit=peak.limit, row=row)


def clock(time: float) -> str:
    """A time to the microsecond, no trailing zeros."""
    return f"{time:.6f}".rstrip("0").rstrip(".") + " s"


def percent(share: float) -> str:
    """101.3 %, with digits enough to show that it is above 100."""
    for digits in range(1, 12):
        text = f"{share * 100:.{digits}f}"
        if float(text) != 100.0:
            break
    return f"{text} %"
