"""Plots as drawn: limits where they are, lines through the values of the table, peaks where the audit has them."""

import math
import re
import xml.etree.ElementTree as ET
from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from pathplan.report.axis import LEFT, RIGHT, TimeAxis, ticks, visible
from pathplan.report.gather import Run, picture_of, picture_of_table
from pathplan.report.plots import FINE, LANE, lane_plot, pace_plot, quantity_lanes, tool_lanes
from pathplan.table import Mark
from pathplan.units import to_screen
from tests.auditing.cast import made_arm, move_table, with_cell

DEG = 180 / math.pi


def vertices(path):
    """Points (K, 2) of a drawn line, in units of the plot."""
    points = []
    for piece in re.findall(r"M[^M]*", path.get("d")):
        start, _, moves = piece[1:].partition("l")
        x, y = map(int, start.removesuffix("h0").split())
        points.append((x, y))
        numbers = list(map(int, re.findall(r"-?\d+", moves)))
        for dx, dy in zip(numbers[::2], numbers[1::2], strict=True):
            x, y = x + dx, y + dy
            points.append((x, y))
    return np.array(points) / FINE


def lanes_of(svg):
    return {lane.get("data-joint"): lane for lane in ET.fromstring(svg).iter("g") if lane.get("class") == "lane"}


def scale_of(lane):
    """What turns heights into values: read off the two limit lines of the lane."""
    drawn = [(float(line.get("data-limit")), float(line.get("y1"))) for line in lane if line.get("class") == "limit"]
    (low, y_low), (high, y_high) = min(drawn), max(drawn)
    assert y_low > y_high, "the lower limit must lie lower"
    return lambda y: low + (y - y_low) * (high - low) / (y_high - y_low)


def find(lane, kind):
    (found,) = [item for item in lane if item.get("class", "").split()[0] == kind]
    return found


@pytest.fixture(scope="module")
def picture(pick):
    return picture_of(pick)


@pytest.mark.parametrize("quantity", ["position", "velocity", "acceleration", "jerk", "torque"])
def test_lines_lie_at_their_values_and_limits_at_the_limits(pick, picture, quantity):
    svg = lane_plot(picture, "plot", quantity, quantity_lanes(picture, quantity))
    lanes = lanes_of(svg)
    assert list(lanes) == [joint.name for joint in pick.arm.joints]
    axis = TimeAxis.of(picture)
    for i, joint in enumerate(pick.arm.joints):
        lane, factor = lanes[joint.name], 1.0 if quantity == "torque" else DEG
        low, high = getattr(pick.arm.limits, quantity)[i] * factor
        limits = sorted(float(line.get("data-limit")) for line in lane if line.get("class") == "limit")
        assert limits == pytest.approx([low, high])
        value = scale_of(lane)
        points = vertices(find(lane, "line"))
        fine = (high - low) / LANE / FINE  # what one step of the drawing is worth
        column = getattr(pick.table, quantity)[:, i] * factor
        # every point that is drawn is a row of the table
        time = axis.start + (points[:, 0] - LEFT) / (RIGHT - LEFT) * (axis.end - axis.start)
        row = np.clip(np.round(time / 0.004).astype(int), 0, len(column) - 1)
        rows = [np.clip(row + k, 0, len(column) - 1) for k in (-1, 0, 1)]
        assert np.min([np.abs(value(points[:, 1]) - column[k]) for k in rows], axis=0).max() <= 1.01 * fine
        # and the extremes of the column are among them
        assert value(points[:, 1]).max() == pytest.approx(column.max(), abs=fine)
        assert value(points[:, 1]).min() == pytest.approx(column.min(), abs=fine)
        peak, ring = getattr(pick.audit.joints[i], quantity), find(lane, "peak")
        assert value(float(ring.get("cy"))) == pytest.approx(peak.peak * factor, abs=0.6 * fine * FINE / 100 + fine)
        assert float(ring.get("cx")) == pytest.approx(axis.x(peak.time), abs=0.01)
        assert find(lane, "share").text == f"{100 * peak.share:.1f} %"


def test_a_spike_in_a_long_table_is_drawn_and_marked():
    table = with_cell(move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 100.0), "velocity", 12_345, 1, 2.2)
    picture = picture_of_table(table, made_arm())
    lane = lanes_of(lane_plot(picture, "plot", "velocity", quantity_lanes(picture, "velocity")))["swing"]
    value = scale_of(lane)
    points = vertices(find(lane, "line"))
    assert value(points[:, 1]).max() == pytest.approx(2.2 * DEG, abs=0.2)
    assert find(lane, "share").text == "110.0 %!" and "over" in find(lane, "peak").get("class")


def test_lanes_without_limits_and_with_sums_of_joints():
    torque = np.tile([100.0, -10.0, 5.0], (751, 1))
    picture = picture_of_table(move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 3.0, torque=torque), made_arm())
    lanes = lanes_of(lane_plot(picture, "plot", "position", quantity_lanes(picture, "position")))
    assert list(lanes) == ["lift", "swing", "bend", "shaft"]
    assert not [item for item in lanes["bend"] if item.get("class") == "limit"]
    assert lanes["lift"].get("data-unit") == "mm" and lanes["swing"].get("data-unit") == "deg"
    drawn = lanes_of(lane_plot(picture, "plot", "torque", quantity_lanes(picture, "torque")))
    assert list(drawn) == ["lift", "swing", "bend"]  # a torque is not summed


def test_tool_speed_under_its_caps_and_gaps_in_the_deviation(pick, picture):
    lanes = lanes_of(lane_plot(picture, "plot", "tool", tool_lanes(picture)))
    assert list(lanes) == ["tool speed", "off the path", "turned off it"]
    caps = {float(line.get("data-limit")) for line in lanes["tool speed"] if line.get("class") == "limit"}
    assert sorted(caps) == pytest.approx(sorted({1e3 * step.speed for step in pick.task.steps if step.speed}))
    deviation = find(lanes["off the path"], "line").get("d")
    known = ~np.isnan(picture.kept["deviation", -1])
    assert deviation.count("M") == np.sum(np.diff(known.astype(int), prepend=0) == 1)
    assert find(lanes["off the path"], "limit").get("data-limit") == "1.0"


def test_pace_has_a_block_for_each_run(pick, picture):
    svg = ET.fromstring(pace_plot(picture, "pace", "What sets the pace"))
    axis = TimeAxis.of(picture)
    blocks = [item for item in svg.iter("rect") if item.get("class", "").startswith("block")]
    assert len(blocks) == len(picture.pace)
    lanes = {}
    for run in picture.pace:
        row, quantity = picture.labels[run.value]
        (block,) = [b for b in blocks if abs(float(b.get("x")) - axis.x(run.start)) < 0.011]
        assert float(block.get("width")) == pytest.approx(axis.x(run.end) - axis.x(run.start), abs=0.011)
        assert block.get("class") == f"block q-{quantity.replace(' ', '-')}"
        assert lanes.setdefault(row, block.get("y")) == block.get("y")
    assert len(set(lanes.values())) == len(lanes)  # a lane each: position tells the joint, not colour


def test_tint_where_the_limit_of_the_lane_paces(picture):
    svg = lane_plot(picture, "plot", "jerk", quantity_lanes(picture, "jerk"))
    tinted = [item for item in lanes_of(svg)["shoulder"] if item.get("class") == "paces q-jerk"]
    label = picture.labels.index((1, "jerk"))
    assert len(tinted) == sum(run.value == label for run in picture.pace) > 0


def test_text_from_files_stays_text(picture):
    marks = (Mark("</svg><script>x</script>", 1.0, 250, 1),)
    svg = lane_plot(replace(picture, marks=marks), "plot", "<b>", quantity_lanes(picture, "velocity"))
    root = ET.fromstring(svg)
    assert not list(root.iter("script")) and root.find("title").text == "<b>"
    assert "</svg><script>x</script>" in {item.text for item in root.iter("text")}


def test_marks_that_would_overlap_keep_their_line(picture):
    marks = tuple(Mark(f"mark number {k}", 1.0 + 0.01 * k, 250, 1) for k in range(5))
    root = ET.fromstring(lane_plot(replace(picture, marks=marks), "plot", "v", quantity_lanes(picture, "velocity")))
    (group,) = [item for item in root.iter("g") if item.get("class") == "marks"]
    assert {item.text for item in group.iter("text")} == {"mark number 0", "mark number 4"}  # to the left and right
    assert {item.text for item in group.iter("title")} == {mark.name for mark in marks}


def test_very_many_marks_and_blocks_become_one_shape_each(picture):
    marks = tuple(Mark(f"mark {k}", 0.05 * k, k, 1) for k in range(100))
    pace = tuple(Run(k, k, 0.01 * k, 0.01 * (k + 1), k % 6) for k in range(600))
    many = replace(picture, marks=marks, pace=pace)
    for svg in (pace_plot(many, "pace", "p"), lane_plot(many, "plot", "v", quantity_lanes(many, "velocity"))):
        (group,) = [item for item in ET.fromstring(svg).iter("g") if item.get("class") == "marks"]
        (ticks_of_marks,) = list(group)
        assert ticks_of_marks.get("d").count("M") == 100
    merged = [
        item for item in ET.fromstring(pace_plot(many, "pace", "p")).iter("path") if item.get("class") == "q-velocity"
    ]
    assert sum(item.get("d").count("M") for item in merged) == 600 and len(merged) == 6


def test_what_is_too_narrow_is_joined():
    axis = TimeAxis(0.0, 10.0)
    runs = [Run(k, k, k * 1e-3, (k + 1) * 1e-3, k % 2) for k in range(10_000)]
    seen = visible(runs, axis)
    assert len(seen) <= RIGHT - LEFT and seen[0].start == 0 and seen[-1].end == pytest.approx(10.0)
    assert all(a.end <= b.start + 1e-12 for a, b in pairwise(seen))
    assert visible(runs[:700], axis) == runs[:700]


@pytest.mark.parametrize(("low", "high"), [(0, 6.06), (0, 3600), (1.2, 1.2004), (-3, 0.5), (0, 1e-4)])
def test_ticks_are_round(low, high):
    found = ticks(low, high)
    assert 2 <= len(found) <= 11 and found[0] >= low - 1e-9 and found[-1] <= high + 1e-9
    step = found[1] - found[0]
    assert any(abs(step / 10 ** math.floor(math.log10(step) + 1e-9) - k) < 1e-6 for k in (1, 2, 5))


def test_units_of_a_gantry(portal):
    picture = picture_of(portal)
    lanes = quantity_lanes(picture, "velocity")
    assert [lane.unit for lane in lanes] == ["mm/s", "mm/s", "mm/s", "deg/s"]
    assert lanes[0].limits[1][2] == pytest.approx(to_screen(portal.arm.limits.velocity[0, 1], "speed"))
