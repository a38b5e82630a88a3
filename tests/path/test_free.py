"""Held joints, workpieces that turn, free axes and a free roll. Referees: pinocchio and plain matrices for poses,
finite differences for derivatives, the closed form for two slides that share a way.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from pathplan.arm import Arm, Joint, load_arm
from pathplan.arm.kinematics import joint_derivatives, smallest_singular_value
from pathplan.errors import InputError, UnreachableError
from pathplan.path import follow_task
from pathplan.path.cartesian import cartesian_path
from pathplan.path.follower import follower_of
from pathplan.path.geometry import Jets, line, pointing, spatial_twists
from pathplan.path.joint import JointPath
from pathplan.path.rungs import rungs_of
from pathplan.path.settling import settled
from pathplan.planning import motion_of
from pathplan.task import load_task
from pathplan.task.model import Frame, Target
from pathplan.timing.solve import time_motions
from tests.arm.conftest import pinocchio_model, seven
from tests.path.conftest import ROBOTS, length, pose, robot, step, task

EXAMPLES = ROBOTS.parent / "examples"
DOWN = np.diag([1.0, -1.0, -1.0])


def stacker(name: str = "stacker6-pallet") -> Arm:
    return load_arm(ROBOTS / f"{name}.toml").equipped(tool="grab")


def on_pallet(motion: str, x: float, y: float, z: float, **rest):
    """A step to a pose on the pallet, mm in its turning frame, the tool down."""
    asked = step(motion, **rest)
    return replace(asked, target=Target(frame="pallet", frame_from_tool=pose(x, y, z)))


def on_the_pallet(steps, **rest):
    arm = stacker()
    frame = Frame("pallet", "base", np.eye(4), joint="pallet")
    return task(arm, arm.positions["home"], steps, frames={"pallet": frame}, **rest)


def sampled(path, number: int, count: int = 400):
    """Joint positions (count, n) all along a step."""
    for stretch in path.stretches:
        for part in stretch.steps:
            if part.step == number:
                return stretch.path(np.linspace(part.s_from, part.s_to, count))
    raise AssertionError(f"step {number} does not move")


def tool_by_pinocchio(arm: Arm, q: np.ndarray) -> np.ndarray:
    """(N, 4, 4) of the joints that carry the tool, which must be the first ones."""
    import pinocchio as pin

    count = len(arm.tool_joints)
    assert arm.tool_joints == tuple(range(count))
    chain = Arm(
        "chain",
        arm.joints[:count],
        arm.parent_from_joint[:count],
        arm.axes[:count],
        arm.tip_from_flange,
        tool=arm.tool,
    )
    model, data, frame = pinocchio_model(chain)
    poses = []
    for row in q[:, :count]:
        pin.framesForwardKinematics(model, data, row)
        poses.append(data.oMf[frame].homogeneous.copy())
    return np.array(poses)


def seen_from_the_pallet(arm: Arm, q: np.ndarray) -> np.ndarray:
    """(N, 4, 4) tool in the moving frame of the pallet: it turns about the vertical through (950, 0, 140) mm."""
    base_from_pallet = np.tile(np.eye(4), (len(q), 1, 1))
    base_from_pallet[:, :3, :3] = Rotation.from_euler("z", q[:, 6:7]).as_matrix()
    base_from_pallet[:, :3, 3] = [0.95, 0.0, 0.14]
    return np.linalg.inv(base_from_pallet) @ tool_by_pinocchio(arm, q)


def off_line(poses: np.ndarray, start: np.ndarray, end: np.ndarray) -> tuple[float, float]:
    """Largest distance (m) from the straight line and largest angle (rad) from an orientation that stays."""
    way = end[:3, 3] - start[:3, 3]
    along = way / np.linalg.norm(way)
    off = poses[:, :3, 3] - start[:3, 3]
    distance = np.linalg.norm(off - (off @ along)[:, None] * along, axis=1).max()
    turned = Rotation.from_matrix(poses[:, :3, :3] @ start[:3, :3].T).magnitude().max()
    return float(distance), float(turned)


@pytest.mark.parametrize("name", ["stacker7", "seven"])
def test_derivatives_with_held_joints_are_those_of_finite_differences(name: str) -> None:
    arm = seven() if name == "seven" else stacker(name)
    held = follower_of(arm, ()).held
    assert len(held) == 1
    random = np.random.default_rng(5)
    q = np.array([0.2, 0.4, -0.9, 0.7, 0.5, 0.8, 0.3]) + 0.0
    rates = random.uniform(-1, 1, (3, 7))
    h = 2e-3
    t = h * np.arange(-4, 5)
    way = q + t[:, None] * rates[0] + t[:, None] ** 2 / 2 * rates[1] + t[:, None] ** 3 / 6 * rates[2]
    poses = arm.forward(way)
    turned = Rotation.from_matrix(poses[:, :3, :3] @ poses[4, :3, :3].T).as_rotvec()
    fit = [np.polynomial.polynomial.polyfit(t, values, 7) for values in (poses[:, :3, 3], turned)]
    p = fit[0][:4] * np.array([1, 1, 2, 6])[:, None]
    a1, a2, a3 = fit[1][1:4] * np.array([1, 2, 6])[:, None]
    # Turning rate at zero rotation vector a: w = a', w' = a'', w'' = a''' + a' x a'' / 2 (series of the exponential).
    turning = np.array([a1, a2, a3 + np.cross(a1, a2) / 2])
    jets = Jets(p[:, None], poses[4:5, :3, :3], turning[:, None])
    found, residual = joint_derivatives(arm, q[None], spatial_twists(jets), held, rates[None][:, :, list(held)])
    np.testing.assert_allclose(found[0], rates, atol=2e-5)
    assert residual.max() < 1e-4
    kept = np.delete(arm.jacobian(q), held, axis=1)
    kept[:3] /= arm.length
    assert smallest_singular_value(arm, q[None], held)[0] == pytest.approx(np.linalg.svd(kept, compute_uv=False)[-1])


def test_a_line_on_a_turning_pallet_is_a_line_there() -> None:
    """Where the pallet stands is given at both ends: it turns evenly, the tool draws its line on it."""
    steps = [
        on_pallet("joint", -250, 0, 200, axes={"pallet": 0.0}),
        on_pallet("line", -250, 200, 200, axes={"pallet": 0.7}, blend=length(20)),
        on_pallet("line", -100, 200, 200, axes={"pallet": 1.0}),
    ]
    path = follow_task(on_the_pallet(steps))
    arm = path.task.arm
    np.testing.assert_allclose(path.targets[1:, 6], [0.0, 0.7, 1.0], atol=1e-12)
    corner = path.corners[-1]
    assert corner.kind == "fly-by"
    for number, (one, two) in ((1, (0, 1)), (2, (1, 2))):
        q = sampled(path, number)
        poses = seen_from_the_pallet(arm, q)
        before, after = (steps[i].target.frame_from_tool for i in (one, two))
        outside = np.linalg.norm(poses[:, :3, 3] - steps[1].target.frame_from_tool[:3, 3], axis=1) > 0.0201
        distance, turned = off_line(poses[outside], before, after)
        assert distance < 1e-6 and turned < 1e-6
        assert np.ptp(q[:, 6]) > 0.2
    inside = seen_from_the_pallet(arm, path.stretches[corner.stretch].path(np.linspace(corner.s_from, corner.s_to, 99)))
    assert np.linalg.norm(inside[:, :3, 3] - steps[1].target.frame_from_tool[:3, 3], axis=1).max() < 0.02 + 1e-6


def test_a_tolerance_that_is_of_no_use_there_is_told() -> None:
    steps = [
        on_pallet("joint", -250, 0, 200, axes={"pallet": 0.0}),
        on_pallet("line", -250, 200, 200, axes={"pallet": 0.7}, orientation_tolerance=0.02),
    ]
    told = [str(finding) for finding in follow_task(on_the_pallet(steps)).findings]
    assert any(text.startswith("step 2: the tolerance is not made use of") for text in told)


def test_the_tool_can_stand_on_the_pallet_while_it_turns() -> None:
    steps = [
        on_pallet("joint", -200, 0, 200, axes={"pallet": 0.0}),
        on_pallet("line", -200, 0, 200, axes={"pallet": 0.6}),
    ]
    path = follow_task(on_the_pallet(steps))
    q = sampled(path, 1)
    poses = seen_from_the_pallet(path.task.arm, q)
    target = steps[0].target.frame_from_tool
    assert np.linalg.norm(poses[:, :3, 3] - target[:3, 3], axis=1).max() < 1e-6
    assert q[-1, 6] == pytest.approx(0.6, abs=1e-12)


def test_a_free_pallet_turns_for_a_shorter_time() -> None:
    """An arc about the middle of the pallet, which may turn to meet the arm."""
    around = [
        on_pallet("joint", -250, 0, 200),
        replace(step("arc", centre=[0, 0, 200], axis=np.array([0, 0, 1.0]), angle=2.0), point_frame="pallet"),
    ]
    still = [replace(around[0], axes={"pallet": 0.0}), replace(around[1], axes={"pallet": 0.0})]
    free, rigid = (follow_task(on_the_pallet(steps)) for steps in (around, still))
    limits = free.task.arm.limits.velocity[:7, 1]

    def time(path) -> float:
        return sum(float((np.abs(np.diff(sampled(path, k), axis=0)) / limits).max(axis=1).sum()) for k in (0, 1))

    assert time(free) < 0.98 * time(rigid)
    poses = seen_from_the_pallet(free.task.arm, sampled(free, 1))
    radius = np.linalg.norm(poses[:, :2, 3], axis=1)
    assert np.abs(radius - 0.25).max() < 1e-6 and np.abs(poses[:, 2, 3] - 0.2).max() < 1e-6


def test_the_pallet_rests_while_the_tool_is_not_on_it() -> None:
    steps = [
        on_pallet("joint", -250, 0, 200, axes={"pallet": 0.4}),
        step("joint", pose(700, -300, 500)),
        step("line", pose(700, -200, 500)),
    ]
    path = follow_task(on_the_pallet(steps))
    np.testing.assert_allclose(path.targets[1:, 6], 0.4, atol=1e-12)
    assert np.ptp(sampled(path, 2)[:, 6]) < 1e-12


def two_slides(fast: float, slow: float) -> Arm:
    """A track that carries a gantry along the same direction, and a wrist of three turns that meet."""
    kinds = ["prismatic"] * 4 + ["revolute"] * 3
    speeds = [fast, slow, 1.0, 1.0, 3.0, 3.0, 3.0]
    joints = [
        Joint(f"j{i + 1}", kind, (-2.0, 2.0), v, 20 * v, 400 * v)
        for i, (kind, v) in enumerate(zip(kinds, speeds, strict=True))
    ]
    axes = [[1, 0, 0], [1, 0, 0], [0, 1, 0], [0, 0, 1], [0, 0, 1], [0, 1, 0], [1, 0, 0]]
    return Arm.from_axes("two slides", joints, np.zeros((7, 3)), axes, np.eye(4))


def test_two_slides_share_a_way_by_their_speeds() -> None:
    """Closed form: a line that two parallel slides make together takes least time when each takes the part that its
    speed has in the sum, and then length / (v1 + v2).
    """
    arm = two_slides(1.0, 0.5)
    start, end = np.eye(4), np.eye(4)
    start[0, 3], end[0, 3] = -0.9, 0.9
    path = follow_task(task(arm, arm.positions["home"], [step("joint", start), step("line", end)]))
    q = sampled(path, 1)
    moved = np.diff(q[:, :2], axis=0)
    assert (q[-1, 0] - q[0, 0]) / 1.8 == pytest.approx(1.0 / 1.5, abs=0.02)
    assert (np.abs(moved) / [1.0, 0.5]).max(axis=1).sum() < 1.8 / 1.5 * 1.02
    np.testing.assert_allclose(tool_by_pinocchio(arm, q)[:, 1:3, 3], 0.0, atol=1e-6)


def test_a_long_line_beside_a_track() -> None:
    """Longer than the arm reaches from anywhere: the track goes along, on the line to a micrometre."""
    arm = stacker("stacker7")
    ends = pose(-900, -550, 400), pose(900, -650, 400)
    path = follow_task(task(arm, arm.positions["home"], [step("joint", ends[0]), step("line", ends[1])]))
    distance, turned = off_line(tool_by_pinocchio(arm, sampled(path, 1)), *ends)
    assert distance < 1e-6 and turned < 1e-6


def test_an_axis_can_be_given_where_it_is_free() -> None:
    arm = stacker("stacker7")
    ends = pose(-200, -550, 400), pose(300, -650, 400)
    steps = [step("joint", ends[0], axes={"track": -0.1}), step("line", ends[1], axes={"track": 0.25})]
    path = follow_task(task(arm, arm.positions["home"], steps))
    q = sampled(path, 1)
    np.testing.assert_allclose(q[:, 0], np.linspace(-0.1, 0.25, len(q)), atol=1e-7)
    assert off_line(tool_by_pinocchio(arm, q), *ends)[0] < 1e-6


def test_seven_axes_follow_a_line() -> None:
    arm = seven()
    q = np.array([0.2, 0.6, 0.1, -1.2, 0.4, 0.8, 0.3])
    start = arm.forward(q)
    end = start.copy()
    end[:3, 3] += [-0.05, 0.2, 0.1]
    path = follow_task(task(arm, q, [step("line", end)]))
    distance, turned = off_line(tool_by_pinocchio(arm, sampled(path, 0)), start, end)
    assert distance < 1e-6 and turned < 1e-6
    np.testing.assert_allclose(path.targets[0], q)


def rolled_free(asked):
    return [replace(one, roll_free=True) for one in asked]


def test_a_pose_that_few_angles_of_a_turntable_reach_is_found() -> None:
    """About -130 deg of the turntable; the grid of two free coordinates has a value every 36 deg."""
    arm = load_arm(ROBOTS / "stacker6-pallet.toml")
    far = np.eye(4)
    far[:3, :3] = Rotation.from_quat([0.700504, -0.042119, 0.590464, -0.398589]).as_matrix()
    far[:3, 3] = [1.145003, -0.499411, 1.353485]
    asked = replace(step("joint"), target=Target(frame="pallet", frame_from_tool=far))
    free = replace(step("joint", pose(700.0, 300.0, 700.0)), roll_free=True)
    frame = Frame("pallet", "base", np.eye(4), joint="pallet")
    path = follow_task(task(arm, arm.positions["home"], [asked, free], frames={"pallet": frame}))
    first = path.stretches[0].path
    there = first(first.length)
    assert np.allclose(seen_from_the_pallet(arm, there)[0], far, atol=1e-6)
    assert abs(np.degrees(there[0, 6]) + 130.0) < 18.0


@pytest.mark.parametrize("bends", [1, 4])
def test_a_free_roll_may_turn_back_and_forth_along_a_line(bends: int) -> None:
    """A course of one piece and of several, on an arm that has nothing else free."""
    arm = robot("glazer6", "nozzle")
    ends = [pose(450.0, -300.0, 500.0), pose(450.0, 300.0, 500.0, roll=150.0)]
    free = rolled_free([step("joint", ends[0]), step("line", ends[1])])
    asked = cartesian_path(task(arm, arm.positions["home"], free))
    rungs = rungs_of(asked)
    way = np.zeros((len(rungs), 1))
    mine = rungs.leg == 1
    way[mine, 0] = 0.8 * np.sin(np.pi * bends * rungs.s[mine] / rungs.s[mine][-1])
    rolling = settled(asked, way).segments.rolls[0]
    assert rolling is not None
    assert np.allclose(rolling(rungs.s[mine])[:, 0] - rolling(rungs.s[mine][-1:])[0, 0], way[mine, 0], atol=0.1)
    assert (len(rolling.breaks) > 2) == (bends > 1)


def test_of_two_ways_of_an_axis_the_one_that_takes_less_time_is_taken(monkeypatch) -> None:
    """The way that is shorter by velocities asks a track for more acceleration here: it is not the shorter one."""
    from pathplan.path import follow

    asked = load_task(EXAMPLES / "stacker7-along-the-belt.toml")
    best_ways, seen = follow.best_ways, []
    for order in (slice(None), slice(None, None, -1), slice(0, 1), slice(1, 2)):
        monkeypatch.setattr(follow, "best_ways", lambda path, rungs, order=order: best_ways(path, rungs)[order])
        motions = [replace(motion_of(stretch), torque=None) for stretch in follow_task(asked).stretches]
        seen.append(sum(timing.duration for timing in time_motions(motions)))
    assert seen[0] == pytest.approx(min(seen[2:]), rel=1e-6) and seen[1] == pytest.approx(seen[0], rel=1e-6)
    assert max(seen[2:]) > 1.02 * min(seen[2:])


def test_with_a_free_roll_only_position_and_axis_are_asked(cast) -> None:
    """The axis takes the shortest way between the two asked, and the joints never turn further than with a roll."""
    arm = cast.robot("glazer6", "nozzle")
    ends = pose(520, -250, 350, 180, 20, 30), pose(560, 250, 420, 165, -10, 200)
    path = follow_task(task(arm, arm.positions["home"], rolled_free([step("joint", ends[0]), step("line", ends[1])])))
    poses = tool_by_pinocchio(arm, sampled(path, 1))
    way = ends[1][:3, 3] - ends[0][:3, 3]
    share = (poses[:, :3, 3] - ends[0][:3, 3]) @ way / (way @ way)
    assert np.linalg.norm(poses[:, :3, 3] - ends[0][:3, 3] - share[:, None] * way, axis=1).max() < 1e-6
    one, two = ends[0][:3, 2], ends[1][:3, 2]
    angle = np.arccos(one @ two)
    axis = (np.sin((1 - share) * angle)[:, None] * one + np.sin(share * angle)[:, None] * two) / np.sin(angle)
    assert np.linalg.norm(poses[:, :3, 2] - axis, axis=1).max() < 1e-6
    assert any("turn of the tool about its own axis is free" in finding.text for finding in path.findings)


def test_a_target_near_a_singularity_is_met_where_a_roll_is_free_elsewhere() -> None:
    """The wrist's centre comes to within millimetres of the first axis: every branch is nearly singular there."""
    arm = robot("glazer6", "nozzle")
    near = np.eye(4)
    near[:3, :3] = Rotation.from_quat([0.671523, -0.630846, 0.309951, -0.234565]).as_matrix()
    near[:3, 3] = [0.187346, 0.022029, 0.327410]
    assert 1e-5 < smallest_singular_value(arm, arm.inverse(near)).max() < 1e-3
    first = replace(step("joint", pose(450.0, -300.0, 500.0)), roll_free=True)
    path = follow_task(task(arm, arm.positions["home"], [first, step("joint", near)]))
    last = path.stretches[-1].path
    assert np.allclose(arm.forward(last(last.length))[0], near, atol=1e-9)


def test_free_roll_saves_the_turn_of_the_flange(cast) -> None:
    """Half a turn between two places close to each other: with the roll asked the flange turns it, else it need not."""
    arm = cast.robot("glazer6", "cup")
    asked = [step("joint", pose(600, -60, 300, 180, 0, 0)), step("joint", pose(600, 60, 300, 180, 0, 170))]
    fixed, free = (follow_task(task(arm, arm.positions["home"], steps)) for steps in (asked, rolled_free(asked)))
    assert abs(np.diff(fixed.targets[1:, 5])[0]) > 2.5
    assert abs(np.diff(free.targets[1:, 5])[0]) < 1.0
    reached = tool_by_pinocchio(arm, free.targets[1:])
    for found, one in zip(reached, asked, strict=True):
        np.testing.assert_allclose(found[:3, 2:], one.target.frame_from_tool[:3, 2:], atol=1e-8)


def test_a_line_without_free_roll_asks_for_the_roll_it_starts_with(cast) -> None:
    arm = cast.robot("glazer6", "cup")
    start, end = pose(600, -60, 300, 180, 0, 100), pose(600, 60, 300, 180, 0, 100)
    steps = [replace(step("joint", start), roll_free=True), step("line", end)]
    path = follow_task(task(arm, arm.positions["home"], steps))
    distance, turned = off_line(tool_by_pinocchio(arm, sampled(path, 1)), start, end)
    assert distance < 1e-6 and turned < 1e-6


def test_pointing_turns_the_axis_the_shortest_way() -> None:
    start, end = pose(0, 0, 0, 10, 20, 30), pose(0, 0, 0, 50, -20, 130)
    turned, twist = pointing(start, end)
    way = line(start, turned, 1.0)
    assert way.angle[0] == pytest.approx(np.arccos(start[:3, 2] @ end[:3, 2]))
    np.testing.assert_allclose(turned[:3, :3] @ Rotation.from_euler("z", twist).as_matrix(), end[:3, :3], atol=1e-12)


def test_a_roll_law_is_what_its_derivatives_say() -> None:
    """The turning rate of a rolling tool against finite differences of its rotation."""
    law = JointPath.through([[0.0], [0.4], [1.5], [1.2]])
    segments = line(pose(0, 0, 0, 10, 20, 30), pose(300, 0, 100, 50, -20, 60), 1.0)
    rolling = replace(
        segments,
        rolls=(
            JointPath.from_pieces(
                law.breaks / law.length * segments.length[0],
                law.coefficients
                * (law.length / segments.length[0]) ** np.arange(len(law.coefficients) - 1, -1, -1)[:, None, None],
            ),
        ),
    )
    k, s, h = np.zeros(1, dtype=int), np.array([0.37 * segments.length[0]]), 1e-5

    def rate(at: float) -> np.ndarray:
        before, after = (rolling.poses(k, np.array([at + d]))[0, :3, :3] for d in (-h, h))
        return Rotation.from_matrix(after @ before.T).as_rotvec() / (2 * h)

    jets = rolling.jets(k, s)
    np.testing.assert_allclose(jets.turning[0, 0], rate(s[0]), atol=1e-7)
    step_ = 1e-3
    np.testing.assert_allclose(jets.turning[1, 0], (rate(s[0] + step_) - rate(s[0] - step_)) / (2 * step_), atol=1e-4)
    second = (rate(s[0] + step_) - 2 * rate(s[0]) + rate(s[0] - step_)) / step_**2
    np.testing.assert_allclose(jets.turning[2, 0], second, atol=2e-2)


def test_a_line_into_a_frame_that_may_stand_anywhere_is_refused() -> None:
    steps = [step("joint", pose(700, -300, 500)), on_pallet("line", -250, 0, 300), step("line", pose(700, -300, 500))]
    match = r"^t\.toml: step\[3\]: starts in another frame than it ends in, and where joint pallet then stands is left "
    with pytest.raises(InputError, match=match + r"free: expected axes = \{ pallet = \.\.\. \} in the step before it"):
        follow_task(on_the_pallet(steps))


def test_a_blend_between_frames_is_refused() -> None:
    steps = [
        on_pallet("joint", -250, 0, 200, axes={"pallet": 0.0}),
        on_pallet("line", -250, 100, 200, axes={"pallet": 0.0}, blend=length(10)),
        step("line", pose(700, 200, 450)),
    ]
    with pytest.raises(
        InputError, match=r"^t\.toml: step\[2\]: blend 10 mm: this step and the next are programmed in "
    ):
        follow_task(on_the_pallet(steps))


def test_a_line_that_nothing_free_can_follow_is_refused() -> None:
    arm = stacker("stacker7")
    steps = [step("joint", pose(0, -550, 400)), step("line", pose(0, -3000, 400))]
    with pytest.raises(UnreachableError, match=r"^t\.toml: step\[2\]: "):
        follow_task(task(arm, arm.positions["home"], steps))


def five_axes() -> Arm:
    """A turning base, three parallel axes, a turn at the wrist, and a nozzle that points down aslant."""
    limits = (-2.9, 2.9)
    joints = [Joint(f"j{i + 1}", "revolute", limits, 3.0, 12.0, 120.0) for i in range(5)]
    points = [[0, 0, 0], [0.1, 0, 0.45], [0.1, 0, 0.95], [0.6, 0, 0.95], [0.7, 0, 0.95]]
    axes = [[0, 0, 1], [0, 1, 0], [0, 1, 0], [0, 1, 0], [1, 0, 0]]
    nozzle = np.eye(4)
    nozzle[:3, :3] = Rotation.from_euler("y", 60, degrees=True).as_matrix() @ DOWN
    nozzle[:3, 3] = [0.8, 0, 0.9]
    return Arm.from_axes("five", joints, points, axes, nozzle)


FIVE = np.array([0.2, 0.5, 0.4, 0.3, 0.2])


def test_five_axes_follow_lines_with_a_free_roll() -> None:
    arm = five_axes()
    start = arm.forward(FIVE)
    middle, end = start.copy(), start.copy()
    middle[:3, 3] += [0.05, 0.12, 0.0]
    middle[:3, :3] = Rotation.from_rotvec([0.1, 0.2, 0.4]).as_matrix() @ start[:3, :3]
    end[:3, 3] += [-0.05, 0.2, 0.06]
    asked = rolled_free([step("line", middle, blend=length(15)), step("line", end)])
    path = follow_task(task(arm, FIVE, [*asked, step("joint", FIVE)]))
    assert path.stretches[0].path.joints == 5
    corner = path.corners[0]
    assert corner.kind == "fly-by"
    q = path.stretches[0].path(np.linspace(0.0, corner.s_from, 300))
    poses = tool_by_pinocchio(arm, q)
    way = middle[:3, 3] - start[:3, 3]
    share = (poses[:, :3, 3] - start[:3, 3]) @ way / (way @ way)
    assert np.linalg.norm(poses[:, :3, 3] - start[:3, 3] - share[:, None] * way, axis=1).max() < 1e-6
    angle = np.arccos(start[:3, 2] @ middle[:3, 2])
    weights = np.sin([(1 - share) * angle, share * angle]) / np.sin(angle)
    assert np.linalg.norm(poses[:, :3, 2] - weights.T @ [start[:3, 2], middle[:3, 2]], axis=1).max() < 1e-6
    np.testing.assert_allclose(path.targets[-1], FIVE)


def test_five_axes_that_are_asked_for_a_roll_are_refused_with_what_would_do() -> None:
    arm = five_axes()
    turned = arm.forward(FIVE)
    turned[:3, :3] = turned[:3, :3] @ Rotation.from_euler("z", 0.5).as_matrix()
    with pytest.raises(UnreachableError, match=r'^t\.toml: step\[1\]: .*; roll = "free" in every step would do'):
        follow_task(task(arm, FIVE, [step("joint", turned)]))
    steps = [replace(step("line", turned), roll_free=True), step("line", arm.forward(FIVE))]
    with pytest.raises(
        InputError, match=r'^t\.toml: step\[2\]: roll: five has five axes, .*expected roll = "free" here'
    ):
        follow_task(task(arm, FIVE, steps))


def test_a_scara_may_roll_its_tool(cast) -> None:
    """Four axes with the tool upright: the last axis need not turn."""
    arm = cast.robot("sorter4", "cup")
    home = arm.forward(arm.positions["home"])
    ends = [home.copy(), home.copy()]
    ends[0][:2, 3] += [-0.05, 0.1]
    ends[1][:2, 3] += [-0.05, -0.1]
    ends[1][:3, :3] = Rotation.from_euler("z", 2.5).as_matrix() @ home[:3, :3]
    steps = rolled_free([step("joint", ends[0]), step("line", ends[1])])
    path = follow_task(task(arm, arm.positions["home"], steps))
    poses = tool_by_pinocchio(arm, sampled(path, 1))
    assert off_line(poses, *ends)[0] < 1e-6
    assert np.abs(poses[:, :3, 2] - ends[0][:3, 2]).max() < 1e-9
    turned = Rotation.from_matrix(poses[-1, :3, :3].T @ poses[0, :3, :3]).magnitude()
    assert turned < 1.5


def test_an_arc_by_its_centre_on_the_pallet_runs_about_it_there() -> None:
    """A full circle about the middle of the pallet, which turns against it: the radius stays in the turning frame."""
    steps = [
        on_pallet("joint", -150, 0, 200, axes={"pallet": 0.0}),
        replace(
            step("arc", centre=[0, 0, 200], axis=np.array([0, 0, 1.0]), angle=2 * np.pi, axes={"pallet": -1.0}),
            point_frame="pallet",
        ),
    ]
    path = follow_task(on_the_pallet(steps))
    q = sampled(path, 1)
    poses = seen_from_the_pallet(path.task.arm, q)
    assert np.abs(np.linalg.norm(poses[:, :2, 3], axis=1) - 0.15).max() < 1e-6
    assert np.unwrap(np.arctan2(poses[:, 1, 3], poses[:, 0, 3]))[-1] - np.pi == pytest.approx(2 * np.pi, abs=1e-5)
    assert q[-1, 6] == pytest.approx(-1.0, abs=1e-12)


def test_what_is_left_free_besides_makes_nothing_slower() -> None:
    """A track, then a track and the roll of the tool: two coordinates are chosen as well as one."""
    arm = stacker("stacker7")
    poses = pose(-600, -500, 300, yaw=40), pose(500, -620, 420, yaw=-30), pose(500, -620, 250, yaw=60)
    asked = [step(motion, target) for motion, target in zip(("joint", "line", "line"), poses, strict=True)]
    low, high = arm.limits.velocity.T

    def time(steps) -> float:
        path = follow_task(task(arm, arm.positions["home"], steps))
        moved = [np.diff(sampled(path, k), axis=0) @ arm.limits.matrix.T for k in range(3)]
        return sum(float(np.maximum(rows / high, rows / low).max(axis=1).sum()) for rows in moved)

    assert time(rolled_free(asked)) < 1.02 * time(asked)
