"""Values in words: screen units, and digits enough to tell a value from the limit it passes."""

from __future__ import annotations

from pathplan.units import format_quantity, format_value, joint_dimension

__all__ = ["apart", "dimension_of", "shown"]

_TOOL = {"tool speed": "speed", "tool acceleration": "acceleration", "tool turning speed": "angular_speed"}


def dimension_of(kind: str, quantity: str) -> str | None:
    """Dimension of a joint's or the tool's quantity; None for a row that sums deg and mm."""
    if quantity in _TOOL:
        return _TOOL[quantity]
    if quantity == "rms torque":
        quantity = "torque"
    return joint_dimension(kind, quantity) if kind else None  # type: ignore[arg-type]


def shown(value: float, dimension: str | None, digits: int = 4) -> str:
    """An SI value as people read it; a sum of mixed units stays in SI."""
    if dimension is None:
        return f"{format_value(value, digits)} (SI)"
    return format_quantity(value, dimension, digits)


def apart(value: float, limit: float, dimension: str | None) -> tuple[str, str]:
    """Value and limit in words that differ where the numbers do."""
    for digits in range(4, 18):
        texts = shown(value, dimension, digits), shown(limit, dimension, digits)
        if texts[0] != texts[1] or value == limit:
            break
    return texts
