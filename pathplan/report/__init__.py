"""What people look at: the audit on a screen."""

from pathplan.report.screen import CAUTIONS, audit_screen

__all__ = ["CAUTIONS", "audit_screen"]
