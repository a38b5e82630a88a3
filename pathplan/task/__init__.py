"""What is asked of an arm: task files, frames, targets and steps."""

from pathplan.task.load import load_task
from pathplan.task.model import Blend, Frame, Step, Target, Task

__all__ = ["Blend", "Frame", "Step", "Target", "Task", "load_task"]
