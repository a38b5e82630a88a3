"""Timing of joint paths: near time-optimal under velocity, acceleration and jerk limits, and a lower bound."""

from pathplan.timing.schedule import Timing, lower_bound, schedule

__all__ = ["Timing", "lower_bound", "schedule"]
