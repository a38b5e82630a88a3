"""pathplan: from tool poses to an audited, synchronized joint table.

    import pathplan
    task = pathplan.load_task("examples/glazer6-pick-and-place.toml")
    plan = pathplan.plan(task)
    plan.duration, plan.bound, plan.audit.passed
    pathplan.write_table(plan.table, "pick.csv")

Everything is SI (m, rad, s) inside. Public names load what they need when they are first used.
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from pathplan.arm import Arm, load_arm
    from pathplan.auditing import Audit, audit
    from pathplan.errors import InputError, LimitError, PathplanError, UnreachableError
    from pathplan.export import read_table, write_table
    from pathplan.path import JointPath
    from pathplan.planning import Plan, plan
    from pathplan.remedies import find_remedies
    from pathplan.retiming import retime
    from pathplan.table import JointTable
    from pathplan.task import Task, load_task
    from pathplan.timing import Timing, lower_bound, schedule

_HOMES = {
    "Arm": "arm",
    "Audit": "auditing",
    "InputError": "errors",
    "JointPath": "path.joint",
    "JointTable": "table",
    "LimitError": "errors",
    "PathplanError": "errors",
    "Plan": "planning",
    "Task": "task",
    "Timing": "timing",
    "UnreachableError": "errors",
    "audit": "auditing",
    "find_remedies": "remedies",
    "load_arm": "arm",
    "load_task": "task",
    "lower_bound": "timing",
    "plan": "planning",
    "read_table": "export",
    "retime": "retiming",
    "schedule": "timing",
    "write_table": "export",
}

__all__ = [
    "Arm",
    "Audit",
    "InputError",
    "JointPath",
    "JointTable",
    "LimitError",
    "PathplanError",
    "Plan",
    "Task",
    "Timing",
    "UnreachableError",
    "audit",
    "find_remedies",
    "load_arm",
    "load_task",
    "lower_bound",
    "plan",
    "read_table",
    "retime",
    "schedule",
    "write_table",
]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'pathplan' has no attribute {name!r}")
    from importlib import import_module

    value = getattr(import_module(f"pathplan.{_HOMES[name]}"), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
