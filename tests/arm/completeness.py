"""Every branch that a numeric search finds, on random reachable poses of arms of different structure; and the time.

    python -m tests.arm.completeness [poses] [starts] [part of an arm's label]

The referee is roboticstoolbox: `ETS.ik_LM` (Levenberg-Marquardt in C) from random starts, 200 a pose by default, its
answers taken where the tool stands within 1e-9 m and rad of the pose. An answer is found if one of ours is nearer than
1e-4 rad or m. Near a singularity that tolerance leaves whole families of answers to one branch: an answer that is none
of ours is carried on to rounding by Newton steps, and is no branch where the arm is singular there. With 10,000 poses
this takes two hours; the daily tests do a few dozen.
"""

from __future__ import annotations

import sys
import time
from dataclasses import dataclass, field

import numpy as np

from pathplan.arm import Arm
from pathplan.arm.refine import pose_errors, refine
from pathplan.arm.structure import geometry_of
from tests.arm.structures import STRUCTURES

SAME = 1e-4
SINGULAR = 1e-6  # smallest singular value (m, rad) below which the search's tolerance leaves more than `SAME` open


@dataclass
class Outcome:
    label: str
    method: str
    poses: int = 0
    places: int = 0
    branches: int = 0  # of ours that are valid
    referee: int = 0  # branches the referee found
    missed: list[tuple[np.ndarray, np.ndarray, float]] = field(default_factory=list)  # q, pose, how near ours come
    blurred: int = 0  # answers that the search's tolerance alone tells from others
    alone: int = 0  # poses of ours without the joint vector they came from
    position_error: float = 0.0
    angle_error: float = 0.0
    time: float = np.inf  # s of processor time a pose and branch
    counts: np.ndarray = field(default_factory=lambda: np.zeros(0, dtype=int))

    @property
    def share(self) -> float:
        return 1.0 - len(self.missed) / max(self.referee, 1)


def serial(arm: Arm, held: tuple[str, ...], values: np.ndarray) -> Arm:
    """The joints that are left, held ones standing at their values, as an arm of its own for the referee."""
    joints = [arm.joint_names.index(name) for name in held]
    q = np.zeros(arm.n)
    q[joints] = values
    g = geometry_of(arm, q, joints)
    left = [arm.joints[i] for i in arm.tool_joints if i not in joints]
    return Arm.from_axes("left", left, g.points, g.axes, g.zero_pose)


def apart(arm: Arm, q: np.ndarray, other: np.ndarray) -> np.ndarray:
    gap = np.abs(q - other)
    turning = np.array([joint.kind == "revolute" for joint in arm.joints])
    gap[..., turning] = np.abs((gap[..., turning] + np.pi) % (2 * np.pi) - np.pi)
    return gap.max(axis=-1)


def examine(label: str, poses: int, starts: int, seed: int = 1, timed: bool = True) -> Outcome:
    make, held = STRUCTURES[label]
    arm = make().equipped()
    value = np.full(len(held), 0.4)
    left = serial(arm, held, value)
    generator = np.random.default_rng(seed)
    low, high = (np.array(side) for side in zip(*(_range(joint) for joint in left.joints), strict=True))
    q = generator.uniform(low, high, (poses, left.n))
    targets = left.forward(q)

    def solve(some: np.ndarray):
        if held:
            found = arm.inverse_free(some, list(held), value[None])
            order = [i for i in arm.tool_joints if arm.joint_names[i] not in held]
            return (
                found.q[:, 0][:, :, order],
                np.asarray(found.valid)[:, 0],
                found.position_error[:, 0],
                found.angle_error[:, 0],
            )
        found = arm.inverse_batch(some)
        return found.q, np.asarray(found.valid), found.position_error, found.angle_error

    method = arm.free_solver(list(held)).typical.method if held else arm.solver.method
    outcome = Outcome(label, method, poses)
    ours, valid, position, angle = solve(targets)
    if timed:
        for _ in range(3):
            start = time.process_time()
            solve(targets[: min(poses, 2048)])
            outcome.time = min(outcome.time, (time.process_time() - start) / min(poses, 2048) / ours.shape[1])
    outcome.places = ours.shape[1]
    outcome.branches = int(valid.sum())
    outcome.counts = np.bincount(valid.sum(axis=1), minlength=outcome.places + 1)
    outcome.position_error, outcome.angle_error = float(position[valid].max()), float(angle[valid].max())
    gap = np.where(valid, apart(left, ours, q[:, None]), np.inf).min(axis=1)
    outcome.alone = int((gap > SAME).sum())
    for k in range(poses):
        seen = referee_branches(left, targets[k], generator.uniform(low, high, (starts, left.n)))
        for answer in seen:
            near = np.where(valid[k], apart(left, ours[k], answer), np.inf).min()
            if near > SAME:
                answer = carried_on(left, targets[k], answer)
                near = np.where(valid[k], apart(left, ours[k], answer), np.inf).min()
                if near <= SAME or np.linalg.svd(left.jacobian(answer), compute_uv=False)[-1] < SINGULAR:
                    outcome.blurred += 1
                    continue
            outcome.referee += 1
            if near > SAME:
                outcome.missed.append((answer, targets[k], float(near)))
    return outcome


def referee_branches(arm: Arm, pose: np.ndarray, starts: np.ndarray) -> list[np.ndarray]:
    """Distinct answers of the toolbox's numeric inverse."""
    if "referee" not in arm.__dict__:
        robot = arm.toolbox()
        for link in robot.links:
            link.qlim = np.array([-1e6, 1e6])
        arm.__dict__["referee"] = robot.ets()
    found: list[np.ndarray] = []
    for start in starts:
        theirs = arm.__dict__["referee"].ik_LM(pose, q0=start, ilimit=60, slimit=1, tol=1e-20, joint_limits=False)
        if not theirs.success:
            continue
        answer = np.asarray(theirs.q, dtype=float)
        if all(apart(arm, other, answer) > SAME for other in found):
            distance, angle = pose_errors(arm.forward(answer), pose)
            if distance < 1e-9 and angle < 1e-9:
                found.append(answer)
    return found


def carried_on(arm: Arm, pose: np.ndarray, answer: np.ndarray) -> np.ndarray:
    """A referee's answer moved on by Newton steps until it stands at the pose to rounding."""
    return refine(geometry_of(arm, np.zeros(arm.n), []), answer[None], pose[None], rounds=40)[0]


def _range(joint) -> tuple[float, float]:
    return joint.position if joint.kind == "prismatic" else (-np.pi, np.pi)


def main(poses: int = 10_000, starts: int = 200, part: str = "") -> None:
    total = [0, 0]
    for label in STRUCTURES:
        if part not in label:
            continue
        began = time.perf_counter()
        outcome = examine(label, poses, starts)
        total[0] += outcome.referee
        total[1] += len(outcome.missed)
        print(f"{label}: {outcome.method}")
        print(
            f"  {poses} poses, {starts} starts: the search found {outcome.referee} branches, {len(outcome.missed)} "
            f"of them missing among ours ({100 * outcome.share:.4f} % found); "
            f"ours {outcome.branches}, of those "
            f"{outcome.branches - outcome.referee + len(outcome.missed)} that the search did not find; "
            f"{outcome.blurred} answers of the search in no place of their own (near a singularity); "
            f"{outcome.alone} poses without the joints they came from"
        )
        print(
            f"  errors at most {outcome.position_error:.1e} m, {outcome.angle_error:.1e} rad; "
            f"{1e6 * outcome.time:.2f} us a pose and branch ({outcome.places}); poses by number of branches: "
            + ", ".join(f"{k}: {n}" for k, n in enumerate(outcome.counts) if n)
            + f"; {time.perf_counter() - began:.0f} s"
        )
        for q, _, near in outcome.missed[:10]:
            print(f"  missed: {np.array2string(q, precision=6, floatmode='fixed')}, nearest of ours {near:.2g} away")
        sys.stdout.flush()
    share = 100 * (1 - total[1] / max(total[0], 1))
    print(f"in all {total[0]} branches found by search, {total[1]} missing: {share:.4f} %")


if __name__ == "__main__":
    arguments = sys.argv[1:]
    main(int(arguments[0]) if arguments else 10_000, int(arguments[1]) if len(arguments) > 1 else 200, *arguments[2:3])
