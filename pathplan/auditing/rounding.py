"""How coarsely the numbers of a table were rounded before they came here.

Tables from elsewhere often hold a few decimals, a few significant digits or single precision. Differences of such
positions show the rounding as motion that nobody meant, the more the higher their order, so the audit allows for it
and says what can't be judged. What rounding there is, is told by the numbers themselves, in rad and m or in deg and mm:
a table of full precision has none.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np

from pathplan.auditing.model import QUANTITIES
from pathplan.auditing.shares import Array
from pathplan.export.columns import DEGREES, MILLIMETRES
from pathplan.table import JointTable

__all__ = ["NONE", "Rounding", "rounding_of", "rounding_of_times"]

MOST_DIGITS = 9  # decimals or significant digits that count as rounded; what is finer is of no weight
FEWEST_DIGITS = 5  # significant digits; fewer can't be told from decimals that happen to be round
ENOUGH = 16  # different numbers in one column: fewer tell nothing of how they were rounded
SAMPLE = 64
NOTHING = 1e-30  # a number below counts as zero
WITHIN = 1e-6  # of the last place: how far a rounded number may lie off it


@dataclass(frozen=True)
class Rounding:
    """The steps to which a table was rounded: of times in s, of each column (n,) by its quantity, SI."""

    time: float
    columns: Mapping[str, Array]

    @classmethod
    def of(cls, table: JointTable, kinds: Sequence[str]) -> Rounding:
        """Of a whole table of joints of these kinds."""
        columns = {name: getattr(table, name) for name in QUANTITIES if getattr(table, name) is not None}
        return cls(rounding_of_times(table.time), {name: rounding_of(v, kinds) for name, v in columns.items()})

    def step(self, quantity: str, n: int) -> Array:
        """The steps (n,) of one quantity, 0 where it was not rounded."""
        return self.columns.get(quantity, np.zeros(n))


NONE = Rounding(0.0, {})


def rounding_of(values: Array, kinds: Sequence[str]) -> Array:
    """The steps (n,), SI, to which columns (N, n) of joints of these kinds were rounded; 0 for full precision.

    Columns of one kind count as rounded alike, so that a joint that hardly moves gets the digits of the others.
    """
    steps = np.zeros(values.shape[1])
    for kind, factor in (("revolute", DEGREES), ("prismatic", MILLIMETRES)):
        at = [k for k, own in enumerate(kinds) if own == kind]
        if at:
            found = [_steps(values[:, at] * scale) / scale for scale in (1.0, factor)]
            # numbers may happen to be round in both units; the finer step allows for less
            known = [step for step in found if step.any()]
            steps[at] = min(known, key=lambda step: float(step.max()), default=0.0)
    return steps


def rounding_of_times(time: Array) -> float:
    """The step in s to which times (N,) were rounded; 0 for full precision."""
    return float(_steps(time[:, None], significant=False)[0])


def _steps(values: Array, *, significant: bool = True) -> Array:
    """The steps (C,) to which columns (N, C) of numbers in one unit were rounded, all zero for full precision.

    `significant`: whether they may have been rounded to significant digits.
    """
    steps = np.zeros(values.shape[1])
    finite = values[np.isfinite(values).all(axis=1)]
    moving = np.flatnonzero(np.ptp(finite, axis=0) > NOTHING) if len(finite) else np.empty(0, dtype=np.intp)
    if not len(moving):
        return steps
    numbers = finite[:, moving]
    sample = numbers[:: max(1, len(numbers) // SAMPLE)]
    largest = np.abs(numbers).max(axis=0)
    place = np.floor(np.log10(largest))
    single = np.abs(numbers.astype(np.float32) - numbers) <= 4 * np.spacing(np.abs(numbers))
    found = []
    for decimals in range(MOST_DIGITS + 1):
        if _whole(sample, 10.0**decimals) and _whole(numbers, 10.0**decimals):
            found.append(np.full(len(moving), 10.0**-decimals))
            break
    for digits in range(FEWEST_DIGITS, MOST_DIGITS + 1 if significant else 0):
        if _whole(sample, _scales(sample, digits)) and _whole(numbers, _scales(numbers, digits)):
            found.append(10.0 ** (place + 1 - digits))
            break
    if single.all():
        found.append(np.spacing(largest.astype(np.float32)).astype(np.float64))
    if found and max(len(np.unique(column[:4096])) for column in numbers.T) >= ENOUGH:
        steps[moving] = np.max(found, axis=0)
    return steps


def _scales(values: Array, digits: int) -> Array:
    """What each number is to be multiplied by so that so many digits stand before its point."""
    size = np.abs(values)
    place = np.floor(np.log10(np.where(size > NOTHING, size, 1.0)))
    return np.asarray(10.0 ** (digits - 1 - place))


def _whole(values: Array, scale: Array | float) -> bool:
    """Whether all numbers are whole once scaled, but for the rounding of floats."""
    scaled = values * scale
    size = np.abs(scaled)
    if size.max(initial=0.0) > 2.0**51:
        return False
    return bool((np.abs(scaled - np.rint(scaled)) <= np.maximum(WITHIN, 8 * np.spacing(size))).all())
