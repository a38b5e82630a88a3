"""Arms: what can move, its limits, where the tool then is, and which joint positions put it there."""

from pathplan.arm.arm import Arm
from pathplan.arm.inverse import Branches
from pathplan.arm.load import load_arm
from pathplan.arm.model import Joint, Limits, Link, Payload, Tool

__all__ = ["Arm", "Branches", "Joint", "Limits", "Link", "Payload", "Tool", "load_arm"]
