"""Fixtures of the audit tests: see cast.py."""

from dataclasses import replace

import numpy as np
import pytest

from tests.auditing.cast import made_arm, move_table


@pytest.fixture(scope="session")
def arm():
    return made_arm()


@pytest.fixture(scope="session")
def calm_table():
    """A move well inside every limit: 3 s, 751 rows, two steps."""
    torque = np.tile([100.0, -10.0, 5.0], (751, 1))
    return move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 3.0, torque=torque)


@pytest.fixture(scope="session")
def position_only(calm_table):
    return replace(calm_table, **dict.fromkeys(("velocity", "acceleration", "jerk", "torque", "pose", "tool_speed")))
