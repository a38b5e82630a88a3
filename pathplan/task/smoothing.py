"""Smooth curves through and near points: quintic splines, C4, of the least bend that a tolerance allows.

The spline minimises sum w |c(u_i) - y_i|^2 + lambda integral |c'''|^2 (a smoothing spline: Reinsch 1967, with the third
derivative in place of the second), with lambda as large as the tolerance permits. Its normal equations are banded, so
the cost is linear in the number of points.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError
from pathplan.quadrature import gauss_legendre

if TYPE_CHECKING:
    from scipy.interpolate import BSpline

__all__ = ["interpolated", "knots_of", "pieces_of", "smoothed", "smoothed_sparsely"]

Array = NDArray[np.float64]
_DEGREE = 5
_FEWEST = 6  # points from which on end knots are left out ("not a knot"); fewer get natural ends
_END_WEIGHT = 1e6  # of the first and last point: a curve begins and ends where its points do
_WEAKEST, _STRONGEST = -12.0, 12.0  # log10 of lambda, relative to the size of the two terms
_HALVINGS = 14  # of the interval between them
_SPLITS = 24  # rounds of halving the cells between sparse knots
_POINTS_A_CELL = 3  # that a cell keeps when it is halved
_NARROWEST = 1e-6  # of the whole: a cell is not halved below this


def interpolated(u: Array, y: Array) -> BSpline:
    """The quintic spline through y (m, d) at increasing u (m,); a straight line through two points."""
    from scipy.interpolate import BSpline, make_interp_spline

    if len(u) == 2:
        return BSpline(np.array([u[0], u[0], u[1], u[1]]), np.array(y, dtype=float), 1)
    if len(u) < _FEWEST:  # of the least integral |c'''|^2: c''' and c'''' vanish at the ends
        free = [(3, np.zeros(y.shape[1])), (4, np.zeros(y.shape[1]))]
        ends: Any = (free, free)
        return make_interp_spline(u, y, k=_DEGREE, bc_type=ends)
    return make_interp_spline(u, y, k=_DEGREE)


def smoothed(u: Array, y: Array, excess: Callable[[Array], Array]) -> BSpline:
    """The smoothest spline whose values at increasing u (m,) are near enough to y (m, d).

    `excess(values (m, d))` says how much of the tolerance each point uses (m,), 1 all of it. There is a knot at every
    point, so that any tolerance can be met.
    """
    if len(u) < _FEWEST:
        return interpolated(u, y)
    fit = _Fit(u, y, u[3:-3])
    if excess(fit.values(_WEAKEST)).max() > 1.0:
        return interpolated(u, y)  # the weakest smoothing that rounding lets us tell from none
    return _strongest(fit, excess)


def smoothed_sparsely(u: Array, y: Array, excess: Callable[[Array], Array]) -> BSpline:
    """As `smoothed` with as few knots as the tolerance allows: for many points close together, u not falling.

    Raises InputError, naming the point, where even knots at every few points don't come near enough.
    """
    if len(u) < 4 * _FEWEST:
        keep = np.append(True, np.diff(u) > 0)
        return interpolated(u[keep], y[keep])
    knots = np.linspace(u[0], u[-1], _FEWEST)[1:-1]
    for _ in range(_SPLITS):
        fit = _Fit(u, y, knots)
        used = excess(fit.values(_WEAKEST))
        if used.max() <= 1.0:
            return _strongest(fit, excess)
        borders = np.concatenate([[u[0]], knots, [u[-1]]])
        cell = np.clip(np.searchsorted(borders, u, side="right") - 1, 0, len(borders) - 2)
        worst = np.zeros(len(borders) - 1)
        np.maximum.at(worst, cell, used)
        enough = np.bincount(cell, minlength=len(worst)) >= 2 * _POINTS_A_CELL
        split = np.flatnonzero((worst > 1.0) & enough & (np.diff(borders) > _NARROWEST * (u[-1] - u[0])))
        if not len(split):
            break
        knots = np.sort(np.concatenate([knots, (borders[split] + borders[split + 1]) / 2]))
    row = int(np.argmax(used))
    raise InputError(f"point {row + 1} can't be met within the tolerance: it lies {used[row]:.3g} times as far off")


def _strongest(fit: _Fit, excess: Callable[[Array], Array]) -> BSpline:
    """The spline of the largest lambda that keeps the tolerance; that of the weakest is known to."""
    low, high = _WEAKEST, _STRONGEST
    if excess(fit.values(high)).max() <= 1.0:
        return fit.spline(high)
    for _ in range(_HALVINGS):
        middle = (low + high) / 2
        if excess(fit.values(middle)).max() <= 1.0:
            low = middle
        else:
            high = middle
    return fit.spline(low)


def knots_of(spline: BSpline) -> Array:
    """Where the pieces of a spline meet, its ends included."""
    return np.unique(spline.t[spline.k : len(spline.t) - spline.k])


def pieces_of(spline: BSpline, breaks: Array) -> Array:
    """Local power coefficients (6, M, d), highest power first, of a spline of degree 5 or less.

    `breaks` (M + 1,): all of its knots, and any places between them.
    """
    from math import factorial

    return np.stack([spline(breaks[:-1], nu=order) / factorial(order) for order in range(_DEGREE, -1, -1)])


class _Fit:
    """The banded problem of one set of points, for any lambda."""

    def __init__(self, u: Array, y: Array, knots: Array) -> None:
        from scipy.interpolate import BSpline

        self.t = np.concatenate([[u[0]] * (_DEGREE + 1), knots, [u[-1]] * (_DEGREE + 1)])
        weight = np.ones(len(u))
        weight[[0, -1]] = _END_WEIGHT
        self.basis = BSpline.design_matrix(u, self.t, _DEGREE)
        self.centre, self.ends = y.mean(axis=0), y[[0, -1]]
        self.right = self.basis.T @ (weight[:, None] * (y - self.centre))
        ones = np.ones(len(u))
        self.near = _band(self.basis.T @ self.basis.multiply(weight[:, None]))
        self.bend = _band(_bending(self.t))
        size = _band(self.basis.T @ self.basis.multiply(ones[:, None]))[-1].sum()
        self.scale = size / max(float(self.bend[-1].sum()), 1e-300)

    def coefficients(self, strength: float) -> Array:
        from scipy.linalg import solveh_banded

        matrix = self.near + 10.0**strength * self.scale * self.bend
        try:
            return np.asarray(solveh_banded(matrix, self.right, check_finite=False)) + self.centre
        except np.linalg.LinAlgError:  # one point metres away from all others, say
            raise InputError("the points lie too unevenly to be smoothed: is one of them far off?") from None

    def values(self, strength: float) -> Array:
        return np.asarray(self.basis @ self.coefficients(strength))

    def spline(self, strength: float) -> BSpline:
        """The spline, moved by the hair that its ends lie off the first and last point."""
        from scipy.interpolate import BSpline

        c = self.coefficients(strength)
        t = self.t
        greville = np.array([t[i + 1 : i + _DEGREE + 1].mean() for i in range(len(c))])
        share = ((greville - t[0]) / (t[-1] - t[0]))[:, None]
        c += (1.0 - share) * (self.ends[0] - c[0]) + share * (self.ends[1] - c[-1])
        c[0], c[-1] = self.ends
        return BSpline(t, c, _DEGREE)


def _band(matrix: Any) -> Array:
    """Upper band storage (6, n) of a symmetric sparse matrix of half bandwidth 5."""
    band = np.zeros((_DEGREE + 1, matrix.shape[0]))
    for offset in range(_DEGREE + 1):
        diagonal = matrix.diagonal(offset)
        band[_DEGREE - offset, offset:] = diagonal
    return band


def _bending(t: Array) -> Any:
    """Sparse (n, n) matrix P with c' P c = integral |spline'''|^2 for coefficients c."""
    from scipy.interpolate import BSpline
    from scipy.sparse import diags_array

    down: Any = None
    knots = t
    for degree in range(_DEGREE, _DEGREE - 3, -1):
        count = len(knots) - degree - 1
        rate = degree / (knots[degree + 1 : degree + count] - knots[1:count])
        step: Any = diags_array(np.stack([-rate, rate]), offsets=[0, 1], shape=(count - 1, count))
        down = step if down is None else step @ down
        knots = knots[1:-1]
    # The third derivative is piecewise quadratic: three Gauss points integrate its square exactly.
    breaks = np.unique(t)
    point, weight = gauss_legendre(3)
    width = np.diff(breaks)
    at = (breaks[:-1, None] + width[:, None] * (point + 1) / 2).ravel()
    share = (width[:, None] * weight / 2).ravel()
    basis = BSpline.design_matrix(at, knots, _DEGREE - 3)
    gram = basis.T @ basis.multiply(share[:, None])
    return down.T @ gram @ down
