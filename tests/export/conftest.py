"""Tables that the export tests draw from."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

import pathplan
from pathplan.table import JointTable, Mark, tick_times


@pytest.fixture(scope="session")
def full_table():
    """Every column there is: a revolute, a prismatic and a revolute joint with an awkward name, 50 rows."""
    rows = 50
    rng = np.random.default_rng(3)
    q = rng.normal(size=(rows, 3)) * [2.0, 0.4, 3.0]
    pose = np.tile(np.eye(4), (rows, 1, 1))
    pose[:, :3, :3] = Rotation.from_rotvec(np.cumsum(rng.normal(size=(rows, 3)), axis=0) * 0.4).as_matrix()
    pose[:, :3, 3] = rng.normal(size=(rows, 3))
    return JointTable(
        time=tick_times(np.arange(rows), 0.004),
        position=q,
        velocity=q * 3.1,
        acceleration=-q * 17.0,
        jerk=q * 211.0,
        torque=q * 9.7,
        step=np.arange(rows) // 20,
        pose=pose,
        tool_speed=np.abs(q[:, 0]),
        joint_names=("swing", "lift", 'wrist, "left"'),
        joint_kinds=("revolute", "prismatic", "revolute"),
        cycle=0.004,
        marks=(Mark("gripper closed", 0.08, 20, 0), Mark('Ärmel; "auf"\u2028', 0.196, 49, 2)),
        meta={
            "arm": "glazer6",
            "task": "Tiles, belt to kiln car",
            "task_file": "tiles.toml",
            "versions": {"pathplan": "0.1.0"},
            "sources": {"tiles.toml": "ab12", "glazer6.toml": "cd34"},
            "breaks_limits": False,
        },
    )


@pytest.fixture(scope="session")
def bare_table(full_table):
    """Time and position alone."""
    return replace(
        full_table,
        **dict.fromkeys(("velocity", "acceleration", "jerk", "torque", "pose", "tool_speed")),
        marks=(),
        meta={},
    )


STOPS = """\
title = "Two stops"
arm = "{arm}"
cycle = "4 ms"
tool = "vacuum gripper"
start = "home"

[[step]]
wait = "0.05 s"
mark = "ready"

[[step]]
motion = "line"
to = {{ xyz = [900, 500, 950], rpy = [180, 0, 40] }}
blend = "30 mm"
mark = "turned"

[[step]]
motion = "line"
to = {{ xyz = [900, 500, 700], rpy = [180, 0, 40] }}

[[step]]
wait = "0.1 s"
mark = "vacuum on"

[[step]]
motion = "joint"
to = "home"
"""


@pytest.fixture(scope="session")
def plan(tmp_path_factory):
    """A plan of two stretches with waits before and between them: joints x, y, z in mm and a wrist in deg."""
    root = Path(pathplan.__file__).parents[1]
    file = tmp_path_factory.mktemp("task") / "stops.toml"
    file.write_text(STOPS.format(arm=(root / "robots" / "loader4.toml").as_posix()))
    return pathplan.plan(pathplan.load_task(file))
