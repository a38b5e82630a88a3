"""What people look at: screens, the report and its live page, figures.

from pathplan.report import figures, write_report
write_report(plan, "pick.html", savings=plan.savings())
figures.velocity(plan).savefig("velocity.png")
"""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from pathplan.report.screen import CAUTIONS, audit_screen

if TYPE_CHECKING:
    from pathplan.report.files import write_report

__all__ = ["CAUTIONS", "audit_screen", "write_report"]


def __getattr__(name: str) -> Any:
    if name != "write_report":
        raise AttributeError(f"module 'pathplan.report' has no attribute {name!r}")
    from pathplan.report.files import write_report

    return write_report
