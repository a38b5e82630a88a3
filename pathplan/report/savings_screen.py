"""What would buy time, as text and as data."""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from typing import TYPE_CHECKING, Any

from pathplan.report.text import aligned, printable
from pathplan.units import format_quantity, format_value

if TYPE_CHECKING:
    from pathplan.savings import Saving
    from pathplan.task import Task

__all__ = ["saving_name", "savings_as_dict", "savings_screen"]


def savings_screen(task: Task, savings: Sequence[Saving]) -> Iterator[str]:
    """Lines of at most 100 columns: what each change saves, timed again."""
    if not savings:
        yield "what would buy time: no single change saves any"
        return
    yield "what would buy time, each change by itself and timed again:"
    rows = []
    for saving in savings:
        name = saving_name(task, saving)
        more, saved = format_quantity(saving.change, "ratio"), format_value(saving.saved * 1e3)
        rows.append([f"  {more} more", name, f"{saved} ms"])
    yield from aligned(rows, (12, 60, 12), left=(0, 1))


def saving_name(task: Task, saving: Saving) -> str:
    """The limit, cap or blend in words."""
    if saving.what == "limit":
        return printable(f"{saving.quantity} limit of {saving.joint}")
    if saving.step is None:
        return f"{saving.quantity} of the whole task"
    step = task.steps[saving.step]
    name = f" ({step.name})" if step.name else ""
    if saving.what == "blend":
        return printable(f"blend after step {saving.step + 1}{name}")
    return printable(f"{saving.quantity} of step {saving.step + 1}{name}")


def savings_as_dict(savings: Sequence[Saving]) -> list[dict[str, Any]]:
    """Plain types for JSON: ms, %, steps counted from 1."""
    return [
        {
            "what": saving.what,
            "quantity": saving.quantity,
            "joint": saving.joint,
            "step": None if saving.step is None else saving.step + 1,
            "change_percent": saving.change * 100,
            "estimate_ms": None if saving.estimate is None else saving.estimate * 1e3,
            "saved_ms": saving.saved * 1e3,
        }
        for saving in savings
    ]
