"""Random tasks never yield a table that breaks a limit, judged by differences of its positions alone."""

from __future__ import annotations

from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import pathplan
from tests.random_tasks import ARMS, FREE_ARMS, ROOT, broken_limits, judge, random_task


@pytest.mark.parametrize("name", ARMS)
@settings(max_examples=15, deadline=None)
@given(seed=st.integers(0, 2**32 - 1))
def test_no_random_task_breaks_a_limit(name, seed):
    arm = pathplan.load_arm(ROOT / "robots" / f"{name}.toml")
    with TemporaryDirectory() as folder:
        judge(random_task(arm, np.random.default_rng(seed)), Path(folder))


@pytest.mark.parametrize("name", ARMS)
def test_most_random_tasks_can_be_planned(name, tmp_path):
    """The property above would hold of a planner that refuses everything."""
    arm = pathplan.load_arm(ROOT / "robots" / f"{name}.toml")
    seen = [judge(random_task(arm, np.random.default_rng(seed)), tmp_path) for seed in range(12)]
    assert seen.count("planned") >= 6


@pytest.mark.parametrize("name", FREE_ARMS)
def test_tasks_that_leave_something_free_keep_the_limits(name, tmp_path):
    arm = pathplan.load_arm(ROOT / "robots" / f"{name}.toml")
    seen = [judge(random_task(arm, np.random.default_rng(seed), free=True), tmp_path) for seed in range(4)]
    assert "planned" in seen


def test_the_judge_sees_a_broken_limit():
    arm = pathplan.load_arm(ROOT / "robots" / "loader4.toml")
    still = np.tile(arm.positions["home"], (50, 1))
    assert broken_limits(arm, still, 0.004) == []
    jumping = still.copy()
    jumping[25:, 0] += 1.01 * arm.joints[0].velocity * 0.004
    name = arm.joints[0].name
    assert broken_limits(arm, jumping, 0.004) == [f"{name} derivative {n}" for n in (1, 2, 3)]
