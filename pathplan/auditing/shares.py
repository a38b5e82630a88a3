"""Shares of two-sided limits, and the peaks that use most of them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.auditing.model import Peak
from pathplan.errors import InputError

__all__ = [
    "Array",
    "Rows",
    "larger",
    "limit_rows",
    "peaks_of",
    "position_shares",
    "row_kinds",
    "rows_of",
    "shares_of",
]

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Rows:
    """Where values stand: time (N,) s, step (N,) and the number of the first row in the whole table."""

    time: Array
    step: NDArray[np.int64]
    first: int = 0

    def peak(self, i: int, value: float, limit: float, share: float, margin: float | None = None) -> Peak:
        place = float(self.time[i]), int(self.step[i]), self.first + int(i)
        return Peak(float(value), float(limit), float(share), *place, margin=margin)


def limit_rows(arm: Arm) -> tuple[tuple[str, ...], Array]:
    """Names and matrix (R, n) of the arm's limit rows. Raises InputError unless its joints come first."""
    matrix = arm.limits.matrix
    if matrix.shape[0] < arm.n or not np.array_equal(matrix[: arm.n], np.eye(arm.n)):
        raise InputError.at(arm.name, "limits", "the first rows must be those of the joints, in order")
    return arm.limits.names, matrix


def row_kinds(arm: Arm) -> tuple[str, ...]:
    """ "revolute" or "prismatic" for each limit row; "" for one that sums both kinds and says not what it counts in."""
    return arm.limit_kinds


def rows_of(values: Array, matrix: Array) -> Array:
    """Values (N, n) of the joints as values (N, R) of the limit rows; the joints' own are left untouched."""
    n = values.shape[1]
    if len(matrix) == n:
        return values
    with np.errstate(invalid="ignore"):
        return np.hstack([values, values @ matrix[n:].T])


def shares_of(values: Array, limits: Array) -> Array:
    """Shares (N, R) that values (N, R) use of limits (R, 2) or (N, R, 2): value / high above zero, value / low below.

    No limit (infinite) is share 0. A value that is not a number gives one.
    """
    low, high = limits[..., 0], limits[..., 1]
    with np.errstate(divide="ignore", invalid="ignore"):
        shares = np.where(values >= 0, values / high, values / low)
        # an infinite value of an unlimited row, and zero of a limit of zero, use nothing
        shares[np.isnan(shares) & ~np.isnan(values)] = 0.0
    return shares


def position_shares(values: Array, limits: Array) -> tuple[Array, Array]:
    """Shares and margins (N, R) of positions (N, R) in limits (R, 2): see `Peak`."""
    low, high = limits[:, 0], limits[:, 1]
    margins = np.minimum(high - values, values - low)
    with np.errstate(invalid="ignore"):
        half = np.where(np.isfinite(high - low), (high - low) / 2, 1.0)
        shares = np.where(np.isfinite(margins), 1 - margins / np.where(half > 0, half, 1.0), 0.0)
    shares[np.isnan(values)] = np.nan
    return shares, margins


def peaks_of(values: Array, limits: Array, rows: Rows, *, position: bool = False) -> tuple[list[Peak | None], Array]:
    """The peak of each limit row, None for a row without limits, and all the shares (N, R).

    limits (R, 2), or (N, R, 2) where they differ from row to row of the values (N, R).
    """
    if position:
        shares, margins = position_shares(values, limits)
    else:
        shares = shares_of(values, limits)
    at = np.argmax(np.where(np.isnan(shares), -np.inf, shares), axis=0)
    peaks: list[Peak | None] = []
    for r, i in enumerate(at):
        low, high = limits[i, r] if limits.ndim == 3 else limits[r]
        if not (math.isfinite(low) or math.isfinite(high)) or np.isnan(shares[i, r]):
            peaks.append(None)
        elif position:
            limit = high if high - values[i, r] <= values[i, r] - low else low
            peaks.append(rows.peak(i, values[i, r], limit, shares[i, r], float(margins[i, r])))
        else:
            limit = high if values[i, r] >= 0 else low
            peaks.append(rows.peak(i, values[i, r], limit, shares[i, r]))
    return peaks, shares


def larger(one: Sequence[Peak | None], other: Sequence[Peak | None]) -> list[Peak | None]:
    """Of each pair the peak with the larger share; the first where they are equal."""
    pairs = zip(one, other, strict=True)
    return [b if a is None or (b is not None and b.share > a.share) else a for a, b in pairs]
