"""Columns that do not belong to the positions beside them."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.auditing import audit

ROOT = Path(pathplan.__file__).parents[1]


def warnings(table, arm):
    return [f for f in audit(table, arm).findings if "does not belong" in f.text]


def test_columns_that_belong_together(arm, calm_table):
    assert warnings(calm_table, arm) == []
    assert warnings(replace(calm_table, cycle=None), arm) == []
    for name in ("velocity", "acceleration", "jerk"):
        assert warnings(replace(calm_table, **{name: None}), arm) == []


@pytest.mark.parametrize("name", ["glazer6-pick-and-place", "loader4-belt-to-car", "sorter4-sort-tiles"])
def test_plans_at_their_limits_agree_with_themselves(name):
    """Jerk jumps in them all the time."""
    plan = pathplan.plan(pathplan.load_task(ROOT / "examples" / f"{name}.toml"))
    assert warnings(plan.table, plan.arm) == []


@pytest.mark.parametrize(
    ("quantity", "base"), [("velocity", "position"), ("acceleration", "velocity"), ("jerk", "acceleration")]
)
@pytest.mark.parametrize("factor", [np.pi / 180, 180 / np.pi, 1e-3, 1e3, -1.0])
def test_a_column_in_another_unit(arm, calm_table, quantity, base, factor):
    column = getattr(calm_table, quantity).copy()
    column[:, 1] *= factor
    mine = [f for f in warnings(replace(calm_table, **{quantity: column}), arm) if f.quantity == quantity]
    (finding,) = mine
    assert (finding.joint, finding.level) == ("swing", "warning")
    assert finding.text.startswith(f"swing: the column of {quantity} does not belong to that of {base}: it says ")


def test_columns_of_two_joints_changed_over(arm, calm_table):
    changed = replace(calm_table, velocity=calm_table.velocity[:, [0, 2, 1]])
    found = warnings(changed, arm)
    assert {(f.joint, f.quantity) for f in found} == {
        (j, q) for j in ("swing", "bend") for q in ("velocity", "acceleration")
    }


def test_it_says_both(arm, calm_table):
    (first, *_) = warnings(replace(calm_table, velocity=calm_table.velocity * [1, 2, 1]), arm)
    # 1.875 A/D twice, in the middle of the motion (Flash & Hogan 1985): 57.3 and 28.65 deg/s
    assert "it says 57.3 deg/s between rows " in first.text and first.text.endswith("changes by 28.65 deg/s")


def test_a_table_that_stands(arm, calm_table):
    still = replace(calm_table, position=np.zeros((751, 3)), **dict.fromkeys(("acceleration", "jerk", "torque")))
    assert warnings(replace(still, velocity=np.zeros((751, 3))), arm) == []
