"""Values of arm files that limit something, checked to be of a size that a machine can have."""

from __future__ import annotations

from pathplan.tomlfile import FARTHEST, Table
from pathplan.units import DIMENSIONS, format_quantity, toml_text

__all__ = ["LARGEST", "SMALLEST", "limit", "ordered"]

# SI: limits above zero beyond these are slips, and would spoil what comes after.
SMALLEST, LARGEST = 1e-6, 1e9


def limit(table: Table, key: str, dimension: str, *default: None) -> float | None:
    """A limit above zero, of a size that a machine can have."""
    value: float | None = table.quantity(key, dimension, *default, positive=True)
    if value is not None and not SMALLEST <= value <= LARGEST:
        raise table.error(
            key,
            f"expected {DIMENSIONS[dimension].expected}, got {toml_text(table.data[key])}: no machine has it",
        )
    return value


def ordered(table: Table, key: str, dimension: str) -> tuple[float, float]:
    """[low, high] with low below high."""
    low, high = table.vector(key, 2, dimension)
    if not low < high:
        raise table.error(
            key,
            f"low {format_quantity(low, dimension)} is not below high {format_quantity(high, dimension)}",
        )
    if max(abs(low), abs(high)) > FARTHEST:
        raise table.error(key, f"expected at most {FARTHEST:g} m or rad, got {toml_text(table.data[key])}")
    return float(low), float(high)
