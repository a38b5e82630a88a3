"""The choice of branches against enumeration of everything there is, with tracking by the arm's own inverse."""

from __future__ import annotations

from itertools import product

import numpy as np
import pytest

from pathplan.path import cartesian_path, follow_task
from pathplan.path.cartesian import tool_frames
from pathplan.path.choice import candidate_states, choose, routes
from pathplan.path.states import within_limits
from pathplan.path.tracking import track


def travel(arm, a: np.ndarray, b: np.ndarray) -> float:
    return float(np.max(np.abs(b - a) / [joint.velocity for joint in arm.joints]))


def follow_line(arm, a: np.ndarray, start: np.ndarray, end: np.ndarray, samples: int = 200):
    """Where a line from joint vector a ends and how long it takes, by nearest answers; None if it can't."""
    from scipy.spatial.transform import Rotation, Slerp

    shares = np.linspace(0, 1, samples + 1)
    poses = np.tile(np.eye(4), (samples + 1, 1, 1))
    turn = Slerp([0, 1], Rotation.from_matrix([start[:3, :3], end[:3, :3]]))
    poses[:, :3, :3] = turn(shares).as_matrix()
    poses[:, :3, 3] = start[:3, 3] + shares[:, None] * (end[:3, 3] - start[:3, 3])
    branches = arm.inverse_batch(poses)
    turns = 2 * np.pi * np.array([joint.kind == "revolute" for joint in arm.joints])
    low, high = np.array([joint.position for joint in arm.joints]).T
    q, time = a, 0.0
    for answers, valid in zip(branches.q[1:], branches.valid[1:], strict=True):
        if not valid.any():
            return None
        change = answers[valid] - q
        change -= turns * np.round(change / (2 * np.pi))
        change = change[np.argmin(np.abs(change).max(axis=1))]
        then = q + change
        if np.abs(change).max() > 0.3 or (then < low).any() or (then > high).any():
            return None
        time += travel(arm, q, then)
        q = then
    return q, time


def enumerate_all(task) -> tuple[float, np.ndarray]:
    """Shortest time and joint vectors at the targets over every combination of answers."""
    arm = task.arm
    best = (np.inf, np.zeros(0))
    joint_steps = [step for step in task.steps if step.motion == "joint"]
    answers = [
        [step.target.joints] if step.target.joints is not None else list(arm.inverse(step.target.frame_from_tool))
        for step in joint_steps
    ]
    memory: dict[tuple, tuple[np.ndarray, float] | None] = {}
    for combination in product(*answers):
        q, total, places, pick = task.start, 0.0, [task.start], iter(combination)
        for step in task.steps:
            if step.motion == "joint":
                then = next(pick)
                total += travel(arm, q, then)
            else:
                key = (step.index, *np.round(q, 6))
                if key not in memory:
                    memory[key] = follow_line(arm, q, arm.forward(q), step.target.frame_from_tool)
                if memory[key] is None:
                    break
                then, spent = memory[key]
                total += spent
            q = then
            places.append(q)
        else:
            if total < best[0]:
                best = (total, np.array(places))
    return best


def tasks(cast) -> dict:
    glazer, sorter = cast.robot("glazer6"), cast.robot("sorter4")
    p = cast.pose
    home = glazer.positions["home"]
    return {
        "line between joint steps": cast.task(
            glazer,
            home,
            [cast.step("joint", p(450, -250, 300)), cast.step("line", p(450, 250, 300)), cast.step("joint", home)],
        ),
        "two lines, low in front": cast.task(
            glazer,
            home,
            [
                cast.step("joint", p(500, 100, 150)),
                cast.step("line", p(400, 200, 150, 180, 0, 60)),
                cast.step("joint", p(420, -200, 400, 160, 20, 90)),
                cast.step("line", p(520, -200, 400, 180, 0, 90)),
            ],
        ),
        "beside the arm": cast.task(
            glazer,
            home,
            [cast.step("joint", p(-150, 500, 350)), cast.step("line", p(150, 520, 350)), cast.step("joint", home)],
        ),
        "sorter": cast.task(
            sorter,
            sorter.positions["home"],
            [
                cast.step("joint", sorter.forward(np.array([0.8, -1.2, -0.05, 1.0]))),
                cast.step("line", sorter.forward(np.array([0.4, -1.0, -0.1, 2.0]))),
                cast.step("joint", sorter.forward(np.array([-0.9, 1.4, -0.02, 0.3]))),
                cast.step("line", sorter.forward(np.array([-0.5, 1.2, -0.02, -1.0]))),
            ],
        ),
    }


@pytest.mark.parametrize("name", ["line between joint steps", "two lines, low in front", "beside the arm", "sorter"])
def test_choice_is_the_best_of_all(cast, name: str) -> None:
    task = tasks(cast)[name]
    time, places = enumerate_all(task)
    assert np.isfinite(time)
    path = cartesian_path(task)
    frames = tool_frames(path)
    states = candidate_states(path, frames)
    rows = [i for i, leg in enumerate(path.legs) if leg.segment >= 0]
    tracks = track(path.course, path.segments, frames[rows])
    choice = choose(path, states, tracks, routes(path, states, tracks))
    assert choice.time == pytest.approx(time, rel=1e-3)
    np.testing.assert_allclose(follow_task(task).targets, places, atol=1e-6)


def test_shortest_way_is_not_the_nearest_first_target(cast) -> None:
    """Greedy choice would take the nearest answer at the first target and pay for it later."""
    arm = cast.robot("glazer6")
    home = arm.positions["home"]
    found = None
    r = np.random.default_rng(5)
    low, high = arm.limits.position[:6].T
    for _ in range(40):
        first, second = (arm.forward(low + (high - low) * r.uniform(0.2, 0.8, 6)) for _ in range(2))
        path = follow_task(cast.task(arm, home, [cast.step("joint", first), cast.step("joint", second)]))
        answers = arm.inverse(first)
        nearest = answers[np.argmin([travel(arm, home, q) for q in answers])]
        rest = min(travel(arm, nearest, q) for q in arm.inverse(second))
        best = travel(arm, home, path.targets[1]) + travel(arm, path.targets[1], path.targets[2])
        assert best <= travel(arm, home, nearest) + rest + 1e-12
        if np.abs(nearest - path.targets[1]).max() > 1e-6:
            found = best
    assert found is not None  # the case did come up


def test_configuration_asked_is_kept(cast) -> None:
    arm = cast.robot("glazer6")
    target = cast.pose(500, 150, 300)
    labels = arm.inverse_batch(target[None]).labels
    for wrist in ("positive", "negative"):
        task = cast.task(arm, arm.positions["home"], [cast.step("joint", target, configuration={"wrist": wrist})])
        q = follow_task(task).targets[1]
        branches = arm.inverse_batch(target[None])
        same = [b for b in range(len(labels)) if np.abs(np.exp(1j * branches.q[0, b]) - np.exp(1j * q)).max() < 1e-9]
        assert {labels[b]["wrist"] for b in same} == {wrist}


def test_configuration_after_a_line_reaches_back(cast) -> None:
    """What is asked at the end of a line decides the branch at its start."""
    arm = cast.robot("glazer6")
    a, b = cast.pose(500, 150, 300), cast.pose(500, 50, 250)
    for wrist, sign in (("positive", 1), ("negative", -1)):
        steps = [cast.step("joint", a), cast.step("line", b, configuration={"wrist": wrist})]
        targets = follow_task(cast.task(arm, arm.positions["home"], steps)).targets
        assert np.sign(targets[1][4]) == np.sign(targets[2][4]) == sign


@pytest.mark.parametrize("beyond", [1e-5, 0.1])
def test_limits_hold_along_the_whole_line(cast, beyond: float) -> None:
    """Both ends are inside every limit, the middle is not for the elbow that would be quickest: by a hair between two
    samples, or by much.
    """
    from dataclasses import replace

    arm = cast.robot("sorter4")
    home = arm.positions["home"]
    a = arm.forward(home)
    a[:3, 3] = [0.42, -0.25, a[2, 3]]
    b = a.copy()
    b[1, 3] = 0.25
    steps = [cast.step("joint", a), cast.step("line", b)]
    free = follow_task(cast.task(arm, home, steps))
    stretch = free.stretches[1].path
    elbow = stretch(np.linspace(0, stretch.length, 4001))[:, 1]
    sign = np.sign(elbow[0])
    peak = np.abs(elbow).max()
    assert peak > np.abs(elbow[[0, -1]]).max() + 0.15
    limits = list(arm.joints[1].position)
    limits[1 if sign > 0 else 0] = float(sign * (peak - beyond))
    joints = (arm.joints[0], replace(arm.joints[1], position=tuple(limits)), *arm.joints[2:])
    tight = replace(arm, joints=joints, limits=None)
    path = follow_task(cast.task(tight, home, steps))
    cast.check_path(path)
    assert np.sign(path.targets[1][1]) == -sign


def test_coupled_rows_are_kept(cast) -> None:
    """A limit on the sum of two joints, which no single joint breaks, turns the choice to another branch."""
    from dataclasses import replace

    from pathplan.arm import Limits

    arm = cast.robot("glazer6")
    home = arm.positions["home"]
    a, b = cast.pose(450, -250, 300, 150), cast.pose(450, 250, 300, 180)
    steps = [cast.step("joint", a), cast.step("line", b)]
    free = follow_task(cast.task(arm, home, steps))
    stretch = free.stretches[1].path
    total = stretch(np.linspace(0, stretch.length, 200))[:, 3:5].sum(axis=1)
    row = np.zeros((1, 6))
    row[0, 3:5] = 1.0
    assert total.min() < home[3:5].sum() - 0.1
    side = (float(total.min() + 1e-3), np.inf)
    none = [[-np.inf, np.inf]]
    limits = arm.limits
    tight = replace(
        arm,
        limits=Limits(
            (*limits.names, "coupled"),
            np.vstack([limits.matrix, row]),
            np.vstack([limits.position, [side]]),
            *(np.vstack([getattr(limits, kind), none]) for kind in ("velocity", "acceleration", "jerk", "torque")),
        ),
    )
    assert not within_limits(tight, stretch(np.linspace(0, stretch.length, 500))).all()
    path = follow_task(cast.task(tight, home, steps))
    for part in path.stretches:
        assert within_limits(tight, part.path(np.linspace(0, part.path.length, 500))).all()


def test_turn_equivalents_are_used(cast) -> None:
    """The last joint starts a whole turn off: the step goes to the equivalent nearby."""
    arm = cast.robot("glazer6")
    low, high = arm.joints[5].position
    assert high - low > 2 * np.pi + 1.0
    home = arm.positions["home"].copy()
    home[5] = high - 0.1
    target = arm.forward(home)
    target[:3, 3] += [0.0, 0.02, 0.0]
    q = follow_task(cast.task(arm, home, [cast.step("joint", target)])).targets[1]
    assert abs(q[5] - home[5]) < 0.5
