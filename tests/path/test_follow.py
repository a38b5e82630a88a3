"""Whole tasks: examples, stretches, corners of every kind, steps that are hardly steps."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from pathplan.errors import InputError
from pathplan.path import JointPath, Stretch, Wait, cartesian_path, follow_task
from pathplan.task import load_task
from pathplan.task.model import Frame, Step, Target

EXAMPLES = sorted((Path(__file__).parents[2] / "examples").glob("*.toml"))


@pytest.mark.parametrize("file", EXAMPLES, ids=lambda file: file.stem)
def test_examples(cast, file: Path) -> None:
    cast.check_path(follow_task(load_task(file)), dense=13)


def above(cast, **shift: float) -> np.ndarray:
    """A pose in the middle of glazer6's workspace."""
    place = {"x": 550.0, "y": -100.0, "z": 350.0} | shift
    return cast.pose(place["x"], place["y"], place["z"])


def test_derivatives_agree_with_finite_differences_of_the_inverse(cast) -> None:
    arm = cast.robot("glazer6")
    a, b = above(cast), cast.pose(700, 200, 500, 170, 20, 30)
    path = follow_task(cast.task(arm, arm.inverse(a)[0], [cast.step("line", b)]))
    stretch = path.stretches[0]
    assert len(stretch.path.breaks) <= 9
    weights = {
        1: [-1 / 60, 3 / 20, -3 / 4, 0, 3 / 4, -3 / 20, 1 / 60],
        2: [1 / 90, -3 / 20, 3 / 2, -49 / 18, 3 / 2, -3 / 20, 1 / 90],
        3: [1 / 8, -1, 13 / 8, 0, -13 / 8, 1, -1 / 8],
    }
    h = 0.004
    for s in np.linspace(0.1, 0.9, 5) * stretch.path.length:
        poses = stretch.programmed(s + h * np.arange(-3, 4))[0]
        near = stretch.path([s])[0]
        answers = [arm.inverse(pose) for pose in poses]
        q = np.array([rows[np.argmin(np.abs(rows - near).sum(axis=1))] for rows in answers])
        for order, tolerance in ((1, 1e-5), (2, 1e-4), (3, 1e-3)):
            expected = np.array(weights[order]) @ q / h**order
            size = 1 + np.abs(expected).max()
            np.testing.assert_allclose(stretch.path([s], order)[0], expected, atol=tolerance * size)


def test_stretches_waits_and_caps(cast) -> None:
    arm = cast.robot("glazer6")
    a, b, c = above(cast), above(cast, z=200.0), above(cast, y=150.0)
    steps = [
        cast.step("joint", a, blend=cast.length(30)),
        cast.step("line", b, speed=0.2),
        cast.step("wait", wait=0.5),
        cast.step("line", a, speed=0.4, acceleration=3.0, blend=cast.length(20)),
        cast.step("line", c),
        cast.step("joint", arm.positions["home"]),
    ]
    path = follow_task(cast.task(arm, arm.positions["home"], steps, speed=0.3))
    cast.check_path(path)
    assert [type(part) for part in path.sequence] == [Stretch, Wait, Stretch, Stretch]
    assert path.sequence[1] == Wait(2, 0.5)
    assert [[part.step for part in stretch.steps] for stretch in path.stretches] == [[0, 1], [3, 4], [5]]
    assert [(c.after_step, c.kind, c.reason) for c in path.corners] == [
        (0, "fly-by", ""),
        (1, "stop", "wait"),
        (3, "fly-by", ""),
        (4, "stop", "no blend asked"),
    ]
    corner, stretch = path.corners[2], path.stretches[1]
    assert stretch.caps == (
        (0.0, pytest.approx(corner.s_to), 0.3, 3.0, None, False),
        (pytest.approx(corner.s_to), pytest.approx(stretch.path.length), 0.3, None, None, False),
    )
    assert stretch.steps[0].s_to == pytest.approx((corner.s_from + corner.s_to) / 2)
    assert [cap.speed for cap in path.stretches[0].caps] == [0.3, 0.2]
    last = path.stretches[2].path
    np.testing.assert_allclose(last([last.length])[0], arm.positions["home"], atol=1e-15)
    np.testing.assert_allclose(path.starts[1], path.targets[2], atol=1e-12)


def test_tool_caps_count(cast) -> None:
    from dataclasses import replace

    arm = cast.robot("sorter4")
    arm = replace(arm, tool=replace(arm.tool, speed=0.1, acceleration=0.5))
    q = arm.positions["home"]
    target = arm.forward(q)
    target[0, 3] -= 0.05
    (cap,) = follow_task(cast.task(arm, q, [cast.step("line", target, speed=0.2)])).stretches[0].caps
    assert (cap.speed, cap.acceleration) == (0.1, 0.5)


def test_tool_derivatives_agree_with_finite_differences(cast) -> None:
    for name in ("glazer6", "sorter4", "loader4"):
        arm = cast.robot(name)
        r = np.random.default_rng(4)
        low, high = arm.limits.position[: arm.n].T
        points = low + (high - low) * r.uniform(0.3, 0.7, (4, arm.n))
        path = JointPath.through(points)
        stretch = Stretch(path, arm, (), (), None, None, None)  # type: ignore[arg-type]
        s, h = np.linspace(0.2, 0.8, 5) * path.length, 1e-4
        first, second = stretch.tool_derivatives(s)
        x = [arm.forward(path(s + k * h))[:, :3, 3] for k in (-1, 0, 1)]
        np.testing.assert_allclose(first, (x[2] - x[0]) / (2 * h), atol=1e-6)
        np.testing.assert_allclose(second, (x[2] - 2 * x[1] + x[0]) / h**2, atol=1e-5)


@pytest.mark.parametrize("blend", ["length", "angle", "share"])
@pytest.mark.parametrize(
    "kinds", ["line line", "line joint", "joint line", "joint joint", "arc line", "line arc", "turn line"]
)
def test_corners_of_every_pairing(cast, kinds: str, blend: str) -> None:
    arm = cast.robot("glazer6")
    size = {"length": cast.length(40), "angle": cast.angle(6), "share": cast.share(30)}[blend]
    a = above(cast)
    b = cast.pose(600, 60, 420, 170, 5, 15)
    c = cast.pose(650, 100, 300, 180, -10, 25)
    first, second = kinds.split()

    def motion(kind: str, start: np.ndarray, end: np.ndarray, **rest) -> Step:
        if kind == "arc":
            return cast.step("arc", end, via=(start[:3, 3] + end[:3, 3]) * 500 + [30, 0, 20], **rest)
        return cast.step("line" if kind == "turn" else kind, end, **rest)

    if first == "turn":
        b = a.copy()
        b[:3, :3] = Rotation.from_rotvec([0.3, 0.1, 0]).as_matrix() @ a[:3, :3]
    path = follow_task(cast.task(arm, arm.inverse(a)[0], [motion(first, a, b, blend=size), motion(second, b, c)]))
    cast.check_path(path)
    (corner,) = path.corners
    assert corner.kind == "fly-by"
    assert corner.used == pytest.approx(corner.asked_value, rel=0.02)
    if blend == "length" and first != "turn":  # the path is left, or joined, at just that distance
        ends = path.stretches[0].path([corner.s_from, corner.s_to])
        away = np.linalg.norm(arm.forward(ends)[:, :3, 3] - corner.pose[:3, 3], axis=1).max()
        chord = 1.0 if "arc" not in kinds else 0.95
        assert 0.04 * chord - 1e-6 <= away <= 0.04 + 1e-6


def test_joint_corner_keeps_every_joint_within_the_angle(cast) -> None:
    arm = cast.robot("glazer6")
    home = arm.positions["home"]
    q = [home + np.deg2rad(d) for d in ([30, 10, 0, 0, 0, 0], [30, 10, 20, 0, 30, 0])]
    path = follow_task(cast.task(arm, home, [cast.step("joint", q[0], blend=cast.angle(8)), cast.step("joint", q[1])]))
    (corner,) = path.corners
    s = np.linspace(corner.s_from, corner.s_to, 101)
    assert np.abs(path.stretches[0].path(s) - q[0]).max() == pytest.approx(np.deg2rad(8), rel=1e-9)
    assert len(path.stretches[0].path.coefficients) == 5  # exact quartic, not fitted


def test_pure_reorientation(cast) -> None:
    arm = cast.robot("glazer6")
    a = above(cast)
    b = a.copy()
    b[:3, :3] = Rotation.from_rotvec([0.4, -0.2, 0.5]).as_matrix() @ a[:3, :3]
    path = follow_task(cast.task(arm, arm.inverse(a)[0], [cast.step("line", b)]))
    cast.check_path(path)
    stretch = path.stretches[0]
    assert stretch.path.length == pytest.approx(np.linalg.norm([0.4, -0.2, 0.5]))
    reached = arm.forward(stretch.path(np.linspace(0, stretch.path.length, 50)))
    assert np.abs(reached[:, :3, 3] - a[:3, 3]).max() < 1e-6


def test_full_circle_comes_back(cast) -> None:
    arm = cast.robot("glazer6")
    a = above(cast)
    circle = cast.step("arc", None, centre=[550, -40, 350], axis=np.array([0, 0, 1.0]), angle=2 * np.pi)
    path = follow_task(cast.task(arm, arm.inverse(a)[0], [circle]))
    cast.check_path(path)
    np.testing.assert_allclose(path.targets[1], path.targets[0], atol=1e-9)
    far = arm.forward(path.stretches[0].path([path.stretches[0].path.length / 2]))[0, :3, 3]
    np.testing.assert_allclose(far, [0.55, 0.02, 0.35], atol=1e-6)


def test_step_to_where_the_arm_is(cast) -> None:
    arm = cast.robot("glazer6")
    a, b, c = above(cast), above(cast, z=300.0), above(cast, y=0.0)
    blend = cast.length(10)
    steps = [
        cast.step("line", a, mark="here"),
        cast.step("line", b, blend=blend),
        cast.step("line", b, blend=blend, mark="passing"),
        cast.step("line", c),
        cast.step("joint", c),
        cast.step("wait", wait=0.1),
    ]
    path = follow_task(cast.task(arm, arm.inverse(a)[0], steps))
    cast.check_path(path)
    assert [part if isinstance(part, Wait) else "moves" for part in path.sequence] == [
        Wait(0, 0.0),
        "moves",
        Wait(4, 0.0),
        Wait(5, 0.1),
    ]
    (corner,) = path.corners
    middle = (corner.s_from + corner.s_to) / 2
    assert path.stretches[0].steps[1] == (2, pytest.approx(middle), pytest.approx(middle))
    words = "the arm already is at this target, the step has no motion"
    assert [(f.step, f.text) for f in path.findings] == [(0, words), (2, words), (4, words)]


def test_step_without_motion_and_blend_stops_the_arm(cast) -> None:
    arm = cast.robot("glazer6")
    a, b, c = above(cast), above(cast, z=300.0), above(cast, y=0.0)
    steps = [cast.step("line", b, blend=cast.length(10)), cast.step("line", b), cast.step("line", c)]
    path = follow_task(cast.task(arm, arm.inverse(a)[0], steps))
    assert [type(part) for part in path.sequence] == [Stretch, Wait, Stretch]
    assert path.corners[0].reason == "the step without motion that follows has no blend"


@pytest.mark.parametrize("kind", ["line", "joint"])
def test_reversal_becomes_a_stop(cast, kind: str) -> None:
    arm = cast.robot("glazer6")
    a, b = above(cast), above(cast, z=250.0)
    start = arm.inverse(a)[0]
    there = b if kind == "line" else start + np.deg2rad([10, 5, -5, 0, 0, 3])
    back = a if kind == "line" else start
    path = follow_task(cast.task(arm, start, [cast.step(kind, there, blend=cast.length(20)), cast.step(kind, back)]))
    cast.check_path(path)
    assert len(path.stretches) == 2
    assert path.corners[0].reason == "reversal"
    words = "the path turns back on itself, so the arm stops here and the blend 20 mm is dropped"
    assert [(f.step, f.text) for f in path.findings] == [(0, words)]


@pytest.mark.parametrize(("degrees", "kind"), [(2.0, "stop"), (3.0, "fly-by")])
def test_both_sides_of_a_reversal(cast, degrees: float, kind: str) -> None:
    arm = cast.robot("glazer6")
    a = above(cast)
    b, c = a.copy(), a.copy()
    b[:3, 3] += [0.1, 0, 0]
    c[:3, 3] = b[:3, 3] - 0.1 * np.array([np.cos(np.deg2rad(degrees)), np.sin(np.deg2rad(degrees)), 0])
    path = follow_task(
        cast.task(arm, arm.inverse(a)[0], [cast.step("line", b, blend=cast.length(20)), cast.step("line", c)])
    )
    cast.check_path(path)
    assert path.corners[0].kind == kind


def test_line_running_into_an_arc(cast) -> None:
    arm = cast.robot("glazer6")
    a = above(cast)
    b = a.copy()
    b[:3, 3] += [0, 0.1, 0]
    arc = cast.step("arc", None, centre=[610, 0, 350], axis=np.array([0, 0, -1.0]), angle=np.pi / 2)
    start = arm.inverse(a)[0]
    stopped = follow_task(cast.task(arm, start, [cast.step("line", b), arc]))
    assert len(stopped.stretches) == 2
    assert stopped.corners[0].reason == "curvature jumps"
    assert str(stopped.findings[0]) == (
        "step 1: the path runs on tangentially but its curvature jumps, so the arm stops here; "
        "a blend would let it fly by"
    )
    flown = follow_task(cast.task(arm, start, [cast.step("line", b, blend=cast.length(5)), arc]))
    cast.check_path(flown)
    assert len(flown.stretches) == 1 and not flown.findings


def test_straight_through_without_blend_says_so(cast) -> None:
    arm = cast.robot("glazer6")
    a, b, c = above(cast), above(cast, x=600.0), above(cast, x=640.0)
    path = follow_task(cast.task(arm, arm.inverse(a)[0], [cast.step("line", b), cast.step("line", c)]))
    assert path.findings[0].text == ("the path runs straight on, but the arm stops here; a blend would let it fly by")


def test_straight_through_corner_stays_on_the_line(cast) -> None:
    arm = cast.robot("glazer6")
    a, b, c = above(cast), above(cast, x=600.0), above(cast, x=640.0)
    blend = cast.length(20)
    path = follow_task(cast.task(arm, arm.inverse(a)[0], [cast.step("line", b, blend=blend), cast.step("line", c)]))
    stretch = path.stretches[0]
    poses, known = stretch.programmed(np.linspace(0, stretch.path.length, 200))
    assert known.all()
    np.testing.assert_allclose(poses[:, :3, 3] - a[:3, 3], np.outer(np.linspace(0, 0.09, 200), [1, 0, 0]), atol=1e-15)


def test_overlapping_corners_shrink_and_say_so(cast) -> None:
    arm = cast.robot("glazer6")
    a, b, c, d = above(cast), above(cast, x=650.0), above(cast, x=650.0, y=-40.0), above(cast, x=550.0, y=-40.0)
    steps = [
        cast.step("line", b, blend=cast.length(50)),
        cast.step("line", c, blend=cast.length(45)),
        cast.step("line", d),
    ]
    path = follow_task(cast.task(arm, arm.inverse(a)[0], steps))
    cast.check_path(path)
    assert [corner.used for corner in path.corners] == pytest.approx([0.03, 0.03])
    assert [f.text for f in path.findings] == [
        "the blend shrinks from 50 mm to 30 mm",
        "the blend shrinks from 45 mm to 30 mm",
    ]


def test_corners_that_meet_leave_no_gap(cast) -> None:
    """Three corners share two short lines: no plain piece is left between them."""
    arm = cast.robot("glazer6")
    points = [above(cast, x=x, y=y) for x, y in ((500, -100), (600, -100), (600, -60), (640, -60), (640, 50))]
    steps = [cast.step("line", p, blend=cast.length(20)) for p in points[1:-1]] + [cast.step("line", points[-1])]
    path = follow_task(cast.task(arm, arm.inverse(points[0])[0], steps))
    cast.check_path(path)
    first, second, third = path.corners
    assert first.s_to == pytest.approx(second.s_from) and second.s_to == pytest.approx(third.s_from)


def test_blend_has_no_effect_where_the_payload_changes(cast) -> None:
    from dataclasses import replace

    arm = cast.robot("glazer6")
    name = next(iter(arm.payloads))
    a, b = above(cast), above(cast, z=250.0)
    steps = [cast.step("line", b, blend=cast.length(20)), replace(cast.step("line", above(cast, y=0.0)), payload=name)]
    path = follow_task(cast.task(arm, arm.inverse(a)[0], steps))
    assert path.corners[0].reason == "the payload changes"
    assert [stretch.arm.payload.name if stretch.arm.payload else None for stretch in path.stretches] == [None, name]
    assert path.findings[0].text == "the arm stops here (the payload changes), so the blend 20 mm has no effect"


def test_tool_change_moves_the_tool_centre_point_and_not_the_arm(cast) -> None:
    from dataclasses import replace

    arm = cast.robot("glazer6")
    tools = list(arm.tools)
    assert len(tools) >= 2
    arm = arm.equipped(tool=tools[0])
    a, b = above(cast), above(cast, z=300.0)
    other = arm.equipped(tool=tools[1])
    steps = [replace(cast.step("line", b), tool=tools[0])]
    start = arm.inverse(a)[0]
    q = follow_task(cast.task(arm, start, steps)).targets[-1]
    c = other.forward(q)
    c[:3, 3] += [0, 0.05, 0]
    path = follow_task(cast.task(arm, start, [*steps, replace(cast.step("line", c), tool=tools[1])]))
    cast.check_path(path)
    assert [stretch.arm.tool.name for stretch in path.stretches] == tools[:2]
    reached = other.forward(path.stretches[1].path(np.linspace(0, path.stretches[1].path.length, 40)))[:, :3, 3]
    line = c[:3, 3] - reached[0]
    assert np.linalg.norm(np.cross(reached - reached[0], line / np.linalg.norm(line)), axis=1).max() < 1e-6
    assert path.corners[0].reason == "the tool changes"


def test_line_a_millimetre_from_a_wrist_singularity(cast) -> None:
    """400 mm, axes 4 and 6 nearly in line in its middle: joint 4 turns nearly half round within a few millimetres."""
    arm = cast.robot("glazer6")
    middle = arm.forward(np.deg2rad([20, 10, 40, 0, 0, 0]))
    a, b = middle.copy(), middle.copy()
    a[:3, 3] += -0.2 * middle[:3, 0] + 0.001 * middle[:3, 1]
    b[:3, 3] += +0.2 * middle[:3, 0] + 0.001 * middle[:3, 1]
    answers = arm.inverse(a)
    start = answers[np.argmin(np.abs(answers[:, [3, 5]]).sum(axis=1))]
    path = follow_task(cast.task(arm, start, [cast.step("line", b)]))
    cast.check_path(path)
    q = path.stretches[0].path(np.linspace(0, path.stretches[0].path.length, 2000))
    assert np.abs(q[-1, 3] - q[0, 3]) > np.deg2rad(150)
    assert np.abs(np.sin(q[:, 4])).min() < 0.01
    assert len(path.stretches[0].path.breaks) < 100


def test_cartesian_path_needs_no_branch(cast) -> None:
    arm = cast.robot("glazer6")
    a, b = above(cast), cast.pose(9000, 0, 0)  # far out of reach
    path = cartesian_path(
        cast.task(arm, arm.inverse(a)[0], [cast.step("line", b), cast.step("joint", arm.positions["home"])])
    )
    assert [leg.kind for leg in path.legs] == ["cartesian", "joint"]
    poses = path.poses(np.array([0, 0]), np.array([0.0, path.segments.length[0]]))
    np.testing.assert_allclose(poses, [a, b], atol=1e-12)
    with pytest.raises(ValueError, match="a joint motion has no programmed tool path"):
        path.poses(np.array([1]), np.array([0.0]))


def test_half_turn_names_the_step(cast) -> None:
    arm = cast.robot("glazer6")
    b = cast.pose(550, -100, 350, 180, 0, 180)
    with pytest.raises(
        InputError,
        match=r"^t\.toml: step\[1\]: the tool would turn by 180 deg, which has no shortest way: give a pose between$",
    ):
        follow_task(cast.task(arm, arm.inverse(above(cast))[0], [cast.step("line", b)]))


def test_every_bad_arc_is_named(cast) -> None:
    arm = cast.robot("glazer6")
    a, b = above(cast), above(cast, y=100.0)
    steps = [
        cast.step("arc", b, via=[550, 0, 350]),
        cast.step("arc", None, centre=[550, 100, 350], axis=np.array([0, 0, 1.0]), angle=1.0),
    ]
    with pytest.raises(
        InputError, match=r"^t\.toml: step\[1\]: start, via and target of the arc lie on one line"
    ) as caught:
        follow_task(cast.task(arm, arm.inverse(a)[0], steps))
    assert [problem.split(": ")[1] for problem in caught.value.problems] == ["step[1]", "step[2]"]


def test_a_frame_on_the_arm_itself_is_refused(cast) -> None:
    arm = cast.robot("glazer6")
    frame = Frame("table", "base", np.eye(4), joint=arm.joints[0].name)
    step = Step(0, "line", "t.toml: step[1]", target=Target(frame="table", frame_from_tool=above(cast)))
    task = cast.task(arm, arm.positions["home"], [step], frames={"table": frame})
    with pytest.raises(
        InputError, match=r'^glazer6: joint "base" carries the tool, expected one that carries a workpiece$'
    ):
        follow_task(task)


def test_endless_joint_takes_the_nearest_turn(cast) -> None:
    arm = cast.endless_six()
    home = arm.positions["home"].copy()
    turns = 7 * 2 * np.pi
    start = home + np.array([0, 0, 0, 0, 0, turns + 0.3])
    a = arm.forward(home)
    b = a.copy()
    b[:3, 3] += [0, 0.1, 0.05]
    path = follow_task(cast.task(arm, start, [cast.step("joint", a), cast.step("line", b), cast.step("joint", home)]))
    cast.check_path(path)
    assert path.targets[1][5] == pytest.approx(turns + home[5])
    assert abs(path.targets[2][5] - turns) < np.pi
    np.testing.assert_array_equal(path.targets[3], home)  # a joint vector is that very vector


def test_arm_without_closed_form(cast) -> None:
    arm = cast.offset_wrist()
    start = np.deg2rad([10, 20, 30, 15, 50, -20])
    a = arm.forward(start)
    b, c = a.copy(), a.copy()
    b[:3, 3] += [0.05, 0.12, -0.06]
    c[:3, 3] += [0.0, 0.2, 0.0]
    c[:3, :3] = Rotation.from_rotvec([0.1, 0.2, 0]).as_matrix() @ c[:3, :3]
    path = follow_task(cast.task(arm, start, [cast.step("line", b, blend=cast.length(30)), cast.step("line", c)]))
    cast.check_path(path)
    assert arm.structure == "general"


def test_corner_shrinks_until_its_region_holds_it(cast) -> None:
    """In the corner both motions turn one joint the same way: together more than either side alone may."""
    arm = cast.robot("sorter4")
    q = np.array([0.0, 0.7, -0.05, 1.8])
    b = arm.forward(q)
    via = 1e3 * b[:3, 3] + [22.5, -14.3, 0.0]
    b[:2, 3] += [-0.06, -0.02]
    steps = [cast.step("joint", q, blend=cast.angle(21)), cast.step("arc", b, via=via)]
    path = follow_task(cast.task(arm, arm.positions["home"], steps))
    cast.check_path(path)
    (corner,) = path.corners
    assert corner.s_to < path.stretches[0].path.length - 0.1  # not for want of room
    assert 20.0 < np.rad2deg(corner.used) < 20.99
    (finding,) = path.findings
    assert finding.text == f"the blend shrinks from 21 deg to {np.rad2deg(corner.used):.2f} deg"


def test_corner_that_would_stand_still_becomes_a_stop(cast) -> None:
    """Two arcs meet at 170 deg, no reversal yet; within the corner their tangents turn on until they cancel out."""
    arm = cast.robot("glazer6")
    a = above(cast)
    turn = np.deg2rad(120)
    first = cast.step(
        "arc", None, centre=[550, -50, 350], axis=np.array([0, 0, 1.0]), angle=turn, blend=cast.share(22.2)
    )
    path = cartesian_path(cast.task(arm, arm.inverse(a)[0], [first]))
    tangent = path.segments.jets(np.array([0]), path.segments.length).position[1, 0]
    tangent /= np.linalg.norm(tangent)
    corner = path.legs[0].end[:3, 3]
    for degrees, kind in ((170.0, "stop"), (-170.0, "fly-by")):
        back = Rotation.from_euler("z", degrees, degrees=True).apply(tangent)
        centre = corner + 0.05 * np.cross([0, 0, 1.0], back)
        second = cast.step("arc", None, centre=1e3 * centre, axis=np.array([0, 0, 1.0]), angle=turn)
        flown = follow_task(cast.task(arm, arm.inverse(a)[0], [first, second]))
        cast.check_path(flown)
        assert flown.corners[0].kind == kind
        assert flown.corners[0].reason == ("reversal" if kind == "stop" else "")


def test_task_that_does_not_move(cast) -> None:
    arm = cast.robot("glazer6")
    home = arm.positions["home"]
    path = follow_task(cast.task(arm, home, [cast.step("line", arm.forward(home), mark="m"), cast.step("joint", home)]))
    assert path.sequence == (Wait(0, 0.0), Wait(1, 0.0))
    assert path.corners == () and len(path.findings) == 2
