"""Strokes that fill a box, so that fillings differ without colour. Drawn as lines: patterns become images in a PDF."""

from __future__ import annotations

from pathplan.report.markup import number

__all__ = ["Box", "filling", "slanted"]

Box = tuple[float, float, float, float]  # x, y, width, height

APART = 7.0


def filling(quantity: str, box: Box) -> str:
    """Path data of the strokes that stand for a quantity; '' for velocity, which is plain."""
    x, y, width, height = box
    if quantity == "acceleration":
        return slanted(box)
    if quantity == "jerk":
        places = ((x + dx, y + height * (0.3 if k % 2 else 0.7)) for k, dx in enumerate(_spaced(width, 4.0)))
        return "".join(f"M{number(px)} {number(py)}h.01" for px, py in places)
    if quantity == "torque":
        return "".join(f"M{number(x)} {number(y + height * part)}h{number(width)}" for part in (0.3, 0.7))
    if quantity == "tool speed":
        return "".join(f"M{number(x + dx)} {number(y)}v{number(height)}" for dx in _spaced(width, 4.0))
    if quantity == "tool acceleration":
        return slanted(box) + slanted(box, rising=True)
    if quantity == "tool turning speed":
        return slanted(box, rising=True)
    return ""


def slanted(box: Box, *, apart: float = APART, rising: bool = False) -> str:
    """Strokes at 45 degrees cut to the box, falling to the right or rising."""
    x, y, width, height = box
    lines, start = [], apart / 2 - height
    while start < width:  # along the top edge, from before the box on
        left, right = max(0.0, start), min(width, start + height)
        if right > left:
            ends = [y + left - start, y + right - start]
            if rising:
                ends = [2 * y + height - end for end in ends]
            lines.append(f"M{number(x + left)} {number(ends[0])}L{number(x + right)} {number(ends[1])}")
        start += apart
    return "".join(lines)


def _spaced(width: float, apart: float) -> list[float]:
    """Places `apart` from one another, in the middle of a width."""
    count = int(width / apart)
    first = (width - (count - 1) * apart) / 2
    return [first + k * apart for k in range(count)]
