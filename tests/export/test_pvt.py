"""Position-velocity-time rows: exact at their instants, their interpolation measured against scipy's cubic Hermite."""

import json
from dataclasses import replace

import numpy as np
import pytest
from scipy.interpolate import CubicHermiteSpline

import pathplan
from pathplan.errors import InputError
from pathplan.export import read_table, write_table
from pathplan.export.pvt import pvt_of_plan, pvt_of_table, rounded_up
from pathplan.table import JointTable, Mark, tick_times

KINDS = ("prismatic",)


def whole(pvt):
    (table,) = pvt.rows()
    return table


@pytest.mark.parametrize("cycles", [1, 2, 5, 7, 25])
def test_rows_are_those_of_the_trajectory(plan, cycles):
    period = cycles * 0.004
    table = whole(pvt_of_plan(plan, period))
    fine = plan.table
    at = np.minimum(np.arange(len(table)) * cycles, len(fine) - 1)
    assert np.array_equal(table.position[:-1], fine.position[at[:-1]])
    assert np.array_equal(table.velocity[:-1], fine.velocity[at[:-1]])
    assert np.array_equal(table.time, tick_times(np.arange(len(table)), period)) and table.cycle == period
    # the last row is at or after the end, and rests at the goal
    assert (len(table) - 2) * cycles < len(fine) - 1 <= (len(table) - 1) * cycles
    assert np.array_equal(table.position[-1], fine.position[-1]) and not table.velocity[-1].any()
    assert table.acceleration is None and table.pose is None and table.torque is None


@pytest.mark.parametrize("cycles", [2, 5, 25])
def test_the_error_of_interpolation_is_true(plan, cycles):
    """scipy's cubic Hermite through the rows, against the table at a sixteenth of its cycle."""
    period = cycles * 0.004
    pvt = pvt_of_plan(plan, period)
    table = whole(pvt)
    spline = CubicHermiteSpline(table.time, table.position, table.velocity)
    finer = pathplan.plan(replace(plan.task, cycle=0.00025))  # the same timing, sixteen rows a cycle
    apart = np.zeros(4)
    for coarse, fine in zip(plan.parts, finer.parts, strict=True):  # each starts on its own tick
        rows = finer.table.part(fine.first, fine.last + 1)
        time = rows.time - rows.time[0] + coarse.first * 0.004
        apart = np.maximum(apart, np.abs(spline(time) - rows.position).max(axis=0))
    assert np.all(apart <= pvt.error * (1 + 2e-3) + 1e-15)
    assert pvt.error.max() <= 3 * apart.max()
    assert pvt.error.max() > 0 and pvt.measured == f"{max(32, 8 * cycles)} instants a period"


def test_the_error_shrinks_with_the_third_power_of_the_period(plan):
    """Where jerk jumps, cubic Hermite is off by a third order of the period."""
    coarse, fine = pvt_of_plan(plan, 0.08).error.max(), pvt_of_plan(plan, 0.04).error.max()
    assert 5 < coarse / fine < 20


def test_the_header_states_it(plan, tmp_path):
    pvt = pvt_of_plan(plan, 0.02)
    write_table(pvt.rows(), tmp_path / "t.pvt.csv")
    lines = (tmp_path / "t.pvt.csv").read_text("utf-8").split("\n")
    said = json.loads(next(line for line in lines if line.startswith("# pvt = "))[8:])
    assert said["interpolation"] == "cubic Hermite" and said["measured_at"] == "40 instants a period"
    assert list(said["largest_error"]) == ["x_mm", "y_mm", "z_mm", "wrist_deg"]
    errors = pvt.error * [1000, 1000, 1000, 180 / np.pi]
    for stated, true in zip(said["largest_error"].values(), errors, strict=True):
        assert true <= stated <= true * 1.01
    again = read_table(tmp_path / "t.pvt.csv")
    assert again.velocity is not None and again.cycle == 0.02 and again.meta["pvt"] == said
    assert [mark.name for mark in again.marks] == ["ready", "turned", "vacuum on"]
    for coarse, fine in zip(again.marks, plan.marks, strict=True):
        assert 0 <= coarse.time - fine.time < 0.02 and coarse.time == again.time[coarse.row]


def test_long_motions_come_in_pieces(plan, monkeypatch):
    at_once = whole(pvt_of_plan(plan, 0.008))
    monkeypatch.setattr("pathplan.export.pvt.MOST_ROWS_PIECE", 10)
    monkeypatch.setattr("pathplan.export.pvt.PIECE", 100)
    pvt = pvt_of_plan(plan, 0.008)
    pieces = list(pvt.rows())
    assert sum(map(len, pieces)) == pvt.count == len(at_once)
    assert np.array_equal(np.vstack([piece.position for piece in pieces]), at_once.position)
    assert np.array_equal(pvt.error, pvt_of_plan(plan, 0.008).error)


@pytest.mark.parametrize("cycles", [1, 3, 10])
def test_of_a_table_every_so_many_rows(plan, cycles):
    pvt = pvt_of_table(plan.table, cycles * 0.004)
    table, exact = whole(pvt), whole(pvt_of_plan(plan, cycles * 0.004))
    assert np.array_equal(table.position, exact.position)
    assert np.array_equal(table.velocity[:-1], exact.velocity[:-1])
    spline = CubicHermiteSpline(table.time, table.position, table.velocity)
    inside = plan.table.time <= table.time[-1]
    apart = np.abs(spline(plan.table.time[inside]) - plan.table.position[inside]).max(axis=0)
    assert pvt.error == pytest.approx(apart, abs=1e-12)
    assert pvt.measured == "the rows left out" and np.all(pvt.error <= pvt_of_plan(plan, cycles * 0.004).error + 1e-12)


@pytest.mark.parametrize(
    ("period", "got"), [(0.006, "6 ms"), (0.001, "1 ms"), (0.0041, "4.1 ms"), (1000.0, "1000000 ms")]
)
def test_a_period_is_a_multiple_of_the_cycle(plan, period, got):
    with pytest.raises(InputError) as error:
        pvt_of_plan(plan, period)
    assert str(error.value) == f"pvt: expected a multiple of the cycle 4 ms, got {got}"


def test_tables_that_can_not_be_made_coarser(plan):
    table = plan.table
    refusals = {
        "the times of the table lie on no regular grid, so that there is no coarser one": replace(table, cycle=None),
        "the table has no velocity": replace(table, velocity=None),
        "the table does not end at rest, and its last row falls between two of the period": table.part(0, 91),
    }
    for complaint, other in refusals.items():
        with pytest.raises(InputError) as error:
            pvt_of_table(other, 0.008 if other.cycle is None else 0.028)
        assert str(error.value) == f"pvt: {complaint}"


def test_marks_move_to_the_next_row():
    q = np.zeros((11, 1))
    table = JointTable(
        tick_times(np.arange(11), 0.01), q, velocity=q, cycle=0.01, marks=(Mark("a", 0.05, 5, 0),), joint_kinds=KINDS
    )
    assert whole(pvt_of_table(table, 0.02)).marks == (Mark("a", 0.06, 3, 0),)


@pytest.mark.parametrize("value", [0.0, 1e-300, 1.0, 0.123456, 9.995, 0.0999999, 123456.0])
def test_rounded_up(value):
    assert value <= rounded_up(value) <= value * 1.01
