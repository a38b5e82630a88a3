"""Figures for scripts: every plot of the report as a matplotlib figure, drawn from a plan or from a table and its arm.

    from pathplan.report import figures
    figures.velocity(plan).savefig("velocity.pdf")
    figures.tool(table, arm)

Limits are dashed, steps shaded, marks named, what paces stands in a strip along the time axis. Lines are thinned with
their peaks kept, so that vector files stay small. Figures belong to the caller: nothing is registered with pyplot.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import TYPE_CHECKING, Any

from pathplan.errors import InputError
from pathplan.report.files import DRAWINGS
from pathplan.report.gather import PACED, Picture, picture_of, picture_of_table
from pathplan.report.plots import LETTERS, Lane, quantity_lanes, tool_lanes
from pathplan.report.text import printable
from pathplan.units import format_value

if TYPE_CHECKING:
    from matplotlib.axes import Axes
    from matplotlib.figure import Figure

    from pathplan.arm import Arm
    from pathplan.planning import Plan
    from pathplan.table import JointTable

__all__ = [
    "KINDS",
    "acceleration",
    "arm",
    "audit",
    "draw",
    "jerk",
    "joints",
    "pacing",
    "position",
    "save",
    "tool",
    "torque",
    "velocity",
]

# Okabe & Ito 2008, "Color Universal Design"
BLACK, ORANGE, SKY, GREEN, YELLOW = "#000000", "#E69F00", "#56B4E9", "#009E73", "#F0E442"
BLUE, VERMILLION, PURPLE = "#0072B2", "#D55E00", "#CC79A7"
COLOURS = dict(zip(PACED, (BLUE, ORANGE, GREEN, PURPLE, SKY, YELLOW, VERMILLION), strict=True))
HATCHES = dict(zip(PACED, ("", "///", "..", "--", "||", "xx", "\\\\\\"), strict=True))
MUTED, RULE, SHADE = "#565c64", "#c9cbc6", "#f0f0ec"
POINTS = 2000  # half the points of a line
WIDTH = 10.0  # inches
MOST_STEPS = 2000
DPI = 150
Source = Any  # Plan | JointTable | Picture


def joints(source: Plan | JointTable, arm: Arm | None = None) -> Figure:
    """Every quantity of every joint: a column a quantity, a row a joint, limits drawn."""
    picture = _picture(source, arm)
    columns = [quantity_lanes(picture, quantity) for quantity in picture.quantities]
    rows = max(map(len, columns))
    figure = _figure(3.4 * len(columns), 0.95 * rows + 1.3)
    axes = figure.subplots(rows, len(columns), sharex=True, squeeze=False)
    for c, lanes in enumerate(columns):
        for r in range(rows):
            if r < len(lanes):
                _lane(axes[r][c], picture, lanes[r], named=c == 0)
            else:
                axes[r][c].set_visible(False)
        axes[0][c].set_title(picture.quantities[c].capitalize(), fontsize=10, fontweight="bold", pad=27)
        _step_names(axes[0][c], picture, 1 / len(columns))
        axes[-1][c].set_xlabel("s")
    _title(figure, picture)
    return figure


def position(source: Plan | JointTable, arm: Arm | None = None) -> Figure:
    """Positions of the joints over time between their limits."""
    return _quantity("position", source, arm)


def velocity(source: Plan | JointTable, arm: Arm | None = None) -> Figure:
    """Velocities of the joints over time between their limits."""
    return _quantity("velocity", source, arm)


def acceleration(source: Plan | JointTable, arm: Arm | None = None) -> Figure:
    """Accelerations of the joints over time between their limits."""
    return _quantity("acceleration", source, arm)


def jerk(source: Plan | JointTable, arm: Arm | None = None) -> Figure:
    """Jerks of the joints over time between their limits."""
    return _quantity("jerk", source, arm)


def torque(source: Plan | JointTable, arm: Arm | None = None) -> Figure:
    """Torques of the joints over time between their limits."""
    return _quantity("torque", source, arm)


def tool(source: Plan | JointTable, arm: Arm | None = None) -> Figure:
    """Tool speed and turning speed with their caps, and with a plan how far the tool lies from its programmed path."""
    picture = _picture(source, arm)
    lanes = tool_lanes(picture)
    if not lanes:
        raise InputError("tool: the table has no tool speed to draw")
    return _stacked(picture, lanes)


def pacing(source: Plan | JointTable, arm: Arm | None = None) -> Figure:
    """Which joint and limit sets the pace when: a line a joint, blocks that carry the limit's letter."""
    picture = _picture(source, arm)
    rows = [*range(len(picture.names)), -1]
    figure = _figure(WIDTH, 0.32 * len(rows) + 1.5)
    axes = figure.subplots()
    _background(axes, picture)
    for run in picture.pace:
        row, quantity = picture.labels[run.value]
        _block(axes, run.start, run.end, rows.index(row), quantity)
        width = run.end - run.start
        if width > 0.012 * picture.duration:
            text = quantity if width > 0.011 * picture.duration * len(quantity) else LETTERS[quantity]
            place = (run.start + run.end) / 2, rows.index(row)
            box = {"boxstyle": "round,pad=0.1", "fc": "white", "ec": "none", "alpha": 0.8}
            axes.text(*place, text, ha="center", va="center", fontsize=7, bbox=box)
    axes.set_yticks(range(len(rows)), [printable(picture.names[row]) if row >= 0 else "tool" for row in rows])
    axes.set_ylim(len(rows) - 0.4, -0.6)
    _time_limits(axes, picture)
    _bare(axes)
    _step_names(axes, picture)
    axes.set_xlabel("s")
    used = [q for q in PACED if any(picture.labels[run.value][1] == q for run in picture.pace)]
    handles = [_swatch(quantity) for quantity in used]
    if handles:
        axes.legend(handles=handles, ncols=len(handles), loc="upper left", bbox_to_anchor=(0, -0.16), frameon=False)
    _title(figure, picture)
    return figure


def audit(source: Plan | JointTable, arm: Arm | None = None) -> Figure:
    """Bars of the largest share that each joint uses of each limit."""
    picture = _picture(source, arm)
    audits = (*picture.audit.joints, *picture.audit.rows)
    quantities = [q for q in ("position", *PACED[:4]) if any(getattr(joint, q) for joint in audits)]
    figure = _figure(WIDTH, 0.34 * len(audits) + 1.2)
    panels = figure.subplots(1, len(quantities), sharey=True, squeeze=False)[0]
    for panel, quantity in zip(panels, quantities, strict=True):
        for row, joint in enumerate(audits):
            peak = getattr(joint, quantity)
            if peak is None:
                continue
            share, over = 100 * peak.share, peak.share > 1 + 1e-6
            colour = VERMILLION if over else COLOURS.get(quantity, MUTED)
            panel.barh(row, share, 0.62, color=colour, hatch="xx" if over else HATCHES.get(quantity, ""), ec="white")
            panel.text(share + 2, row, f"{share:.1f}{'!' if over else ''}", va="center", fontsize=8)
        panel.axvline(100, color=MUTED, ls="--", lw=1)
        panel.set_title(quantity, fontsize=10)
        panel.set_xlim(0, max(125.0, *(100 * p.share + 28 for joint in audits if (p := getattr(joint, quantity)))))
        panel.set_xlabel("% of the limit")
        _bare(panel)
    panels[0].set_yticks(range(len(audits)), [printable(joint.name) for joint in audits])
    panels[0].invert_yaxis()
    _title(figure, picture)
    return figure


def arm(source: Plan | JointTable, arm: Arm | None = None, *, time: float | None = None) -> Figure:
    """The arm in space with its path, blends and frames, at a time (s; default the start), faint at the marks."""
    from pathplan.report.space import draw_space

    picture = _picture(source, arm)
    figure = _figure(7.5, 6.0)
    draw_space(figure, picture, time)
    _title(figure, picture)
    return figure


KINDS: Mapping[str, Callable[..., Figure]] = {
    "joints": joints,
    "position": position,
    "velocity": velocity,
    "acceleration": acceleration,
    "jerk": jerk,
    "torque": torque,
    "tool": tool,
    "pacing": pacing,
    "audit": audit,
    "arm": arm,
}
"""Every kind of figure by its name on the command line."""


def draw(kind: str, source: Plan | JointTable | Picture, arm: Arm | None = None, **options: Any) -> Figure:
    """A figure by the name of its kind, with the options of that kind.

    Raises InputError for an unknown kind, and where there is nothing to draw.
    """
    if kind not in KINDS:
        raise InputError(f"kind: expected one of {', '.join(KINDS)}, got {kind}")
    return KINDS[kind](source, arm, **options)


def save(figure: Figure, file: str | Path, *, note: str = "") -> None:
    """Write a figure as .png, .svg or .pdf, the same bytes for the same figure. `note` goes into the file's own record.

    Raises InputError for another suffix or a place that can't be written, PathplanError when the disk fails.
    """
    import matplotlib

    from pathplan.export.save import saving

    file = Path(file)
    kind = file.suffix.lower()
    if kind not in DRAWINGS:
        got = f'"{file.suffix}"' if file.suffix else "none"
        raise InputError.at(str(file), f"unknown kind of figure: expected {' or '.join(DRAWINGS)}, got {got}")
    record = {
        ".png": {"Software": "pathplan", "Comment": note},
        ".svg": {"Creator": "pathplan", "Description": note, "Date": None},
        ".pdf": {"Creator": "pathplan", "Subject": note, "CreationDate": None},
    }[kind]
    style: Any = {"svg.hashsalt": "pathplan", "svg.fonttype": "none", "pdf.fonttype": 42}
    with saving(file) as stream, matplotlib.rc_context(style):
        figure.savefig(stream, format=kind[1:], dpi=DPI, metadata=record)


def _picture(source: Any, arm: Arm | None) -> Picture:
    from pathplan.table import JointTable

    if isinstance(source, Picture):
        return source
    if not isinstance(source, JointTable):
        return picture_of(source, buckets=POINTS)
    if arm is None:
        raise InputError("arm: a table is drawn with the arm that it belongs to, got none")
    return picture_of_table(source, arm, buckets=POINTS)


def _quantity(quantity: str, source: Any, arm: Arm | None) -> Figure:
    picture = _picture(source, arm)
    lanes = quantity_lanes(picture, quantity)
    if not lanes:
        raise InputError(f"{quantity}: the table has none to draw")
    return _stacked(picture, lanes)


def _stacked(picture: Picture, lanes: list[Lane]) -> Figure:
    """Lanes above one another, with a strip of what paces below."""
    figure = _figure(WIDTH, 0.95 * len(lanes) + 1.6)
    axes = figure.subplots(len(lanes) + 1, 1, sharex=True, height_ratios=[1.0] * len(lanes) + [0.22])
    for axis, lane in zip(axes, lanes, strict=False):
        _lane(axis, picture, lane, named=True)
    _step_names(axes[0], picture)
    _strip(axes[-1], picture)
    _title(figure, picture)
    return figure


def _figure(width: float, height: float) -> Figure:
    from matplotlib.figure import Figure

    return Figure(figsize=(width, height), layout="constrained")


def _title(figure: Figure, picture: Picture) -> None:
    from pathplan.report.screen import verdict

    # parse_math: a dollar sign in a task's title is no formula
    title = _short(picture.title or picture.arm.name, 90)
    figure.suptitle(title, x=0.02, ha="left", fontweight="bold", parse_math=False)
    words = f"{verdict(picture.audit)}, {format_value(picture.duration, 7)} s"
    figure.text(0.99, 0.995, words, ha="right", va="top", fontsize=9, color=MUTED)


def _lane(axes: Axes, picture: Picture, lane: Lane, *, named: bool) -> None:
    _background(axes, picture)
    paces = [(run.start, run.end - run.start) for run in picture.pace if run.value == lane.label]
    _spans(axes, paces, facecolor=COLOURS.get(lane.key), alpha=0.3, lw=0, zorder=1)
    for start, end, value in lane.limits:
        axes.plot([start, end], [value, value], color=MUTED, ls=(0, (4, 2)), lw=1, zorder=2, gid="limit")
    for curve in lane.curves:
        axes.plot(curve.time, curve.value, color=MUTED, ls=(0, (4, 2)), lw=1, zorder=2, gid="limit")
    axes.plot(lane.line.time, lane.line.value * lane.factor, color=BLACK, lw=1.1, zorder=3, gid="line")
    if lane.peak is not None:
        place = lane.peak.time, lane.peak.peak * lane.factor
        axes.plot(*place, "o", ms=4, mfc="white", mec=BLACK, mew=1.1, zorder=4, gid="peak", clip_on=False)
        axes.annotate(_used(lane), (1.0, 0.5), xycoords="axes fraction", xytext=(4, 0), textcoords="offset points",
                      va="center", fontsize=7, color=MUTED)  # fmt: skip
    _time_limits(axes, picture)
    edges = sorted({value for _, _, value in lane.limits})
    if edges and lane.key not in ("deviation", "turn", "tool speed", "tool turning speed"):
        axes.set_yticks([edge for edge in edges if math.isfinite(edge)])
        axes.yaxis.set_major_formatter(lambda value, _: format_value(value))
    unit = lane.unit.replace("^2", "²").replace("^3", "³")
    label = f"{_short(lane.name, 14)}\n{unit}" if named else unit
    axes.set_ylabel(label, rotation=0, ha="right", va="center", fontsize=8, parse_math=False)
    axes.tick_params(labelsize=7)
    _bare(axes)


def _time_limits(axes: Axes, picture: Picture) -> None:
    start, end = float(picture.kept_time[0]), float(picture.kept_time[-1])
    axes.set_xlim(start, end if end > start else start + 1.0)


def _used(lane: Lane) -> str:
    assert lane.peak is not None
    if lane.key in ("deviation", "turn"):
        return f"{format_value(lane.peak.peak * lane.factor, 2)} {lane.unit}"
    return f"{100 * lane.peak.share:.1f} %"


def _background(axes: Axes, picture: Picture) -> None:
    """Steps shaded by turns, waits hatched, marks as lines."""
    waits, odd = [], []
    for run in picture.steps[:MOST_STEPS]:
        if run.value < len(picture.motions) and picture.motions[run.value] == "wait":
            waits.append((run.start, run.end - run.start))
        elif run.value % 2:
            odd.append((run.start, run.end - run.start))
    _spans(axes, odd, facecolor=SHADE, lw=0, zorder=0)
    _spans(axes, waits, facecolor="none", edgecolor=RULE, hatch="////", lw=0, zorder=0)
    for mark in picture.marks[:200]:
        axes.axvline(mark.time, color=MUTED, ls=":", lw=1, zorder=2)


def _spans(axes: Axes, spans: list[tuple[float, float]], **how: Any) -> None:
    """Stretches of time (start, length) over the whole height of the axes, as one artist."""
    if spans:
        axes.broken_barh(spans, (0, 1), transform=axes.get_xaxis_transform(), **how)


def _step_names(axes: Axes, picture: Picture, room: float = 1.0) -> None:
    """Numbers of the steps and names of the marks above the topmost axes; `room`: its width in parts of a whole one."""
    width = max(picture.duration, 1e-9) / room
    for run in picture.steps[:400]:
        if run.end - run.start > 0.02 * width:
            _above(axes, (run.start + run.end) / 2, 3, str(run.value + 1), ha="center", color=MUTED)
    last = -math.inf
    for mark in picture.marks[:100]:
        if mark.time >= last:
            _above(axes, mark.time, 13, f"◆ {_short(mark.name, 24)}", ha="left", style="italic")
            last = mark.time + 0.012 * width * len(mark.name)


def _above(axes: Axes, time: float, points: float, text: str, **how: Any) -> None:
    """A text so many points above the axes, at a time."""
    how |= {"xycoords": axes.get_xaxis_transform(), "xytext": (0, points), "textcoords": "offset points"}
    axes.annotate(text, (time, 1.0), fontsize=7, va="bottom", parse_math=False, **how)


def _strip(axes: Axes, picture: Picture) -> None:
    for run in picture.pace:
        row, quantity = picture.labels[run.value]
        _block(axes, run.start, run.end, 0, quantity)
        width = run.end - run.start
        name = picture.names[row] if row >= 0 else "tool"
        text = name if width > 0.011 * picture.duration * len(name) else str(row + 1) if row >= 0 else "t"
        if width > 0.012 * picture.duration:
            how: dict[str, Any] = {"ha": "center", "va": "center", "fontsize": 6, "parse_math": False}
            axes.text((run.start + run.end) / 2, 0, printable(text), **how)
    axes.set_ylim(-0.5, 0.5)
    axes.set_yticks([])
    axes.set_ylabel("paced by", rotation=0, ha="right", va="center", fontsize=8)
    axes.set_xlabel("s")
    _bare(axes)


def _block(axes: Axes, start: float, end: float, row: float, quantity: str) -> None:
    how: dict[str, Any] = {"color": COLOURS[quantity], "hatch": HATCHES[quantity], "ec": "white", "lw": 0.4}
    axes.barh(row, end - start, 0.8, left=start, zorder=2, **how)


def _swatch(quantity: str) -> Any:
    from matplotlib.patches import Patch

    label = f"{LETTERS[quantity]} {quantity}"
    return Patch(facecolor=COLOURS[quantity], hatch=HATCHES[quantity], edgecolor="white", label=label)


def _bare(axes: Axes) -> None:
    for side in ("top", "right"):
        axes.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        axes.spines[side].set_color(RULE)


def _short(text: str, most: int) -> str:
    shown = printable(text)
    return shown if len(shown) <= most else shown[: most - 1] + "…"
