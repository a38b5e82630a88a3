"""Plots over time as SVG: a lane for each joint, as high as the room between its limits.

A lane's dashed edges are the limits, so the line that touches one uses all of it; its scale is the joint's own. Where
the limit of the lane paces the motion the lane is tinted; a ring marks the peak that the audit states. Nothing is told
by colour alone: joints have lanes, limits are dashed, what paces carries its name, waits are hatched.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from pathplan.auditing.model import TOLERANCE, Peak
from pathplan.auditing.words import dimension_of, shown
from pathplan.report.axis import LEFT, RIGHT, WIDTH, TimeAxis, ticks, visible
from pathplan.report.gather import PACED, Line, Picture, Run
from pathplan.report.hatching import Box, filling, slanted
from pathplan.report.markup import esc, number, pretty, tag
from pathplan.report.text import clock
from pathplan.report.thinning import Array
from pathplan.units import DIMENSIONS, format_value, to_screen

__all__ = ["LETTERS", "Lane", "lane_plot", "pace_plot", "quantity_lanes", "swatch", "tool_lanes"]

LANE, GAP, ROLL = 46.0, 18.0, 18.0  # heights
TOP = 34.0  # marks and the steps' band
FINE = 50  # lines are drawn in this part of a unit
MOST_MARKS = 60  # with a line and perhaps a name each
MOST_BLOCKS = 250  # of what paces, one by one
LETTERS = dict(zip(PACED, ("v", "a", "j", "t", "s", "c", "r"), strict=True))
Scale = Callable[[Any], Any]  # screen unit -> height
PATH_CONTRACT = 1e-6  # m and rad: how near to its line or arc the tool is promised to be


@dataclass(frozen=True, eq=False)
class Lane:
    """One line with its limits, in screen units. `limits`: pieces (start, end in s, value), drawn where they stand."""

    key: str  # quantity, or what the tool does
    name: str
    unit: str
    line: Line
    limits: tuple[tuple[float, float, float], ...]
    peak: Peak | None  # in SI
    factor: float  # from SI to screen units
    said: str  # in words, for those who don't see it
    curves: tuple[Line, ...] = ()  # limits that change along the way, in screen units
    label: int = -1  # index in Picture.labels of the limit that the lane shows


def quantity_lanes(picture: Picture, quantity: str) -> list[Lane]:
    """The lanes of one quantity: the joints, then rows that limit sums of joints."""
    lanes = []
    audits = (*picture.audit.joints, *picture.audit.rows)
    limits = picture.limits(quantity)
    axis = TimeAxis.of(picture)
    for r, (name, kind) in enumerate(zip(picture.names, picture.kinds, strict=True)):
        line = picture.lines.get((quantity, r))
        if line is None:
            continue
        dimension = dimension_of(kind, quantity)
        factor = to_screen(1.0, dimension) if dimension else 1.0
        finite = [float(value) * factor for value in limits[r] if math.isfinite(value)]
        peak: Peak | None = getattr(audits[r], quantity)
        label = picture.labels.index((r, quantity)) if quantity in PACED else -1
        left = picture.lines.get(("torque left", r)) if quantity == "torque" else None
        curves = tuple(Line(left.time, left.value * value) for value in finite) if left is not None else ()
        unit = DIMENSIONS[dimension].screen if dimension else "SI"
        pieces = tuple((axis.start, axis.end, value) for value in finite)
        words = said(name, peak, dimension)
        lanes.append(Lane(quantity, name, unit, line, pieces, peak, factor, words, curves, label))
    return lanes


def tool_lanes(picture: Picture) -> list[Lane]:
    """Tool speed and turning speed with their caps, and how far the tool lies from its programmed path."""
    axis = TimeAxis.of(picture)
    lanes = []
    speeds = (
        ("tool speed", "speed", picture.caps.speed, picture.audit.tool_speed),
        ("tool turning speed", "angular_speed", picture.caps.turning_speed, picture.audit.tool_turning_speed),
    )
    for key, dimension, caps, peak in speeds:
        line = picture.lines.get((key, -1))
        if line is None:
            continue
        factor = to_screen(1.0, dimension)
        pieces = tuple(
            (run.start, run.end, factor * float(caps[min(run.value, len(caps) - 1)]))
            for run in visible(picture.steps, axis)
            if math.isfinite(caps[min(run.value, len(caps) - 1)])
        )
        label, words = picture.labels.index((-1, key)), said(key, peak, dimension)
        unit, name = DIMENSIONS[dimension].screen, key.removesuffix(" speed") if "turning" in key else key
        lanes.append(Lane(key, name, unit, line, pieces, peak, factor, words, label=label))
    deviation = picture.audit.deviation_rows
    for key, name, unit in (("deviation", "off the path", "µm"), ("turn", "turned off it", "µrad")):
        line = picture.lines.get((key, -1))
        if line is None or deviation is None:
            continue
        turned = key == "turn"
        value = deviation.angle if turned else deviation.position
        time = deviation.angle_time if turned else deviation.position_time
        step = deviation.angle_step if turned else deviation.position_step
        peak = Peak(value, PATH_CONTRACT, value / PATH_CONTRACT, time, step, -1)
        words = f"{name}: at most {format_value(value * 1e6, 3)} {unit} at {clock(time)}"
        pieces = ((axis.start, axis.end, PATH_CONTRACT * 1e6),)
        lanes.append(Lane(key, name, unit, line, pieces, peak, 1e6, words))
    return lanes


def said(name: str, peak: Peak | None, dimension: str | None) -> str:
    """A lane in words."""
    if peak is None:
        return f"{name}: no limit"
    used = f"{shown(peak.peak, dimension)} of {shown(peak.limit, dimension)}"
    return f"{name}: {used}, {100 * peak.share:.1f} %, at {clock(peak.time)}"


def lane_plot(picture: Picture, name: str, title: str, lanes: Sequence[Lane]) -> str:
    """Lanes above one another over the time axis, with steps, marks and what paces. `name` is unique in a page."""
    axis = TimeAxis.of(picture)
    bottom = TOP + len(lanes) * (LANE + GAP)
    body = [_steps(picture, axis, bottom), _marks(picture, axis, bottom)]
    body += [_lane(picture, axis, lane, TOP + k * (LANE + GAP) + GAP / 2) for k, lane in enumerate(lanes)]
    body += [_strip(picture, axis, bottom + 4), _time_axis(axis, bottom + 20, TOP, bottom)]
    words = pretty("; ".join(lane.said for lane in lanes))
    return _svg(name, title, f"Over {clock(axis.end - axis.start)}. {words}.", bottom + 52, "".join(body))


def pace_plot(picture: Picture, name: str, title: str) -> str:
    """Which joint and limit sets the pace when: a lane a joint, blocks that carry the limit's name."""
    axis = TimeAxis.of(picture)
    rows = [*range(len(picture.names)), -1]
    bottom = TOP + len(rows) * (ROLL + 4) + 4
    body = [_steps(picture, axis, bottom), _marks(picture, axis, bottom)]
    blocks: dict[int, list[str]] = {row: [] for row in rows}
    runs = visible(picture.pace, axis)
    for run in runs:
        row, quantity = picture.labels[run.value]
        top = TOP + rows.index(row) * (ROLL + 4) + 4
        if len(runs) <= MOST_BLOCKS:
            blocks[row].append(_block(axis, run, top, quantity))
    if len(runs) > MOST_BLOCKS:
        for row in rows:
            mine = [run for run in runs if picture.labels[run.value][0] == row]
            blocks[row].append(_merged(picture, axis, mine, TOP + rows.index(row) * (ROLL + 4) + 4, ROLL - 3))
    for k, row in enumerate(rows):
        top = TOP + k * (ROLL + 4) + 4
        who = picture.names[row] if row >= 0 else "tool"
        body.append(tag("text", _short(who), x=8, y=top + 13, class_="who"))
        body.append(tag("line", x1=LEFT, x2=RIGHT, y1=top + ROLL, y2=top + ROLL, class_="base"))
        body += blocks[row]
    body.append(_time_axis(axis, bottom + 4, TOP, bottom))
    return _svg(name, title, _pace_words(picture), bottom + 36, "".join(body))


def _svg(name: str, title: str, words: str, height: float, body: str) -> str:
    head = tag("title", esc(title), id=f"{name}-title") + tag("desc", esc(words), id=f"{name}-desc")
    return tag(
        "svg",
        head + body,
        class_="plot",
        id=name,
        viewbox=f"0 0 {WIDTH} {number(height)}",
        role="img",
        aria_labelledby=f"{name}-title",
        aria_describedby=f"{name}-desc",
    )


def _pace_words(picture: Picture) -> str:
    parts = []
    for step in picture.audit.pacing:
        paced = [part for part in step.parts if part.quantity != "none"][:1]
        who = ", ".join(f"{part.joint or ''} {part.quantity} {100 * part.part:.0f} %".strip() for part in paced)
        parts.append(f"step {picture.step_label(step.step)}: {who or 'nothing'}")
    return "What paces most of each step. " + "; ".join(parts[:40]) + "."


def _steps(picture: Picture, axis: TimeAxis, bottom: float) -> str:
    """Every second step shaded, waits hatched, their numbers and where there is room their names above."""
    odd, waits, hatch, texts = [], [], [], []
    for run in visible(picture.steps, axis):
        x, width = axis.x(run.start), axis.x(run.end) - axis.x(run.start)
        box = f"M{number(x)} {number(TOP - 16)}h{number(width)}V{number(bottom)}H{number(x)}z"
        motion = picture.motions[run.value] if run.value < len(picture.motions) else ""
        if motion == "wait":
            waits.append(box)
            hatch.append(slanted((x, TOP - 16, width, bottom - TOP + 16), apart=9))
        elif run.value % 2:
            odd.append(box)
        for text in (picture.step_label(run.value), str(run.value + 1)):
            if width >= 6.3 * len(text) + 4:
                texts.append(tag("text", esc(text), x=x + width / 2, y=TOP - 4, class_="step"))
                break
    shade = tag("path", d="".join(odd), class_="shade") if odd else ""
    rest = tag("path", d="".join(waits), class_="wait") + tag("path", d="".join(hatch), class_="hatch") if waits else ""
    return tag("g", shade + rest + "".join(texts), class_="steps")


def _marks(picture: Picture, axis: TimeAxis, bottom: float) -> str:
    """Marks as lines with their names on top; names without room are left to the table of marks, and so are the lines
    of very many, which stay as ticks.
    """
    places = [axis.x(mark.time) for mark in picture.marks]
    if len(places) > MOST_MARKS:
        shape = "".join(f"M{number(x)} {number(TOP - 24)}v6" for x in dict.fromkeys(round(x, 1) for x in places))
        return tag("g", tag("path", d=shape, class_="tick-of-mark"), class_="marks")
    found, free = [], float(LEFT)
    for k, mark in enumerate(picture.marks):
        x = places[k]
        words = tag("title", esc(mark.name))
        found.append(tag("path", words, d=f"M{number(x)} {number(TOP - 18)}V{number(bottom)}"))
        found.append(tag("path", d=f"M{number(x)} {number(TOP - 18)}l-4 -5l4 -5l4 5z", class_="gem"))
        width = 6.4 * len(mark.name)
        following = places[k + 1] - 6 if k + 1 < len(places) else float(WIDTH)
        left = x + 7 if x + 7 + width <= following else x - 7 - width
        if left >= free and left + width <= following:
            found.append(tag("text", esc(mark.name), x=left, y=TOP - 20, class_="mark"))
        free = max(x, left + width) + 7 if left >= free else x + 7
    return tag("g", "".join(found), class_="marks")


def _lane(picture: Picture, axis: TimeAxis, lane: Lane, top: float) -> str:
    values = lane.line.value * lane.factor
    edges = [value for _, _, value in lane.limits]
    low, high = _range(lane, values, edges)

    def y(value: Any) -> Any:
        return top + (high - value) * (LANE / (high - low))

    parts = [tag("rect", x=LEFT, y=top, width=RIGHT - LEFT, height=LANE, class_="room")]
    for run in visible([run for run in picture.pace if run.value == lane.label], axis):
        x, width = axis.x(run.start), axis.x(run.end) - axis.x(run.start)
        parts.append(tag("rect", x=x, width=width, y=top, height=LANE, class_=f"paces {_class(lane.key)}"))
    if low < 0 < high:
        parts.append(tag("line", x1=LEFT, x2=RIGHT, y1=y(0.0), y2=y(0.0), class_="zero"))
    for start, end, value in lane.limits:
        where = {"x1": axis.x(start), "x2": axis.x(end), "y1": y(value), "y2": y(value)}
        parts.append(tag("line", **where, class_="limit", data_limit=repr(value)))
    for curve in lane.curves:
        shape = _line(axis, curve.time, curve.value, y)
        parts.append(tag("path", d=shape, transform=f"scale({1 / FINE:g})", class_="limit curve"))
    parts.append(tag("path", d=_line(axis, lane.line.time, values, y), transform=f"scale({1 / FINE:g})", class_="line"))
    parts += _names(lane, edges, high, top, y)
    if lane.peak is not None:
        over = " over" if _over(lane.peak) else ""
        spot = {"cx": axis.x(lane.peak.time), "cy": y(lane.peak.peak * lane.factor), "r": 3.2}
        parts.append(tag("circle", **spot, class_=f"peak{over}"))
        parts.append(tag("text", esc(_used(lane)), x=RIGHT + 6, y=top + LANE / 2 + 4, class_=f"share{over}"))
    return tag("g", "".join(parts), class_="lane", data_joint=lane.name, data_quantity=lane.key, data_unit=lane.unit)


def _range(lane: Lane, values: Array, edges: Sequence[float]) -> tuple[float, float]:
    """What a lane spans: its limits, and the line where that goes beyond; zero too, but of positions."""
    known = values[np.isfinite(values)]
    least, most = float(known.min(initial=np.inf)), float(known.max(initial=-np.inf))
    if lane.key != "position" or not len(known):
        least, most = min(least, 0.0), max(most, 0.0)
    low, high = min([least, *edges]), max([most, *edges])
    return (low, high) if high > low else (low - 0.5, low + 0.5)


def _used(lane: Lane) -> str:
    """What stands to the right of a lane: the share at its peak, or the peak of a deviation."""
    assert lane.peak is not None
    if lane.key in ("deviation", "turn"):
        return f"{format_value(lane.peak.peak * lane.factor, 2)} {lane.unit}"
    share = 100 * lane.peak.share
    return f"{max(share, 100.1):.1f} %!" if _over(lane.peak) else f"{share:.1f} %"


def _over(peak: Peak) -> bool:
    return peak.margin < -1e-9 if peak.margin is not None else peak.share > 1 + TOLERANCE


def _names(lane: Lane, edges: Sequence[float], high: float, top: float, y: Scale) -> Iterator[str]:
    """A lane's name, unit and limits."""
    yield tag("text", _short(lane.name), x=8, y=top + 20, class_="who")
    yield tag("text", esc(pretty(lane.unit)), x=8, y=top + 35, class_="unit")
    placed: list[float] = []
    most = high if high > max(edges, default=-math.inf) * 1.05 else None  # the line goes well beyond: say how far
    for value in [*([most] if most is not None else []), *sorted(set(edges), reverse=True)]:
        at = min(top + LANE, max(top + 8, y(value) + 4))
        if all(abs(at - other) >= 11 for other in placed):
            placed.append(at)
            yield tag("text", format_value(value, 3 if value == most else 4), x=LEFT - 6, y=at, class_="edge")


def _line(axis: TimeAxis, time: Array, values: Array, y: Scale) -> str:
    """The line as path data in whole FINEths of a unit: moves relative, gaps left open, flat stretches one stroke."""
    known = np.isfinite(values)
    span = (RIGHT - LEFT) / (axis.end - axis.start)
    xs = np.round(FINE * (LEFT + (time - axis.start) * span)).astype(np.int64)
    ys = np.round(FINE * np.asarray(y(np.where(known, values, 0.0)))).astype(np.int64)
    pieces = []
    borders = np.flatnonzero(np.diff(known.astype(np.int8))) + 1
    for part in np.split(np.arange(len(values)), borders):
        if not len(part) or not known[part[0]]:
            continue
        px, py = xs[part], ys[part]
        if len(part) > 2:  # a point between two of its own height adds nothing
            flat = (py[1:-1] == py[:-2]) & (py[1:-1] == py[2:])
            keep = np.concatenate([[True], ~flat, [True]])
            px, py = px[keep], py[keep]
        moves = np.column_stack([np.diff(px), np.diff(py)]).ravel().tolist()
        text = " ".join(map(str, moves)).replace(" -", "-")
        pieces.append(f"M{px[0]} {py[0]}" + (f"l{text}" if text else "h0"))
    return "".join(pieces)


def _block(axis: TimeAxis, run: Run, top: float, quantity: str) -> str:
    x, width, height = axis.x(run.start), axis.x(run.end) - axis.x(run.start), ROLL - 3
    text = next((text for text in (quantity, LETTERS[quantity]) if width >= 6.4 * len(text) + 5), "")
    words = tag("title", esc(f"{quantity}, {clock(run.start)} to {clock(run.end)}"))
    block = swatch(quantity, (x, top, width, height), words)
    return block + (tag("text", text, x=x + width / 2, y=top + 11.5, class_="on") if text else "")


def swatch(quantity: str, box: Box, words: str = "") -> str:
    """A box in the colour and filling of a quantity."""
    x, y, width, height = box
    strokes = filling(quantity, box)
    block = tag("rect", words, x=x, y=y, width=width, height=height, class_=f"block {_class(quantity)}")
    return block + (tag("path", d=strokes, class_="pattern") if strokes else "")


def _strip(picture: Picture, axis: TimeAxis, top: float) -> str:
    """What paces, as one strip: the joint's name where it fits, else its number."""
    runs, parts = visible(picture.pace, axis), []
    if len(runs) > MOST_BLOCKS:
        parts.append(_merged(picture, axis, runs, top, 12.0))
        runs = []
    for run in runs:
        row, quantity = picture.labels[run.value]
        x, width = axis.x(run.start), axis.x(run.end) - axis.x(run.start)
        words = tag("title", esc(f"paced by {picture.pace_label(run.value)}"))
        parts.append(tag("rect", words, x=x, y=top, width=width, height=12, class_=f"paced {_class(quantity)}"))
        names = (picture.names[row], str(row + 1)) if row >= 0 else ("tool", "t")
        text = next((name for name in names if width >= 6 * len(name) + 3), "")
        if text:
            parts.append(tag("text", esc(text), x=x + width / 2, y=top + 9.5, class_="on"))
    label = tag("text", "paced by", x=LEFT - 6, y=top + 10, class_="edge")
    return tag("g", label + "".join(parts), class_="strip")


def _merged(picture: Picture, axis: TimeAxis, runs: Sequence[Run], top: float, height: float) -> str:
    """Very many blocks as one shape a quantity, too narrow for fillings and names."""
    shapes: dict[str, list[str]] = {}
    for run in runs:
        quantity = picture.labels[run.value][1]
        x, width = axis.x(run.start), axis.x(run.end) - axis.x(run.start)
        box = f"M{number(x)} {number(top)}h{number(width)}v{number(height)}h-{number(width)}z"
        shapes.setdefault(quantity, []).append(box)
    return "".join(tag("path", d="".join(boxes), class_=_class(quantity)) for quantity, boxes in shapes.items())


def _time_axis(axis: TimeAxis, y: float, top: float, bottom: float) -> str:
    parts = []
    for time in ticks(axis.start, axis.end):
        x = axis.x(time)
        parts.append(tag("line", x1=x, x2=x, y1=top, y2=bottom, class_="grid"))
        parts.append(tag("text", format_value(time, 6), x=x, y=y + 13, class_="tick"))
    parts.append(tag("text", "s", x=RIGHT + 14, y=y + 13, class_="tick"))
    return tag("g", "".join(parts), class_="axis")


def _class(quantity: str) -> str:
    return "q-" + quantity.replace(" ", "-")


def _short(text: str) -> str:
    """A name that fits beside its lane."""
    return esc(text) if len(text) <= 15 else esc(text[:14]) + "…" + tag("title", esc(text))
