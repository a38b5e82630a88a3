"""An arm, motions with known peaks, and tables of them, that the audit tests draw from."""

import math
from dataclasses import replace

import numpy as np

from pathplan.arm import Arm, Joint, Limits, Tool
from pathplan.table import JointTable, tick_times

INF = math.inf


def made_arm(**changes):
    """A lift with two turning links of 0.5 m and 0.4 m; a fourth limit row sums lift and bend."""
    joints = (
        Joint("lift", "prismatic", (-0.1, 0.9), 1.0, 4.0, 30.0, torque=500.0),
        Joint("swing", "revolute", (-2.0, 2.0), 2.0, 10.0, 80.0, torque=60.0),
        Joint("bend", "revolute", (-INF, INF), 5.0, 10.0, 30.0),
    )
    n = len(joints)

    def both(values):
        return np.array([[-value, value] for value in values])

    limits = Limits(
        names=("lift", "swing", "bend", "shaft"),
        matrix=np.vstack([np.eye(n), [0.0, 1.0, -2.0]]),
        position=np.array([*[joint.position for joint in joints], (-9.0, 9.0)]),
        velocity=both([1.0, 2.0, 5.0, 8.0]),
        acceleration=both([4.0, 10.0, 10.0, INF]),
        jerk=both([30.0, 80.0, 30.0, INF]),
        torque=both([500.0, 60.0, INF, INF]),
    )
    flange = np.eye(4)
    flange[:3, 3] = 0.9, 0.0, 0.3
    values = {"limits": limits, "tool": Tool("cup", np.eye(4), speed=None, acceleration=None), **changes}
    origins = [[0, 0, 0], [0, 0, 0.3], [0.5, 0, 0.3]]
    return Arm.from_axes("test arm", joints, origins, [[0, 0, 1]] * 3, flange, **values)


def min_jerk(tau):
    """Position and derivatives (4, N) of the minimum-jerk polynomial over 0..1 (Flash & Hogan 1985)."""
    tau = np.clip(tau, 0.0, 1.0)
    return np.array(
        [
            tau**3 * (10 - 15 * tau + 6 * tau**2),
            30 * tau**2 * (1 - tau) ** 2,
            60 * tau * (1 - 3 * tau + 2 * tau**2),
            60 * (1 - 6 * tau + 6 * tau**2),
        ]
    )


def move_table(start, distance, duration, cycle=0.004, **more):
    """A minimum-jerk move of all joints together, `duration` a multiple of the cycle."""
    ticks = np.arange(round(duration / cycle) + 1)
    shape = min_jerk(tick_times(ticks, cycle) / duration)
    q, v, a, j = (
        shape[k][:, None] * np.asarray(distance) / duration**k + (np.asarray(start) if k == 0 else 0.0)
        for k in range(4)
    )
    values = {
        "time": tick_times(ticks, cycle),
        "position": q,
        "velocity": v,
        "acceleration": a,
        "jerk": j,
        "step": (ticks > 0.5 * ticks[-1]).astype(np.int64),
        "joint_names": ("lift", "swing", "bend"),
        "joint_kinds": ("prismatic", "revolute", "revolute"),
        "cycle": cycle,
    }
    return JointTable(**{**values, **more})


def with_cell(table, quantity, row, joint, value):
    """The table with one value changed."""
    column = getattr(table, quantity).copy()
    column[row, joint] = value
    return replace(table, **{quantity: column})


def jerk_phases(times, phases, start=0.0, speed=0.0):
    """Position and derivatives (4, N) of phases (duration, jerk) that follow one another."""
    times = np.asarray(times, dtype=float)
    values = np.zeros((4, len(times)))
    state, begin = np.array([start, speed, 0.0]), 0.0
    for duration, jerk in phases:
        mine = times >= begin - 1e-12
        t = times[mine] - begin
        q, v, a = state
        values[:, mine] = [
            q + v * t + a * t**2 / 2 + jerk * t**3 / 6,
            v + a * t + jerk * t**2 / 2,
            a + jerk * t,
            np.full(len(t), jerk),
        ]
        d = duration
        state = np.array([q + v * d + a * d**2 / 2 + jerk * d**3 / 6, v + a * d + jerk * d**2 / 2, a + jerk * d])
        begin += duration
    after = times > begin - 1e-12
    values[0, after], values[1:, after] = state[0], 0.0
    return values
