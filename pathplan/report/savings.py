"""What would buy time, as a section of a page."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

from pathplan.report.markup import esc, tag
from pathplan.report.savings_screen import saving_name
from pathplan.report.sections import section, table
from pathplan.units import format_quantity, format_value

if TYPE_CHECKING:
    from pathplan.planning import Plan
    from pathplan.savings import Saving

__all__ = ["savings_section"]


def savings_section(plan: Plan | None, savings: Sequence[Saving] | None) -> str:
    """What each change saves, largest first; '' where nobody looked for it (None) or there is no plan to change."""
    if plan is None or savings is None:
        return ""
    title = "What would buy time"
    if not savings:
        return section("savings", title, tag("p", "No single limit, cap or blend saves any time."))
    rows = [
        [
            esc(saving_name(plan.task, saving)),
            f"+{format_quantity(saving.change, 'ratio')}",
            f"{format_value(1e3 * saving.saved, 3)} ms",
        ]
        for saving in savings
    ]
    about = tag("p", "Each change by itself, what it concerns timed again; what that takes off the motion time.")
    return section("savings", title, about, table(title, ["change", "by", "saves"], rows, numbers=(1, 2), small=True))
