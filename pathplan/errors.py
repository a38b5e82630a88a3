"""Errors of pathplan: one line for people, data for scripts.

Exit status of the command line follows the class: `InputError` 2, every other `PathplanError` 1.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

__all__ = ["InputError", "LimitError", "PathplanError", "UnreachableError"]


class PathplanError(Exception):
    """Anything pathplan refuses. `str(error)` is one clear line; `data` holds the numbers behind it (SI)."""

    exit_status = 1

    def __init__(self, message: str, *, data: Mapping[str, Any] | None = None) -> None:
        super().__init__(message)
        self.data: dict[str, Any] = dict(data or {})


class InputError(PathplanError):
    """A file, key, row or argument is not what it must be.

    Use `InputError.at("pick.toml", "step[4].blend", "expected a length such as \"20 mm\", got -5")`.
    `problems` lists every problem found when several were gathered before raising.
    """

    exit_status = 2

    def __init__(self, message: str, *, problems: Sequence[str] = (), data: Mapping[str, Any] | None = None) -> None:
        super().__init__(message, data=data)
        self.problems: tuple[str, ...] = tuple(problems) or (message,)

    @classmethod
    def at(cls, *where: str, data: Mapping[str, Any] | None = None) -> InputError:
        """Join file, key and complaint with colons: the last item is the complaint."""
        return cls(": ".join(where), data=data)


class UnreachableError(PathplanError):
    """No inverse-kinematics branch can reach a pose or follow a step.

    `data` holds what is known of: step, share (0..1 of the step), pose (4x4), joint, limit, singular, best.
    """


class LimitError(PathplanError):
    """A limit is broken or can't be kept. `data` holds joint, quantity, time, value, limit where known."""
