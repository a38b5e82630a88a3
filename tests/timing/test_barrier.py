"""The Newton step of the barrier problems."""

from __future__ import annotations

import numpy as np
import pytest

from pathplan.errors import PathplanError
from pathplan.timing.barrier import newton_step


def banded(matrix: np.ndarray) -> np.ndarray:
    return np.stack([np.append(0.0, np.diag(matrix, 1)), np.diag(matrix)])


def test_it_solves() -> None:
    matrix = np.diag([4.0, 5.0, 6.0]) + np.diag([1.0, -2.0], 1) + np.diag([1.0, -2.0], -1)
    gradient = np.array([1.0, -3.0, 2.0])
    np.testing.assert_allclose(newton_step(banded(matrix), gradient), -np.linalg.solve(matrix, gradient), rtol=1e-14)


def test_what_rounding_has_cost_is_mended() -> None:
    """Semidefinite but for a last digit: Cholesky fails, and the step must still lead downhill."""
    matrix = np.array([[1.0, 1.0], [1.0, 1.0 - 1e-15]])
    gradient = np.array([1.0, 1.0])
    assert newton_step(banded(matrix), gradient) @ gradient < 0


def test_what_is_not_positive_definite_is_refused() -> None:
    with pytest.raises(PathplanError, match="not positive definite"):
        newton_step(banded(np.array([[1.0, 2.0], [2.0, 1.0]])), np.ones(2))
