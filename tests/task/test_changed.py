"""A changed task is the task that its changed file would be."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.task.changed import ancestors, with_frame, with_inserted, with_payload, with_start, with_step

ROOT = Path(__file__).parents[2]
TASK = """\
arm = "{arm}"
cycle = "8 ms"
tool = "cup"
start = "home"
return = "{back}"
[frames.bench]
xyz = {bench}
rpy = [0, 0, 10]
[frames.tray]
parent = "bench"
xyz = [20, 30, 40]
rpy = [0, 5, -25]
[[step]]
motion = "joint"
to = {{ frame = "tray", xyz = [0, 0, 60], rpy = [180, 0, 0] }}
blend = "5 mm"
[[step]]
motion = "arc"
via = {{ frame = "tray", xyz = [30, 30, 60] }}
to = {{ frame = "tray", xyz = [60, 0, 60], rpy = [180, 0, 0] }}
[[step]]
motion = "arc"
centre = {{ frame = "bench", xyz = [60, 40, 90] }}
axis = [0.1, 0, 1]
angle = 40
"""


def load(folder: Path, bench: str = "[480, 0, 220]", back: str = "joint") -> pathplan.Task:
    arm = (ROOT / "robots" / "glazer6.toml").as_posix()
    (folder / "t.toml").write_text(TASK.format(arm=arm, bench=bench, back=back))
    return pathplan.load_task(folder / "t.toml")


def test_a_moved_frame_takes_everything_in_it_along(tmp_path) -> None:
    task, moved = load(tmp_path), load(tmp_path, bench="[470, 25, 200]")
    changed = with_frame(task, "bench", moved.frames["bench"].parent_from_frame)
    for one, other in zip(changed.steps[:2], moved.steps[:2], strict=True):
        np.testing.assert_allclose(changed.pose(one.target), moved.pose(other.target), atol=1e-12)
    for one, other in zip(changed.steps, moved.steps, strict=True):
        for key in ("via", "centre", "axis"):
            if getattr(other, key) is None:
                assert getattr(one, key) is None
            else:
                np.testing.assert_allclose(getattr(one, key), getattr(other, key), atol=1e-12)
    assert ancestors(task, "tray") == ["tray", "bench"] and ancestors(task, "base") == []
    np.testing.assert_array_equal(
        load(tmp_path).frames["bench"].parent_from_frame, task.frames["bench"].parent_from_frame
    )


@pytest.mark.parametrize("back", ["joint", "line"])
def test_another_start_is_returned_to(tmp_path, back) -> None:
    task = load(tmp_path, back=back)
    start = np.deg2rad([5, -10, 30, 2, 75, 8])
    changed = with_start(task, start)
    np.testing.assert_array_equal(changed.start, start)
    last = changed.steps[-1].target
    np.testing.assert_array_equal(last.joints, start)
    if back == "line":
        np.testing.assert_allclose(last.frame_from_tool, task.arm.forward(start), atol=1e-12)
    assert all(one is other for one, other in zip(changed.steps[:-1], task.steps[:-1], strict=True))


def test_a_step_put_in_comes_between_stop_points(tmp_path) -> None:
    task = load(tmp_path)
    changed = with_inserted(task, 1, task.start)
    assert [step.index for step in changed.steps] == list(range(len(task.steps) + 1))
    assert [step.motion for step in changed.steps[:3]] == ["joint", "joint", "arc"]
    assert changed.steps[0].blend is None and changed.steps[1].blend is None
    assert changed.steps[1].tool == "cup"


def test_one_step_changed(tmp_path) -> None:
    task = load(tmp_path)
    changed = with_step(task, 2, angle=-0.5)
    assert changed.steps[2].angle == -0.5 and changed.steps[1] is task.steps[1]


def test_a_lighter_payload(tmp_path) -> None:
    task = load(tmp_path)
    before, after = task.arm.payloads["tile"], with_payload(task, "tile", 0.25).arm.payloads["tile"]
    assert after.mass == before.mass / 4
    np.testing.assert_allclose(after.inertia, before.inertia / 4)
    np.testing.assert_array_equal(after.com, before.com)
    assert with_payload(task, "tile", 0.25).arm.payloads["tile stack"] is task.arm.payloads["tile stack"]
