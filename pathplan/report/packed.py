"""Rows packed for a page: whole numbers of a decimal, differences, bytes by significance, deflate, base64.

A column is rounded to the decimals that it is shown with, so that what the page reads is what it shows. Neighbouring
rows differ little, and differences of differences even less: a minute at 1 kHz of six axes packs into about a megabyte.
"""

from __future__ import annotations

import base64
import math
import zlib
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

__all__ = ["NOT_A_NUMBER", "Column", "decimals_for", "pack", "unpack"]

NOT_A_NUMBER = -(2**31)
MOST = 2**31 - 1
MOST_ORDER = 3  # of differences
FINEST = 6  # decimals


@dataclass(frozen=True, eq=False)
class Column:
    """A column in screen units and the decimals it is rounded to."""

    values: NDArray[Any]  # (M,)
    decimals: int = 0


def decimals_for(scale: float) -> int:
    """Decimals that show 1e-5 of a scale, but more than 3 only to show 3e-4 of it; 0 to 6.

    So a share of a limit that is read from what is shown is right to 0.05 %.
    """
    if not (math.isfinite(scale) and scale > 0):
        return 3
    fine, needed = (math.ceil(digits - math.log10(scale)) for digits in (5.0, 3.5))
    return int(min(FINEST, max(0, min(3, fine), needed)))


def pack(columns: list[Column]) -> dict[str, Any]:
    """Columns of one length as JSON values: {"rows", "columns": [[decimals, order], ...], "data": base64}.

    Not a number stays one, and so does what is too large for 31 bits.
    """
    planes, kinds = [], []
    for column in columns:
        whole = _whole(column)
        order, differences = _smallest(whole)
        zigzag = ((differences << 1) ^ (differences >> 31)).view(np.uint32)
        planes.append(zigzag.astype("<u4").view(np.uint8).reshape(-1, 4).T.tobytes())
        kinds.append([column.decimals, order])
    data = zlib.compress(b"".join(planes), 6)
    rows = len(columns[0].values) if columns else 0
    return {"rows": rows, "columns": kinds, "data": base64.b64encode(data).decode("ascii")}


def unpack(packed: dict[str, Any]) -> list[NDArray[np.float64]]:
    """The columns again, rounded as they were packed: what the page's own code does, for tests and scripts."""
    raw = np.frombuffer(zlib.decompress(base64.b64decode(packed["data"])), dtype=np.uint8)
    rows, columns = packed["rows"], []
    for k, (decimals, order) in enumerate(packed["columns"]):
        planes = raw[4 * rows * k : 4 * rows * (k + 1)].reshape(4, rows)
        zigzag = np.ascontiguousarray(planes.T).view("<u4").ravel()
        values = ((zigzag >> 1) ^ (0 - (zigzag & 1)).astype(np.uint32)).view(np.int32)
        for _ in range(order):
            values = np.cumsum(values, dtype=np.int32)
        columns.append(np.where(values == NOT_A_NUMBER, np.nan, values / 10.0**decimals))
    return columns


def _whole(column: Column) -> NDArray[np.int32]:
    """The column in whole units of its last decimal."""
    with np.errstate(invalid="ignore", over="ignore"):
        scaled = np.round(np.asarray(column.values, dtype=np.float64) * 10.0**column.decimals)
    known = np.isfinite(scaled) & (np.abs(scaled) <= MOST)
    return np.where(known, scaled, NOT_A_NUMBER).astype(np.int32)


def _smallest(whole: NDArray[np.int32]) -> tuple[int, NDArray[np.int32]]:
    """The order of differences, counted from zero before the first row, with the least sum of bits."""
    best: tuple[float, int, NDArray[np.int32]] | None = None
    differences = whole
    for order in range(MOST_ORDER + 1):
        if order:  # modulo 2^32, as the sums will be
            differences = np.diff(differences, prepend=np.int32(0)).astype(np.int32)
        bits = float(np.log2(1.0 + np.abs(differences.astype(np.float64))).sum())
        if best is None or bits < best[0]:
            best = (bits, order, differences)
    assert best is not None
    return best[1], best[2]
