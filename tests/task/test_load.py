"""What a good task file becomes: SI, frames resolved, offsets applied, a way back to the start."""

import hashlib

import numpy as np
import pytest
from spatialmath import SE3

CELL = SE3(0.6, 0.0, 0.1)
CAR = CELL * SE3(0.0, 0.3, 0.05) * SE3.Rz(90, "deg")
BELT = CELL * SE3(0.0, -0.2, 0.0) * SE3.Rx(180, "deg")
SHELF = CAR * SE3(0.1, 0.02, 0.0) * SE3.Rx(180, "deg")
HEAD4 = 'arm = "bench4.toml"\ncycle = 0.002\n'


def close(expected, tolerance=1e-12):
    return pytest.approx(np.asarray(expected), abs=tolerance)


@pytest.fixture
def task(load, text):
    return load(text)


def test_the_task_as_a_whole(task, text, bench6):
    assert task.title == "Tile from belt to car"
    assert task.cycle == 0.004
    assert task.start == close(np.deg2rad([0, -30, 60, 0, 60, 0]))
    assert task.arm.tool.name == "gripper"
    assert task.arm.payload is None
    assert task.sources == {"pick.toml": hashlib.sha256(text.encode()).hexdigest()}
    assert [step.motion for step in task.steps] == [
        "joint",
        "line",
        "wait",
        "line",
        "arc",
        "arc",
        "joint",
        "joint",
    ]
    assert [step.index for step in task.steps] == list(range(8))
    assert [step.where for step in task.steps] == [
        *(f"pick.toml: step[{k}]" for k in range(1, 8)),
        "pick.toml: return",
    ]
    assert {step.tool for step in task.steps} == {"gripper"}
    assert bench6.tool.name == "none"  # the arm given is not changed


def test_nested_frames_in_the_base_frame(task):
    assert task.base_from_frame("base") == close(np.eye(4))
    assert task.base_from_frame("cell") == close(CELL)
    assert task.base_from_frame("car") == close(CAR)


def test_frames_nest_as_deep_as_one_likes(load, text):
    nest = "".join(f'[frames.f{k}]\nparent = "{f"f{k - 1}" if k else "car"}"\nxyz = [0.1, 0, 0]\n' for k in range(3000))
    task = load(text.replace("[poses.belt]", nest + "[poses.belt]").replace('frame = "car"', 'frame = "f2999"'))
    assert task.base_from_frame("f2999") == close(CAR * SE3(0.3, 0, 0), 1e-9)
    assert task.pose(task.steps[4].target) == close(CAR * SE3(0.3, 0, 0) * CAR.inv() * SHELF, 1e-9)


def test_offsets_run_along_the_axes_of_the_frame_or_of_the_tool(task):
    above_in_frame, at, away_in_tool = (task.pose(task.steps[k].target) for k in (0, 1, 3))
    assert at == close(BELT)
    assert above_in_frame == close(CELL * SE3(0.0, -0.2, 0.08) * SE3.Rx(180, "deg"))
    assert away_in_tool == close(BELT * SE3(0.0, 0.0, -0.08))  # the tool looks down: backwards is up
    assert above_in_frame == close(away_in_tool)


def test_an_offset_may_turn_the_tool_about_its_own_axes(load, text):
    task = load(text.replace("{ tool = [0, 0, -80] }", "{ frame = [1, 2, 3], tool = [0, 0, -80], rpy = [0, 20, 0] }"))
    expected = CELL * SE3(1e-3, -0.198, 3e-3) * SE3.Rx(180, "deg") * SE3(0, 0, -0.08) * SE3.Ry(20, "deg")
    assert task.pose(task.steps[3].target) == close(expected)


def test_blends_keep_size_and_text(task):
    blends = {step.index: step.blend for step in task.steps if step.blend is not None}
    assert {k: (b.kind, b.text) for k, b in blends.items()} == {
        0: ("share", "15 %"),
        3: ("length", "20 mm"),
        4: ("angle", "10 deg"),
    }
    assert [b.value for b in blends.values()] == pytest.approx([0.15, 0.02, np.deg2rad(10)])


def test_a_bare_blend_is_in_mm(load, text):
    blend = load(text.replace('blend = "20 mm"', "blend = 12.5")).steps[3].blend
    assert (blend.kind, blend.value, blend.text) == ("length", 0.0125, "12.5 mm")


def test_waits_marks_caps_and_configuration(task):
    approach, pick, wait, _, arc = task.steps[:5]
    assert approach.configuration == {"elbow": "up"}
    assert (pick.speed, pick.acceleration) == (0.25, None)
    assert (wait.wait, wait.mark, wait.target) == (0.3, "gripper closed", None)
    assert (arc.speed, arc.acceleration) == (None, 2.0)


def test_an_arc_through_a_via_point(task):
    arc = task.steps[4]
    assert arc.via == close([0.6, 0.0, 0.3])
    assert task.pose(arc.target) == close(SHELF)
    assert arc.centre is None


def test_an_arc_by_centre_axis_and_angle_in_the_frame_of_its_centre(task):
    arc = task.steps[5]
    assert arc.name == "half round"
    assert arc.centre == close((CAR * SE3(0.15, 0.02, 0.0)).t)
    assert arc.axis == close([0, 0, 1])
    assert arc.angle == pytest.approx(-np.pi)
    assert arc.along
    assert arc.target is None


def test_the_axis_of_an_arc_turns_with_the_frame(load, text):
    task = load(text.replace("axis = [0, 0, 2]", "axis = [3, 0, 0]").replace("tool_along = true", ""))
    assert task.steps[5].axis == close(CAR.R @ [1, 0, 0])
    assert not task.steps[5].along


def test_named_poses_give_points_too(load, text, bench6):
    task = load(text.replace('via = { frame = "cell", xyz = [0, 0, 200] }', 'via = "parked"'))
    arm = bench6.equipped(tool="gripper")
    assert task.steps[4].via == close(arm.forward(np.deg2rad([10, -30, 60, 0, 60, 0]))[:3, 3])


@pytest.mark.parametrize(
    ("written", "motion"), [("true", "joint"), ('"joint"', "joint"), ('"line"', "line"), ("false", None)]
)
def test_the_way_back_to_the_start(load, text, written, motion):
    task = load(text.replace("return = true", f"return = {written}"))
    if motion is None:
        assert len(task.steps) == 7
    else:
        back = task.steps[-1]
        assert (back.motion, back.name) == (motion, "return to start")
        assert back.target.joints == close(task.start)
        if motion == "line":
            assert task.pose(back.target) == close(task.arm.forward(task.start))


def test_a_line_to_a_joint_vector_knows_joints_and_pose(load, text):
    task = load(text.replace('[[step]]\nmotion = "joint"\nto = "parked"', '[[step]]\nmotion = "line"\nto = "parked"'))
    target = task.steps[6].target
    assert target.joints == close(np.deg2rad([10, -30, 60, 0, 60, 0]))
    assert task.pose(target) == close(task.arm.forward(target.joints))


def test_a_blend_at_the_last_step_is_a_corner_into_the_way_back(load, text):
    task = load(text + 'blend = "10 mm"\n')
    assert task.steps[6].blend is not None


@pytest.mark.parametrize("start", ['"home"', '"parked"', "[0, -30, 60, 0, 60, 0]"])
def test_the_start_by_name_or_value(load, text, bench6, start):
    task = load(text.replace('start = [0, -30, 60, 0, "60 deg", 0]', f"start = {start}"))
    expected = [10 if "parked" in start else 0, -30, 60, 0, 60, 0]
    assert task.start == close(np.deg2rad(expected))


def test_arm_positions_are_targets_by_name(load, text, bench6):
    task = load(text.replace('to = "parked"', 'to = "folded"'))
    assert task.steps[6].target.joints == close(bench6.positions["folded"])


def test_task_wide_caps_lower_those_of_the_steps(load, text):
    task = load(text.replace("return = true", 'return = true\nspeed = 100\nacceleration = "3 m/s^2"'))
    assert task.speed == 0.1
    moves = [step for step in task.steps if step.motion != "wait"]
    assert {step.speed for step in moves} == {0.1}
    assert [step.acceleration for step in moves] == [3.0, 3.0, 3.0, 2.0, 3.0, 3.0, 3.0]


def test_the_payload_is_carried_from_the_first_step(load, text):
    task = load(text.replace("return = true", 'return = true\npayload = "tile"'))
    assert task.arm.payload.name == "tile"
    assert {step.payload for step in task.steps} == {"tile"}


def test_joint_vectors_mix_mm_and_deg(load, bench4):
    task = load(
        HEAD4 + 'start = [100, "20 cm", 300, 90]\n[[step]]\nmotion = "joint"\nto = "home"',
        bench4,
    )
    assert task.title == "pick"  # the file's name where there is no title
    assert task.start == close([0.1, 0.2, 0.3, np.pi / 2])


def test_a_limit_itself_is_inside(load, bench4):
    task = load(
        HEAD4 + 'start = [0, 800, 0, -170]\n[[step]]\nmotion = "joint"\nto = "home"',
        bench4,
    )
    assert task.start == close([0.0, 0.8, 0.0, np.deg2rad(-170)])


def test_nothing_in_a_task_can_be_changed(task):
    arrays = [task.start, *(f.parent_from_frame for f in task.frames.values())]
    for step in task.steps:
        arrays += [a for a in (step.via, step.centre, step.axis) if a is not None]
        if step.target is not None:
            arrays += [a for a in (step.target.joints, step.target.frame_from_tool) if a is not None]
    assert len(arrays) > 10
    assert not any(array.flags.writeable for array in arrays)
