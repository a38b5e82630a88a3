"""What is drawn is what the table and the audit say."""

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest

from pathplan.report.gather import picture_of, picture_of_table
from tests.auditing.cast import made_arm, move_table, with_cell


@pytest.fixture(scope="module")
def picture(pick):
    return picture_of(pick)


def test_every_row_is_kept_as_it_is(pick, picture):
    table = pick.table
    assert picture.rows == len(table) == len(picture.kept_rows)
    assert np.array_equal(picture.kept_time, table.time) and np.array_equal(picture.kept_step, table.step)
    for quantity in ("position", "velocity", "acceleration", "jerk", "torque"):
        for i in range(table.n):
            assert np.array_equal(picture.kept[quantity, i], getattr(table, quantity)[:, i])
    assert np.array_equal(picture.kept["tool z", -1], table.pose[:, 2, 3])


def test_lines_hold_the_peaks_of_the_audit(pick, picture):
    for i, joint in enumerate(pick.audit.joints):
        for quantity, peak in joint.peaks().items():
            line = picture.lines[quantity, i]
            at = np.flatnonzero(line.time == peak.time)
            assert peak.peak in line.value[at]
            values = getattr(pick.table, quantity)[:, i]
            assert line.value.min() == values.min() and line.value.max() == values.max()
            assert len(line.time) <= 1202 and (np.diff(line.time) >= 0).all()


def test_deviation_is_that_of_the_audit(pick, picture):
    deviation = pick.audit.deviation_rows
    assert np.nanmax(picture.lines["deviation", -1].value) == pytest.approx(deviation.position, rel=1e-9)
    assert np.nanmax(picture.lines["turn", -1].value) == pytest.approx(deviation.angle, rel=1e-9)
    waits = [step.index for step in pick.task.steps if step.motion == "wait"]
    assert np.isnan(picture.kept["deviation", -1][np.isin(picture.kept_step, waits)]).all()


def test_pace_adds_up_to_the_audit(pick, picture):
    """The runs that are drawn, summed by step, are the parts that the audit states."""
    table = pick.table
    spent = {}
    for run in picture.pace:
        row, quantity = picture.labels[run.value]
        for k in range(run.first, run.last + 1):
            if k:
                key = (int(table.step[k]), picture.names[row] if row >= 0 else None, quantity)
                spent[key] = spent.get(key, 0) + 1
    stated = {
        (step.step, part.joint, part.quantity): round(part.part * step.duration / 0.004)
        for step in pick.audit.pacing
        for part in step.parts
        if part.quantity != "none"
    }
    assert spent == stated


def test_steps_follow_one_another(pick, picture):
    runs = picture.steps
    assert [run.value for run in runs] == list(range(len(pick.task.steps)))
    assert runs[0].start == 0 and runs[-1].end == pick.duration
    assert all(a.end == b.start and a.last + 1 == b.first for a, b in pairwise(runs))
    durations = {step.step: step.duration for step in pick.audit.pacing}
    assert [run.end - run.start for run in runs] == pytest.approx([durations[run.value] for run in runs])


def test_in_pieces_or_whole(pick, monkeypatch):
    """A plan that is evaluated piece by piece gives the same picture, whatever the pieces."""
    whole = picture_of(pick)
    monkeypatch.setattr("pathplan.report.outputs.WHOLE", 1000)
    again = picture_of(replace(pick))
    assert again.plan is not None and "table" not in again.plan.__dict__
    for key, line in whole.lines.items():
        assert np.array_equal(line.value, again.lines[key].value, equal_nan=True)
    assert whole.pace == again.pace and whole.steps == again.steps


def test_a_long_table_keeps_peaks_borders_and_ends():
    table = with_cell(move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 100.0), "velocity", 12_345, 1, 1.9)
    picture = picture_of_table(table, made_arm(), most=1000)
    assert len(picture.kept_rows) <= 1100
    peaks = {peak.row for joint in picture.audit.joints for peak in joint.peaks().values()}
    assert {0, len(table) - 1, 12_345} | peaks <= set(picture.kept_rows.tolist())
    line = picture.lines["velocity", 1]
    assert len(line.time) <= 1202 and line.value.max() == 1.9
    assert line.time[line.value.argmax()] == table.time[12_345]
    assert (line.time[0], line.time[-1]) == (0.0, 100.0)


def test_rows_that_limit_sums_have_their_own_lines():
    table = move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 3.0)
    picture = picture_of_table(table, made_arm())
    assert picture.names == ("lift", "swing", "bend", "shaft")
    shaft = table.velocity[:, 1] - 2 * table.velocity[:, 2]
    assert picture.lines["velocity", 3].value.max() == pytest.approx(shaft.max(), rel=1e-12)


def test_positions_alone():
    table = move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 3.0)
    bare = replace(table, velocity=None, acceleration=None, jerk=None)
    picture = picture_of_table(bare, made_arm())
    assert picture.quantities == ("position",) and picture.pace == ()


def test_torque_that_falls_with_speed():
    """What is left of a drive's torque is gathered beside it: 60 N m up to 1 rad/s, down to 15 N m at 2 rad/s."""
    arm = made_arm()
    swing = replace(arm.joints[1], torque_corner=1.0, torque_at_velocity=15.0)
    arm = replace(arm, joints=(arm.joints[0], swing, arm.joints[2]))
    torque = np.tile([100.0, -10.0, 5.0], (751, 1))
    table = move_table([0.2, -0.5, 0.3], [0.4, 2.4, -1.2], 3.0, torque=torque)
    picture = picture_of_table(table, arm)
    left = picture.kept["torque left", 1]
    speed = np.abs(table.velocity[:, 1])  # at most 1.5 rad/s
    assert left == pytest.approx(np.where(speed > 1, 1 - 0.75 * (speed - 1), 1.0), abs=1e-12)
    assert left.min() == pytest.approx(0.625) and (picture.kept["torque left", 0] == 1).all()
