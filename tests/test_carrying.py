"""Tools and payloads that change on the way: table, torque and audit follow. Referee for torque: pinocchio."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.auditing.tool import arms_by_step, by_tool, step_caps, tool_acceleration

ROOT = Path(__file__).parent.parent


@pytest.fixture(scope="module")
def pick():
    return pathplan.plan(pathplan.load_task(ROOT / "examples" / "glazer6-pick-and-place.toml"))


@pytest.fixture(scope="module")
def change():
    return pathplan.plan(pathplan.load_task(ROOT / "examples" / "glazer6-change-tools.toml"))


def torque_by_pinocchio(arm, step, q, qd, qdd):
    """(N, n) rigid-body torque with the tool and payload of a step, from the arm file's own numbers."""
    import pinocchio as pin

    model = pin.Model()
    model.gravity = pin.Motion(np.array(arm.gravity), np.zeros(3))
    parent = 0
    for i, joint in enumerate(arm.joints):
        placement = pin.SE3(np.array(arm.parent_from_joint[i]))
        kind = pin.JointModelRevoluteUnaligned(np.array(arm.axes[i]))
        parent = model.addJoint(parent, kind, placement, joint.name)
        link = arm.links[i]
        body = pin.Inertia(link.mass, np.array(link.com), np.array(link.inertia))
        model.appendBodyToJoint(parent, body, pin.SE3.Identity())
    tool = arm.tools.get(step.tool)
    if tool is not None:
        place = pin.SE3(np.array(arm.tip_from_flange)) * pin.SE3(np.array(tool.flange_from_tool))
        for thing in (tool, arm.payloads.get(step.payload)):
            if thing is not None:
                body = pin.Inertia(thing.mass, np.array(thing.com), np.array(thing.inertia))
                model.appendBodyToJoint(parent, body, place)
    data = model.createData()
    return np.array([pin.rnea(model, data, *row) for row in zip(q, qd, qdd, strict=True)])


def drives(arm, qd, qdd):
    """(N, n) what friction and rotors add, by the formulas of the arm file."""
    links = arm.links
    rotor = np.array([joint.gear_ratio**2 * link.rotor_inertia for joint, link in zip(arm.joints, links, strict=True)])
    viscous = np.array([link.viscous for link in links])
    forward, backward = np.array([link.coulomb for link in links]).T
    return rotor * qdd + viscous * qd + np.where(qd > 0, forward, np.where(qd < 0, -backward, 0.0))


@pytest.mark.parametrize("name", ["pick", "change"])
def test_torque_follows_tool_and_payload(name, request):
    plan = request.getfixturevalue(name)
    table, arm = plan.table, plan.task.arm
    for step in plan.task.steps:
        rows = np.flatnonzero(table.step == step.index)[1::23]  # the row on which two steps meet is of the earlier
        q, qd, qdd = table.position[rows], table.velocity[rows], table.acceleration[rows]
        expected = torque_by_pinocchio(arm, step, q, qd, qdd) + drives(arm, qd, qdd)
        np.testing.assert_allclose(table.torque[rows], expected, rtol=1e-9, atol=1e-9)


def test_the_payload_counts_from_the_wait_on(pick):
    """The step of torque when the tile is picked up is what holding it takes: gravity alone."""
    table, arm = pick.table, pick.task.arm
    first = int(np.flatnonzero(table.step == 2)[0])
    q = table.position[[first]]
    still = np.zeros_like(q)
    holding = [arm.equipped(tool="cup", payload=load).torque(q, still, still)[0] for load in (None, "tile")]
    np.testing.assert_allclose(table.torque[first], holding[1], atol=1e-12)
    np.testing.assert_allclose(table.torque[first - 1], holding[0], atol=1e-12)
    # the shoulder: weight of the tile times its horizontal distance from the axis of joint 2
    com = arm.equipped(tool="cup", payload="tile")
    pose = com.forward(q[0])
    reach = np.linalg.norm((pose @ [*com.payload.com, 1])[:2]) - 0.08  # a = 80 mm to the axis of joint 2
    assert abs(holding[1][1] - holding[0][1]) == pytest.approx(1.2 * 9.80665 * reach, rel=1e-9)


def test_poses_are_of_the_tool_that_is_carried(change):
    table, arm = change.table, change.task.arm
    assert change.task.tools == ("cup", "none", "nozzle")
    for step in (1, 4, 9):
        rows = np.flatnonzero(table.step == step)[1:]
        carrying = arm.equipped(tool=change.task.steps[step].tool)
        np.testing.assert_allclose(table.pose[rows], carrying.forward(table.position[rows]), atol=1e-12)
    seat = change.task.steps[5]
    last = np.flatnonzero(table.step == 5)[-1]
    np.testing.assert_allclose(table.pose[last], change.task.pose(seat.target), atol=2e-7)


def test_the_tools_own_cap_holds_while_it_is_carried(change):
    table = change.table
    carried = np.array([step.tool for step in change.task.steps])[table.step]
    speed = {tool: table.tool_speed[carried == tool].max() for tool in change.task.tools}
    assert speed["nozzle"] <= 0.6 * (1 + 1e-6) and speed["nozzle"] > 0.599
    assert speed["cup"] > 0.7
    assert change.audit.passed
    asked = [step.speed for step in change.task.steps if step.speed is not None]  # two caps are reached, one is named
    assert change.audit.tool_speed.share == pytest.approx(1, abs=1e-4)
    assert change.audit.tool_speed.limit == pytest.approx(0.6) or change.audit.tool_speed.limit in asked


CAPPED = """
arm = "{arm}"
cycle = "4 ms"
start = "home"
tool = "cup"

[[step]]
motion = "joint"
to = {{ joints = [25, -15, 35, 0, 70, 0] }}
acceleration = "2 m/s^2"

[[step]]
motion = "joint"
to = {{ joints = [-10, -5, 30, 0, 65, 40] }}
tool = "nozzle"
acceleration = "1.5 m/s^2"

[[step]]
motion = "joint"
to = "home"
tool = "none"
acceleration = "2.5 m/s^2"
"""


def test_tool_acceleration_is_judged_with_each_steps_tool(tmp_path):
    file = tmp_path / "capped.toml"
    file.write_text(CAPPED.format(arm=(ROOT / "robots" / "glazer6.toml").as_posix()))
    plan = pathplan.plan(pathplan.load_task(file))
    assert plan.audit.passed, [finding.text for finding in plan.audit.findings]
    table, caps = plan.table, (2.0, 1.5, 2.5)
    for step, (tool, cap) in enumerate(zip(plan.task.tools, caps, strict=True)):
        rows = table.step == step
        point = table.pose[rows][:, :3, 3]
        seen = np.linalg.norm(np.diff(point, 2, axis=0), axis=1) / plan.task.cycle**2
        assert 0.97 * cap < seen.max() < cap * (1 + 1e-3), tool
    peak = plan.audit.tool_acceleration
    assert peak.share == pytest.approx(1, abs=1e-4)


def test_the_audit_of_a_table_that_is_too_fast_for_one_of_its_tools(tmp_path):
    """The same rows judged with the right tool and with the first one for all: only the right one sees it."""
    file = tmp_path / "capped.toml"
    text = CAPPED.format(arm=(ROOT / "robots" / "glazer6.toml").as_posix())
    file.write_text(text.replace('acceleration = "1.5 m/s^2"\n', ""))
    fast = pathplan.plan(pathplan.load_task(file))
    file.write_text(text)
    slow = pathplan.plan(pathplan.load_task(file))
    table = fast.table
    arms = arms_by_step(slow.task.arm, slow.task)
    caps = step_caps(slow.task.arm, slow.task)[1]
    np.testing.assert_allclose(caps, [2.0, 1.5, 2.5])
    worst = {}
    for arm, rows in by_tool(arms, table.step):
        values = tool_acceleration(arm, table.position[rows], table.velocity[rows], table.acceleration[rows])
        worst[arm.tool.name] = (values / caps[table.step[rows]]).max()
    assert worst["nozzle"] > 1.2 and worst["cup"] < 1.001 and worst["none"] < 1.001


def test_rows_by_tool():
    arm = pathplan.load_arm(ROOT / "robots" / "glazer6.toml").equipped(tool="cup")
    assert [found for found, _ in by_tool((arm,), np.array([0, 0, 3]))] == [arm]
    other = arm.equipped(tool="nozzle")
    parts = {found.tool.name: rows.tolist() for found, rows in by_tool((arm, other, arm), np.array([0, 1, 1, 2, 1]))}
    assert parts == {"cup": [0, 3], "nozzle": [1, 2, 4]}
