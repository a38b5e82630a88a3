"""Forward kinematics, Jacobian and joint derivatives against pinocchio, roboticstoolbox and finite
differences.
"""

import re
import tomllib
from pathlib import Path

import numpy as np
import pytest

from pathplan import errors
from pathplan.arm.kinematics import joint_derivatives, smallest_singular_value

ROBOTS = Path(__file__).parents[2] / "robots"


def test_forward_and_jacobian_agree_with_pinocchio(arm, spread, referee):
    import pinocchio as pin

    model, data, frame = referee(arm)
    q = spread(arm, 150)
    poses, jacobians = arm.forward(q), arm.jacobian(q)
    for row, pose, jac in zip(q, poses, jacobians, strict=True):
        theirs = pin.computeFrameJacobian(model, data, row, frame, pin.ReferenceFrame.LOCAL_WORLD_ALIGNED)
        pin.framesForwardKinematics(model, data, row)
        scale = max(1.0, np.abs(pose[:3, 3]).max())  # planar three is metres long
        np.testing.assert_allclose(pose, data.oMf[frame].homogeneous, rtol=0, atol=1e-12 * scale)
        np.testing.assert_allclose(jac, theirs, rtol=0, atol=1e-12 * scale)


def test_joint_frames_agree_with_pinocchio(arm, spread, referee):
    import pinocchio as pin

    model, data, _ = referee(arm)
    q = spread(arm, 1)[0]
    pin.forwardKinematics(model, data, q)
    for i, joint in enumerate(arm.joints):
        np.testing.assert_allclose(arm.base_from_joint(joint.name, q), data.oMi[i + 1].homogeneous, rtol=0, atol=1e-12)


def toolbox_robot(name: str):
    """The robot of a DH arm file, its rows read from the file itself and typed into roboticstoolbox."""
    import roboticstoolbox as rtb
    from spatialmath import SE3

    data = tomllib.loads((ROBOTS / f"{name}.toml").read_text())
    assert data["dh"] == "modified"
    links = []
    for row in data["joint"]:
        a, d = row["dh"].get("a", 0) / 1e3, row["dh"].get("d", 0) / 1e3
        alpha, theta = np.deg2rad([row["dh"].get("alpha", 0), row["dh"].get("theta", 0)])
        if row["kind"] == "revolute":
            links.append(rtb.RevoluteMDH(a=a, alpha=alpha, d=d, offset=theta))
        else:
            links.append(rtb.PrismaticMDH(a=a, alpha=alpha, theta=theta, offset=d))
    flange = data["mechanical_interface"]
    tool = SE3(*np.array(flange.get("xyz", [0, 0, 0])) / 1e3) * SE3.RPY(flange.get("rpy", [0, 0, 0]), unit="deg")
    return rtb.DHRobot(links, tool=tool)


@pytest.mark.parametrize("name", ["sorter4", "glazer6"])
def test_arm_file_of_dh_rows_agrees_with_roboticstoolbox(name, cast, spread):
    arm = cast(name).equipped()
    ets = toolbox_robot(name).ets()
    q = spread(arm, 300)
    np.testing.assert_allclose(arm.forward(q), ets.eval(q), rtol=0, atol=1e-12)
    for row, jac in zip(q[:100], arm.jacobian(q[:100]), strict=True):
        np.testing.assert_allclose(jac, ets.jacob0(row), rtol=0, atol=1e-12)


def test_arm_file_of_axes_agrees_with_roboticstoolbox(cast, spread):
    """loader4: its file states axes; here the same gantry as elementary transforms, typed in from the
    file.
    """
    from roboticstoolbox import ET

    ets = ET.tx(jindex=0) * ET.ty(jindex=1) * ET.tz(jindex=2) * ET.tx(0.12) * ET.Rz(jindex=3)
    ets = ets * ET.tz(1.25) * ET.Rx(np.pi)
    arm = cast("loader4").equipped()
    q = spread(arm, 100)
    np.testing.assert_allclose(arm.forward(q), ets.eval(q), rtol=0, atol=1e-12)
    for row, jac in zip(q, arm.jacobian(q), strict=True):
        np.testing.assert_allclose(jac, ets.jacob0(row), rtol=0, atol=1e-12)


def test_any_leading_shape_and_the_borders_of_the_internal_chunks(cast, spread):
    arm = cast("glazer6")
    q = spread(arm, 2050)
    poses, jacobians = arm.forward(q), arm.jacobian(q)
    for k in (0, 1023, 1024, 2047, 2048, 2049):
        np.testing.assert_allclose(arm.forward(q[k]), poses[k], rtol=0, atol=1e-15)
        np.testing.assert_allclose(arm.jacobian(q[k]), jacobians[k], rtol=0, atol=1e-15)
    assert arm.forward(q[:6].reshape(2, 3, 6)).shape == (2, 3, 4, 4)
    assert arm.jacobian(q[:6].reshape(2, 3, 6)).shape == (2, 3, 6, 6)
    assert arm.forward(q[:0]).shape == (0, 4, 4)


def test_a_wrong_number_of_joint_values_is_refused(cast):
    with pytest.raises(errors.InputError, match=re.escape("expected 6 joint values in the last dimension, got 4")):
        cast("glazer6").forward(np.zeros((3, 4)))


# ---- joint derivatives
# -------------------------------------------------------------------------------------------


def rotation(axis: np.ndarray, angle: float) -> np.ndarray:
    from scipy.spatial.transform import Rotation

    return Rotation.from_rotvec(np.asarray(axis) * angle).as_matrix()


def line_and_arc(pose, turning):
    """Two tool paths s -> pose through `pose`, at constant rates, with their spatial twists (3, 6) at s = 0.

    `turning` (3,): turning rate of the tool. Twist: w constant, v_o = p' - w x p, differentiated by hand.
    """
    direction = np.array([0.3, -0.2, 0.15])
    start = pose[:3, 3]

    def line(s):
        moved = np.eye(4)
        moved[:3, :3] = rotation(turning, s) @ pose[:3, :3]
        moved[:3, 3] = start + direction * s
        return moved

    zero = np.zeros(3)
    line_twists = np.stack(
        [
            np.r_[direction - np.cross(turning, start), turning],
            np.r_[-np.cross(turning, direction), zero],
            np.r_[zero, zero],
        ]
    )
    normal, radius = np.array([0.0, 0.0, 1.0]), np.array([0.12, 0.05, 0.0])
    centre = start - radius

    def arc(s):
        moved = np.eye(4)
        moved[:3, :3] = rotation(turning, s) @ pose[:3, :3]
        moved[:3, 3] = centre + rotation(normal, s) @ radius
        return moved

    p1 = np.cross(normal, radius)
    p2, p3 = np.cross(normal, p1), np.cross(normal, np.cross(normal, p1))
    arc_twists = np.stack(
        [
            np.r_[p1 - np.cross(turning, start), turning],
            np.r_[p2 - np.cross(turning, p1), zero],
            np.r_[p3 - np.cross(turning, p2), zero],
        ]
    )
    return (line, line_twists), (arc, arc_twists)


# Central differences of order 8 for the first three derivatives (Fornberg 1988, table 1), over -4..4.
WEIGHTS = {
    1: np.array([1 / 280, -4 / 105, 1 / 5, -4 / 5, 0, 4 / 5, -1 / 5, 4 / 105, -1 / 280]),
    2: np.array([-1 / 560, 8 / 315, -1 / 5, 8 / 5, -205 / 72, 8 / 5, -1 / 5, 8 / 315, -1 / 560]),
    3: np.array([-7 / 240, 3 / 10, -169 / 120, 61 / 30, 0, -61 / 30, 169 / 120, -3 / 10, 7 / 240]),
}


@pytest.mark.parametrize(
    "name", ["glazer6", "crooked wrist", "puma", "sorter4", "crane scara", "loader4", "heavy gantry"]
)
@pytest.mark.parametrize("shape", [0, 1], ids=["line", "arc"])
def test_joint_derivatives_against_differences_of_the_inverse(name, shape, cast, spread):
    arm = cast(name)
    axis = arm.axes[-1] if arm.n == 6 else None
    checked = 0
    for q in spread(arm, 20, seed=5) * 0.5:
        if smallest_singular_value(arm, q[None])[0] < 0.1:
            continue
        pose = arm.forward(q)
        if axis is None:  # four axes: the tool turns about the arm's own turning axis
            jac = arm.jacobian(q)
            turning = 0.4 * next(column for column in jac[3:].T if np.any(column))
        else:
            turning = np.array([0.2, -0.3, 0.25])
        path, twists = line_and_arc(pose, turning)[shape]
        step = 0.002
        branches = arm.inverse_batch(np.array([path(k * step) for k in range(-4, 5)]))
        middle = np.abs((branches.q[4] - q + np.pi) % (2 * np.pi) - np.pi).max(axis=1)
        branch = int(np.argmin(middle))
        assert middle[branch] < 1e-9
        assert branches.valid[:, branch].all()
        revolute = np.array([j.kind == "revolute" for j in arm.joints])
        samples = np.where(revolute, np.unwrap(branches.q[:, branch], axis=0), branches.q[:, branch])
        found, residual = joint_derivatives(arm, q[None], twists[None])
        assert residual.max() < 1e-11
        for order, tolerance in ((1, 1e-9), (2, 1e-7), (3, 1e-5)):
            expected = WEIGHTS[order] @ samples / step**order
            scale = 1.0 + np.abs(expected).max()
            np.testing.assert_allclose(found[0, order - 1], expected, rtol=0, atol=tolerance * scale)
        checked += 1
    assert checked >= 4


def test_what_a_four_axis_arm_cannot_follow_is_the_residual(cast):
    """A tilt rate about x of 0.7 per unit is left over whole, scaled by the characteristic length."""
    arm = cast("sorter4")
    q = np.deg2rad([20.0, 60.0, 0.0, 30.0])
    q[2] = -0.05
    point = arm.forward(q)[:3, 3]
    tilt = np.array([0.7, 0.0, 0.0])
    asked = np.zeros((1, 3, 6))
    asked[0, 0] = np.r_[-np.cross(tilt, point), tilt]  # the tool centre point stays where it is
    found, residual = joint_derivatives(arm, q[None], asked)
    np.testing.assert_allclose(found[0, 0], 0.0, atol=1e-14)
    np.testing.assert_allclose(residual[0, 0], 0.7 * arm.length, rtol=1e-12)


def test_a_seven_axis_arm_moves_with_the_least_joint_norm(cast, spread):
    """Against numpy's least-squares solution of least norm of the Jacobian at the tool."""
    arm = cast("seven")
    q = spread(arm, 60)
    q = q[smallest_singular_value(arm, q) > 0.1]
    assert len(q) >= 10
    twists = np.random.default_rng(3).normal(size=(len(q), 3, 6))
    found, residual = joint_derivatives(arm, q, twists)
    assert residual.max() < 1e-9
    for row, twist, first in zip(q, twists[:, 0], found[:, 0], strict=True):
        at_tool = np.r_[twist[:3] + np.cross(twist[3:], arm.forward(row)[:3, 3]), twist[3:]]
        np.testing.assert_allclose(first, np.linalg.lstsq(arm.jacobian(row), at_tool)[0], atol=1e-9)


def test_at_a_singularity_the_answer_is_finite_and_the_residual_tells(cast):
    arm = cast("glazer6")
    q = np.zeros((2, 6))  # wrist straight: axes 4 and 6 in line
    q[1] = arm.positions["home"]
    sideways = arm.base_from_joint("pitch", q[0])[:3, 0]  # the tool can't turn about the line square to both
    asked = np.zeros((2, 3, 6))
    asked[:, 0] = np.r_[-np.cross(sideways, arm.forward(q[0])[:3, 3]), sideways]
    found, residual = joint_derivatives(arm, q, asked)
    assert np.isfinite(found).all()
    assert residual[0, 0] > 0.1 * arm.length
    assert residual[1, 0] < 1e-12


def test_twists_of_a_wrong_shape_are_refused(cast):
    with pytest.raises(errors.InputError, match=re.escape("expected twists of shape (2, 3, 6), got (2, 6)")):
        joint_derivatives(cast("glazer6"), np.zeros((2, 6)), np.zeros((2, 6)))


# ---- singular values
# ---------------------------------------------------------------------------------------------


def test_puma_singularities(cast):
    """Wrist, elbow and shoulder conditions computed for the toolbox's DH model of the Puma 560 (a3
    .0203, d4 .4318).
    """
    arm = cast("puma")
    elbow = np.arctan2(0.0203, 0.4318) + np.pi / 2  # cos(q3 - atan2(a3, d4)) = 0
    assert elbow == pytest.approx(1.6178, abs=1e-4)
    q3 = -1.0
    # shoulder: a2 cos q2 + a3 cos(q2 + q3) - d4 sin(q2 + q3) = 0, solved for tan q2
    numerator = 0.4318 + 0.0203 * np.cos(q3) - 0.4318 * np.sin(q3)
    q2 = np.arctan2(numerator, 0.0203 * np.sin(q3) + 0.4318 * np.cos(q3))
    singular = np.array(
        [
            [0.3, 0.4, -1.0, 0.2, 0.0, 0.7],
            [0.3, 0.4, elbow, 0.2, 0.8, 0.7],
            [0.3, 0.4, elbow - np.pi, 0.2, 0.8, 0.7],
            [0.3, q2, q3, 0.2, 0.8, 0.7],
        ]
    )
    assert smallest_singular_value(arm, singular).max() < 2e-15
    assert smallest_singular_value(arm, np.array([[0.3, 0.4, -1.0, 0.2, 0.8, 0.7]]))[0] > 0.05


def test_singular_value_has_no_unit(cast, spread):
    """A glazer twice as large in every length has the same distance from singularity."""
    from dataclasses import replace

    arm = cast("glazer6")
    fixed, flange = np.array(arm.parent_from_joint), np.array(arm.tip_from_flange)
    tool = np.array(arm.tool.flange_from_tool)
    for array in (fixed, flange, tool):
        array[..., :3, 3] *= 2.0
    large = replace(arm, parent_from_joint=fixed, tip_from_flange=flange, tool=replace(arm.tool, flange_from_tool=tool))
    q = spread(arm, 50)
    assert large.length == pytest.approx(2 * arm.length)
    np.testing.assert_allclose(smallest_singular_value(large, q), smallest_singular_value(arm, q), atol=1e-13)


def test_a_gantry_is_equally_far_from_singularity_everywhere(cast, spread):
    values = smallest_singular_value(cast("loader4"), spread(cast("loader4"), 20))
    np.testing.assert_allclose(values, values[0], atol=1e-14)
    assert values[0] > 0.5
