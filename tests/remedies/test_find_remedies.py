"""What would make a refused task work: written into the task file as the remedy says, it must plan; a little less must
not. The proof is always the task file, loaded and planned anew.
"""

from __future__ import annotations

import re
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.errors import InputError, LimitError, PathplanError, UnreachableError
from pathplan.path import follow_task
from pathplan.path.refusals import rpy_of
from pathplan.remedies import Remedies, Remedy, find_remedies
from pathplan.remedies.branches import other_branches
from pathplan.remedies.freedoms import free_axes, free_roll
from pathplan.remedies.steps import joint_step, served_pose, smaller_blend
from pathplan.remedies.trials import Trials, window
from pathplan.report.remedies_screen import remedies_screen
from pathplan.task.model import Step, Target

ROOT = Path(__file__).parents[2]
LONG = 600.0  # s: as long as it takes
HEAD = """\
arm = "{arm}"
cycle = "8 ms"
start = {start}
"""


def text_of(arm: str, start: str, rest: str) -> str:
    return HEAD.format(arm=(ROOT / "robots" / f"{arm}.toml").as_posix(), start=start) + rest


BELT = text_of(
    "sorter4",
    '"home"',
    """
[frames.belt]
xyz = [520, -320, 0]
rpy = [0, 0, 20]
[poses.tile]
frame = "belt"
xyz = [0, 0, 250]
rpy = [180, 0, 0]
[[step]]
motion = "joint"
to = "tile"
[[step]]
motion = "line"
to = "tile"
offset = { frame = [90, 20, 0] }
[[step]]
motion = "joint"
to = "home"
""",
)


def task_of(folder: Path, text: str) -> pathplan.Task:
    (folder / "t.toml").write_text(text)
    return pathplan.load_task(folder / "t.toml")


def refusal(task: pathplan.Task) -> PathplanError:
    with pytest.raises((UnreachableError, LimitError)) as caught:
        pathplan.plan(task)
    return caught.value


def remedies(task: pathplan.Task) -> Remedies:
    return find_remedies(task, refusal(task), seconds=LONG)


def only(found: Remedies, what: str, text: str = "") -> Remedy:
    (remedy,) = [remedy for remedy in found if remedy.what == what and text in remedy.text]
    return remedy


def with_key(text: str, table: str, key: str) -> str:
    """A task file with `key = value` of a table in place of what stands there."""
    head, tail = text.split(f"[{table}]\n")
    changed, count = re.subn(rf"(?m)^{key.split(' = ')[0]} = .*$", key, tail, count=1)
    assert count == 1
    return f"{head}[{table}]\n{changed}"


def plans(task: pathplan.Task) -> bool:
    try:
        follow_task(task)
    except PathplanError:
        return False
    return True


@pytest.fixture(scope="module")
def belt(tmp_path_factory) -> tuple[Remedies, list[tuple[str, int, int]]]:
    """The remedies of BELT, and the progress that was told of the search."""
    task, told = task_of(tmp_path_factory.mktemp("belt"), BELT), []
    found = find_remedies(task, refusal(task), seconds=LONG, progress=lambda *what: told.append(what))
    return found, told


@pytest.mark.parametrize(("how", "key"), [("move", "xyz"), ("turn", "rpy")])
def test_a_frame_is_moved_as_far_as_it_must(tmp_path, belt, how, key) -> None:
    remedy = only(belt[0], "frame", f"{how} frame belt by ")
    written = remedy.text.split(": ")[1]
    assert written.startswith(f"{key} = [")
    planned = pathplan.plan(task_of(tmp_path, with_key(BELT, "frames.belt", written)))
    assert remedy.duration == pytest.approx(planned.duration, abs=0.008)
    size = abs(remedy.changes.get("shift", remedy.changes.get("turn")))
    grain = 1e-3 if how == "move" else np.deg2rad(0.1)
    assert size > grain
    pose = remedy.changes["pose"].copy()
    if how == "move":
        pose["xyz".index(remedy.changes["axis"]), 3] -= np.sign(remedy.changes["shift"]) * 2 * grain
        less = f"xyz = {(1e3 * pose[:3, 3]).tolist()}"
    else:
        back = np.array([0.0, 0.0, np.sign(remedy.changes["turn"]) * 2 * grain])
        less = f"rpy = {np.rad2deg(rpy_of(pose) - back).tolist()}"
    assert not plans(task_of(tmp_path, with_key(BELT, "frames.belt", less)))


def test_the_smallest_shift_is_the_one_the_reach_asks_for(tmp_path) -> None:
    """A joint step to a place beyond the reach of a SCARA: its links reach 650 mm, the distance is Pythagoras."""
    text = text_of(
        "sorter4",
        '"home"',
        '[frames.belt]\nxyz = [600, 0, 0]\n[[step]]\nmotion = "joint"\nto = { frame = "belt", xyz = [70, 0, 250], '
        "rpy = [180, 0, 0] }\n",
    )
    remedy = only(remedies(task_of(tmp_path, text)), "frame", "move")
    assert remedy.changes["axis"] == "x" and remedy.changes["frame"] == "belt"
    assert -0.022 <= remedy.changes["shift"] <= -0.020


def test_what_stands_in_no_frame_is_moved_itself(tmp_path) -> None:
    text = text_of("sorter4", '"home"', '[[step]]\nmotion = "joint"\nto = { xyz = [670, 0, 250], rpy = [180, 0, 0] }\n')
    remedy = only(remedies(task_of(tmp_path, text)), "target", "move")
    assert remedy.step == 0 and remedy.text.startswith("move the target of step 1 by ")
    xyz = remedy.text.split("xyz = ")[1]
    assert plans(task_of(tmp_path, re.sub(r"xyz = \[[^]]*\]", f"xyz = {xyz}", text)))


def test_a_pose_tilted_for_four_axes_is_levelled(tmp_path) -> None:
    text = text_of(
        "sorter4", '"home"', '[[step]]\nmotion = "joint"\nto = { xyz = [400, 100, 250], rpy = [178, 1, 30] }\n'
    )
    remedy = only(remedies(task_of(tmp_path, text)), "target")
    pose = remedy.changes["pose"]
    np.testing.assert_allclose(pose[:3, 2], [0, 0, -1], atol=1e-9)
    np.testing.assert_allclose(pose[:3, 3], [0.4, 0.1, 0.25], atol=1e-9)
    keys = re.search(r"xyz = \[[^]]*\], rpy = \[[^]]*\]", remedy.text)[0]
    assert plans(task_of(tmp_path, re.sub(r"xyz = .*\]", keys, text)))


def test_a_line_that_no_branch_follows_becomes_a_joint_step(tmp_path) -> None:
    """A line through the hollow in the middle of a SCARA's reach, where only the elbow's limit stops it."""
    text = text_of(
        "sorter4",
        '"home"',
        '[[step]]\nmotion = "joint"\nto = { xyz = [300, -30, 250], rpy = [180, 0, 0] }\n'
        '[[step]]\nmotion = "line"\nto = { xyz = [-300, -30, 250], rpy = [180, 0, 0] }\n',
    )
    task = task_of(tmp_path, text)
    (remedy,) = joint_step(Trials(task, refusal(task), time.monotonic() + LONG))
    assert remedy.what == "motion"
    assert remedy.step == 1 and "a joint step in place of the line" in remedy.text
    assert plans(task_of(tmp_path, text.replace('motion = "line"', 'motion = "joint"')))


def test_another_configuration(tmp_path) -> None:
    text = text_of(
        "glazer6",
        '"home"',
        '[[step]]\nmotion = "joint"\nto = { xyz = [550, -100, 350], rpy = [180, 0, 0] }\n'
        'configuration = { elbow = "down" }\n',
    )
    task = task_of(tmp_path, text)
    (remedy,) = other_branches(Trials(task, refusal(task), time.monotonic() + LONG))
    assert remedy.changes["configuration"] == {"elbow": "up"}
    assert plans(task_of(tmp_path, text.replace('"down"', '"up"')))


def test_another_start(tmp_path) -> None:
    """A SCARA follows a line past its side with the elbow out, not with the elbow in the way."""
    arm = pathplan.load_arm(ROOT / "robots" / "sorter4.toml")
    pose = arm.forward(arm.positions["home"])
    ends = []
    for xyz in ([0.1, 0.5, 0.25], [-0.45, 0.25, 0.25]):
        end = pose.copy()
        end[:3, 3] = xyz
        ends.append(end)
    line = f'[[step]]\nmotion = "line"\nto = {{ xyz = {(1e3 * ends[1][:3, 3]).tolist()}, rpy = [180, 0, 90] }}\n'
    outcomes = {}
    turn = pose.copy()
    turn[:3, :3] = [[0, 1, 0], [1, 0, 0], [0, 0, -1]]
    turn[:3, 3] = ends[0][:3, 3]
    for q in arm.inverse(turn):
        values = [float(v) for v in np.round(np.rad2deg(q), 3)]
        values[2] = round(1e3 * float(q[2]), 3)
        text = text_of("sorter4", str(values), line + "\n").replace('cycle = "8 ms"', 'cycle = "8 ms"\nreturn = "line"')
        outcomes[text] = plans(task_of(tmp_path, text))
    assert set(outcomes.values()) == {True, False}  # by brute force: some starts work, others don't
    for text in (text for text, works in outcomes.items() if not works):
        remedy = only(remedies(task_of(tmp_path, text)), "branch", "start in another branch")
        start = remedy.text.split("start = ")[1]
        again = task_of(tmp_path, re.sub(r"start = .*", f"start = {start}", text))
        assert plans(again)
        np.testing.assert_allclose(again.arm.forward(again.start), turn, atol=1e-4)


def test_a_joint_step_to_where_a_taught_path_starts(tmp_path) -> None:
    (tmp_path / "hop.csv").write_text("shoulder,elbow,screw,wrist\n20,60,-50,0\n30,50,-40,10\n40,40,-50,20\n")
    text = text_of(
        "sorter4", '"home"', '[taught.hop]\npoints = "hop.csv"\n[[step]]\nmotion = "taught"\nalong = "hop"\n'
    )
    remedy = only(remedies(task_of(tmp_path, text)), "branch", "a joint step before step 1, to its first point")
    joints = remedy.text.split("joints = ")[1]
    assert joints == "[20, 60, -50, 0]"
    assert plans(
        task_of(
            tmp_path,
            text.replace("[[step]]", f'[[step]]\nmotion = "joint"\nto = {{ joints = {joints} }}\n[[step]]'),
        )
    )


def test_a_smaller_blend(tmp_path) -> None:
    """Two lines that turn beside a wrist singularity (axes 4 and 6 in line), the corner cutting through it."""
    arm = pathplan.load_arm(ROOT / "robots" / "glazer6.toml")
    middle = arm.forward(np.deg2rad([20, 10, 40, 0, 0, 0]))
    u = np.cos(5.863618698205273) * middle[:3, 0] + np.sin(5.863618698205273) * middle[:3, 1]
    across = np.cross(middle[:3, 2], u)
    corner = middle[:3, 3] + 0.010436088410914398 * u
    points = [corner - 0.1 * u + 0.07201561075215619 * across, corner, corner - 0.1 * u - 0.07201561075215619 * across]
    steps = "".join(
        f'[[step]]\nmotion = "{"line" if k else "joint"}"\n'
        f"to = {{ xyz = {(1e3 * point).tolist()}, rpy = {np.rad2deg(rpy_of(middle)).tolist()} }}\n"
        + ('blend = "45.70701161463324 mm"\n' if k == 1 else "")
        for k, point in enumerate(points)
    )
    text = text_of("glazer6", '"home"', steps)
    task = task_of(tmp_path, text)
    assert "corner after this step" in str(refusal(task))
    (remedy,) = smaller_blend(Trials(task, refusal(task), time.monotonic() + LONG))
    value = re.search(r'blend = "([^"]*)"', remedy.text)[1]
    assert plans(task_of(tmp_path, re.sub(r'blend = "[^"]*"', f'blend = "{value}"', text)))


def test_a_payload_that_can_be_held(tmp_path) -> None:
    arm = (ROOT / "robots" / "glazer6.toml").read_text()
    assert arm.count('mass = "1.2 kg"') == 1
    (tmp_path / "heavy.toml").write_text(arm.replace('mass = "1.2 kg"', 'mass = "40 kg"'))
    text = (
        'arm = "heavy.toml"\ncycle = "8 ms"\nstart = "home"\npayload = "tile"\n'
        '[[step]]\nmotion = "joint"\nto = { xyz = [700, 100, 350], rpy = [180, 0, 0] }\n'
    )
    task = task_of(tmp_path, text)
    assert isinstance(refusal(task), LimitError)
    remedy = only(remedies(task), "payload")
    for mass, works in ((remedy.changes["mass"], True), (remedy.changes["mass"] * 1.02, False)):
        (tmp_path / "heavy.toml").write_text(arm.replace('mass = "1.2 kg"', f'mass = "{mass} kg"'))
        try:
            pathplan.plan(task_of(tmp_path, text))
            assert works
        except LimitError:
            assert not works


def test_a_move_that_spoils_another_step_goes_further(tmp_path) -> None:
    """The line needs the belt nearer; so near, the step after it is too near: only what serves both is a remedy."""
    text = BELT + '[[step]]\nmotion = "joint"\nto = { frame = "belt", xyz = [-340, 130, 250], rpy = [180, 0, 0] }\n'
    task = task_of(tmp_path, text)
    for remedy in remedies(task):
        assert remedy.duration is not None
        assert pathplan.plan(remedy.task).duration == remedy.duration


def test_nothing_helps_and_says_what_was_tried(tmp_path) -> None:
    text = text_of(
        "sorter4", '"home"', '[[step]]\nmotion = "joint"\nto = { xyz = [2000, 0, 250], rpy = [180, 0, 0] }\n'
    )
    found = remedies(task_of(tmp_path, text))
    assert not found.found and found.finished and len(found) == 0
    assert any("shifts of the target of step 1" in text for text in found.tried)


def test_without_time_nothing_is_found(tmp_path) -> None:
    task = task_of(tmp_path, BELT)
    found = find_remedies(task, refusal(task), seconds=0.0)
    assert not found.found and not found.finished


def test_other_errors_have_no_remedies(tmp_path) -> None:
    task = task_of(tmp_path, BELT)
    with pytest.raises(InputError, match=r"^remedies: expected the UnreachableError or LimitError of a step"):
        find_remedies(task, InputError("t.toml: step: what"))
    with pytest.raises(InputError, match=r"^remedies: expected"):
        find_remedies(replace(task, steps=task.steps[:1]), refusal(task))


def test_progress_is_told(belt) -> None:
    told = belt[1]
    assert told[0][:2] == ("remedies", 0) and told[-1][1] == told[-1][2]


def test_five_axes_take_the_roll_that_follows() -> None:
    """The same place and the same direction of the tool, turned about it as the arm turns it."""
    arm = pathplan.load_arm(ROOT / "robots" / "glazer6.toml")
    tip = arm.parent_from_joint[5] @ arm.tip_from_flange
    five = pathplan.Arm("five", arm.joints[:5], arm.parent_from_joint[:5], arm.axes[:5], tip)
    pose = five.forward(np.array([0.3, -0.2, 0.6, 0.1, 1.0]))
    turned = pose.copy()
    turned[:3, :2] = pose[:3, :2] @ np.array([[0.8, -0.6], [0.6, 0.8]])
    step = Step(0, "joint", "t.toml: step[1]", target=Target(frame_from_tool=turned))
    task = pathplan.Task("t", None, five, np.array([0.0, -0.3, 0.5, 0.0, 1.2]), (step,), 0.008)
    (remedy,) = served_pose(Trials(task, refusal(task), time.monotonic() + LONG))
    np.testing.assert_allclose(remedy.changes["pose"][:3, 3], pose[:3, 3], atol=1e-8)
    np.testing.assert_allclose(remedy.changes["pose"][:3, 2], pose[:3, 2], atol=1e-8)
    assert plans(remedy.task)


def test_a_task_too_long_to_plan_again_still_gets_its_remedies(tmp_path, belt, monkeypatch) -> None:
    """As if every task were long and no time left to plan it whole: found all the same, and said to be unproven."""
    task = task_of(tmp_path, BELT)
    proven = [remedy.text for remedy in belt[0]]
    monkeypatch.setattr("pathplan.remedies.trials.LONG_TASK", 0)
    monkeypatch.setattr("pathplan.remedies.trials.SHARE", -1.0)
    found = remedies(task)
    assert [remedy.text for remedy in found] == proven and not found.finished
    assert all(remedy.duration is None for remedy in found)
    screen = " ".join(" ".join(remedies_screen(found)).split())  # wherever its lines break
    assert "(planned only as far as the step refused)" in screen
    assert screen.endswith('time ran out before all was tried and planned whole: --remedies "60 s" gives it longer')


def test_a_window_holds_what_decides() -> None:
    """Whatever can be planned whole can be followed window by window: every step of every example."""
    for name in ("sorter4-spline-tray", "loader4-stack-tiles", "glazer6-kiln-mouth"):
        task = pathplan.load_task(ROOT / "examples" / f"{name}.toml")
        for step in task.steps[:12]:
            if step.motion != "wait":
                assert plans(window(task, step.index))
                assert window(task, step.index).steps[-1].target is step.target


def test_a_tool_that_may_roll(tmp_path) -> None:
    """The flange stands 10 deg before its limit and is to turn 30 deg on: only the tool's roll asks for it."""
    arm = pathplan.load_arm(ROOT / "robots" / "glazer6.toml")
    start = np.deg2rad([10, -15, 25, 5, 70, 350])
    pose = arm.forward(start)
    c, s = np.cos(np.deg2rad(30)), np.sin(np.deg2rad(30))
    pose[:3, :2] = pose[:3, :2] @ np.array([[c, -s], [s, c]])
    pose[:3, 3] += [0.0, 0.05, 0.0]
    line = (
        f'[[step]]\nmotion = "line"\nto = {{ xyz = {(1e3 * pose[:3, 3]).tolist()}, '
        f"rpy = {np.rad2deg(rpy_of(pose)).tolist()} }}\n"
    )
    text = text_of("glazer6", "[10, -15, 25, 5, 70, 350]", line)
    task = task_of(tmp_path, text)
    (remedy,) = free_roll(Trials(task, refusal(task), time.monotonic() + LONG))
    assert remedy.what == "roll" and 'roll = "free"' in remedy.text and remedy.step == 0
    assert plans(task_of(tmp_path, text + 'roll = "free"\n'))


def test_an_axis_that_may_stand_elsewhere(tmp_path) -> None:
    """A place beside the track's middle is out of reach from its end, where the step wants the track."""
    text = text_of(
        "stacker7",
        '"home"',
        '[[step]]\nmotion = "joint"\nto = { xyz = [-700, -500, 500], rpy = [180, 0, 0] }\naxes = { track = 1400 }\n',
    )
    task = task_of(tmp_path, text)
    (remedy,) = free_axes(Trials(task, refusal(task), time.monotonic() + LONG))
    assert remedy.changes["axes"] == ["track"]
    assert plans(task_of(tmp_path, text.replace("axes = { track = 1400 }", "")))


def test_a_line_too_near_a_singularity_is_let_through_it():
    """A micrometre past it: axes 4 and 6 would have to turn over within a micrometre."""
    from tests.path.conftest import robot, step, task
    from tests.path.test_crossing import passing

    arm = robot("glazer6")
    a, b = passing(arm, 1e-6)
    refused = task(arm, arm.inverse(a)[2], [step("line", b)])
    with pytest.raises(UnreachableError) as caught:
        pathplan.plan(refused)
    found = find_remedies(refused, caught.value, seconds=60).found
    (remedy,) = (remedy for remedy in found if "tolerance" in remedy.text)
    assert remedy.text == 'step 1: orientation_tolerance = "0.05 deg"'
