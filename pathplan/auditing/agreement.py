"""Whether columns of velocity, acceleration and jerk belong to the positions beside them.

A column in another unit, or of another joint, would be judged as if it told how the joint moves. What a joint goes from
row to row is held against the mean of its velocity in both, and so on upwards: an error of the unit is a factor of 57
or 1000, what the rule itself is off is the smaller the finer the rows.
"""

from __future__ import annotations

from collections.abc import Iterator

import numpy as np

from pathplan.arm import Arm
from pathplan.auditing.model import Finding
from pathplan.auditing.words import dimension_of, shown
from pathplan.table import JointTable

__all__ = ["disagreements"]

PAIRS = (("position", "velocity"), ("velocity", "acceleration"), ("acceleration", "jerk"))
APART = 0.25  # of the larger of both: from here on a row disagrees
ROWS = 0.5  # of the rows that move: from here on a column disagrees
MOVES = 0.05  # of the largest value: smaller ones tell nothing
FEWEST = 8  # rows that must move


def disagreements(table: JointTable, arm: Arm) -> Iterator[Finding]:
    """A warning for every column of a whole table that does not belong to the one of which it is the rate."""
    intervals = np.diff(table.time)[:, None]
    with np.errstate(all="ignore"):
        for base, rate in PAIRS:
            values, column = getattr(table, base), getattr(table, rate)
            if values is None or column is None:
                continue
            told = (column[1:] + column[:-1]) / 2
            seen = np.where(intervals > 0, np.diff(values, axis=0) / intervals, np.nan)
            larger = np.maximum(np.abs(told), np.abs(seen))
            for k, joint in enumerate(arm.joints):
                moving = larger[:, k] > MOVES * np.nanmax(larger[:, k], initial=0.0)
                apart = np.abs(told - seen)[:, k] > APART * larger[:, k]
                # jerk jumps, so that a mean of two rows may be far off beside a jump; not in half of all rows
                if moving.sum() < FEWEST or apart[moving].mean() < ROWS:
                    continue
                row = int(np.nanargmax(np.where(moving, np.abs(told - seen)[:, k], np.nan)))
                dimension = dimension_of(joint.kind, rate)
                pair = shown(float(told[row, k]), dimension), shown(float(seen[row, k]), dimension)
                text = f"{joint.name}: the column of {rate} does not belong to that of {base}: it says {pair[0]} "
                text += f"between rows {row + 1} and {row + 2}, where {base} changes by {pair[1]}"
                where = (float(table.time[row]), int(table.step[row]), joint.name, rate)
                yield Finding("warning", text, *where, row=row)
