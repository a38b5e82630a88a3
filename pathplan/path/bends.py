"""Orientation offsets along a segment: the tool leaves its programmed orientation and comes back to it, smoothly.

A bump turns the tool by beta(u) r in its own frame, r a fixed rotation vector, u = (s - centre) / width and
beta(u) = (1 - u^2)^6 for |u| < 1, which is smooth inside and vanishes at both ends with its first five derivatives.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from pathplan.path.joint import Array
from pathplan.path.rotations import exponential

__all__ = ["Bend", "Bump"]

_POWER = 6
_BETA = [np.polynomial.Polynomial([1.0, 0.0, -1.0]) ** _POWER]
for _ in range(3):
    _BETA.append(_BETA[-1].deriv())


@dataclass(frozen=True, eq=False)
class Bump:
    """One turn aside and back; see the module's formula."""

    centre: float  # path parameter
    width: float  # on each side
    turn: Array  # (3,) rotation vector in the tool frame, rad

    @property
    def angle(self) -> float:
        return float(np.linalg.norm(self.turn))


@dataclass(frozen=True)
class Bend:
    """The bumps along one segment, none over another."""

    bumps: tuple[Bump, ...]

    def rotation(self, s: Array) -> Array:
        """(N, 3, 3) tool_from_bent_tool at s (N,)."""
        return exponential(self.derivatives(s, 0)[0])

    def derivatives(self, s: Array, highest: int = 3) -> Array:
        """(highest + 1, N, 3) the rotation vector and its derivatives; wherever it is not zero, all are parallel."""
        found = np.zeros((highest + 1, len(s), 3))
        for bump in self.bumps:
            u = (s - bump.centre) / bump.width
            inside = np.abs(u) < 1.0
            for order in range(highest + 1):
                value = _BETA[order](u[inside]) / bump.width**order
                found[order, inside] = value[:, None] * bump.turn
        return found
