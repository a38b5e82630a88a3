"""Arms and task texts that the tests of this room draw from."""

import numpy as np
import pytest

from pathplan.arm import Arm
from pathplan.arm.model import Joint, Payload, Tool
from pathplan.task import load_task

TASK6 = """\
title = "Tile from belt to car"
arm = "bench6.toml"
cycle = "4 ms"
tool = "gripper"
start = [0, -30, 60, 0, "60 deg", 0]
return = true

[frames.cell]
xyz = [600, 0, 100]

[frames.car]
parent = "cell"
xyz = [0, 300, 50]
rpy = [0, 0, 90]

[poses.belt]
frame = "cell"
xyz = [0, -200, 0]
rpy = [180, 0, 0]

[poses.shelf]
frame = "car"
xyz = [100, 20, 0]
quat = [0, 1, 0, 0]

[poses.parked]
joints = [10, -30, 60, 0, 60, 0]

[[step]]
motion = "joint"
to = "belt"
offset = { frame = [0, 0, 80] }
configuration = { elbow = "up" }
blend = "15 %"

[[step]]
motion = "line"
to = "belt"
speed = 250

[[step]]
wait = "0.3 s"
mark = "gripper closed"

[[step]]
motion = "line"
to = "belt"
offset = { tool = [0, 0, -80] }
blend = "20 mm"

[[step]]
motion = "arc"
via = { frame = "cell", xyz = [0, 0, 200] }
to = "shelf"
blend = "10 deg"
acceleration = "2 m/s^2"

[[step]]
name = "half round"
motion = "arc"
centre = { frame = "car", xyz = [150, 20, 0] }
axis = [0, 0, 2]
angle = -180
tool_along = true

[[step]]
motion = "joint"
to = "parked"
"""


def revolute(name: str, low: float = -170.0, high: float = 170.0) -> Joint:
    return Joint(name, "revolute", (np.deg2rad(low), np.deg2rad(high)), 3.0, 10.0, 100.0)


@pytest.fixture(scope="session")
def text() -> str:
    """A task that uses everything a task file may say."""
    return TASK6


@pytest.fixture(scope="session")
def bench6() -> Arm:
    """A six-axis arm with a spherical wrist, about a metre of reach."""
    names = ("turn", "lift", "bend", "roll", "tip", "flange")
    base_from_flange = np.array([[0, 0, 1, 0.98], [0, -1, 0, 0], [1, 0, 0, 0.9], [0, 0, 0, 1.0]])
    flange_from_tool = np.eye(4)
    flange_from_tool[2, 3] = 0.1
    gripper = Tool("gripper", flange_from_tool, mass=0.8)
    return Arm.from_axes(
        "bench6",
        [revolute(name, -120.0 if name == "bend" else -170.0) for name in names],
        [[0, 0, 0.4], [0, 0, 0.4], [0, 0, 0.9], [0.5, 0, 0.9], [0.9, 0, 0.9], [0.9, 0, 0.9]],
        [[0, 0, 1], [0, 1, 0], [0, 1, 0], [1, 0, 0], [0, 1, 0], [1, 0, 0]],
        base_from_flange,
        tools={"gripper": gripper},
        payloads={"tile": Payload("tile", 1.2, np.zeros(3), np.zeros((3, 3)))},
        positions={"home": np.deg2rad([0, -30, 60, 0, 60, 0]), "folded": np.deg2rad([0, -90, 90, 0, 90, 0])},
    )


@pytest.fixture(scope="session")
def bench4() -> Arm:
    """A gantry: three sliding axes and a turning wrist."""
    slide = [Joint(name, "prismatic", (0.0, 0.8), 1.0, 4.0, 40.0) for name in ("along", "across", "down")]
    base_from_flange = np.diag([1.0, -1.0, -1.0, 1.0])
    return Arm.from_axes(
        "bench4",
        [*slide, revolute("wrist")],
        np.zeros((4, 3)),
        [[1, 0, 0], [0, 1, 0], [0, 0, -1], [0, 0, -1]],
        base_from_flange,
        positions={"home": np.array([0.1, 0.1, 0.1, 0.0])},
    )


@pytest.fixture
def load(tmp_path, bench6):
    """load(text, arm=bench6): the task of a text, written to pick.toml."""

    def load_text(text: str, arm: Arm = bench6):
        path = tmp_path / "pick.toml"
        path.write_text(text, encoding="utf-8")
        return load_task(path, arm=arm)

    return load_text
