"""A table from elsewhere as a joint table: columns found and told apart, units made SI, nothing guessed in silence."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.errors import InputError
from pathplan.export.columns import JOINT_FIELDS
from pathplan.export.foreign.asked import Asked
from pathplan.export.foreign.source import Array, Source, source_of
from pathplan.export.foreign.words import Meaning, Unit, meaning_of, plain, unit_of, unit_split
from pathplan.export.read import reading
from pathplan.table import JointTable, tick_times
from pathplan.tomlfile import nearest
from pathplan.units import toml_text

if TYPE_CHECKING:
    from pathplan.arm import Arm

__all__ = ["Foreign", "read_foreign"]

LISTED = 8  # names of columns in a message
_DIMENSIONS = {"revolute": "angle", "prismatic": "length"}
_RATES = {"position": 0, "velocity": 1, "acceleration": 2, "jerk": 3}


@dataclass(frozen=True)
class Foreign:
    """A table from elsewhere, and what people should know of how it was read."""

    table: JointTable
    notes: tuple[str, ...]


@dataclass(frozen=True)
class _Use:
    """One column that is used: which, for what, and its unit as far as it is told."""

    at: int
    field: str
    joint: int  # -1: of no joint
    unit: Unit | None


def read_foreign(file: str | Path, arm: Arm, asked: Asked = Asked()) -> Foreign:  # noqa: B008  # frozen
    """Read a table that pathplan did not write: .csv, .npz or .parquet, for the joints of an arm.

    Columns are those that `asked` names and those whose names are recognised: see `pathplan.export.foreign.words`.
    A unit comes from the name, a row of units, `asked`, or, for a rate, from the joint's position. Cells that are
    empty become not a number. Nothing in the file is executed, and its size is bounded.

    Raises InputError, one line, for a file that can't be read, a joint without a column of positions, two columns of
    the same meaning, and a unit that nothing tells.
    """
    file = Path(file)
    with reading(file):
        source = source_of(file)
        uses, notes = _uses(file, source, arm, asked)
        _check_complete(file, source, uses, arm, asked)
        units = [_unit(file, source, use, uses, arm, asked, notes) for use in uses]
        values = source.read([use.at for use in uses])
    names = [source.names[use.at] for use in uses]
    with np.errstate(over="ignore"):  # what becomes infinite is told by the audit
        arrays = _arrays(uses, units, values, arm.n)
    if asked.cycle is not None:
        arrays["time"] = tick_times(np.arange(len(values)), asked.cycle)
    steps = arrays.pop("step", None)
    if steps is not None:
        steps = _steps(steps, notes)
    unused = [name for k, name in enumerate(source.names) if name and k not in {use.at for use in uses}]
    if unused:
        notes.append(f"columns that are not used: {_listed(unused)}")
    meta = {"arm": arm.name, "sources": dict(arm.sources), "read_from": file.name, "columns_read": names}
    table = JointTable(
        **arrays,
        step=steps,
        joint_names=tuple(joint.name for joint in arm.joints),
        joint_kinds=tuple(joint.kind for joint in arm.joints),
        cycle=asked.cycle,
        meta=meta,
    )
    return Foreign(table, tuple(notes))


def _uses(file: Path, source: Source, arm: Arm, asked: Asked) -> tuple[list[_Use], list[str]]:
    """The columns that are used, those asked for first. Raises InputError for two of the same meaning."""
    names, joints = source.names, [joint.name for joint in arm.joints]
    found: dict[tuple[str, int], _Use] = {}
    taken: set[int] = set()

    def take(at: int, field: str, joint: int, unit: Unit | None) -> None:
        other = found.get((field, joint))
        if other is not None:
            what = field if joint < 0 else f"{field} of {joints[joint]}"
            pair = f"columns {names[other.at]} and {names[at]}"
            raise InputError.at(str(file), f"{pair} would both be {what}: say which with --columns or --time")
        found[field, joint] = _Use(at, field, joint, unit)
        taken.add(at)

    for name, target in asked.columns.items():
        at = _index(file, names, name, "--columns")
        joint, field = asked.meaning(target, joints)
        unit = unit_of(source.units[at]) or unit_split(name)[1]
        take(at, field or _field_by_unit(unit), joint, unit)
    if asked.time is not None:
        at = _index(file, names, asked.time, "--time")
        take(at, "time", -1, unit_of(source.units[at]) or unit_split(asked.time)[1])
    meanings = {at: meaning for at, name in enumerate(names) if (meaning := meaning_of(name, joints))}
    base = min((m.number for m in meanings.values() if m.number is not None), default=1)
    for at, meaning in meanings.items():
        if at in taken or (meaning.field == "time" and (asked.time is not None or asked.cycle is not None)):
            continue
        unit = meaning.unit or unit_of(source.units[at])
        meant = _joint(meaning, 0 if base == 0 else 1, arm.n)
        field = meaning.field or _field_by_unit(unit)
        if meant is None or ((field, meant) in found and found[field, meant].at in _asked_places(names, asked)):
            continue  # the number of no joint; or what is asked for stands before what is recognised
        take(at, field, meant, unit)
    order = ["time", *JOINT_FIELDS, "step"]
    return sorted(found.values(), key=lambda use: (order.index(use.field), use.joint)), []


def _asked_places(names: Sequence[str], asked: Asked) -> set[int]:
    return {names.index(name) for name in asked.columns if name in names}


def _index(file: Path, names: Sequence[str], name: str, option: str) -> int:
    """Where a column of this name stands. Raises InputError."""
    for same in (lambda other: other == name, lambda other: plain(other) == plain(name)):
        at = [k for k, other in enumerate(names) if same(other)]
        if len(at) == 1:
            return at[0]
        if at:
            raise InputError.at(str(file), f"{option}: several columns are called {toml_text(name)}")
    raise InputError.at(str(file), f"{option}: no column {toml_text(name)}{nearest(name, names) or _there(names)}")


def _there(names: Sequence[str]) -> str:
    return f", there are {_listed(names)}"


def _listed(names: Sequence[str]) -> str:
    shown = [toml_text(name, 40)[1:-1] for name in names[:LISTED]]
    return ", ".join(shown) + (f" and {len(names) - LISTED} more" if len(names) > LISTED else "")


def _joint(meaning: Meaning, first: int, n: int) -> int | None:
    """Index of the joint a name means, -1 for the time and the like, None for a number that no joint has."""
    if meaning.number is None:
        return -1 if meaning.joint is None else meaning.joint
    joint = meaning.number - first
    return joint if 0 <= joint < n else None


def _field_by_unit(unit: Unit | None) -> str:
    if unit is None or unit.dimension == "time":
        return "position"
    return "torque" if unit.dimension in ("torque", "force") else JOINT_FIELDS[unit.order]


def _check_complete(file: Path, source: Source, uses: Sequence[_Use], arm: Arm, asked: Asked) -> None:
    """Refuse a table without time or without the position of a joint."""
    there = {(use.field, use.joint) for use in uses}
    lost = [joint.name for k, joint in enumerate(arm.joints) if ("position", k) not in there]
    listed = f"its columns are {_listed(list(source.names))}"
    if list(source.names) == [str(k + 1) for k in range(len(source.names))]:
        listed = f"it names no columns, so they are called {_listed(list(source.names))}"
    if lost:
        pairs = ", ".join(f"NAME={joint}" for joint in lost[:2]) + (", ..." if len(lost) > 2 else "")
        complaint = f"no column with the position of {', '.join(lost)}: {listed}"
        raise InputError.at(str(file), f'{complaint}: say which with --columns "{pairs}"')
    if ("time", -1) not in there and asked.cycle is None:
        how = 'say which with --time NAME, or the time from row to row with --time "4 ms"'
        raise InputError.at(str(file), f"no column of time: {listed}: {how}")
    for field in JOINT_FIELDS[1:]:
        missing = [joint.name for k, joint in enumerate(arm.joints) if (field, k) not in there]
        if 0 < len(missing) < arm.n:
            some = next(source.names[use.at] for use in uses if use.field == field)
            complaint = f"column {some} is {field}, but there is none of {', '.join(missing)}"
            how = f'say which with --columns "NAME={missing[0]} {field}"'
            raise InputError.at(str(file), f"{complaint}: {how}")


def _unit(
    file: Path, source: Source, use: _Use, uses: Sequence[_Use], arm: Arm, asked: Asked, notes: list[str]
) -> float:
    """The size in SI of a column's unit. Raises InputError for a unit that does not fit, or that nothing tells."""
    if use.field == "step":
        return 1.0
    where = f"column {source.names[use.at]}"
    kind = arm.joints[use.joint].kind
    if use.field == "time":
        dimension = "time"
    elif use.field == "torque":
        dimension = "torque" if kind == "revolute" else "force"
    else:
        dimension = _DIMENSIONS[kind]
    order = _RATES.get(use.field, 0)
    if use.unit is not None:
        if (use.unit.dimension, use.unit.order) != (dimension, order):
            whose = f"the {use.field} of {kind} joint {arm.joints[use.joint].name}" if use.joint >= 0 else "time"
            raise InputError.at(str(file), where, f"{use.unit.text} is no unit of {whose}")
        return use.unit.size
    if dimension in asked.units:
        return asked.units[dimension].size
    if use.field in ("velocity", "acceleration", "jerk"):
        position = next(other for other in uses if other.field == "position" and other.joint == use.joint)
        if position.unit is not None:
            _note(
                notes, f"{use.field} tells no unit: taken per s{'' if order == 1 else f'^{order}'} in that of position"
            )
            return position.unit.size
    if dimension in ("torque", "force"):
        _note(notes, f"{dimension} tells no unit: taken in {'N m' if dimension == 'torque' else 'N'}")
        return 1.0
    examples = {"angle": "deg (or rad)", "length": "mm (or m)", "time": "s (or ms)"}
    raise InputError.at(str(file), where, f"tells no unit: say it with --unit {examples[dimension]}")


def _note(notes: list[str], text: str) -> None:
    """A note that holds of several columns, once."""
    if text not in notes:
        notes.append(text)


def _arrays(uses: Sequence[_Use], units: Sequence[float], values: Array, n: int) -> dict[str, Any]:
    """SI arrays by field."""
    arrays: dict[str, Any] = {}
    for column, (use, unit) in enumerate(zip(uses, units, strict=True)):
        parts = round(1 / unit) if unit < 1 else 0  # 1000 for mm: one division rounds better than by 0.001
        numbers = values[:, column] / parts if parts and 1 / parts == unit else values[:, column] * unit
        if use.joint < 0:
            arrays[use.field] = numbers
        else:
            arrays.setdefault(use.field, np.empty((len(values), n)))[:, use.joint] = numbers
    return arrays


def _steps(values: Array, notes: list[str]) -> Any:
    """Steps counted from 0, where a column of that name holds whole numbers from 1."""
    whole = np.isfinite(values).all() and (values == np.rint(values)).all()
    if whole and values.min() >= 1 and values.max() <= 2**31:
        return np.asarray(values - 1, dtype=np.int64)
    notes.append("column step is not used: it does not count steps from 1")
    return None
