"""An arm as text for a terminal and as data: joints, limits, reach, structure, inverse, tools, warnings."""

from __future__ import annotations

import textwrap
from collections.abc import Iterator, Mapping, Sequence
from typing import Any

import numpy as np

from pathplan.arm import Arm
from pathplan.arm.reach import Reach, reach
from pathplan.arm.structure import COMPONENTS
from pathplan.report.text import WIDTH, aligned, fit, printable
from pathplan.units import DIMENSIONS, Quantity, format_quantity, format_value, joint_dimension, to_screen

__all__ = ["arm_as_dict", "arm_screen"]

LABEL = 10  # width of the words on the left
QUANTITIES: tuple[Quantity, ...] = ("velocity", "acceleration", "jerk", "torque")


def arm_screen(arm: Arm) -> str:
    """The arm in lines of at most 100 columns, without a line end after the last. What is not known is a dash; what is
    needed to plan and missing says so.
    """
    blocks = [_headline(arm), _kinematics(arm), _joints(arm), _places(arm), _carried(arm), _warnings(arm)]
    return "\n\n".join("\n".join(lines) for block in blocks if (lines := list(block)))


def arm_as_dict(arm: Arm) -> dict[str, Any]:
    """The same for scripts, SI; None for what is not known or without end."""
    far = reach(arm.equipped())
    return {
        "name": arm.name,
        "title": arm.title,
        "sources": dict(arm.sources),
        "structure": arm.structure if len(arm.tool_joints) <= 6 else _locked(arm).structure,
        "inverse": _method(arm),
        "branches": [dict(label) for label in _labels(arm)],
        "steady_branches": arm.steady_branches,
        "serves": sorted(arm.serves, key=COMPONENTS.index),
        "serves_pointing": arm.serves_pointing,
        "free_joints": list(arm.free_joints),
        "length": arm.length,
        "reach": {"low": far.low.tolist(), "high": far.high.tolist(), "from_first_axis": far.from_first_axis},
        "joints": [
            {
                "name": joint.name,
                "kind": joint.kind,
                "moves_tool": i in arm.tool_joints,
                "position": [_number(value) for value in joint.position],
                **{quantity: _number(getattr(joint, quantity)) for quantity in QUANTITIES},
            }
            for i, joint in enumerate(arm.joints)
        ],
        "coupled": [
            {
                "name": arm.limits.names[row],
                "row": arm.limits.matrix[row].tolist(),
                **{
                    quantity: [_number(float(value)) for value in getattr(arm.limits, quantity)[row]]
                    for quantity in ("position", *QUANTITIES)
                },
            }
            for row in range(arm.n, len(arm.limits.names))
        ],
        "positions": {
            name: {"q": q.tolist(), "base_from_interface": arm.equipped().forward(q).tolist()}
            for name, q in arm.positions.items()
        },
        "tools": {name: {"mass": tool.mass} for name, tool in arm.tools.items()},
        "payloads": {name: {"mass": payload.mass} for name, payload in arm.payloads.items()},
        "warnings": list(arm.warnings),
    }


def _number(value: float | None) -> float | None:
    return value if value is not None and np.isfinite(value) else None


def _headline(arm: Arm) -> Iterator[str]:
    yield fit(printable(f"{arm.name}: {arm.title}" if arm.title else arm.name))
    outside = [arm.joint_names[i] for i in range(arm.n) if i not in arm.tool_joints]
    text = f"{len(arm.tool_joints)} axes between base and tool"
    if outside:
        text += f", {', '.join(outside)} beside {'them' if len(arm.tool_joints) > 1 else 'it'}"
    if arm.sources:
        text += f"; {', '.join(arm.sources)}"
    yield fit(printable(text))


def _kinematics(arm: Arm) -> Iterator[str]:
    lines = {
        "inverse": _method(arm),
        "branches": _branches(arm),
        "serves": _serves(arm),
        "reach": _reach(reach(arm.equipped())),
    }
    structure = arm.structure if len(arm.tool_joints) <= 6 else _locked(arm).structure
    lines = {"structure": structure, **lines}
    if arm.free_joints:
        more = "one" if len(arm.free_joints) == 1 else str(len(arm.free_joints))
        lines["free"] = f"{', '.join(arm.free_joints)}: {more} more than a pose asks for; structure with it held"
    for word, text in lines.items():
        yield from _labelled(word, text)


def _labelled(word: str, text: str) -> list[str]:
    indent = " " * (LABEL + 1)
    return textwrap.wrap(printable(text), WIDTH, initial_indent=f"{word:<{LABEL}} ", subsequent_indent=indent)


def _locked(arm: Arm) -> Any:
    return arm.free_solver(list(arm.free_joints)).typical


def _solver(arm: Arm) -> Any:
    return arm.solver if len(arm.tool_joints) <= 6 else _locked(arm)


def _method(arm: Arm) -> str:
    method: str = _solver(arm).method
    return method


def _labels(arm: Arm) -> Sequence[Mapping[str, str]]:
    labels: Sequence[Mapping[str, str]] = _solver(arm).labels
    return labels


def _branches(arm: Arm) -> str:
    labels = _labels(arm)
    words: dict[str, dict[str, None]] = {}
    for label in labels:
        for part, word in label.items():
            words.setdefault(part, {})[word] = None
    solver = _solver(arm)
    count = f"{'up to ' if solver.form is None else ''}{len(labels)}"
    if not words or "branch" in words:
        return count if solver.steady else f"{count}, without names: followed from pose to pose"
    return f"{count}: " + ", ".join(f"{part} {' or '.join(options)}" for part, options in words.items())


def _serves(arm: Arm) -> str:
    if len(arm.serves) == len(COMPONENTS):
        return "every pose"
    names = [name for name in COMPONENTS if name in arm.serves]
    pointing = ["the direction of the tool's z axis, not its roll"] if arm.serves_pointing else []
    if pointing and len(arm.tool_joints) == 5:
        return "every place with the direction of the tool's z axis; its roll follows from them"
    if not names and not pointing:
        return f"{len(arm.tool_joints)} mixtures of place and orientation, none of them whole"
    return ", ".join(names + pointing)


def _reach(far: Reach) -> str:
    spans = [
        f"{axis} {format_value(1e3 * low)} to {format_value(1e3 * high)}"
        for axis, low, high in zip("xyz", far.low, far.high, strict=True)
    ]
    text = f"mechanical interface {', '.join(spans)} mm"
    if far.from_first_axis is not None and far.from_first_axis > 1e-3:
        text += f"; {format_value(1e3 * far.from_first_axis)} mm from the first turning axis"
    return text


def _joints(arm: Arm) -> Iterator[str]:
    table = [["joint", "kind", "position", *QUANTITIES]]
    for i, joint in enumerate(arm.joints):
        cells = [joint.name + ("" if i in arm.tool_joints else " (beside)"), joint.kind, _span(arm, i)]
        for quantity in QUANTITIES:
            value = getattr(joint, quantity)
            if value is None:
                cells.append("-")
            elif not np.isfinite(value):
                cells.append("missing")
            else:
                cells.append(format_quantity(value, joint_dimension(joint.kind, quantity)))
        table.append([printable(cell) for cell in cells])
    rows = [row for row in range(len(arm.limits.names)) if row >= arm.n]
    table += [_coupled_cells(arm, row) for row in rows]
    yield from aligned(table, [18, 9, 19, 12, 14, 16, 11], left=(0, 1))
    for row in rows:
        yield fit(printable(f"{arm.limits.names[row]} = {_sum(arm, row)}: a coupled drive"))


def _coupled_cells(arm: Arm, row: int) -> list[str]:
    """The limits of a sum of joints as a line of the joint table."""
    kind = arm.limit_kinds[row]
    cells = [arm.limits.names[row], "coupled"]
    quantities: tuple[Quantity, ...] = ("position", *QUANTITIES)
    for quantity in quantities:
        low, high = (float(value) for value in getattr(arm.limits, quantity)[row])
        dimension = joint_dimension(kind, quantity) if kind else "number"
        if not np.isfinite([low, high]).any():
            cells.append("-")
        elif quantity != "position" and low == -high:
            cells.append(format_quantity(high, dimension))
        else:
            unit = DIMENSIONS[dimension].screen
            cells.append(" to ".join(format_value(to_screen(value, dimension)) for value in (low, high)) + f" {unit}")
    return [printable(cell) for cell in cells]


def _sum(arm: Arm, row: int) -> str:
    """What a row of the limits adds up, per mm or deg of each joint, as in the arm file."""
    kind = arm.limit_kinds[row]
    unit = to_screen(1.0, joint_dimension(kind, "position") if kind else "number")
    parts = []
    for joint, share in zip(arm.joints, arm.limits.matrix[row], strict=True):
        if share != 0.0:
            size = float(share) * unit / to_screen(1.0, joint_dimension(joint.kind, "position"))
            parts.append(f"{format_value(size)} {joint.name}" if size != 1.0 else joint.name)
    return " + ".join(parts).replace("+ -", "- ")


def _span(arm: Arm, i: int) -> str:
    joint = arm.joints[i]
    dimension = joint_dimension(joint.kind, "position")
    low, high = joint.position
    if not np.isfinite(low) and not np.isfinite(high):
        return "missing" if f"{joint.name}: no position limits" in arm.warnings else "unlimited"
    unit = "deg" if joint.kind == "revolute" else "mm"
    return f"{format_value(to_screen(low, dimension))} to {format_value(to_screen(high, dimension))} {unit}"


def _places(arm: Arm) -> Iterator[str]:
    from pathplan.path.refusals import place_text

    bare = arm.equipped()
    for name, q in arm.positions.items():
        values = [
            format_value(to_screen(value, joint_dimension(joint.kind, "position")))
            for value, joint in zip(q.tolist(), arm.joints, strict=True)
        ]
        yield from _labelled(name, f"{', '.join(values)}: {place_text(bare.forward(q))}")


def _carried(arm: Arm) -> Iterator[str]:
    for name, tool in arm.tools.items():
        away = format_quantity(float(np.linalg.norm(tool.flange_from_tool[:3, 3])), "length")
        mass = f", {format_quantity(tool.mass, 'mass')}" if tool.mass else ""
        yield fit(printable(f"{'tool':<{LABEL}} {name}: tip {away} from the mechanical interface{mass}"))
    for name, payload in arm.payloads.items():
        yield fit(printable(f"{'payload':<{LABEL}} {name}: {format_quantity(payload.mass, 'mass')}"))


def _warnings(arm: Arm) -> Iterator[str]:
    for text in arm.warnings:
        yield from textwrap.wrap(printable(text), WIDTH, initial_indent="? ", subsequent_indent="  ")
