"""An arm and a motion that tables from elsewhere are made of."""

from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.table import tick_times

ROOT = Path(pathplan.__file__).parents[1]


@pytest.fixture(scope="session")
def arm():
    """Joints x, y, z in mm and a wrist in deg."""
    return pathplan.load_arm(ROOT / "robots" / "loader4.toml")


@pytest.fixture(scope="session")
def motion(arm):
    """Times (N,) s and positions (N, 4) SI of a slow minimum-jerk move (Flash & Hogan 1985), 501 rows at 4 ms."""
    time = tick_times(np.arange(501), 0.004)
    tau = time / time[-1]
    shape = tau**3 * (10 - 15 * tau + 6 * tau**2)
    return time, arm.positions["home"] + np.outer(shape, [0.4, -0.3, -0.2, 1.0])


@pytest.fixture(scope="session")
def on_screen(motion):
    """The positions in mm and deg."""
    return motion[1] * [1000, 1000, 1000, 180 / np.pi]
