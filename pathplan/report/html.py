"""The report: one self-contained HTML file, and the pieces of it that the live page puts in place.

Nothing is fetched: style, script and data stand in the file, and its content security policy allows that very style and
script by their hashes and nothing else.
"""

from __future__ import annotations

import base64
import hashlib
from collections.abc import Mapping, Sequence
from functools import cache
from importlib.resources import files
from typing import TYPE_CHECKING, Any

import numpy as np

from pathplan.report.drives_section import drives_section
from pathplan.report.gather import Picture
from pathplan.report.markup import embedded, esc, tag
from pathplan.report.page_data import page_data
from pathplan.report.plots import LETTERS, lane_plot, pace_plot, quantity_lanes, swatch, tool_lanes
from pathplan.report.savings import savings_section
from pathplan.report.scene import Scene, scene_of
from pathplan.report.screen import verdict
from pathplan.report.sections import (
    audit_section,
    cautions_section,
    findings_section,
    headline,
    inputs_section,
    marks_section,
    section,
    steps_section,
)
from pathplan.report.still import arm_still

if TYPE_CHECKING:
    from pathplan.savings import Saving

__all__ = [
    "SLOTS",
    "PageParts",
    "asset",
    "content_policy",
    "digests",
    "document",
    "page_parts",
    "report_html",
    "task_key",
    "title_of",
]

SCRIPTS = ("rows.js", "chain.js", "view.js", "scrub.js", "start.js")
ABOVE = ("headline", "changes", "findings", "audit", "steps")
BELOW = ("marks", "drives", "savings", "inputs", "cautions")
SLOTS = (*ABOVE, "plots", "still", *BELOW)
RATES = (("1", "at full speed"), ("0.25", "at a quarter"), ("0.1", "at a tenth"))
# what a button shows, says and does: turn by deg, tilt by deg, zoom
TURNS = (
    ("◀", "turn left", "-10 0 1"),
    ("▶", "turn right", "10 0 1"),
    ("+", "nearer", "0 0 1.2"),
    ("−", "farther", "0 0 0.8333"),
)
PageParts = Mapping[str, str]


def report_html(picture: Picture, savings: Sequence[Saving] | None = None) -> str:
    """The whole report of a motion; `savings` as `Plan.savings` finds them, None to say nothing of them.

    The same motion gives the same text.
    """
    scene = scene_of(picture)
    parts = page_parts(picture, scene, savings)
    return document(title_of(picture), parts, page_data(picture, scene), picture.meta)


def title_of(picture: Picture) -> str:
    """Title and verdict."""
    return f"{picture.title or picture.arm.name}: {verdict(picture.audit)}"


def page_parts(picture: Picture, scene: Scene, savings: Sequence[Saving] | None = None) -> dict[str, str]:
    """The markup of each slot, '' for what there is nothing to say of."""
    ghosts = None
    rows = [mark.row for mark in picture.marks][:4]
    if rows:
        at = np.clip(np.searchsorted(picture.kept_rows, rows), 0, len(picture.kept_rows) - 1)
        ghosts = np.column_stack([picture.kept["position", i][at] for i in range(picture.arm.n)])
    about = "The arm where it starts, faint at the marks; programmed path dashed, corners broad"
    return {
        "headline": headline(picture),
        "changes": "",
        "findings": findings_section(picture),
        "audit": audit_section(picture),
        "steps": steps_section(picture),
        "plots": _plots(picture),
        "still": arm_still(scene, "arm-still", about, ghosts=ghosts),
        "marks": marks_section(picture),
        "drives": drives_section(picture),
        "savings": savings_section(picture.plan, savings),
        "inputs": inputs_section(picture),
        "cautions": cautions_section(),
    }


def document(
    title: str,
    parts: PageParts,
    data: Any,
    meta: Mapping[str, Any],
    *,
    live: int | None = None,
    trouble: str = "",
) -> str:
    """The page. `live`: the version that the live page starts from; without it, a report that needs nothing more."""
    version = dict(meta.get("versions") or {}).get("pathplan", "")
    head = [
        tag("meta", charset="utf-8"),
        tag("meta", http_equiv="Content-Security-Policy", content=content_policy(live=live is not None)),
        tag("meta", name="viewport", content="width=device-width, initial-scale=1"),
        tag("meta", name="color-scheme", content="light dark"),
        tag("meta", name="referrer", content="no-referrer"),
        tag("meta", name="generator", content=f"pathplan {version}".rstrip()),
        tag("meta", name="pathplan-task", content=task_key(meta)),
        tag("link", rel="icon", href="data:,"),
        tag("title", esc(title)),
        f"<style>{style_text()}</style>",
    ]
    known = digests(parts)
    slots = {name: tag("div", parts.get(name, ""), data_slot=name, data_digest=known.get(name)) for name in SLOTS}
    motion = _motion(slots["plots"], slots["still"])
    whole = [*(slots[name] for name in ABOVE), motion, *(slots[name] for name in BELOW)]
    main = tag("main", "".join(whole), id="sections", hidden=data is None)
    body = [
        tag("a", "Skip to the motion", href="#motion", class_="skip"),
        _watch_lines(trouble) if live is not None else "",
        main,
        f'<script type="application/json" id="data">{embedded(data)}</script>',
        f"<script>{script_text(live=live is not None)}</script>",
    ]
    root = {"lang": "en", "data_version": live}
    inner = tag("head", "\n".join(head)) + tag("body", "\n".join(body), class_="stale" if trouble else None)
    return "<!DOCTYPE html>\n" + tag("html", inner, **root) + "\n"


def task_key(meta: Mapping[str, Any]) -> str:
    """What tells the reports of one task from those of another: a digest of its title and file name."""
    return hashlib.sha256(f"{meta.get('task')}\n{meta.get('task_file')}".encode(errors="replace")).hexdigest()[:32]


@cache
def asset(name: str) -> str:
    """A file of the page: style or script."""
    return files("pathplan.report").joinpath("page", name).read_text(encoding="utf-8")


def content_policy(*, live: bool) -> str:
    """Nothing but what stands in the page itself; the live page may ask where it came from."""
    rules = [
        "default-src 'none'",
        f"script-src {_hash(script_text(live=live))}",
        f"style-src {_hash(style_text())}",
        "img-src data:",
        "base-uri 'none'",
        "form-action 'none'",
    ]
    return "; ".join([*rules, *(["connect-src 'self'"] if live else [])])


@cache
def style_text() -> str:
    """Colours and plots, which still pictures use too, and the rest of the page."""
    return asset("plot.css") + asset("page.css")


@cache
def script_text(*, live: bool) -> str:
    """The page's code in one piece that leaves no names behind."""
    names = [*SCRIPTS, *(["watch.js"] if live else [])]
    return "(() => {\n'use strict';\n" + "\n".join(map(asset, names)) + "})();"


def digests(parts: PageParts) -> dict[str, str]:
    """What tells whether a slot's markup is another than before."""
    return {name: hashlib.sha256(html.encode(errors="replace")).hexdigest()[:16] for name, html in parts.items()}


def _watch_lines(trouble: str) -> str:
    """What the live page says of the files as they are now, and that it is at work."""
    told = tag("p", "\n".join(map(esc, trouble.split("\n"))), id="trouble", role="alert", hidden=not trouble)
    return told + tag("p", "planning …", id="doing", role="status", hidden=True)


def _hash(text: str) -> str:
    return f"'sha256-{base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()}'"


def _plots(picture: Picture) -> str:
    """Every plot over time."""
    plots = []
    if picture.audit.measured == "columns":
        title = "What sets the pace"
        plots.append(_boxed(title, pace_plot(picture, "plot-pace", title), _legend()))
    for quantity in picture.quantities:
        name = quantity.capitalize()
        plots.append(_boxed(name, lane_plot(picture, f"plot-{quantity}", name, quantity_lanes(picture, quantity))))
    lanes = tool_lanes(picture)
    if lanes:
        plots.append(_boxed("Tool", lane_plot(picture, "plot-tool", "Tool speed and path deviation", lanes)))
    about = "Each lane is as high as the room between its limits (dashed)."
    about += " A ring marks the peak, a tint where the limit paces."
    return tag("p", about, class_="small") + "".join(plots)


def _boxed(title: str, plot: str, below: str = "") -> str:
    """A plot under its heading, with the cursor that follows the slider."""
    cursor = tag("div", "", class_="cursor", aria_hidden="true")
    return tag("div", tag("h3", esc(title)) + tag("div", plot + cursor, class_="plot-inner") + below, class_="plot-box")


def _legend() -> str:
    items = []
    for quantity, letter in LETTERS.items():
        filled = swatch(quantity, (0.0, 0.0, 22.0, 12.0))
        picture = tag("svg", filled, viewbox="0 0 22 12", class_="swatch", aria_hidden="true")
        items.append(tag("li", picture + esc(f" {letter} {quantity}")))
    return tag("ul", "".join(items), class_="legend", aria_label="limits that set the pace")


def _motion(plots: str, still: str) -> str:
    """The view with its slider and readings, beside the plots."""
    views = [tag("button", name, type="button", data_look=name) for name in ("front", "side", "above", "whole")]
    for sign, name, how in TURNS:
        views.append(tag("button", sign, type="button", data_turn=how, aria_label=name, title=name))
    box = tag("input", type="checkbox", id="labels", checked=True) + " frames and names"
    canvas = tag("canvas", "", id="view", tabindex=0, role="img", aria_label="The arm")
    rates = "".join(tag("option", esc(name), value=value) for value, name in RATES)
    slider = {"type": "range", "id": "slider", "min": 0, "max": 1, "step": 1, "value": 0, "aria_label": "Time"}
    play = tag("button", "Play", type="button", id="play") + tag("select", rates, id="rate", aria_label="Play at")
    hint = "Arrow keys step row by row, space plays; click a plot or a time to go there. Drag the arm to turn it."
    scrub = tag("div", tag("input", **slider) + tag("div", play + tag("label", box), class_="tools"), class_="scrub")
    readings = tag("table", tag("caption", "Readings at this row") + "<thead></thead><tbody></tbody>", id="readings")
    panel = [
        canvas,
        tag("div", "".join(views), class_="tools"),
        scrub,
        tag("dl", "", id="now", class_="facts"),
        tag("div", readings, class_="wide", tabindex=0, role="region", aria_label="Readings at this row"),
        tag("p", esc(hint), class_="small"),
    ]
    old = tag("p", "Turning and playing need a browser of 2023 or later.", id="no-scrub", hidden=True)
    left = tag("div", "".join(panel), class_="panel") + old + still
    both = tag("div", left, class_="left") + tag("div", plots, id="plots")
    return section("motion", "Motion", tag("div", both, class_="two"))
