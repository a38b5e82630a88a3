"""Properties of random tasks: what is planned keeps every promise, what is refused is refused in one line."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from pathplan.errors import PathplanError
from pathplan.path import follow_task

steps_of = st.lists(
    st.tuples(
        st.sampled_from(["joint", "line", "line", "line", "arc", "circle", "same"]),
        st.sampled_from(["none", "length", "length", "angle", "share"]),
        st.floats(0.02, 1.0),
        st.integers(0, 2**32 - 1),
    ),
    min_size=2,
    max_size=6,
)


def near(random: np.random.Generator, pose: np.ndarray, axes: int) -> np.ndarray:
    """A pose not far from another that an arm with so many axes may serve."""
    turn = random.normal(size=3) * 0.25
    if axes < 6:
        turn[:2] = 0.0
    out = pose.copy()
    out[:3, :3] = Rotation.from_rotvec(turn).as_matrix() @ pose[:3, :3]
    out[:3, 3] += random.uniform(-0.1, 0.1, 3)
    return out


def built(cast, arm, asked: list) -> object:
    low, high = arm.limits.position[: arm.n].T
    pose = arm.forward(arm.positions["home"])
    steps = []
    for motion, kind, size, seed in asked:
        random = np.random.default_rng(seed)
        blend = {
            "none": None,
            "length": cast.length(round(60 * size, 3)),
            "angle": cast.angle(round(30 * size, 3)),
            "share": cast.share(round(50 * size, 3)),
        }[kind]
        if motion == "joint":
            pose = arm.forward(low + (high - low) * random.uniform(0.3, 0.7, arm.n))
        elif motion in ("line", "arc"):
            then = near(random, pose, arm.n)
            via = (pose[:3, 3] + then[:3, 3]) * 500 + random.uniform(-80, 80, 3)
            pose = then
        if motion == "circle":
            centre = 1e3 * pose[:3, 3] + [*random.uniform(-60, 60, 2), 0]
            along = bool(random.random() < 0.3)
            axis = np.array([0, 0, 1.0])
            steps.append(cast.step("arc", centre=centre, axis=axis, angle=2 * np.pi, along=along, blend=blend))
        elif motion == "arc":
            steps.append(cast.step("arc", pose, via=via, blend=blend))
        else:
            steps.append(cast.step("line" if motion == "same" else motion, pose, blend=blend))
    return cast.task(arm, arm.positions["home"], steps)


@pytest.mark.parametrize("name", ["glazer6", "sorter4", "loader4"])
@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(asked=steps_of)
def test_random_tasks(cast, name: str, asked: list) -> None:
    task = built(cast, cast.robot(name), asked)
    try:
        path = follow_task(task)
    except PathplanError as refusal:
        text = str(refusal)
        assert text.startswith("t.toml: step[") and "\n" not in text
        return
    cast.check_path(path)
    moved = sorted({part.step for stretch in path.stretches for part in stretch.steps})
    waited = sorted(part.step for part in path.sequence if not hasattr(part, "path"))
    assert sorted(moved + waited) == list(range(len(task.steps)))
    assert len(path.corners) <= len(task.steps)
