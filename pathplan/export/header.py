"""What a table file says about itself: joints, cycle, marks, meta. The same for every kind of file."""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

from pathplan.errors import InputError
from pathplan.table import JointTable, Mark

__all__ = ["FORMAT", "MAX_HEADER", "MAX_JOINTS", "RESERVED", "TITLE", "Header", "header_as_dict", "header_from_dict"]

MAX_JOINTS = 100  # with MAX_ROWS of kinds.py it bounds what reading a hostile file can cost
MAX_HEADER = 1 << 26  # characters or bytes of a header
TITLE = "pathplan joint table"
FORMAT = 1  # of the files, raised when a reader of the last one would misread the next
RESERVED = ("format", "units", "cycle_s", "joints", "mark", "marks", "rows")  # not for meta
_KEY = re.compile(r"[A-Za-z_][A-Za-z0-9_ .-]*")


@dataclass(frozen=True)
class Header:
    """All of a table but its rows. `meta` holds JSON values: tuples have become lists."""

    joint_names: tuple[str, ...]
    joint_kinds: tuple[str, ...]
    cycle: float | None
    marks: tuple[Mark, ...]
    meta: Mapping[str, Any]

    @classmethod
    def of(cls, table: JointTable) -> Header:
        """The header of a table. Raises InputError for names and meta that a file can't hold."""
        for name in table.joint_names:
            if not name or not name.isprintable():
                raise InputError.at("table", "joint_names", f"can't be a column name: {name!r}")
        for key in table.meta:
            if not isinstance(key, str) or not _KEY.fullmatch(key) or key in RESERVED:
                raise InputError.at("table", "meta", f"can't be a key of a file header: {key!r}")
        try:
            meta = json.loads(json.dumps(dict(table.meta), allow_nan=False))
        except (TypeError, ValueError, RecursionError) as error:
            raise InputError.at("table", "meta", f"expected JSON values only ({error})") from None
        return cls(table.joint_names, table.joint_kinds, table.cycle, table.marks, meta)

    def joints(self) -> list[list[str]]:
        """[name, kind] of every joint; the kind is "" where it is not known."""
        kinds = self.joint_kinds or ("",) * len(self.joint_names)
        return [[name, kind] for name, kind in zip(self.joint_names, kinds, strict=True)]


def joints_from(value: Any, where: str) -> tuple[tuple[str, ...], tuple[str, ...]]:
    """Names and kinds from what `Header.joints` wrote. Raises InputError at `where`."""
    good = (
        isinstance(value, list)
        and value
        and all(
            isinstance(pair, list) and len(pair) == 2 and all(isinstance(text, str) for text in pair) for pair in value
        )
    )
    if not good:
        raise InputError.at(where, "joints", f"expected a list of [name, kind], got {_short(value)}")
    names, kinds = tuple(pair[0] for pair in value), tuple(pair[1] for pair in value)
    if len(names) > MAX_JOINTS:
        raise InputError.at(where, "joints", f"more than {MAX_JOINTS}")
    known = set(kinds) <= {"revolute", "prismatic"}
    if not (known or set(kinds) == {""}) or len(set(names)) != len(names):
        raise InputError.at(where, "joints", f"expected different names of known kinds, got {_short(value)}")
    return names, kinds if known else ()


def header_as_dict(header: Header, first: int, units: str, **more: Any) -> dict[str, Any]:
    """A header for kinds of file that keep it as one JSON text; rows and steps count from `first`."""
    remark = {"BREAKS LIMITS": "this table failed its audit and must not be run"}
    return {
        "format": f"{TITLE} {FORMAT}",
        **more,
        **(remark if header.meta.get("breaks_limits") else {}),
        "units": units,
        "cycle_s": header.cycle,
        "joints": header.joints(),
        "marks": [mark_as_dict(mark, first) for mark in header.marks],
        "meta": dict(header.meta),
    }


def header_from_dict(content: Any, first: int, where: str) -> Header:
    """The header that `header_as_dict` made. Raises InputError at `where`."""
    if not isinstance(content, dict) or not str(content.get("format")).startswith(TITLE):
        raise InputError.at(where, "not a joint table written by pathplan: its header is of another kind")
    if content["format"] != f"{TITLE} {FORMAT}":
        got = str(content["format"])[len(TITLE) :].strip()[:20]
        raise InputError.at(where, f"format {got} of table: this pathplan reads {FORMAT}")
    for key, kind in (("joints", list), ("cycle_s", object), ("marks", list), ("meta", dict)):
        if not isinstance(content.get(key, KeyError), kind) or key not in content:
            raise InputError.at(where, "header", f"{key} is missing or of another kind")
    names, kinds = joints_from(content["joints"], where)
    marks = tuple(mark_from(mark, first, where) for mark in content["marks"])
    return Header(names, kinds, cycle_from(content["cycle_s"], where), marks, content["meta"])


def rows_from(value: Any, most: int, where: str) -> int:
    """How many rows a header says there are. Raises InputError at `where`."""
    if not isinstance(value, int) or not 0 <= value <= most:
        raise InputError.at(where, "rows", f"expected a number up to {most}, got {str(value)[:40]}")
    return value


def cycle_from(value: Any, where: str) -> float | None:
    """A cycle in s, or None for null. Raises InputError at `where`."""
    if value is None:
        return None
    if isinstance(value, bool) or not isinstance(value, int | float) or not 1e-9 <= value < 1e9:
        raise InputError.at(where, "cycle_s", f"expected a positive time or null, got {_short(value)}")
    return float(value)


def mark_as_dict(mark: Mark, first: int) -> dict[str, Any]:
    """A mark for a file whose rows and steps count from `first`."""
    return {"name": mark.name, "time_s": mark.time, "row": mark.row + first, "step": mark.step + first}


def mark_from(value: Any, first: int, where: str) -> Mark:
    """The mark that `mark_as_dict` wrote. Raises InputError at `where`."""
    kinds: dict[str, type | tuple[type, ...]] = {"name": str, "time_s": (int, float), "row": int, "step": int}
    good = isinstance(value, dict) and value.keys() == kinds.keys()
    if not good or not all(isinstance(value[key], kind) for key, kind in kinds.items()):
        raise InputError.at(where, "mark", f"expected name, time_s, row and step, got {_short(value)}")
    if not abs(value["time_s"]) < 1e9:
        raise InputError.at(where, "mark", f"expected a time in s, got {_short(value['time_s'])}")
    return Mark(value["name"], float(value["time_s"]), value["row"] - first, value["step"] - first)


def json_line(value: Any) -> str:
    """JSON on one line, letters of every language kept, whatever some reader takes for a line end escaped."""
    text = json.dumps(value, ensure_ascii=False, allow_nan=False)
    for char in "\x7f\x85\u2028\u2029":
        text = text.replace(char, f"\\u{ord(char):04x}")
    return text


def from_json(text: str, where: str) -> Any:
    """Parsed JSON, NaN and infinity refused. Raises InputError at `where`."""
    try:
        return json.loads(text, parse_constant=_refuse)
    except (ValueError, RecursionError):
        raise InputError.at(where, f"header is damaged at {_short(text)}") from None


def _refuse(constant: str) -> None:
    raise ValueError(constant)


def _short(value: Any) -> str:
    text = repr(value)
    return text if len(text) <= 60 else text[:57] + "..."
