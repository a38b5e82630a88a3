"""What would buy time: estimates from multipliers agree with planning again."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import pytest

import pathplan
from pathplan.timing.sensitivity import sensitivity
from pathplan.timing.solve import time_motions
from tests.timing.cases import CAST, Case, motion_of

ROOT = Path(__file__).parent.parent


@pytest.mark.parametrize("name", ["wavy", "corner", "one joint", "never at speed"])
def test_multipliers_foretell_what_a_limit_is_worth(name):
    """Against finite differences: all limits of one kind 2 % higher."""
    case = CAST[name]
    motion = motion_of(case)
    timing = time_motions([motion])[0]
    worth = sensitivity(motion, timing)
    for k, quantity in enumerate(("velocity", "acceleration", "jerk"), start=1):
        more = Case(*(values * 1.02 if i == k else values for i, values in enumerate(case)))
        saved = timing.duration - time_motions([motion_of(more)])[0].duration
        estimate = getattr(worth, quantity).sum() * 0.02
        assert estimate == pytest.approx(saved, abs=2.5e-3 * timing.duration)


def test_scaling_every_limit_accounts_for_the_whole_time():
    """Velocity limits k times, accelerations k^2, jerks k^3: the time shrinks by k, so the parts add up to it."""
    case = CAST["wavy"]
    motion = motion_of(case)
    timing = time_motions([motion])[0]
    worth = sensitivity(motion, timing)
    total = worth.velocity.sum() + 2 * worth.acceleration.sum() + 3 * worth.jerk.sum()
    assert total == pytest.approx(timing.duration, rel=0.05)


@pytest.fixture(scope="module")
def plan() -> pathplan.Plan:
    return pathplan.plan(pathplan.load_task(ROOT / "examples" / "loader4-belt-to-car.toml"))


def test_savings_are_those_of_planning_again(plan):
    savings = plan.savings(top=3)
    assert savings and list(savings) == sorted(savings, key=lambda saving: -saving.saved)
    best = savings[0]
    assert best.what == "limit" and best.change == 0.1 and best.joint is not None
    limits = plan.task.arm.limits
    row = limits.names.index(best.joint)
    values = getattr(limits, best.quantity).copy()
    values[row] *= 1.1
    arm = replace(plan.task.arm, limits=replace(limits, **{best.quantity: values}))
    again = pathplan.plan(replace(plan.task, arm=arm))
    assert plan.motion_time - again.motion_time == pytest.approx(best.saved, abs=5e-4 * plan.motion_time)
    for saving in savings:
        if saving.estimate is not None:
            assert saving.estimate == pytest.approx(saving.saved, rel=0.5, abs=0.01)


def test_a_cap_on_the_whole_task_is_one_change(plan):
    slow = pathplan.plan(replace(plan.task, speed=0.25))
    best = slow.savings(top=1)[0]
    assert (best.what, best.quantity, best.step) == ("cap", "tool speed", None)
    assert best.saved > 0.05 * slow.motion_time
