"""What would buy time: told where a plan offers it, and nothing at all where it does not."""

from __future__ import annotations

from typing import Any

from pathplan.report.markup import esc, tag
from pathplan.report.sections import section, table
from pathplan.units import format_value

__all__ = ["savings_section"]


def savings_section(plan: Any) -> str:
    """A table of `plan.savings` as HTML, '' where the plan has no such thing or it is empty.

    `savings` is a sequence, largest first, of entries that say `change` (words: "shoulder jerk limit 10 % higher") and
    `saved` (s that the re-planned task is shorter).
    """
    savings = getattr(plan, "savings", None)
    if not savings:
        return ""
    rows = [[esc(entry.change), f"{format_value(1e3 * entry.saved, 3)} ms"] for entry in savings]
    about = tag("p", "Each was planned again with the one change; what is saved is the difference in cycle time.")
    body = table("What would buy time", ["change", "saves"], rows, numbers=(1,), small=True)
    return section("savings", "What would buy time", about, body)
