"""Five axes as six: an axis is added at the tool whose turn must come out as zero.

Of a pose that five axes reach, the six-axis closed form finds every branch, those of the five among them; the others
turn the added axis and are dropped. The axis is laid so that a closed form fits: through where axes 4 and 5 meet, or
square to axis 5.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import replace

import numpy as np

from pathplan.arm.geometry import EXACT, Geometry, Tolerance
from pathplan.arm.inverse_form import Form
from pathplan.arm.model import Array
from pathplan.arm.structure import recognise

__all__ = ["TURNED", "with_sixth"]

TURNED = 1e-3  # rad: an answer that turns the added axis by more is none of the five axes' own


def with_sixth(g: Geometry, tolerance: Tolerance = EXACT) -> tuple[Geometry, Form] | None:
    """A chain of six joints whose first five are those of `g`, with the closed form that serves it; None if none does.

    A form with steady branches is preferred.
    """
    if g.m != 5 or g.kinds[4] != "revolute":
        return None
    unsteady = None
    for point, axis in _axes(g):
        six = replace(
            g,
            kinds=(*g.kinds, "revolute"),
            points=np.vstack([g.points, point]),
            axes=np.vstack([g.axes, axis]),
            numbers=(*g.numbers, max(g.numbers) + 1),
        )
        form = recognise(six, tolerance)
        if form is not None and form.steady:
            return six, form
        if form is not None and unsteady is None:
            unsteady = six, form
    return unsteady


def _axes(g: Geometry) -> Iterator[tuple[Array, Array]]:
    """Points and directions worth trying."""
    last = g.axes[4]
    if g.kinds[3] == "revolute" and not g.parallel(3, 4):
        yield g.foot(4, 3), _unit(np.cross(last, g.axes[3]))
    normal = _unit(np.cross(last, np.eye(3)[np.argmin(np.abs(last))]))
    yield g.points[4], normal
    yield g.points[4] + g.length * last, normal
    yield g.points[4] + g.length * np.cross(last, normal), normal


def _unit(vector: Array) -> Array:
    return np.asarray(vector / np.linalg.norm(vector))
