"""The audit for machines: plain types, screen units, nothing that JSON has no word for."""

import json
import math
from dataclasses import replace

import numpy as np
import pytest

from pathplan.arm import Tool
from pathplan.auditing import CornerUse, Deviation, audit
from tests.auditing.cast import made_arm, with_cell


def as_json(found):
    return json.loads(json.dumps(found.to_dict(), allow_nan=False))


def test_values_are_in_screen_units_and_count_from_one(calm_table):
    arm = made_arm(tool=Tool("cup", np.eye(4), speed=0.9))
    table = with_cell(replace(calm_table, meta={"task": "Stack"}), "velocity", 400, 1, 2.5)
    found = as_json(audit(table, arm))
    assert found["passed"] is False and found["task"] == "Stack" and found["arm"] == "test arm"
    assert found["units"] == "mm, deg, s, N m, N, percent; steps and rows count from 1"
    assert (found["rows"], found["cycle_s"], found["duration_s"]) == (751, 0.004, 3.0)
    lift, swing, bend = found["joints"]
    assert lift["velocity"]["peak"] == pytest.approx(250.0) and lift["velocity"]["limit"] == 1000.0
    assert lift["velocity"]["unit"] == "mm/s" and lift["velocity"]["percent"] == pytest.approx(25.0)
    assert lift["position"]["margin"] == pytest.approx(300.0)
    assert swing["velocity"] == {
        "peak": pytest.approx(math.degrees(2.5)),
        "limit": pytest.approx(math.degrees(2.0)),
        "unit": "deg/s",
        "percent": pytest.approx(125.0),
        "time_s": 1.6,
        "step": 2,
        "row": 401,
    }
    assert "position" not in bend and swing["torque"]["unit"] == "N m" and lift["torque"]["unit"] == "N"
    assert swing["differences"]["velocity"]["percent"] < 30
    assert found["coupled"][0]["name"] == "shaft" and found["tool_speed"]["unit"] == "mm/s"
    (finding,) = [f for f in found["findings"] if f["quantity"] == "velocity"]
    assert finding["value"] == pytest.approx(math.degrees(2.5)) and finding["unit"] == "deg/s"
    assert (finding["step"], finding["time_s"], finding["joint"]) == (2, 1.6, "swing")
    assert found["pacing"][1]["step"] == 2 and found["singularity"]["smallest_singular_value"] > 0


def test_infinite_and_missing_numbers_become_null(arm, calm_table):
    table = with_cell(calm_table, "velocity", 400, 1, math.inf)
    assert as_json(audit(table, arm))["joints"][1]["velocity"]["peak"] is None
    bare = replace(calm_table, time=np.full(751, np.nan), jerk=None)
    assert as_json(audit(bare, arm))["passed"] is False


def test_a_row_over_both_kinds_of_joints_stays_in_si(calm_table):
    arm = made_arm()
    limits = replace(arm.limits, matrix=np.vstack([np.eye(3), [20.0, 1.0, 0.0]]))
    table = with_cell(calm_table, "velocity", 400, 0, 0.9)
    found = audit(table, made_arm(limits=limits))
    (finding,) = [f for f in found.findings if f.level == "exceedance" and f.quantity == "velocity"]
    assert "shaft: velocity 18.5" in finding.text and finding.text.count("(SI)") == 2
    assert as_json(found)["coupled"][0]["velocity"]["unit"] == "SI"


def test_what_the_plan_adds(arm, calm_table):
    found = replace(
        audit(calm_table, arm),
        deviation_rows=Deviation(1e-6, 0.5, 0, math.radians(0.1), 0.7, 1, 42),
        corners=(
            CornerUse(0, "fly-by", "", "20 mm", 0.02, 0.012, "length"),
            CornerUse(1, "fly-by", "", "15 %", 0.15, 0.15, "share"),
            CornerUse(2, "stop", "wait", "", 0.0, 0.0, ""),
        ),
    )
    plain = as_json(found)
    assert plain["path_deviation"]["midway"] is None
    rows = plain["path_deviation"]["rows"]
    assert rows["position_mm"] == pytest.approx(1e-3) and rows["angle_deg"] == pytest.approx(0.1)
    assert (rows["position_step"], rows["angle_step"], rows["poses"]) == (1, 2, 42)
    sizes = [(c["asked_value"], c["used"], c["unit"], c["after_step"]) for c in plain["corners"]]
    assert sizes == [(20.0, 12.0, "mm", 1), (15.0, 15.0, "percent", 2), (None, None, None, 3)]
