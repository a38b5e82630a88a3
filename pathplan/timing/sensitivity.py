"""What a little more of each limit would save: the multipliers of the fine timing.

At the optimum of a constrained problem the multiplier of a limit is what the cost gains per unit of the limit (Boyd &
Vandenberghe 2004, sec. 5.6). On the central path they are the barrier weight over the slack.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pathplan.timing.barrier import follow_central_path
from pathplan.timing.fine import FineProblem
from pathplan.timing.mesh import GAUSS_LOBATTO, Mesh, rows_at
from pathplan.timing.motion import Motion
from pathplan.timing.stretch import StretchTiming

Array = NDArray[np.float64]

_GAP = 2e-4
_SLOWER = 0.97  # of b: strictly inside every limit, where the central path is joined


@dataclass(frozen=True)
class Sensitivity:
    """Seconds saved by one stretch per relative change of each limit, by where on the path: at s (P,).

    velocity, acceleration, jerk (R, P) by row; torque (n, P) by joint; tool_speed, tool_turning_speed,
    tool_acceleration (P,).
    """

    s: Array
    velocity: Array
    acceleration: Array
    jerk: Array
    torque: Array
    tool_speed: Array
    tool_turning_speed: Array
    tool_acceleration: Array


def sensitivity(motion: Motion, timing: StretchTiming) -> Sensitivity:
    """Sensitivities of a timing that is optimal for a motion under all its limits (full pace)."""
    mesh = Mesh(motion, timing.clock, timing.tau, float(timing.tau[-1] / (len(timing.tau) - 1)))
    problem = FineProblem([mesh], rows_at(mesh, GAUSS_LOBATTO))
    x = np.stack([timing.b, timing.slope * mesh.unit], axis=1).ravel()
    x = problem.slowed(x, _SLOWER, only_down=True)
    mu = _GAP * problem.durations(x) / problem.gap
    x, _ = follow_central_path(problem, x, start=5 * mu, final=mu)
    state, rows = problem.state(x), problem.rows
    m = mu[0] * problem.share
    a_low, a_high = rows.acceleration_range
    j_low, j_high = rows.jerk_range
    acceleration = m * (a_high / (a_high - state.acceleration) - a_low / (state.acceleration - a_low))
    root = state.root
    jerk = m * root * (j_high / (j_high * root - state.jerk) - j_low / (state.jerk - j_low * root))
    wall = 2 * m * rows.wall / (rows.wall - state.b[0])
    tool = np.zeros_like(wall)
    if state.tool is not None:
        used = (state.tool**2).sum(axis=0)
        tool = np.where(used > 0, 2 * m / (1.0 - used), 0.0)
    s, velocity, by_tool = _by_wall(mesh, wall)
    torque = _torque(motion, problem, state.torque, m)
    return Sensitivity(s, velocity, _flat(acceleration), _flat(jerk), torque, by_tool[0], by_tool[1], tool.ravel())


def _flat(values: Array) -> Array:
    return values.reshape(len(values), -1)


def _by_wall(mesh: Mesh, wall: Array) -> tuple[Array, Array, Array]:
    """Path parameters (P,); what walls are worth by what sets them: velocities (R, P), speeds of the tool (2, P)."""
    motion = mesh.motion
    tau = (mesh.tau[:-1] + mesh.width * GAUSS_LOBATTO[:, None]).ravel()
    s = mesh.clock.derivatives(tau, 0)[0]
    piece, _ = motion.path.locate(s)
    along = motion.along(piece, s, 2)
    walls, tool = along.speed_walls().T, along.tool_walls()
    by_tool = tool.min(axis=0) < walls.min(axis=0)
    worth, at = wall.ravel(), np.arange(len(s))
    velocity, of_tool = np.zeros_like(walls), np.zeros_like(tool)
    velocity[walls.argmin(axis=0), at] = np.where(by_tool, 0.0, worth)
    of_tool[tool.argmin(axis=0), at] = np.where(by_tool, worth, 0.0)
    return s, velocity, of_tool


def _torque(motion: Motion, problem: FineProblem, torque: Array | None, m: Array) -> Array:
    joints = motion.path.joints
    total = np.zeros((joints, m.size))
    if torque is None or motion.torque is None:
        return total
    rows = motion.along(np.zeros(1, dtype=np.intp), np.zeros(1), 2).torque_rows(np.ones(1), np.zeros(1))
    assert rows is not None
    np.add.at(total, rows.joint, _flat(m / (1.0 - torque)))
    return total
