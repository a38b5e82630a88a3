"""A plan as a notebook shows it: its summary and a picture, small enough to be kept in the notebook."""

from __future__ import annotations

import base64
import math
from typing import TYPE_CHECKING

from pathplan.report.gather import picture_of
from pathplan.report.html import asset
from pathplan.report.markup import esc, tag
from pathplan.report.outputs import WHOLE
from pathplan.report.plan_data import bound_at_pace
from pathplan.report.plots import lane_plot, quantity_lanes
from pathplan.report.screen import verdict
from pathplan.report.text import clock

if TYPE_CHECKING:
    from pathplan.planning import Plan

__all__ = ["plan_html"]

BUCKETS = 150  # half the points of a line: a notebook keeps every picture


def plan_html(plan: Plan) -> str:
    """Title, verdict and times as a table, and the velocities of the joints between their limits as an SVG image.

    Of a plan whose rows are too many to be held, the table alone.
    """
    bound = bound_at_pace(plan)
    facts = [
        ("verdict", verdict(plan.audit)),
        ("cycle time", clock(plan.duration)),
        ("motion", clock(plan.duration - plan.waiting_time)),
        ("waiting", clock(plan.waiting_time)),
        ("bound", clock(math.floor(bound * 1e3) / 1e3)),
        ("arm", plan.arm.name),
        ("steps", str(len(plan.task.steps))),
        ("rows", str(plan.ticks + 1)),
    ]
    head = "".join(tag("th", esc(name), scope="col") for name, _ in facts)
    cells = "".join(tag("td", esc(value)) for _, value in facts)
    table = tag("table", tag("caption", esc(plan.task.title)) + tag("tr", head) + tag("tr", cells))
    if plan.ticks >= WHOLE:  # the rows would have to be evaluated once more
        return table
    picture = picture_of(plan, buckets=BUCKETS, most=2, tool=False)
    lanes = quantity_lanes(picture, "velocity")
    plot = lane_plot(picture, "velocity", "Velocity of the joints between their limits", lanes)
    words = "; ".join(lane.said for lane in lanes)
    return tag("div", table + tag("img", src=_image(plot), alt=f"Velocity over time. {words}", width=900))


def _image(plot: str) -> str:
    """An SVG element as the address of an image that carries its own style and ground."""
    style = tag("style", asset("plot.css"))
    ground = tag("rect", width="100%", height="100%", fill="var(--paper)")
    inner = plot.replace("<svg ", '<svg xmlns="http://www.w3.org/2000/svg" ', 1)
    at = inner.index(">") + 1
    whole = inner[:at] + style + ground + inner[at:]
    return "data:image/svg+xml;base64," + base64.b64encode(whole.encode()).decode()
