"""What a search for remedies gives."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any, Literal

from pathplan.task.model import Task

__all__ = ["Kind", "Remedies", "Remedy"]

Kind = Literal["branch", "motion", "orientation_tolerance", "blend", "target", "payload", "frame", "roll", "axes"]


@dataclass(frozen=True, eq=False)
class Remedy:
    """One change with which a refused task can be planned.

    `changes` says in SI what is changed: of a frame or target its name or step, axis and `shift` (m) or `turn` (rad)
    and the new pose; of a branch the joints or the configuration; of a motion, blend or payload the new value.
    """

    what: Kind
    text: str  # one line for people, mm and deg, with what to write into the task file
    step: int | None  # that is changed, counted from 0 in the task as it was; None: the start, a frame or a payload
    changes: Mapping[str, Any]
    task: Task  # as changed
    duration: float | None  # s, of the whole task so changed; None: planned up to the step refused, time ran out then


@dataclass(frozen=True)
class Remedies:
    """The changes found, the most modest kinds first, and in words what was tried in vain."""

    found: tuple[Remedy, ...]
    tried: tuple[str, ...]
    finished: bool  # False: time ran out before everything was tried

    def __iter__(self) -> Iterator[Remedy]:
        return iter(self.found)

    def __len__(self) -> int:
        return len(self.found)
