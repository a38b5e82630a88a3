"""What the poses of a task leave free, and what is known of it: held joints and the roll of the tool.

Known is what a start or target joint vector has, and what a step says (`axes`). An axis that carries a workpiece rests
while the tool is not on that workpiece. Everything else is free at the target, and along the lines that lead there.
The roll of the tool is free at a target whose own step leaves it free, if the step after it asks for no roll from there
on: a joint step, the end of the task, or another step with a free roll and the same tool.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from pathplan.arm.relative import ROLL
from pathplan.path.follower import Follower
from pathplan.path.geometry import Mask
from pathplan.path.joint import Array
from pathplan.path.newton import joint_weights
from pathplan.task.model import Step

__all__ = ["Freedom", "Knowledge"]


@dataclass(frozen=True, eq=False)
class Freedom:
    """Of m legs and H held joints. `known` (m + 1, H): at the start and after each leg, NaN where free; `kept` (m, H):
    the joint rests on that leg; `roll` (m + 1,): the tool may stand at any roll there; `rolling` (m,): and on the way.
    """

    known: Array
    kept: Mask
    roll: Mask
    rolling: Mask

    @property
    def chosen(self) -> bool:
        """Something is left to choose."""
        return bool(np.isnan(self.known).any() or self.roll.any() or self.rolling.any())


class Knowledge:
    """Gathers what is known of the held joints, step after step."""

    def __init__(self, follower: Follower, start: Array) -> None:
        self.follower = follower
        self.known: list[Array] = [start[list(follower.held)]]
        self.kept: list[Mask] = []

    @property
    def now(self) -> Array:
        """(H,) where the held joints stand, as far as that is known."""
        return self.known[-1]

    def learn(self, step: Step, view: int) -> None:
        """What a step says of its end."""
        follower, now = self.follower, self.now
        value, kept = np.full(len(now), np.nan), np.zeros(len(now), dtype=bool)
        joints = step.target.joints if step.target is not None else None
        carrying = follower.views[view].tool_joints
        for h, i in enumerate(follower.held):
            name = follower.arm.joint_names[i]
            if joints is not None:
                value[h] = joints[i]
            elif name in step.axes:
                value[h] = step.axes[name]
            elif i not in follower.arm.tool_joints and i not in carrying:
                value[h], kept[h] = now[h], True
        self.known.append(value)
        self.kept.append(kept)

    def change(self) -> float:
        """How far held joints known on both sides of the last step move on it: rad, or arm lengths."""
        weights = joint_weights(self.follower.arm)[list(self.follower.held)]
        moved = (self.known[-1] - self.known[-2]) * weights
        return float(np.linalg.norm(moved[np.isfinite(moved)]))

    def rest(self) -> None:
        """The last step turned out to be no motion."""
        self.known[-1] = np.where(np.isnan(self.known[-2]), self.known[-1], self.known[-2])
        self.kept[-1] = np.ones(len(self.now), dtype=bool)

    def freedom(self, kinds: Sequence[str], steps: Sequence[Step]) -> Freedom | None:
        """All of it; None where nothing is held and no roll is free."""
        rolling = np.array([step.roll_free for step in steps], dtype=bool)
        if not self.follower.held and not self.follower.carriers and not rolling.any():
            return None
        roll = np.zeros(len(steps) + 1, dtype=bool)
        if ROLL in self.follower.arm.joint_names:  # five axes decide it by themselves
            return Freedom(np.array(self.known), np.array(self.kept).reshape(len(steps), -1), roll, roll[1:])
        for i, step in enumerate(steps):
            if not step.roll_free:
                continue
            following = steps[i + 1] if i + 1 < len(steps) else None
            same = following is not None and following.roll_free and following.tool == step.tool
            roll[i + 1] = following is None or kinds[i + 1] in ("joint", "taught") or same
        return Freedom(np.array(self.known), np.array(self.kept).reshape(len(steps), -1), roll, rolling)
