"""The smallest size from which on something works, in round numbers."""

from __future__ import annotations

from collections.abc import Callable, Sequence

import numpy as np

__all__ = ["smallest"]

Test = Callable[[float], bool]


def smallest(promises: Test, works: Test, sizes: Sequence[float], grain: float) -> float | None:
    """The least size, a multiple of `grain` (of ten times that from 100 of them on), that works; None if none does.

    `sizes` increase and are multiples of `grain`: the first that promises to work is brought down towards the one
    before it by bisection on `promises`, which is quick, then taken up again by a grain at a time, and by the rest of
    the sizes, until it `works` too. What works only between two of the sizes is not seen.
    """
    first = next((k for k, size in enumerate(sizes) if promises(size)), None)
    if first is None:
        return None
    below, size = sizes[first - 1] if first else 0.0, sizes[first]
    step = grain if below < 100.0 * grain else 10.0 * grain
    low, high = int(np.floor(below / step + 1e-9)), round(size / step)
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if promises(middle * step) else (middle, high)
    further = [high * step, (high + 1) * step, (high + 3) * step]
    return next((x for x in (*further, *(s for s in sizes[first:] if s > further[-1])) if works(x)), None)
