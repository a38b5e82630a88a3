"""An audit as plain types, for JSON: mm and deg, shares in percent, steps and rows counted from 1."""

from __future__ import annotations

import math
from dataclasses import asdict
from typing import Any

from pathplan.auditing.drives import DriveUse, rpm
from pathplan.auditing.held import HELD_WITHIN, HeldSpeed
from pathplan.auditing.model import Audit, Finding, JointAudit, Peak
from pathplan.auditing.passes import Pass
from pathplan.auditing.planned import CornerUse, Deviation
from pathplan.auditing.words import dimension_of
from pathplan.units import DIMENSIONS, to_screen

__all__ = ["audit_as_dict"]

UNITS = "mm, deg, s, N m, N, percent; steps and rows count from 1"
_REGIONS = {"length": "length", "angle": "angle", "share": "ratio"}


def audit_as_dict(audit: Audit) -> dict[str, Any]:
    """All of an audit. Every number is finite or None; a value's unit stands beside it."""
    singularity, turning = audit.singularity, _peak(audit.tool_turning_speed, "angular_speed")
    return {
        "passed": audit.passed,
        "units": UNITS,
        "arm": audit.arm,
        "task": audit.task,
        "rows": audit.count,
        "cycle_s": audit.cycle,
        "duration_s": _number(audit.duration),
        "motion_time_s": _number(audit.motion_time),
        "waiting_time_s": _number(audit.waiting_time),
        "bound_s": audit.bound,
        "measured": audit.measured,
        "joints": [_joint(joint) for joint in audit.joints],
        "drives": [_drive(drive) for drive in audit.drives],
        "coupled": [_joint(row) for row in audit.rows],
        "tool_speed": _peak(audit.tool_speed, "speed"),
        "tool_acceleration": _peak(audit.tool_acceleration, "acceleration"),
        **({"tool_turning_speed": turning} if turning is not None else {}),
        "singularity": singularity
        and {"smallest_singular_value": singularity.value, **_place(singularity.time, singularity.step)},
        "turned_aside": [
            {
                **_place(turn.time, turn.step),
                "angle_deg": math.degrees(turn.angle),
                "allowed_deg": math.degrees(turn.allowed),
            }
            for turn in audit.turns
        ],
        "passes": [_pass(found) for found in audit.passes],
        "pacing": [
            {
                "step": step.step + 1,
                "name": step.name,
                "duration_s": step.duration,
                "parts": [
                    {"joint": part.joint, "quantity": part.quantity, "percent": 100 * part.part} for part in step.parts
                ],
            }
            for step in audit.pacing
        ],
        "speeds": [
            {
                "step": speed.step + 1,
                "name": speed.name,
                "asked_mm_s": None if speed.asked is None else 1000 * speed.asked,
                "reached_mm_s": _number(1000 * speed.reached),
                "percent_of_time_at_asked": 100 * speed.part,
            }
            for speed in audit.speeds
        ],
        **({"held": [_held(held) for held in audit.held]} if audit.held else {}),
        "path_deviation": {
            "rows": _deviation(audit.deviation_rows),
            "midway": _deviation(audit.deviation_midway),
        },
        "corners": [_corner(corner) for corner in audit.corners],
        "continuous": [_joint(joint) for joint in audit.continuous],
        "findings": [_finding(finding, audit) for finding in audit.findings],
    }


def _held(held: HeldSpeed) -> dict[str, Any]:
    """One step that is to hold a tool speed; parts in percent of the whole step."""
    return {
        "step": held.step + 1,
        "name": held.name,
        "held_mm_s": 1000 * held.speed,
        "capped_at_mm_s": 1000 * held.cap,
        "tolerance_percent": 100 * HELD_WITHIN,
        "percent_of_length": 100 * held.length_part,
        "percent_of_time": 100 * held.time_part,
        "length_mm": 1000 * held.length,
        "time_s": held.time,
        "reached_mm_s": 1000 * held.reached,
        "begins_at_rest": held.begins_at_rest,
        "ends_at_rest": held.ends_at_rest,
        "elsewhere": [
            {
                "where": missed.where,
                "joint": missed.joint,
                "quantity": missed.quantity,
                "percent_of_length": 100 * missed.length_part,
                "percent_of_time": 100 * missed.time_part,
            }
            for missed in held.missed
        ],
    }


def _pass(found: Pass) -> dict[str, Any]:
    """Of what does not turn in tool space, the speed in mm/s; of what only turns, in deg/s."""
    speed = None if found.speed is None else to_screen(found.speed, "angular_speed" if found.turning else "speed")
    return {
        **_place(found.time, found.step),
        "percent_of_step": 100 * found.share,
        "kind": found.kind,
        "smallest_singular_value": found.value,
        "runs_through": found.through,
        "distance_mm": None if found.distance is None else 1000 * found.distance,
        "angle_deg": None if found.angle is None else math.degrees(found.angle),
        "base_from_tool": found.pose.tolist(),
        "joint": found.joint,
        "speed_deg_s" if found.turning else "speed_mm_s": speed,
        "lost_s": found.lost,
    }


def _number(value: float | None) -> float | None:
    return None if value is None or not math.isfinite(value) else float(value)


def _place(time: float, step: int) -> dict[str, Any]:
    return {"time_s": _number(time), "step": step + 1}


def _scaled(value: float | None, dimension: str | None) -> float | None:
    value = _number(value)
    return value if value is None or dimension is None else to_screen(value, dimension)


def _unit(dimension: str | None) -> str:
    return "SI" if dimension is None else DIMENSIONS[dimension].screen


def _peak(peak: Peak | None, dimension: str | None) -> dict[str, Any] | None:
    if peak is None:
        return None
    found = {
        "peak": _scaled(peak.peak, dimension),
        "limit": _scaled(peak.limit, dimension),
        "unit": _unit(dimension),
        "percent": _number(100 * peak.share),
        **_place(peak.time, peak.step),
        "row": peak.row + 1,
    }
    if peak.margin is not None:
        found["margin"] = _scaled(peak.margin, dimension)
    return found


def _joint(joint: JointAudit) -> dict[str, Any]:
    def all_of(peaks: dict[str, Peak]) -> dict[str, Any]:
        return {name: _peak(peak, dimension_of(joint.kind, name)) for name, peak in peaks.items()}

    found = {"name": joint.name, "kind": joint.kind or None, **all_of(joint.peaks())}
    if joint.differences is not None:
        found["differences"] = all_of(dict(joint.differences))
    return found


def _drive(drive: DriveUse) -> dict[str, Any]:
    """One drive; motor speeds in rpm, power in W, energy in J over the table, margins in percent of the limit."""
    share = drive.rms_share
    limited = math.isfinite(drive.torque.limit)
    dimension = dimension_of(drive.kind, "torque")
    return {
        "name": drive.name,
        "kind": drive.kind,
        "unit": _unit(dimension),
        "torque": _peak(drive.torque, dimension),
        "torque_margin_percent": 100 * (1 - drive.torque.share) if limited else None,
        "rms_torque": _number(drive.rms),
        "continuous_torque": drive.continuous,
        "rms_percent": None if share is None else 100 * share,
        "rms_margin_percent": None if share is None else 100 * (1 - share),
        "motor_speed_rpm": _number(rpm(drive.motor_speed)),
        "motor_speed_limit_rpm": _number(rpm(drive.motor_speed_limit)),
        "peak_power_w": _number(drive.power),
        "peak_power_time_s": _number(drive.power_time),
        "peak_power_step": drive.power_step + 1,
        "peak_returning_power_w": _number(drive.returning),
        "work_j": _number(drive.work),
        "returned_j": _number(drive.returned),
        "net_j": _number(drive.net),
        "jumps": [
            {
                "cause": jumps.cause,
                "count": jumps.count,
                "largest": jumps.largest,
                "unit": _unit(dimension),
                **_place(jumps.time, jumps.step),
            }
            for jumps in drive.jumps
        ],
    }


def _deviation(deviation: Deviation | None) -> dict[str, Any] | None:
    if deviation is None:
        return None
    return {
        "position_mm": 1000 * deviation.position,
        "position_time_s": deviation.position_time,
        "position_step": deviation.position_step + 1,
        "angle_deg": math.degrees(deviation.angle),
        "angle_time_s": deviation.angle_time,
        "angle_step": deviation.angle_step + 1,
        "poses": deviation.count,
    }


def _corner(corner: CornerUse) -> dict[str, Any]:
    dimension = _REGIONS.get(corner.region)
    unit = "percent" if dimension == "ratio" else _unit(dimension) if dimension else None
    return {
        "after_step": corner.after_step + 1,
        "kind": corner.kind,
        "reason": corner.reason,
        "asked": corner.asked,
        "asked_value": _scaled(corner.asked_value, dimension) if dimension else None,
        "used": _scaled(corner.used, dimension) if dimension else None,
        "unit": unit,
    }


def _finding(finding: Finding, audit: Audit) -> dict[str, Any]:
    found = asdict(finding)
    kinds = {joint.name: joint.kind for joint in (*audit.joints, *audit.rows)}
    dimension = None
    if finding.quantity == "time":
        dimension = "time"
    elif finding.quantity is not None and finding.value is not None:
        dimension = dimension_of(kinds.get(finding.joint or "", ""), finding.quantity)
    found["time_s"] = _number(found.pop("time"))
    found["step"] = None if finding.step is None else finding.step + 1
    found["row"] = None if finding.row is None else finding.row + 1
    for name in ("value", "limit"):
        found[name] = _scaled(getattr(finding, name), dimension)
    found["unit"] = None if finding.value is None else _unit(dimension)
    return found
