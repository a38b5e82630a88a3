"""Task to Cartesian path to joint path q(s)."""

from pathplan.path.cartesian import CartesianPath, Finding, Leg, cartesian_path
from pathplan.path.follow import check_branches, follow_task
from pathplan.path.joint import JointPath
from pathplan.path.targets import TargetBranches, target_branches
from pathplan.path.taskpath import Cap, Corner, StepPart, Stretch, TaskPath, Wait
from pathplan.path.tool_motion import tool_derivatives

__all__ = [
    "Cap",
    "CartesianPath",
    "Corner",
    "Finding",
    "JointPath",
    "Leg",
    "StepPart",
    "Stretch",
    "TargetBranches",
    "TaskPath",
    "Wait",
    "cartesian_path",
    "check_branches",
    "follow_task",
    "target_branches",
    "tool_derivatives",
]
