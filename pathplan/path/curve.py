"""Tool curves as they are evaluated: position and turning rate with exact derivatives, and how long they are."""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from pathplan.path.joint import Array
from pathplan.quadrature import gauss_legendre
from pathplan.quaternions import quaternion_product, rotations
from pathplan.task.model import Curve

__all__ = ["CurveSize", "curve_derivatives", "curve_size"]

_POINTS = 9  # places on a piece where its speed is looked at


class CurveSize(NamedTuple):
    """Length (m) and angle (rad) of a whole curve, and the most of each per path parameter."""

    path_length: float
    angle: float
    speed: float
    turning: float


def curve_derivatives(curve: Curve, s: Array, highest: int) -> tuple[list[Array], Array, list[Array]]:
    """Positions and their derivatives up to `highest`, each (N, 3), rotations (N, 3, 3), and turning rate with its
    derivatives up to `highest` - 1, each (N, 3), at s (N,); in the curve's frame.

    With Q of any length, R' = [w] R for w = 2 vec(Q' conj Q) / |Q|^2, since a change of length alone is real; and
    the derivative of vec(Q' conj Q) is vec(Q'' conj Q), since Q' conj Q' is real.
    """
    breaks = curve.breaks
    piece = np.clip(np.searchsorted(breaks, s, side="right") - 1, 0, len(breaks) - 2)
    local = (s - breaks[piece])[:, None]
    position = _derivatives(curve.position[:, piece], local, highest)
    q = _derivatives(curve.quaternion[:, piece], local, highest)
    if highest == 0:
        return position, rotations(q[0]), []
    conjugate = q[0] * [1.0, -1.0, -1.0, -1.0]
    size = _dot(q[0], q[0])
    turning = [2.0 * quaternion_product(q[1], conjugate)[:, 1:] / size]
    if highest >= 2:
        change = 2.0 * quaternion_product(q[2], conjugate)[:, 1:]
        size1 = 2.0 * _dot(q[0], q[1])
        turning.append((change - turning[0] * size1) / size)
    if highest >= 3:
        other = q[1] * [1.0, -1.0, -1.0, -1.0]
        change = 2.0 * (quaternion_product(q[3], conjugate) + quaternion_product(q[2], other))[:, 1:]
        size2 = 2.0 * (_dot(q[0], q[2]) + _dot(q[1], q[1]))
        turning.append((change - 2.0 * turning[1] * size1 - turning[0] * size2) / size)
    return position, rotations(q[0]), turning


def curve_size(curve: Curve) -> CurveSize:
    """How long a curve is and how far it turns (Gauss-Legendre quadrature on every piece)."""
    point, weight = gauss_legendre(_POINTS)
    width = np.diff(curve.breaks)
    s = (curve.breaks[:-1, None] + width[:, None] * (point + 1) / 2).ravel()
    share = (width[:, None] * weight / 2).ravel()
    position, _, turning = curve_derivatives(curve, np.concatenate([s, curve.breaks]), 1)
    speed, turn = np.linalg.norm(position[1], axis=1), np.linalg.norm(turning[0], axis=1)
    inside = slice(0, len(s))
    return CurveSize(float(speed[inside] @ share), float(turn[inside] @ share), float(speed.max()), float(turn.max()))


def _dot(a: Array, b: Array) -> Array:
    return np.einsum("ij,ij->i", a, b)[:, None]


def _derivatives(coefficients: Array, local: Array, highest: int) -> list[Array]:
    """Value and derivatives (N, d) of N polynomials (k + 1, N, d), highest power first, at local (N, 1)."""
    out = []
    powers = coefficients
    for _ in range(highest + 1):
        value = powers[0].copy()
        for row in powers[1:]:
            value *= local
            value += row
        out.append(value)
        degree = len(powers) - 1
        powers = powers[:-1] * np.arange(degree, 0, -1.0)[:, None, None]
    return out
