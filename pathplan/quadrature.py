"""Gauss-Legendre points and weights, worked out once for each number of points."""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.typing import NDArray


@cache
def gauss_legendre(points: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Points (P,) in (-1, 1) and weights (P,), read-only: exact for polynomials up to degree 2 P - 1."""
    x, w = np.polynomial.legendre.leggauss(points)
    x.setflags(write=False)
    w.setflags(write=False)
    return x, w
