"""What the drive sees: the numeric contract, the ends, tables of positions alone, irregular times."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pathplan.auditing import audit
from pathplan.auditing.differences import divided_differences
from pathplan.table import JointTable, tick_times
from tests.auditing.cast import jerk_phases, move_table, with_cell

KINDS = ("prismatic", "revolute", "revolute")


def swing_table(phases, start, cycle, columns=True, faster=1.0):
    """A table in which only the swing moves, rest to rest, its derivatives from the phases."""
    ticks = np.arange(int(np.ceil(sum(d for d, _ in phases) / cycle)) + 1)
    q = jerk_phases(tick_times(ticks, cycle), phases, start)
    q[0] = start + (q[0] - start) * faster
    values = [np.column_stack([0 * c, c, 0 * c]) for c in q]
    more = {"joint_kinds": KINDS, "cycle": cycle, "torque": 0 * values[0]}
    return JointTable(tick_times(ticks, cycle), *values[: 4 if columns else 1], **more)


def double_s(t_jerk, t_acceleration, t_speed, jerk):
    ramp = [(t_jerk, jerk), (t_acceleration, 0.0), (t_jerk, -jerk)]
    return [*ramp, (t_speed, 0.0), *[(d, -j) for d, j in ramp]]


@settings(deadline=None, max_examples=60)
@given(
    st.floats(-1.9, 0.0),
    st.sampled_from([0.001, 0.002, 0.004, 0.01]),
    st.floats(0.0, 0.05),
    st.floats(0.0, 0.3),
    st.booleans(),
)
def test_a_motion_at_its_jerk_limit_passes_whatever_the_rounding(arm, start, cycle, t_a, t_v, columns):
    """Jerk 80 and acceleration 80 * 0.12 = 9.6 of swing's 10: nothing is to spare in the jerk."""
    table = swing_table(double_s(0.12, t_a, t_v, 80.0), start, cycle, columns)
    found = audit(table, arm)
    assert [f.text for f in found.findings if f.level == "exceedance" and f.quantity == "jerk"] == []


@settings(deadline=None, max_examples=30)
@given(st.floats(-1.9, 0.0), st.sampled_from([0.001, 0.002, 0.004]))
def test_one_hundred_thousandth_too_much_is_found(arm, start, cycle):
    table = swing_table(double_s(0.12, 0.0, 0.1, 80.0 * (1 + 1e-5)), start, cycle, columns=False)
    found = audit(table, arm)
    assert {f.joint for f in found.findings if f.level == "exceedance" and f.quantity == "jerk"} == {"swing"}


def test_a_blip_that_the_columns_do_not_show(arm, calm_table):
    q = calm_table.position[300, 1]
    found = audit(with_cell(calm_table, "position", 300, 1, q + 1e-3), arm)
    jerk, acceleration = (f for f in found.findings if f.level == "exceedance")
    # a single row 1 mrad off: second differences 1, -2, 1 and third differences 1, -3, 3, -1
    assert abs(jerk.value) == pytest.approx(3e-3 / 0.004**3, rel=1e-3)
    assert acceleration.value == pytest.approx(-2e-3 / 0.004**2, rel=1e-2)
    assert (acceleration.joint, acceleration.quantity) == ("swing", "acceleration")
    assert (acceleration.time, acceleration.step, acceleration.limit) == (1.2, 0, -10.0)
    assert jerk.text.endswith("4 rows from 1.192 s to 1.204 s (difference of the written positions)")
    assert found.joints[1].jerk.share < 1 < found.joints[1].differences["jerk"].share


@pytest.mark.parametrize(("part", "row", "step"), [((100, 751), 0, 0), ((0, 600), 599, 1)])
def test_a_cut_table_starts_or_ends_with_a_jump(arm, calm_table, position_only, part, row, step):
    """Cut out of its motion, a table is not at rest at the cut: by its columns, and by its differences."""
    cut = audit(calm_table.part(*part), arm)
    rest = [f for f in cut.findings if "not at rest" in f.text]
    assert {(f.joint, f.quantity) for f in rest} == {
        (joint, quantity) for joint in ("lift", "swing", "bend") for quantity in ("velocity", "acceleration")
    }
    assert all(f.limit == 0.0 and f.step == step and f.value != 0.0 for f in rest)
    bare = audit(position_only.part(*part), arm)
    worst = bare.joints[1].acceleration
    assert not bare.passed and worst.row == row and worst.step == step
    assert worst.share > 1 and bare.measured == "differences"


def test_positions_alone_are_judged_by_differences_and_it_says_so(arm, position_only):
    found = audit(position_only, arm)
    assert found.passed and found.measured == "differences" and found.pacing == ()
    text = "the table has no columns of velocity, acceleration and jerk: judged by finite differences of the positions"
    assert text in [f.text for f in found.findings]
    for joint, size in zip(found.joints, (0.4, 0.8, 1.2), strict=True):
        assert abs(joint.velocity.peak) == pytest.approx(1.875 * size / 3, rel=1e-4)
        assert abs(joint.acceleration.peak) == pytest.approx(5.7735 * size / 9, rel=1e-3)
        assert joint.jerk == joint.differences["jerk"]
    assert found.rows[0].velocity.peak == pytest.approx(1.875 * (0.8 + 2.4) / 3, rel=1e-4)


def test_some_columns_missing(arm, calm_table):
    found = audit(replace(calm_table, jerk=None), arm)
    assert found.joints[0].velocity != found.joints[0].differences["velocity"]
    assert found.joints[0].jerk == found.joints[0].differences["jerk"]
    text = "the table has no columns of jerk: judged by finite differences of the positions"
    assert text in [f.text for f in found.findings]


def test_positions_alone_break_each_limit(arm):
    fast = move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 0.4)
    bare = replace(fast, velocity=None, acceleration=None, jerk=None)
    found = audit(bare, arm)
    broken = {(f.joint, f.quantity) for f in found.findings if f.level == "exceedance"}
    # 1.875 A/D, 5.7735 A/D^2, 60 A/D^3: lift 1.875, 14.4, 375; swing 3.75, 28.9, 750; bend 5.6, 43, 1125
    joints = {(j, q) for j in ("lift", "swing", "bend") for q in ("velocity", "acceleration", "jerk")}
    assert broken == joints | {("shaft", "velocity")}


def test_divided_differences_of_a_cubic_are_its_derivatives():
    """n! f[t0..tn] of a polynomial of degree n is its n-th derivative, on any grid (Newton)."""
    times = np.cumsum(np.random.default_rng(0).uniform(0.5, 2.0, 30))
    cubic = 3 - 2 * times + 0.5 * times**2 + 4 * times**3
    first, _, third = divided_differences(times, cubic[:, None])
    assert third == pytest.approx(np.full((27, 1), 24.0), rel=1e-6)
    _, second, _ = divided_differences(times, (times**2)[:, None])
    assert second == pytest.approx(np.full((28, 1), 2.0), rel=1e-9)
    assert first[:, 0] == pytest.approx(np.diff(cubic) / np.diff(times))


def test_irregular_times_use_their_own_intervals(arm):
    """The same move at random instants: the same peaks, within what the wider gaps blur."""
    rng = np.random.default_rng(5)
    time = np.concatenate([[0.0], np.cumsum(rng.uniform(0.002, 0.006, 800))])
    tau = np.minimum(time / 3.0, 1.0)
    q = np.outer(tau**3 * (10 - 15 * tau + 6 * tau**2), [0.4, 0.8, -1.2])
    found = audit(JointTable(time, q), arm)
    assert found.passed and found.cycle is None
    assert "the times lie on no regular grid: differences use the times of the rows" in [f.text for f in found.findings]
    for joint, size in zip(found.joints, (0.4, 0.8, 1.2), strict=True):
        assert abs(joint.velocity.peak) == pytest.approx(1.875 * size / 3, rel=1e-3)
        assert abs(joint.acceleration.peak) == pytest.approx(5.7735 * size / 9, rel=1e-2)
        assert abs(joint.jerk.peak) <= 60 * size / 27 * (1 + 1e-6)


def test_a_regular_table_without_a_cycle_finds_it(arm, position_only):
    found = audit(replace(position_only, cycle=None), arm)
    assert found.cycle == 0.004 and found.passed
    assert "the table states no cycle: 4 ms found from its times" in [f.text for f in found.findings]
    rounded = replace(position_only, cycle=None, time=np.round(position_only.time / 1.2, 5))
    assert audit(rounded, arm).cycle == pytest.approx(0.004 / 1.2, rel=1e-5)
