"""Arm files whose joints branch: parents, the tip, torque of what stands apart."""

import re

import numpy as np
import pytest

from pathplan import errors
from pathplan.arm import load_arm

TREE = """name = "cell"
{dh}
tip = "lift"

[[joint]]
name = "swing"
kind = "revolute"
{one}
position = [-130, 130]
velocity = 200
acceleration = 900
jerk = 9000
mass = "8 kg"
com = [150, 0, 0]
inertia = [0.02, 0.09, 0.1]

[[joint]]
name = "lift"
kind = "prismatic"
{two}
position = [-200, 0]
velocity = 500
acceleration = 3000
jerk = 40000
mass = "2 kg"
com = [0, 0, -100]

[[joint]]
name = "table"
kind = "revolute"
{three}
parent = "base"
position = "unlimited"
velocity = 90
acceleration = 200
jerk = 2000
mass = "30 kg"
com = [40, 0, 0]
inertia = [1, 1, 2]

[positions]
home = [0, -100, 0]
"""
AXES = {
    "dh": "",
    "one": "origin = [0, 0, 400]\naxis = [0, 0, 1]",
    "two": "origin = [500, 0, 400]\naxis = [0, 0, 1]",
    "three": "origin = [900, 100, 200]\naxis = [1, 0, 1]",
}
ROWS = {"one": "dh = { a = 500, d = 400 }", "two": "dh = { }", "three": "dh = { d = 200 }"}


def written(folder, **parts):
    file = folder / "cell.toml"
    file.write_text(TREE.format(**parts))
    return file


def test_a_table_beside_the_arm(tmp_path):
    arm = load_arm(written(tmp_path, **AXES))
    assert arm.parents == (-1, 0, -1) and arm.tip == 1 and arm.tool_joints == (0, 1)
    q = np.array([0.4, -0.1, 2.0])
    np.testing.assert_allclose(arm.forward(q)[:3, 3], [0.0, 0.0, -0.1], atol=1e-12)  # the interface at zero: the base
    np.testing.assert_allclose(arm.base_from_joint("table", q)[:3, 3], [0.9, 0.1, 0.2], atol=1e-15)
    assert (arm.jacobian(q)[:, 2] == 0).all()


@pytest.mark.parametrize("convention", ["standard", "modified"])
def test_rows_follow_their_parents(convention, tmp_path):
    rows = ROWS if convention == "standard" else {**ROWS, "one": "dh = { d = 400 }", "two": "dh = { a = 500 }"}
    arm = load_arm(written(tmp_path, dh=f'dh = "{convention}"', **rows))
    assert arm.parents == (-1, 0, -1)
    np.testing.assert_allclose(arm.forward([np.pi / 2, -0.1, 1.0])[:3, 3], [0, 0.5, 0.3], atol=1e-15)
    height = 0.0 if convention == "standard" else 0.2  # a standard row turns before it goes along
    np.testing.assert_allclose(arm.base_from_joint("table", [0, 0, 1.0])[:3, 3], [0, 0, height], atol=1e-15)


def test_torque_of_chains_that_stand_apart(tmp_path, referee):
    import pinocchio as pin

    arm = load_arm(written(tmp_path, **AXES))
    q, qd, qdd = np.random.default_rng(0).uniform(-0.2, 0.2, (3, 5, 3))
    torque = arm.torque(q, qd, qdd)
    model = pin.Model()
    model.gravity.linear = np.array(arm.gravity)
    for i, item in enumerate(arm.joints):
        kind = pin.JointModelRevoluteUnaligned if item.kind == "revolute" else pin.JointModelPrismaticUnaligned
        placement = pin.SE3(np.array(arm.parent_from_joint[i]))
        model.addJoint(arm.parents[i] + 1, kind(np.array(arm.axes[i])), placement, item.name)
        link = arm.links[i]
        body = pin.Inertia(link.mass, np.array(link.com), np.array(link.inertia))
        model.appendBodyToJoint(i + 1, body, pin.SE3.Identity())
    data = model.createData()
    for k in range(5):
        np.testing.assert_allclose(torque[k], pin.rnea(model, data, q[k], qd[k], qdd[k]), atol=1e-11)


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ('tip = "lift"\n', "", 'cell.toml: missing key "tip": joints branch, expected "lift" or "table"'),
        ('tip = "lift"', 'tip = "lifter"', 'cell.toml: tip: expected "swing", "lift" or "table", got "lifter"'),
        (
            'parent = "base"',
            'parent = "swinh"',
            'cell.toml: joint[3].parent: no earlier joint "swinh", did you mean "swing"?',
        ),
        ('parent = "base"', 'parent = "table"', 'joint[3].parent: no earlier joint "table"'),
    ],
)
def test_what_is_wrong_is_said_in_one_line(old, new, message, tmp_path):
    file = written(tmp_path, **AXES)
    assert old in file.read_text()
    file.write_text(file.read_text().replace(old, new))
    with pytest.raises(errors.InputError, match=re.escape(message)):
        load_arm(file)


def test_torque_of_joints_that_branch_above_the_base_is_refused(tmp_path):
    file = written(tmp_path, **AXES)
    file.write_text(file.read_text().replace('parent = "base"', 'parent = "swing"'))
    with pytest.raises(errors.InputError, match="cell: no torque: joint swing carries several, lift, table"):
        load_arm(file).torque(*np.zeros((3, 1, 3)))
