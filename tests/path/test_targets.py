"""Branches at the targets: counts and room against the inverse of single poses, one by one."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.path import cartesian_path, follow_task, target_branches
from pathplan.path.cartesian import tool_frames

ROOT = Path(__file__).parents[2]


@pytest.mark.parametrize("name", ["glazer6-pick-and-place", "loader4-belt-to-car", "sorter4-spline-tray"])
def test_every_branch_is_there_with_its_room(name) -> None:
    task = pathplan.load_task(ROOT / "examples" / f"{name}.toml")
    arm, path = task.arm, follow_task(task)
    found = target_branches(task, path)
    cartesian = cartesian_path(task)
    frames = tool_frames(cartesian)
    legs = {leg.step.index: i for i, leg in enumerate(cartesian.legs)}
    posed = [
        step.index
        for step in task.steps
        if step.motion != "wait" and (step.target is None or step.target.joints is None)
    ]
    assert found.step.tolist() == posed
    limits = arm.limits
    for k, step in enumerate(found.step.tolist()[:6]):
        leg = legs[step]
        pose = cartesian.legs[leg].end @ frames[leg]
        answers = arm.inverse(pose)  # every branch, turn equivalents included
        for b in np.flatnonzero(found.reached[k]):
            np.testing.assert_allclose(arm.forward(found.q[k, b]), pose, atol=1e-8)
            rows = limits.matrix @ found.q[k, b]
            room = np.minimum(rows - limits.position[:, 0], limits.position[:, 1] - rows)
            assert found.margin[k, b] == pytest.approx(room[found.limit[k, b]], abs=1e-12)
            same = np.abs((answers - found.q[k, b] + np.pi) % (2 * np.pi) - np.pi).max(axis=1) < 1e-6
            assert found.within[k, b] == same.any()
            if found.within[k, b] and b != found.used[k]:
                rooms = np.minimum(answers @ limits.matrix.T - limits.position[:, 0],
                                   limits.position[:, 1] - answers @ limits.matrix.T)  # fmt: skip
                weights = np.array([1.0 / arm.length if kind == "prismatic" else 1.0 for kind in arm.limit_kinds])
                best = (rooms * weights).min(axis=1)[same].max()
                assert (room * weights).min() == pytest.approx(best, abs=1e-9)
            scaled = arm.jacobian(found.q[k, b]).copy()
            scaled[:3] /= arm.length
            scaled[:, [joint.kind == "prismatic" for joint in arm.joints]] *= arm.length
            assert found.singular[k, b] == pytest.approx(np.linalg.svd(scaled, compute_uv=False)[min(arm.n, 6) - 1])
        np.testing.assert_allclose(found.q[k, found.used[k]], path.targets[leg + 1], atol=1e-12)
    assert found.within[np.arange(len(posed)), found.used].all()


def test_out_of_reach_and_out_of_limits(cast) -> None:
    arm = cast.robot("glazer6")
    steps = [cast.step("joint", cast.pose(550, -100, 350)), cast.step("line", cast.pose(1400, 0, 300))]
    found = target_branches(cast.task(arm, arm.positions["home"], steps))
    assert found.used.tolist() == [-1, -1]
    assert not found.reached[1].any() and not found.within[1].any() and np.isnan(found.singular[1]).all()
    beyond = found.reached[0] & ~found.within[0]
    assert beyond.any() and (found.margin[0, beyond] < 0).all()
    assert (found.margin[0, found.within[0]] > 0).all()


def test_joint_targets_leave_no_choice(cast) -> None:
    arm = cast.robot("glazer6")
    found = target_branches(cast.task(arm, arm.positions["home"], [cast.step("joint", arm.positions["parked"])]))
    assert len(found.step) == 0 and found.q.shape[0] == 0


def test_a_joint_without_limits_is_no_limit(cast) -> None:
    arm = cast.endless_six()
    found = target_branches(cast.task(arm, arm.positions["home"], [cast.step("joint", cast.pose(550, -100, 350))]))
    assert (found.limit[found.reached] != 5).all()
