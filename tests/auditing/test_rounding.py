"""Numbers that were rounded: told by themselves, allowed for in differences, and what can't be judged is said."""

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pathplan.auditing import audit
from pathplan.auditing.rounding import rounding_of, rounding_of_times
from tests.auditing.cast import made_arm, move_table

KINDS = ("prismatic", "revolute", "revolute")
MM, DEG = 1e-3, np.pi / 180


def rounded(table, write, units=(MM, DEG, DEG)):
    """The positions as they come back from a file that holds them in these units through `write`."""
    values = np.vectorize(write)(table.position / units) * units
    return replace(table, position=values)


def decimals(digits):
    return lambda value: round(float(value), digits)


def significant(digits):
    return lambda value: float(f"{value:.{digits}g}")


@pytest.mark.parametrize("digits", [3, 6, 8])
@pytest.mark.parametrize("units", [(MM, DEG, DEG), (1.0, 1.0, 1.0)])
def test_decimals_are_told(position_only, digits, units):
    steps = rounding_of(rounded(position_only, decimals(digits), units).position, KINDS)
    assert steps == pytest.approx(10.0**-digits * np.array(units), rel=1e-12)


@pytest.mark.parametrize("digits", [5, 6, 7])
def test_significant_digits_are_told(position_only, digits):
    table = rounded(position_only, significant(digits))
    places = np.floor(np.log10(np.abs(table.position / [MM, DEG, DEG]).max(axis=0)))
    expected = 10.0 ** (places + 1 - digits) * [MM, DEG, DEG]
    assert rounding_of(table.position, KINDS) == pytest.approx(expected, rel=1e-12)


def test_single_precision_is_told(position_only):
    for units in ((MM, DEG, DEG), (1.0, 1.0, 1.0)):
        table = rounded(position_only, lambda value: float(np.float32(value)), units)
        largest = np.abs(table.position / units).max(axis=0).astype(np.float32)
        assert rounding_of(table.position, KINDS) == pytest.approx(np.spacing(largest) * units, rel=1e-6)


def test_full_precision_has_none(position_only):
    assert not rounding_of(position_only.position, KINDS).any()
    assert not rounding_of(np.zeros((50, 3)), KINDS).any()
    assert not rounding_of(np.full((5, 3), np.nan), KINDS).any()


def test_few_numbers_tell_nothing():
    """A joint that stands and jumps once must not have its jump taken for rounding."""
    position = np.zeros((100, 3))
    position[50:, 1] = 0.001
    assert not rounding_of(position, KINDS).any()


def test_a_joint_that_hardly_moves_gets_the_digits_of_the_others(position_only):
    position = rounded(position_only, decimals(4)).position.copy()
    position[:, 2] = 0.0
    position[400:, 2] = DEG  # one whole degree
    assert rounding_of(position, KINDS) == pytest.approx([1e-4 * MM, 1e-4 * DEG, 1e-4 * DEG])


def test_times():
    assert rounding_of_times(np.arange(100) / 300) == 0.0
    assert rounding_of_times(np.round(np.arange(100) / 300, 4)) == pytest.approx(1e-4)
    assert rounding_of_times(np.arange(100) * 0.004) == pytest.approx(1e-3)


@settings(deadline=None, max_examples=40)
@given(st.integers(2, 9), st.sampled_from([0.001, 0.004, 0.01]), st.lists(st.floats(-1.0, 1.0), min_size=3, max_size=3))
def test_rounding_never_breaks_a_limit_that_is_kept(digits, cycle, start):
    """A motion at its limits, written with few digits: nothing it is blamed for, nothing more allowed than needed."""
    arm = made_arm(limits=None)
    table = move_table(start, [0.4, 0.8, -1.2], 1.2, cycle)  # accelerations of 1.6, 3.2, 4.8; jerks of 14, 28, 42
    bare = replace(table, velocity=None, acceleration=None, jerk=None, torque=None)
    found = audit(rounded(bare, decimals(digits)), arm)
    blamed = {(f.joint, f.quantity) for f in found.findings if f.level == "exceedance" and f.quantity != "velocity"}
    assert blamed <= {("bend", "jerk"), ("lift", "position")}  # 42 of 30; a lift that starts below -0.1 m


def test_what_is_said(arm, position_only):
    found = audit(rounded(position_only, decimals(3)), arm)
    assert found.passed
    texts = {f.level: [] for f in found.findings}
    for finding in found.findings:
        texts[finding.level].append(finding.text)
    # steps of 0.001 deg at 4 ms: 0.25 deg/s, 125 deg/s^2, 62500 deg/s^3; and of bend twice that goes into shaft
    assert texts["note"][:2] == [
        "velocity is judged to within 0.22 % of its limits: positions rounded to 0.001 deg alone make up to "
        "0.25 deg/s of swing",
        "acceleration is judged to within 22 % of its limits: positions rounded to 0.001 deg alone make up to "
        "125 deg/s^2 of swing",
    ]
    assert texts["warning"] == [
        "jerk of lift, swing, bend can't be judged: positions rounded to 0.001 deg alone make up to "
        "62500 deg/s^3 of bend"
    ]
    assert [joint.jerk for joint in found.joints] == [None, None, None]
    assert found.joints[0].acceleration is not None and found.joints[0].differences["jerk"] is not None


def test_velocity_that_can_not_be_judged_is_no_pass(arm, position_only):
    found = audit(rounded(position_only, decimals(0)), arm)
    (finding,) = [f for f in found.findings if f.level == "exceedance"]
    assert finding.quantity == "velocity" and not found.passed
    # 1 deg and 1 mm in 4 ms: 250 deg/s and 250 mm/s
    assert finding.text == (
        "velocity of swing, shaft can't be judged: positions rounded to 1 deg alone make up to 250 deg/s of swing"
    )


def test_columns_are_allowed_half_a_step(arm, calm_table):
    """A velocity at its limit, written to a thousandth: the last digit may lie beyond."""
    velocity = np.round(calm_table.velocity / [MM, DEG, DEG], 3) * [MM, DEG, DEG]
    limit = 2.0 / DEG  # 114.5916 deg/s
    for value, passes in ((np.ceil(limit * 1000) / 1000, True), (np.ceil(limit * 1000 + 1) / 1000, False)):
        changed = velocity.copy()
        changed[300, 1] = value * DEG
        found = [f for f in audit(replace(calm_table, velocity=changed), arm).findings if f.level == "exceedance"]
        assert (found == []) is passes


def test_more_than_rounding_is_found(arm, position_only):
    """A row that lies three steps off its place is beyond what rounding makes."""
    table = rounded(position_only, decimals(3))
    position = table.position.copy()
    position[300, 1] += 0.5 * DEG
    found = audit(replace(table, position=position), arm)
    assert {f.joint for f in found.findings if f.level == "exceedance"} >= {"swing"}


def test_rounded_chunks_of_a_plan_are_allowed_nothing(arm, position_only):
    """Only a whole table from a file is taken for rounded."""
    table = rounded(position_only, decimals(3))
    assert not audit(table.chunks(100), arm).passed
