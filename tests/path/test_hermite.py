"""Septic Hermite pieces against numpy's polynomials."""

from __future__ import annotations

import numpy as np

from pathplan.path.hermite import derivatives_at, hermite_coefficients


def test_reproduces_polynomials_of_degree_seven() -> None:
    r = np.random.default_rng(2)
    polynomials = r.normal(size=(5, 3, 8))  # pieces, joints, powers (highest first)
    width = r.uniform(0.05, 3.0, 5)

    def jets(at: np.ndarray) -> np.ndarray:
        return np.array(
            [
                [[np.polyval(np.polyder(p, k), x) for p in row] for row, x in zip(polynomials, at, strict=True)]
                for k in range(4)
            ]
        )

    coefficients = hermite_coefficients(jets(np.zeros(5)), jets(width), width)
    for share in (0.0, 0.3, 0.7, 1.0):
        expected = jets(share * width)
        np.testing.assert_allclose(derivatives_at(coefficients, share * width), expected, rtol=1e-8, atol=1e-7)


def test_meets_both_ends_to_third_order() -> None:
    r = np.random.default_rng(3)
    begin, end, width = r.normal(size=(4, 6, 2)), r.normal(size=(4, 6, 2)), r.uniform(0.1, 2.0, 6)
    coefficients = hermite_coefficients(begin, end, width)
    np.testing.assert_allclose(derivatives_at(coefficients, np.zeros(6)), begin, atol=1e-12)
    found = derivatives_at(coefficients, width)
    for order in range(4):
        np.testing.assert_allclose(
            found[order] * width[:, None] ** order, end[order] * width[:, None] ** order, atol=1e-11
        )
