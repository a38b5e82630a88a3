"""The cast of arms that the tests of this folder draw from, and the referees built independently of our
own code.
"""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pytest

from pathplan.arm import Arm, Joint, Link, load_arm
from pathplan.arm.chain import DHRow, chain_from_dh, moved_link, rot_x, rot_z, translation

ROBOTS = Path(__file__).parents[2] / "robots"
QUARTER = np.pi / 2


def joint(name: str, kind: str = "revolute", reach: float = np.pi) -> Joint:
    return Joint(name, kind, (-reach, reach), 3.0, 10.0, 100.0)


def dh_arm(name: str, rows: list[DHRow], convention: str = "standard", kinds: str = "", **rest) -> Arm:
    """An arm from DH rows; kinds "RRP" and so on, all revolute by default."""
    fixed, axes, tip, _ = chain_from_dh(rows, convention)
    words = {"R": "revolute", "P": "prismatic"}
    joints = tuple(joint(f"j{i}", words[k]) for i, k in enumerate(kinds or "R" * len(rows)))
    return Arm(name, joints, fixed, axes, tip, **rest)


def oblique_six() -> Arm:
    """Six axes in no special position: general structure."""
    r = np.random.default_rng(11)
    rows = [DHRow(r.uniform(0.1, 0.5), alpha, r.uniform(0.1, 0.4), r.uniform(-1, 1)) for alpha in r.uniform(-2, 2, 6)]
    return dh_arm("oblique six", rows)


def crooked_wrist() -> Arm:
    """A spherical wrist on crooked ground: shoulder offset, axes turned about, wrist axes not square,
    base tilted.
    """
    frame = translation(0.3, -0.2, 0.1) @ rot_x(0.4) @ rot_z(0.7)
    centre = np.array([0.15, 0.9, 0.2])
    axes = np.array([[0, 0.2, 1.0], [1, 0, 0], [-1, 0, 0], [0.1, 1, 0.2], [1, 0.3, 0.1], [0, 1, 0.3]])
    origins = np.array([[0, 0, 0], [0.1, 0.05, 0.3], [0.4, 0.1, 0.75], centre, centre, centre])
    hand = translation(*centre) @ rot_x(0.3) @ translation(0, 0.02, 0.1)
    turned = origins @ frame[:3, :3].T + frame[:3, 3]
    return Arm.from_axes(
        "crooked wrist", [joint(f"j{i}") for i in range(6)], turned, axes @ frame[:3, :3].T, frame @ hand
    )


def puma() -> Arm:
    """Puma 560 from the toolbox's own DH model (Corke & Armstrong-Helouvry parameters), as an arm of ours."""
    import roboticstoolbox

    robot = roboticstoolbox.models.DH.Puma560()
    rows = [DHRow(link.a, link.alpha, link.d, link.theta) for link in robot.links]
    fixed, axes, tip, joint_from_link = chain_from_dh(rows, "standard")
    joints, links = [], []
    for i, link in enumerate(robot.links):
        ratio = float(link.G)
        joints.append(Joint(f"j{i + 1}", "revolute", tuple(link.qlim), 1.0, 1.0, 1.0, gear_ratio=ratio))
        friction = (link.Tc[0] * abs(ratio), -link.Tc[1] * abs(ratio))
        stated = Link(link.m, link.r, link.I, link.B * ratio**2, friction, link.Jm)
        links.append(moved_link(stated, joint_from_link[i]))
    return Arm("puma", tuple(joints), fixed, axes, tip, links=tuple(links), gravity=np.array([0, 0, -9.81]))


def heavy_gantry() -> Arm:
    """Prismatic joints first, tilted on its base, with masses: what the toolbox's own rne gets wrong."""
    frame = translation(0.2, 0.1, 1.5) @ rot_x(0.5) @ rot_z(0.3)
    kinds = ["prismatic", "prismatic", "revolute", "prismatic"]
    axes = np.array([[1, 0.1, 0], [0, 1, 0], [0, 0.2, -1], [0, 0, 1.0]]) @ frame[:3, :3].T
    origins = np.array([[0, 0, 0], [0.1, 0, 0], [0.2, 0.1, -0.3], [0.3, 0.1, -0.4]]) @ frame[:3, :3].T + frame[:3, 3]
    links = tuple(
        Link(
            3.0 - 0.5 * i,
            np.array([0.1, 0.02 * i, -0.1]),
            np.diag([0.03, 0.04, 0.02 + 0.01 * i]),
            2.0,
            (1.0, 1.5),
            1e-4,
        )
        for i in range(4)
    )
    joints = [Joint(f"j{i}", kind, (-1.0, 1.0), 1.0, 1.0, 1.0, gear_ratio=20.0) for i, kind in enumerate(kinds)]
    return Arm.from_axes("heavy gantry", joints, origins, axes, frame @ translation(0.3, 0.2, -0.5), links=links)


def crane_scara() -> Arm:
    """A SCARA with its screw first, upside-down axes and a hand off its last axis."""
    return Arm.from_axes(
        "crane scara",
        [joint("screw", "prismatic", 0.5), joint("a"), joint("b"), joint("c")],
        [[0, 0, 0], [0.1, 0.05, 1], [0.4, 0.3, 1], [0.55, 0.0, 0.9]],
        [[0, 0, 1], [0, 0, -1], [0, 0, 1], [0, 0, -1]],
        translation(0.6, 0.02, 0.7) @ rot_x(np.pi),
    )


def planar_three() -> Arm:
    """Craig, "Introduction to Robotics", ch. 4 exercise: planar 3R with links 4, 3, 2."""
    return dh_arm("planar three", [DHRow(4.0), DHRow(3.0), DHRow(2.0)])


def offset_wrist() -> Arm:
    """Three parallel axes and a wrist whose axes don't meet."""
    q = QUARTER
    rows = [
        DHRow(0, q, 0.18),
        DHRow(-0.61),
        DHRow(-0.57),
        DHRow(0, q, 0.17),
        DHRow(0, -q, 0.12),
        DHRow(0, 0, 0.11),
    ]
    return dh_arm("offset wrist", rows)


def seven() -> Arm:
    q = QUARTER
    rows = [
        DHRow(0, -q, 0.34),
        DHRow(0, q),
        DHRow(0, q, 0.4),
        DHRow(0, -q),
        DHRow(0, -q, 0.4),
        DHRow(0, q),
        DHRow(0, 0, 0.13),
    ]
    return dh_arm("seven", rows)


def loaded(name: str, tool: str | None = None, payload: str | None = None) -> Arm:
    return load_arm(ROBOTS / f"{name}.toml").equipped(tool=tool, payload=payload)


CAST = {
    "loader4": lambda: loaded("loader4", "vacuum gripper", "tile"),
    "sorter4": lambda: loaded("sorter4", "cup"),
    "glazer6": lambda: loaded("glazer6", "nozzle"),
    "glazer6 stacking": lambda: loaded("glazer6", "cup", "tile stack"),
    "puma": puma,
    "crooked wrist": crooked_wrist,
    "crane scara": crane_scara,
    "heavy gantry": heavy_gantry,
    "planar three": planar_three,
    "offset wrist": offset_wrist,
    "oblique six": oblique_six,
    "seven": seven,
}


@cache
def cast_member(name: str) -> Arm:
    return CAST[name]()


@pytest.fixture(params=list(CAST))
def arm(request: pytest.FixtureRequest) -> Arm:
    """Every arm of the cast, one after the other."""
    return cast_member(request.param)


@pytest.fixture
def cast():
    """An arm of the cast by its name."""
    return cast_member


@pytest.fixture
def spread():
    """Random joint vectors (count, n) inside the position limits, from a seed."""
    return random_configurations


def random_configurations(arm: Arm, count: int, seed: int = 0) -> np.ndarray:
    low, high = np.array([j.position for j in arm.joints]).T
    return np.random.default_rng(seed).uniform(low, high, (count, arm.n))


@pytest.fixture
def referee():
    """A pinocchio model of an arm, built joint by joint from its transforms and axes: (model, data, tool
    frame).
    """
    return pinocchio_model


def pinocchio_model(arm: Arm):
    import pinocchio as pin

    model = pin.Model()
    model.gravity.linear = np.array(arm.gravity)
    parent = 0
    for i, item in enumerate(arm.joints):
        axis = np.array(arm.axes[i])
        kind = pin.JointModelRevoluteUnaligned if item.kind == "revolute" else pin.JointModelPrismaticUnaligned
        placement = pin.SE3(np.array(arm.parent_from_joint[i]))
        parent = model.addJoint(parent, kind(axis), placement, item.name)
        if arm.links is not None:
            link = arm.links[i]
            inertia = pin.Inertia(link.mass, np.array(link.com), np.array(link.inertia))
            model.appendBodyToJoint(parent, inertia, pin.SE3.Identity())
    from_flange = pin.SE3(np.array(arm.tip_from_flange))
    from_tool = from_flange * pin.SE3(np.array(arm.tool.flange_from_tool))
    for thing in (arm.tool, arm.payload):
        if thing is not None and arm.links is not None:
            inertia = pin.Inertia(thing.mass, np.array(thing.com), np.array(thing.inertia))
            model.appendBodyToJoint(parent, inertia, from_tool)
    frame = model.addFrame(pin.Frame("tool", parent, 0, from_tool, pin.FrameType.OP_FRAME))
    return model, model.createData(), frame
