"""Patterns: the same pose at many places, in rows, layers and stacks.

[patterns.NAME]
    frame           in which the first place is given, and along whose axes the others lie; default "base"
    xyz, rpy or quat    tool pose at the first place
    count           places in up to three directions: [3, 4, 5], or 6 in one
    pitch           what lies between two: [310, 210, 9] along x, y and z of the frame, or a vector for a
                    direction, [[310, 0, 0], [0, 210, 0], [0, 0, 9]]; 310 or [310, 0, 0] for one direction
    order           "rows": the first direction runs fastest, always the same way; "serpentine": there and back
    reverse         true: the last place comes first, as for taking a stack down
    skip            places left out, counted from 1: [[1, 2, 3], [3, 4, 5]], or [2, 5] in one direction
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError
from pathplan.task.model import Target
from pathplan.tomlfile import FARTHEST, Table, read_only
from pathplan.units import parse_quantity, toml_text

__all__ = ["MOST_PLACES", "Pattern", "read_pattern"]

Array = NDArray[np.float64]
MOST_PLACES = 100_000
_DIRECTIONS = 3


@dataclass(frozen=True)
class Pattern:
    """Places in the order in which they come, all in one frame; `labels` tell them apart: "stack [2, 1, 3]"."""

    name: str
    frame: str
    places: tuple[Target, ...]
    labels: tuple[str, ...]


def read_pattern(name: str, table: Table, frame: str) -> Pattern:
    """A [patterns.NAME] table. `frame`: the name under its key "frame", checked."""
    table.has("frame")
    first = table.pose()
    count = _count(table)
    pitch = _pitch(table, count)
    order = table.choice("order", ("rows", "serpentine"), "rows")
    backwards = table.flag("reverse", False)
    skipped = _skip(table, count)
    at = _order(count, serpentine=order == "serpentine")
    if backwards:
        at = at[::-1]
    if skipped:
        kept = [place for place in at.tolist() if tuple(place) not in skipped]
        at = np.array(kept, dtype=int).reshape(-1, len(count))
    if not len(at):
        raise table.error("skip", "leaves out every place")
    position = np.asarray(first[:3, 3] + at @ pitch)
    if np.abs(position).max() > FARTHEST:
        raise table.error("pitch", f"the pattern reaches beyond {FARTHEST:g} m")
    poses = np.tile(first, (len(at), 1, 1))
    poses[:, :3, 3] = position
    read_only(poses)
    places = tuple(Target(frame=frame, frame_from_tool=pose) for pose in poses)
    labels = tuple(f"{name} [{', '.join(str(number + 1) for number in place)}]" for place in at.tolist())
    return Pattern(name, frame, places, labels)


def _count(table: Table) -> tuple[int, ...]:
    value = table.take("count")
    numbers = value if isinstance(value, list) else [value]
    good = 1 <= len(numbers) <= _DIRECTIONS and all(type(n) is int and n >= 1 for n in numbers)
    if not good:
        expected = "expected 1 to 3 whole numbers above zero such as [3, 4, 5]"
        raise table.error("count", f"{expected}, got {toml_text(value)}")
    total = 1
    for n in numbers:
        total *= n
    if total > MOST_PLACES:
        raise table.error("count", f"expected at most {MOST_PLACES} places, got {toml_text(value)}")
    return tuple(numbers)


def _pitch(table: Table, count: Sequence[int]) -> Array:
    """(directions, 3) m."""
    value, where = table.take("pitch"), table.at("pitch")
    single = not isinstance(table.data["count"], list)
    entries = [value] if single else value
    if not isinstance(entries, list) or len(entries) != len(count):
        got = f"{len(entries)} of them" if isinstance(entries, list) else toml_text(value)
        expected = f"expected a list of {len(count)} lengths or vectors, as many as count has directions"
        raise table.error("pitch", f"{expected}, got {got}")
    pitch = np.zeros((len(count), 3))
    for k, (entry, n) in enumerate(zip(entries, count, strict=True)):
        place = where if single else f"{where}[{k + 1}]"
        if isinstance(entry, list):
            if len(entry) != 3:
                raise InputError.at(place, f"expected a length or a vector [x, y, z], got {toml_text(entry)}")
            pitch[k] = [_length(number, place) for number in entry]
        else:
            pitch[k, k] = _length(entry, place)
        if n > 1 and not pitch[k].any():
            raise InputError.at(place, f"expected a length other than zero for {n} places, got {toml_text(entry)}")
    return pitch


def _length(value: Any, where: str) -> float:
    length = parse_quantity(value, "length", where)
    if abs(length) > FARTHEST:
        raise InputError.at(where, f"expected a length within {FARTHEST:g} m, got {toml_text(value)}")
    return length


def _skip(table: Table, count: Sequence[int]) -> set[tuple[int, ...]]:
    """Places left out, counted from 0."""
    value = table.take("skip", [])
    if not isinstance(value, list):
        raise table.error("skip", f"expected a list of places such as {_example(count)}, got {toml_text(value)}")
    skipped = set()
    for k, entry in enumerate(value, start=1):
        place = entry if isinstance(entry, list) else [entry]
        good = len(place) == len(count) and all(
            type(number) is int and 1 <= number <= n for number, n in zip(place, count, strict=True)
        )
        if not good:
            size = " x ".join(map(str, count))
            complaint = f"expected a place among {size}, counted from 1, got {toml_text(entry)}"
            raise InputError.at(f"{table.at('skip')}[{k}]", complaint)
        skipped.add(tuple(number - 1 for number in place))
    return skipped


def _example(count: Sequence[int]) -> str:
    return "[2, 5]" if len(count) == 1 else str([[1] * len(count)])


def _order(count: Sequence[int], *, serpentine: bool) -> NDArray[np.int_]:
    """(places, directions) counted from 0, the first direction fastest."""
    places = np.zeros((1, 0), dtype=int)
    for n in count:
        rows = np.broadcast_to(places, (n, *places.shape)).copy()
        if serpentine:
            rows[1::2] = rows[1::2, ::-1]
        number = np.broadcast_to(np.arange(n)[:, None, None], (n, len(places), 1))
        places = np.concatenate([rows, number], axis=2).reshape(-1, rows.shape[2] + 1)
    return places
