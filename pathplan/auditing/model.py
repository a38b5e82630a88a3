"""What an audit says, as data. SI; steps and rows count from 0; shares are 1 at the limit."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

if TYPE_CHECKING:
    from pathplan.auditing.drives import DriveUse
    from pathplan.auditing.held import HeldSpeed
    from pathplan.auditing.passes import Pass
    from pathplan.auditing.planned import CornerUse, Deviation, StepSpeed
    from pathplan.auditing.tolerances import TurnedAside

__all__ = [
    "QUANTITIES",
    "TOLERANCE",
    "TOOL",
    "Audit",
    "Finding",
    "JointAudit",
    "Level",
    "Pacing",
    "Peak",
    "Singularity",
    "StepPacing",
]

TOOL = ("tool speed", "tool acceleration", "tool turning speed")  # what caps on the tool limit
QUANTITIES = ("position", "velocity", "acceleration", "jerk", "torque")
TOLERANCE = 1e-6  # of a limit: shares up to 1 + TOLERANCE pass (design.md, numeric contract)
Level = Literal["exceedance", "warning", "note"]


@dataclass(frozen=True)
class Peak:
    """The value that uses most of a limit.

    `peak` is the value with its sign and `limit` the limit on that side, with its sign. The share of a
    velocity, acceleration, jerk, torque or speed is peak / limit. A position uses its range from the
    middle: share 0 there, 1 at either limit (of a one-sided limit, 1 rad or 1 m counts as half the
    range); `margin` is its distance from the nearer limit, negative beyond it.
    """

    peak: float
    limit: float
    share: float
    time: float  # s
    step: int
    row: int
    margin: float | None = None


@dataclass(frozen=True)
class JointAudit:
    """One joint, or one row that limits a sum of joints. None where there is no limit or nothing to judge.

    `differences` holds the same for velocity, acceleration and jerk as the drive sees them: finite
    differences of the written positions, see `pathplan.auditing.differences`.
    """

    name: str
    kind: str  # "revolute", "prismatic", or "" for a row over both kinds, which has no screen unit of its own
    position: Peak | None = None
    velocity: Peak | None = None
    acceleration: Peak | None = None
    jerk: Peak | None = None
    torque: Peak | None = None
    differences: Mapping[str, Peak] | None = None

    def peaks(self) -> dict[str, Peak]:
        """Quantity -> peak, of those there are."""
        found = {quantity: getattr(self, quantity) for quantity in QUANTITIES}
        return {quantity: peak for quantity, peak in found.items() if peak is not None}


@dataclass(frozen=True)
class Finding:
    """Something to know. An "exceedance" means that the table must not be run.

    `joint` is the name of the joint or limit row; value and limit are SI. What is not known is None.
    """

    level: Level
    text: str
    time: float | None = None
    step: int | None = None
    joint: str | None = None
    quantity: str | None = None
    value: float | None = None
    limit: float | None = None
    row: int | None = None


@dataclass(frozen=True)
class Singularity:
    """Where the table comes nearest to a singularity: the smallest singular value of the Jacobian there.

    Dimensionless: linear rows over the arm's characteristic length, prismatic columns times it.
    """

    value: float
    time: float
    step: int
    row: int


@dataclass(frozen=True)
class Pacing:
    """A limit that sets the pace of a step for part (0..1) of its time. `joint` is None for the tool."""

    joint: str | None
    quantity: str  # "velocity", "acceleration", "jerk", "torque", "tool ..." of `TOOL`, "none"
    part: float


@dataclass(frozen=True)
class StepPacing:
    """What paces one step, largest part first. "none" is the time in which no limit is used to 90 %."""

    step: int
    name: str
    duration: float  # s of the table's time
    parts: tuple[Pacing, ...]


@dataclass(frozen=True)
class Audit:
    """The audit of a joint table. `passed` is true when no finding is an exceedance.

    `measured` says where velocity, acceleration and jerk come from: "columns" of the table, or
    "differences" of its positions where it has no such columns. What needs the plan is None or empty
    without one.
    """

    arm: str
    task: str
    count: int  # rows of the table
    cycle: float | None  # s, as stated or found from the times; None where they are irregular
    duration: float  # s, first to last row
    measured: Literal["columns", "differences"]
    joints: tuple[JointAudit, ...]
    rows: tuple[JointAudit, ...]  # limits on sums of joints (coupled drives)
    findings: tuple[Finding, ...]
    tool_speed: Peak | None = None
    tool_acceleration: Peak | None = None
    tool_turning_speed: Peak | None = None
    singularity: Singularity | None = None
    turns: tuple[TurnedAside, ...] = ()  # of the steps that tolerate that the tool leaves its orientation
    passes: tuple[Pass, ...] = ()  # where a programmed tool path comes near a singularity, by the plan
    pacing: tuple[StepPacing, ...] = ()
    speeds: tuple[StepSpeed, ...] = ()
    held: tuple[HeldSpeed, ...] = ()  # of the steps that are to hold a tool speed
    motion_time: float | None = None  # s
    waiting_time: float | None = None  # s
    deviation_rows: Deviation | None = None
    deviation_midway: Deviation | None = None
    corners: tuple[CornerUse, ...] = ()
    continuous: tuple[JointAudit, ...] = ()  # of the trajectory itself, evaluated between the rows
    drives: tuple[DriveUse, ...] = ()  # where the table has torque
    bound: float | None = None  # s, lower bound of the duration, where the plan states one

    def tool_peaks(self) -> dict[str, Peak | None]:
        """The peaks of the tool by the quantities of `TOOL`, None where nothing caps it."""
        return {quantity: getattr(self, quantity.replace(" ", "_")) for quantity in TOOL}

    @property
    def passed(self) -> bool:
        return not any(finding.level == "exceedance" for finding in self.findings)

    def to_dict(self) -> dict[str, Any]:
        """Plain types for JSON, in mm and deg, steps and rows counted from 1. See `pathplan.auditing.plain`."""
        from pathplan.auditing.plain import audit_as_dict

        return audit_as_dict(self)
