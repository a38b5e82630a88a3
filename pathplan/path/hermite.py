"""Septic Hermite pieces: the polynomial of degree seven that takes value and three derivatives at both
ends.
"""

from __future__ import annotations

from math import factorial

import numpy as np

from pathplan.path.joint import Array

__all__ = ["derivatives_at", "hermite_coefficients"]

DEGREE = 7


def _solution() -> Array:
    """(4, 4) what the four upper coefficients on [0, 1] take from the four conditions left at t = 1."""
    powers = np.arange(4, 8)
    conditions = np.array([[factorial(p) / factorial(p - k) for p in powers] for k in range(4)])
    return np.rint(np.linalg.inv(conditions) * 6.0) / 6.0  # its entries are sixths of whole numbers


_UPPER = _solution()
_FALLING = np.array([[factorial(p) / factorial(p - k) if p >= k else 0.0 for p in range(8)] for k in range(4)])


def hermite_coefficients(begin: Array, end: Array, width: Array) -> Array:
    """Local power coefficients (8, m, n), highest power first, of pieces of widths (m,).

    `begin` and `end` (4, m, n): value and derivatives to third order at the two ends.
    """
    scale = width[:, None] ** np.arange(4)[:, None, None]
    left, right = begin * scale, end * scale  # by t = (s - start) / width
    lower = left / np.array([1.0, 1.0, 2.0, 6.0])[:, None, None]
    missing = right - np.einsum("kp,pmn->kmn", _FALLING[:, :4], lower)
    upper = np.einsum("pk,kmn->pmn", _UPPER, missing)
    coefficients = np.concatenate([lower, upper]) / width[:, None] ** np.arange(8)[:, None, None]
    return coefficients[::-1]


def derivatives_at(coefficients: Array, local: Array) -> Array:
    """(4, m, n) value and three derivatives of each piece (8, m, n) at its own local offset (m,)."""
    degree = len(coefficients) - 1
    out = np.empty((4, *coefficients.shape[1:]))
    x = local[:, None]
    for k in range(4):
        value = np.zeros(coefficients.shape[1:])
        for row in range(degree - k + 1):
            value = value * x + _FALLING[k, degree - row] * coefficients[row]
        out[k] = value
    return out
