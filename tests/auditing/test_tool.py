"""The tool: nearness to singularity against every row, acceleration against numeric differentiation, caps."""

from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pathplan.arm import Tool, load_arm
from pathplan.arm.kinematics import smallest_singular_value
from pathplan.auditing.shares import Rows
from pathplan.auditing.tool import nearest_singularity, step_caps, tool_acceleration, tool_speed
from pathplan.task.model import Step, Task
from tests.auditing.cast import made_arm


@settings(deadline=None, max_examples=40)
@given(st.integers(0, 2**32 - 1), st.sampled_from([1e-4, 1e-3, 0.02, 0.5]), st.integers(1, 3000))
def test_nearest_singularity_is_that_of_all_rows(arm, seed, pace, count):
    rng = np.random.default_rng(seed)
    q = np.cumsum(rng.normal(size=(count, 3)) * pace, axis=0) + rng.uniform(-1.5, 1.5, 3)
    rows = Rows(np.arange(count) * 0.001, np.arange(count) // 10)
    found = nearest_singularity(arm, q, rows, np.arange(count) + 5)
    values = smallest_singular_value(arm, q)
    assert found.value == pytest.approx(values.min(), rel=1e-12, abs=1e-15)
    i = found.row - 5
    assert values[i] == found.value and (found.time, found.step) == (i * 0.001, i // 10)


def test_a_spherical_wrist_is_singular_where_its_middle_joint_is_straight():
    """sin q5 = 0 (checks.md)."""
    arm = load_arm(Path(__file__).parents[2] / "robots" / "glazer6.toml")
    q = np.tile([0.1, 0.3, 0.2, 0.4, 0.0, 0.5], (301, 1))
    q[:, 4] = np.linspace(1.5, -1.5, 301)
    rows = Rows(np.arange(301) * 0.01, np.zeros(301, dtype=int))
    found = nearest_singularity(arm, q, rows, np.arange(301))
    assert found.value < 1e-12 and found.row == 150
    before = nearest_singularity(arm, q[:140], Rows(rows.time[:140], rows.step[:140]), np.arange(140))
    assert nearest_singularity(arm, q[:10], rows, np.arange(10) + 200, before) == before


def test_tool_acceleration_is_the_second_derivative_of_the_tool_point(arm):
    rng = np.random.default_rng(2)
    q, v, a = rng.normal(size=(3, 50, 3))
    h = 1e-4
    ends = [arm.forward(q + v * t + a * t**2 / 2)[:, :3, 3] for t in (-h, 0.0, h)]
    second = np.linalg.norm(ends[0] - 2 * ends[1] + ends[2], axis=1) / h**2
    assert tool_acceleration(arm, q, v, a) == pytest.approx(second, rel=1e-4)
    first = np.linalg.norm(ends[2] - ends[0], axis=1) / (2 * h)
    assert tool_speed(arm, q, v) == pytest.approx(first, rel=1e-6)
    assert tool_acceleration(arm, q, 0 * v, 0 * a) == pytest.approx(np.zeros(50))


def test_centripetal_acceleration(arm):
    """Stretched out, 0.9 m from the swing axis, at 2 rad/s: 3.6 m/s^2."""
    found = tool_acceleration(arm, np.zeros((1, 3)), np.array([[0.3, 2.0, 0.0]]), np.zeros((1, 3)))
    assert found[0] == pytest.approx(3.6, rel=1e-8)


def test_the_lowest_cap_counts():
    cup = Tool("cup", np.eye(4), speed=0.8, acceleration=3.0, turning_speed=1.5)
    arm = made_arm(tool=cup, tools={"cup": cup, "bare": Tool("bare", np.eye(4))})

    def step(tool="cup", **caps):
        return Step(0, "line", "", tool=tool, **caps)

    steps = (
        step(),
        step(speed=0.5, acceleration=9.0, turning_speed=1.2),
        step("bare"),
        step("bare", speed=2.0, acceleration=1.0, turning_speed=4.0),
        step("bare", held_speed=0.3),
    )
    caps = step_caps(arm, Task("", None, arm, np.zeros(3), steps, 0.004, speed=1.0, turning_speed=2.0))
    assert caps.speed.tolist() == [0.8, 0.5, 1.0, 1.0, 0.3]
    assert caps.acceleration.tolist() == [3.0, 3.0, np.inf, 1.0, np.inf]
    assert caps.turning_speed.tolist() == [1.5, 1.2, 2.0, 2.0, 2.0]
    assert [cap.tolist() for cap in step_caps(arm)] == [[0.8], [3.0], [1.5]]
