"""A refused task: the nearest changes with which it can be planned."""

from pathplan.remedies.find import find_remedies
from pathplan.remedies.model import Remedies, Remedy

__all__ = ["Remedies", "Remedy", "find_remedies"]
