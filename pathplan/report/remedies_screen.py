"""What would make a refused task work, as text and as data."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Mapping
from typing import Any

import numpy as np

from pathplan.errors import PathplanError
from pathplan.remedies import Remedies, Remedy
from pathplan.report.text import WIDTH, clock, printable

__all__ = ["refusal_as_dict", "remedies_as_dict", "remedies_screen"]


def remedies_screen(remedies: Remedies) -> Iterator[str]:
    """Lines of at most 100 columns."""
    if remedies.found:
        yield "would work, each change by itself and planned again:"
    for remedy in remedies:
        yield from _wrapped(f"{remedy.text} ({_time(remedy)})", "- ")
    if not remedies.found:
        yield "no single change was found that would work"
    if remedies.tried and not remedies.found:
        yield from _wrapped(f"tried: {'; '.join(remedies.tried)}", "  ")
    if not remedies.finished:
        yield 'time ran out before all was tried and planned whole: --remedies "60 s" gives it longer'


def _wrapped(text: str, bullet: str) -> list[str]:
    return textwrap.wrap(printable(text), WIDTH, initial_indent=bullet, subsequent_indent="  ", break_on_hyphens=False)


def _time(remedy: Remedy) -> str:
    if remedy.duration is None:
        return "planned only as far as the step refused"
    return f"cycle time {clock(remedy.duration)}"


def remedies_as_dict(remedies: Remedies) -> dict[str, Any]:
    """Plain types for JSON: SI, poses as 4x4, steps counted from 1."""
    return {
        "remedies": [
            {
                "what": remedy.what,
                "text": remedy.text,
                "step": None if remedy.step is None else remedy.step + 1,
                "changes": _changes(remedy),
                "cycle_time_s": remedy.duration,
            }
            for remedy in remedies
        ],
        "tried_in_vain": list(remedies.tried),
        "remedies_finished": remedies.finished,
    }


def _changes(remedy: Remedy) -> Any:
    """What is changed, steps counted from 1."""
    changes = dict(remedy.changes)
    if "before" in changes:
        changes["before"] += 1
    if "steps" in changes:
        changes["steps"] = [step + 1 for step in changes["steps"]]
    return _plain(changes)


def refusal_as_dict(error: PathplanError) -> dict[str, Any]:
    """The refusal and the numbers behind it: SI, the step counted from 1."""
    data = dict(error.data)
    if data.get("step") is not None:
        data["step"] += 1
    return {"message": str(error), **_plain(data)}


def _plain(value: Any) -> Any:
    """Arrays as lists, numbers that are none as None."""
    if isinstance(value, Mapping):
        return {str(key): _plain(inner) for key, inner in value.items()}
    if isinstance(value, np.ndarray):
        return _plain(value.tolist())
    if isinstance(value, list | tuple):
        return [_plain(inner) for inner in value]
    if isinstance(value, np.generic):
        return _plain(value.item())
    if isinstance(value, float) and not np.isfinite(value):
        return None
    return value
