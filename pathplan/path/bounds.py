"""Position limits along the whole of a finished path, not only where it was sampled."""

from __future__ import annotations

from dataclasses import dataclass
from math import comb

import numpy as np

from pathplan.arm import Limits
from pathplan.path.fit import Pieces
from pathplan.path.joint import Array
from pathplan.path.states import LIMIT_SLACK

__all__ = ["Crossing", "first_crossing"]


@dataclass(frozen=True)
class Crossing:
    """Where a path leaves a position limit furthest on the first piece that does: piece, offset in it,
    limit row, side.
    """

    piece: int
    local: float
    row: int
    side: int  # 0 low, 1 high


def _to_bernstein(degree: int) -> Array:
    """(degree+1, degree+1) from power coefficients on [0, 1], lowest first, to Bernstein coefficients."""
    return np.array(
        [[comb(i, j) / comb(degree, j) if j <= i else 0.0 for j in range(degree + 1)] for i in range(degree + 1)]
    )


def first_crossing(pieces: Pieces, limits: Limits) -> Crossing | None:
    """The first piece on which a position row is exceeded, None if none is.

    A polynomial lies within the hull of its Bernstein coefficients, which clears nearly every piece at
    once; the others are searched at their stationary points.
    """
    low, high = limits.position.T
    degree = len(pieces.coefficients) - 1
    rows = pieces.coefficients @ limits.matrix.T  # highest power first
    unit = (rows * pieces.width[:, None] ** np.arange(degree, -1, -1)[:, None, None])[::-1]
    hull = np.einsum("ij,jmr->imr", _to_bernstein(degree), unit)
    suspect = (hull.min(axis=0) < low - LIMIT_SLACK) | (hull.max(axis=0) > high + LIMIT_SLACK)
    for piece in np.flatnonzero(suspect.any(axis=1)):
        for row in np.flatnonzero(suspect[piece]):
            powers = unit[::-1, piece, row]
            stationary = np.roots(np.polyder(np.trim_zeros(powers, "f"))) if np.any(powers[:-1]) else np.zeros(0)
            inside = stationary.real[(abs(stationary.imag) < 1e-6) & (stationary.real > 0) & (stationary.real < 1)]
            t = np.concatenate([[0.0, 1.0], inside])
            values = np.polyval(powers, t)
            beyond = np.stack([low[row] - values, values - high[row]], axis=1)
            at, side = np.unravel_index(int(np.argmax(beyond)), beyond.shape)
            if beyond[at, side] > LIMIT_SLACK:
                return Crossing(int(piece), float(t[at] * pieces.width[piece]), int(row), int(side))
    return None
