"""Torque limits in the timing: closed forms of one joint, and a six-axis arm judged by pinocchio elsewhere."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.arm.path_torque import PathTorque, path_torque
from pathplan.timing.bound import bound_durations
from pathplan.timing.solve import time_motions
from pathplan.timing.torque import TorqueLimits
from tests.timing.cases import motion_of, straight

ROOT = Path(__file__).parent.parent.parent
FAST = (50.0, 1e3, 2e4)  # limits that never bind: velocity, acceleration, jerk


def one_joint(*, mass=1.0, weight=0.0, viscous=0.0, coulomb=0.0, peak=10.0, corner=np.inf, fall=0.0) -> TorqueLimits:
    """A hoist: a mass moved straight up against its weight and friction."""

    def terms(q, q1, q2):
        still = np.zeros_like(q)
        return PathTorque(mass * q1, mass * q2, viscous * q1, coulomb * np.sign(q1), still + weight)

    return TorqueLimits(terms, np.array([[-peak, peak]]), np.array([corner]), np.array([fall]))


def hoisted(distance: float, limits: TorqueLimits):
    motion = replace(motion_of(straight([distance], *FAST)), torque=limits)
    return time_motions([motion])[0], float(bound_durations([motion])[0])


def test_hoist_with_weight_and_friction():
    """Up with (peak - weight - friction)/mass, down with (peak + weight + friction)/mass: bang-bang, closed form."""
    stretch, bound = hoisted(1.0, one_joint(mass=2.0, weight=4.0, coulomb=1.0, peak=10.0))
    rise, brake = (10 - 4 - 1) / 2, (10 + 4 + 1) / 2
    closed = np.sqrt(2 * 1.0 * (1 / rise + 1 / brake))
    assert closed <= stretch.duration <= 1.003 * closed
    assert 0.99 * closed <= bound <= closed * (1 + 1e-9)


def test_hoist_with_viscous_friction():
    """m dv/dt = peak - B v speeding up, m dv/dt = -peak - B v braking: integrated numerically as the referee."""
    mass, viscous, peak = 1.0, 3.0, 10.0
    stretch, bound = hoisted(2.0, one_joint(mass=mass, viscous=viscous, peak=peak))

    def distances(top):
        """Distance and time to reach the speed top and to stop from it, in closed form."""
        end, tau = peak / viscous, mass / viscous
        up = -tau * np.log(1 - top / end)
        down = tau * np.log(1 + top / end)
        return end * up - tau * top + tau * top - end * down, up + down

    low, high = 0.0, peak / viscous * (1 - 1e-12)
    for _ in range(200):
        middle = (low + high) / 2
        low, high = (middle, high) if distances(middle)[0] < 2.0 else (low, middle)
    closed = distances(low)[1]
    assert closed <= stretch.duration <= 1.003 * closed
    assert 0.97 * closed <= bound <= closed * (1 + 1e-9)


def test_peak_torque_that_falls_with_speed():
    limits = one_joint(mass=1.0, peak=10.0, corner=2.0, fall=2.5)
    stretch, bound = hoisted(4.0, limits)
    t = np.linspace(0, stretch.duration, 20001)
    _, speed, acceleration, _ = (value[:, 0] for value in stretch.derivatives(t))
    allowed = 10.0 - 2.5 * np.maximum(np.abs(speed) - 2.0, 0.0)
    assert np.all(np.abs(acceleration) <= allowed * (1 + 1e-6) + 1e-9)
    assert (np.abs(acceleration) / allowed).max() > 0.995
    free = hoisted(4.0, one_joint(mass=1.0, peak=10.0))[0]
    assert bound <= stretch.duration and stretch.duration > 1.05 * free.duration


def test_pendulum_slows_where_gravity_takes_its_torque():
    """A pendulum swung up by a quarter turn: torque m l^2 q'' + m g l sin q within its limit everywhere."""
    inertia, weight, peak = 0.5, 4.0, 6.0

    def terms(q, q1, q2):
        still = np.zeros_like(q)
        return PathTorque(inertia * q1, inertia * q2, still, still, weight * np.sin(q))

    limits = TorqueLimits(terms, np.array([[-peak, peak]]), np.array([np.inf]), np.array([0.0]))
    motion = replace(motion_of(straight([np.pi / 2], *FAST)), torque=limits)
    stretch = time_motions([motion])[0]
    t = np.linspace(0, stretch.duration, 20001)
    q, _, acceleration, _ = stretch.derivatives(t)
    torque = inertia * acceleration + weight * np.sin(q)
    assert 0.999 * peak < np.abs(torque).max() <= peak * (1 + 1e-6)
    # energy: least time by quadrature of dq / speed, torque +peak to the switch, -peak after it
    work_up = peak * q[:, 0] - weight * (1 - np.cos(q[:, 0]))
    work_down = peak * (np.pi / 2 - q[:, 0]) + weight * (1 - np.cos(q[:, 0])) * 0 + weight * (np.cos(q[:, 0]) - 0.0)
    speed = np.sqrt(2 * np.maximum(np.minimum(work_up, work_down), 0.0) / inertia)  # rounding at the ends
    x = np.linspace(0, 1, 200001)
    place = np.pi / 2 * (3 * x**2 - 2 * x**3)  # crowds the ends, where the speed is zero
    value = np.interp(place, q[:, 0], speed)
    closed = np.sum(np.diff(place) / np.maximum((value[1:] + value[:-1]) / 2, 1e-9))
    assert stretch.duration == pytest.approx(closed, rel=5e-3)


def weak(task: pathplan.Task, share: float) -> pathplan.Task:
    limits = replace(task.arm.limits, torque=task.arm.limits.torque * share)
    return replace(task, arm=replace(task.arm, limits=limits))


@pytest.fixture(scope="module")
def task() -> pathplan.Task:
    return pathplan.load_task(ROOT / "examples" / "glazer6-pick-and-place.toml")


def test_a_weak_arm_is_slower_and_never_overloaded(task):
    strong, plan = pathplan.plan(task), pathplan.plan(weak(task, 0.31))
    assert plan.motion_time > 1.015 * strong.motion_time
    assert plan.bounds.sum() <= plan.motion_time
    limit = plan.task.arm.limits.torque[:6, 1]
    worst = 0.0
    for part in plan.parts:
        if part.timing is not None:
            t = np.arange(0.0, part.timing.duration, task.cycle / 20)
            q, qd, qdd, _ = part.timing.derivatives(t)
            worst = max(worst, (np.abs(part.stretch.arm.torque(q, qd, qdd)) / limit).max())
    assert 0.999 < worst <= 1 + 1e-6


def test_a_pose_that_cannot_be_held_is_refused(task):
    with pytest.raises(pathplan.LimitError) as caught:
        pathplan.plan(weak(task, 0.2))
    assert str(caught.value) == (
        "glazer6-pick-and-place.toml: step[1]: joint elbow needs 28.43 N m just to hold the pose on this step, "
        "and its peak torque is 28 N m"
    )
    assert caught.value.data["joint"] == "elbow" and caught.value.data["step"] == 0


def test_parts_of_the_torque_add_up(task):
    arm, rng = task.arm, np.random.default_rng(0)
    q, q1, q2 = rng.uniform(-1, 1, (3, 50, 6))
    parts = path_torque(arm, q, q1, q2)
    speed, acceleration = 1.7, -2.3
    total = parts.inertia * acceleration + parts.speed * speed**2 + parts.viscous * speed
    total += parts.coulomb + parts.gravity
    expected = arm.torque(q, q1 * speed, q2 * speed**2 + q1 * acceleration)
    np.testing.assert_allclose(total, expected, atol=1e-9)
