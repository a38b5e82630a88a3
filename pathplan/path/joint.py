"""The joint path q(s): piecewise polynomials of joint positions over a path parameter.

A `JointPath` says where the arm goes and nothing about when. Its pieces meet with continuous position, first and
second derivative; the third may jump at `breaks`, and is bounded between them. Timing relies on exactly that.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from pathplan.errors import InputError

if TYPE_CHECKING:
    from scipy.interpolate import BSpline

Array = NDArray[np.float64]

_SMOOTH = 1e-7  # largest relative jump in q, q' or q'' that still counts as continuous


class JointPath:
    """Joint positions over a path parameter s in [0, length], piecewise polynomial and C2.

    Parameters
    ----------
    spline : scipy BSpline
        Joint positions (coefficients (m, n); rad, or m for prismatic joints) over any parameter, C2 or smoother on
        its base interval. The path parameter is shifted so that it starts at 0.

    Raises
    ------
    InputError
        When the spline is not (m, n)-valued, not finite, not C2, or stands still on a whole piece.
    """

    __slots__ = ("_breaks", "_coefficients")

    def __init__(self, spline: BSpline) -> None:
        from math import factorial

        from scipy.interpolate import BSpline

        if not isinstance(spline, BSpline):
            raise InputError(f"joint path: expected a scipy BSpline, got {type(spline).__name__}")
        if spline.c.ndim != 2:
            raise InputError(f"joint path: expected spline coefficients of shape (m, joints), got {spline.c.shape}")
        if spline.k < 3:
            raise InputError(f"joint path: expected a spline of degree 3 or more, got degree {spline.k}")
        if not np.all(np.isfinite(spline.c)):
            raise InputError("joint path: expected finite spline coefficients, got NaN or infinity")
        knots = np.unique(spline.t[spline.k : len(spline.t) - spline.k])
        taylor = [spline(knots[:-1], nu=order) / factorial(order) for order in range(spline.k, -1, -1)]
        self._set(knots - knots[0], np.stack(taylor))

    def _set(self, breaks: Array, coefficients: Array) -> None:
        _check_pieces(breaks, coefficients)
        breaks.flags.writeable = False
        coefficients = np.ascontiguousarray(coefficients)
        coefficients.flags.writeable = False
        self._breaks = breaks
        self._coefficients = coefficients

    @classmethod
    def from_pieces(cls, breaks: ArrayLike, coefficients: ArrayLike) -> JointPath:
        """From breaks (m+1,) and local power coefficients (k+1, m, n), highest power first, like scipy's PPoly.

        Raises InputError when the pieces don't meet with continuous position, first and second derivative.
        """
        path = cls.__new__(cls)
        breaks = np.array(breaks, dtype=float)
        path._set(breaks - breaks[0], np.array(coefficients, dtype=float))
        return path

    @classmethod
    def through(cls, points: ArrayLike) -> JointPath:
        """Smooth path through taught joint points (m, n), m >= 2, in order; rad, or m for prismatic joints.

        Quintic spline interpolation over the centripetal parameter (Lee 1989), which keeps the path from looping
        where points lie close together; C4. Fewer than six points have free ends (third and fourth derivative zero).
        Repeated neighbouring points are refused: a path can't stand still.
        """
        from pathplan.task.smoothing import interpolated

        points = np.asarray(points, dtype=float)
        if points.ndim != 2 or len(points) < 2:
            raise InputError(f"joint path: expected at least two points of shape (m, joints), got {points.shape}")
        if not np.all(np.isfinite(points)):
            row = int(np.flatnonzero(~np.isfinite(points).all(axis=1))[0])
            raise InputError(f"joint path: point {row + 1} is not finite")
        steps = np.linalg.norm(np.diff(points, axis=0), axis=1)
        if np.any(steps == 0):
            row = int(np.flatnonzero(steps == 0)[0])
            raise InputError(f"joint path: points {row + 1} and {row + 2} are equal; a path can't stand still")
        parameter = np.concatenate([[0.0], np.cumsum(np.sqrt(steps))])
        parameter *= steps.sum() / parameter[-1]
        if len(points) == 2:
            return cls.from_pieces(parameter, np.stack([(points[1] - points[0]) / parameter[1], points[0]])[:, None])
        return cls(interpolated(parameter, points))

    @property
    def length(self) -> float:
        """Length of the path parameter (dimensionless)."""
        return float(self._breaks[-1])

    @property
    def joints(self) -> int:
        """Number of joints n."""
        return int(self._coefficients.shape[2])

    @property
    def breaks(self) -> Array:
        """(m+1,) where the third derivative may jump."""
        return self._breaks

    @property
    def coefficients(self) -> Array:
        """(k+1, m, n) local power coefficients, highest power first."""
        return self._coefficients

    def __call__(self, s: ArrayLike, derivative: int = 0, side: Literal["left", "right"] = "right") -> Array:
        """Joint positions, or their derivative by s, at s (len(s),) -> (len(s), n).

        `side` chooses the piece at a break: "right" the one that begins there, "left" the one that ends there.
        Values outside [0, length] are taken at the nearest end's polynomial.
        """
        s = np.atleast_1d(np.asarray(s, dtype=float))
        piece, local = self.locate(s, side)
        return self.at(piece, local, derivative)

    def locate(self, s: Array, side: Literal["left", "right"] = "right") -> tuple[NDArray[np.intp], Array]:
        """Piece index and local offset of each s (N,)."""
        piece = np.searchsorted(self._breaks, s, side="right" if side == "right" else "left") - 1
        piece = np.clip(piece, 0, len(self._breaks) - 2)
        return piece, s - self._breaks[piece]

    def derivatives(self, s: Array, highest: int = 3, side: Literal["left", "right"] = "right") -> list[Array]:
        """q and its derivatives up to `highest` at s (N,): a list of (N, n)."""
        return self.all_at(*self.locate(s, side), highest)

    def at(self, piece: NDArray[np.intp], local: Array, derivative: int = 0) -> Array:
        """(N, n) from piece indices (N,) and local offsets (N,): no search, so the caller decides the side."""
        return _horner(self._coefficients[:, piece], local, derivative)

    def all_at(self, piece: NDArray[np.intp], local: Array, highest: int = 3) -> list[Array]:
        """q and its derivatives up to `highest`, each (N, n), like `at`."""
        coefficients = self._coefficients[:, piece]
        return [_horner(coefficients, local, order) for order in range(highest + 1)]


def _horner(coefficients: Array, local: Array, derivative: int) -> Array:
    """Value (N, n) of a derivative of N polynomials (k+1, N, n), highest power first, at local (N,)."""
    degree = len(coefficients) - 1
    if derivative > degree:
        return np.zeros(coefficients.shape[1:])
    x = local[:, None]
    value = _falling(degree, derivative) * coefficients[0]
    for k in range(1, degree - derivative + 1):
        value *= x
        value += _falling(degree - k, derivative) * coefficients[k]
    return value


def _falling(power: int, derivative: int) -> float:
    """power (power - 1) ... over `derivative` factors: what differentiating x^power brings down."""
    product = 1.0
    for i in range(derivative):
        product *= power - i
    return product


def _check_pieces(breaks: Array, coefficients: Array) -> None:
    if coefficients.ndim != 3 or breaks.ndim != 1 or len(breaks) != coefficients.shape[1] + 1:
        raise InputError(
            f"joint path: expected breaks (m+1,) and coefficients (k+1, m, joints), got {breaks.shape} "
            f"and {coefficients.shape}"
        )
    if not (np.all(np.isfinite(breaks)) and np.all(np.isfinite(coefficients))):
        raise InputError("joint path: expected finite pieces, got NaN or infinity")
    width = np.diff(breaks)
    if not np.all(width > 0):
        raise InputError("joint path: expected increasing breaks")
    for order in range(3):
        left = _horner(coefficients[:, :-1], width[:-1], order)
        right = _horner(coefficients[:, 1:], np.zeros(len(width) - 1), order)
        if not len(left):
            break
        scale = np.abs(_horner(coefficients, width / 2, order)).max() + np.abs(left).max() + 1.0
        jump = np.abs(left - right).max(axis=1)
        if jump.max() > _SMOOTH * scale:
            at = int(np.argmax(jump))
            what = ("position", "first derivative", "second derivative")[order]
            raise InputError(
                f"joint path: expected a path that is C2 or smoother, but its {what} jumps by {jump[at]:.3g} "
                f"at parameter {breaks[at + 1]:.6g}"
            )
