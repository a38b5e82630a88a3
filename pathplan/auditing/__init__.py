"""The audit: what a joint table uses of every limit, where, and whether it may be run."""

from pathplan.auditing.drives import DriveUse, LoadChange, TorqueJumps
from pathplan.auditing.held import HeldSpeed
from pathplan.auditing.judge import audit
from pathplan.auditing.model import Audit, Finding, JointAudit, Pacing, Peak, Singularity, StepPacing
from pathplan.auditing.planned import (
    CornerUse,
    Deviation,
    Evidence,
    StepSpeed,
    joint_peaks,
    path_deviation,
    tool_speed_by_step,
    worse_deviation,
    worse_peaks,
)

__all__ = [
    "Audit",
    "CornerUse",
    "Deviation",
    "DriveUse",
    "Evidence",
    "Finding",
    "HeldSpeed",
    "JointAudit",
    "LoadChange",
    "Pacing",
    "Peak",
    "Singularity",
    "StepPacing",
    "StepSpeed",
    "TorqueJumps",
    "audit",
    "joint_peaks",
    "path_deviation",
    "tool_speed_by_step",
    "worse_deviation",
    "worse_peaks",
]
