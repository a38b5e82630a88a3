"""Jumps of position, told apart from motion that is too fast."""

from dataclasses import replace

import numpy as np
import pytest

from pathplan.auditing import audit
from tests.auditing.cast import move_table


def jumps(table, arm):
    return [(f.text, f.row, f.joint) for f in audit(table, arm).findings if "jumps by" in f.text]


def moved(table, rows, joint, by):
    position = table.position.copy()
    position[rows, joint] += by
    return replace(table, position=position)


@pytest.mark.parametrize("size", [1, 2, 3, 100, 751])
@pytest.mark.parametrize(
    ("rows", "joint", "by", "text", "row"),
    [
        (slice(300, None), 0, 0.05, "lift: position jumps by 50.92 mm from row 300 to row 301, at 1.2 s", 300),
        (
            slice(300, 301),
            1,
            -0.02,
            "swing: position jumps by -1.04 deg from row 300 to row 301, at 1.2 s; 1 more row like it",
            300,
        ),
        (
            slice(1, None),
            2,
            0.02,
            "bend: position jumps by 1.146 deg from row 1 to row 2, at 0.004 s",
            1,
        ),
        (
            slice(750, None),
            2,
            0.02,
            "bend: position jumps by 1.146 deg from row 750 to row 751, at 3 s",
            750,
        ),
    ],
)
def test_a_jump_is_named_by_row_and_joint(arm, position_only, size, rows, joint, by, text, row):
    table = moved(position_only, rows, joint, by)
    found = [(f.text, f.row, f.joint) for f in audit(table.chunks(size), arm).findings if "jumps by" in f.text]
    assert found == [(text, row, ("lift", "swing", "bend")[joint])]


def test_several_joints_and_rows(arm, position_only):
    table = moved(moved(position_only, slice(300, None), 1, 0.1), slice(500, None), 1, -0.1)
    table = moved(table, slice(200, None), 0, 0.1)
    assert [(row, joint) for _, row, joint in jumps(table, arm)] == [(200, "lift"), (300, "swing")]
    assert jumps(table, arm)[1][0].endswith("; 1 more row like it")


def test_what_is_merely_too_fast_does_not_jump(arm):
    """The minimum-jerk move in a fifth of the time it needs: every limit broken, no jump."""
    fast = move_table([0.2, -0.5, 0.3], [0.4, 0.8, -1.2], 0.3)
    found = audit(replace(fast, velocity=None, acceleration=None, jerk=None), arm)
    assert not found.passed and not any("jumps by" in f.text for f in found.findings)


def test_a_sudden_stop_is_no_jump(arm, position_only):
    """A motion cut off in full speed breaks the acceleration limit; no row lies out of its place."""
    found = audit(position_only.part(0, 400), arm)
    assert not found.passed and not any("jumps by" in f.text for f in found.findings)


def test_rows_that_are_no_numbers_are_no_jumps(arm, position_only):
    assert jumps(moved(position_only, slice(300, 302), 1, np.nan), arm) == []


def test_irregular_times(arm, position_only):
    rng = np.random.default_rng(5)
    time = np.cumsum(rng.uniform(0.002, 0.008, 751))
    tau = (time - time[0]) / np.ptp(time)
    position = np.outer(tau**3 * (10 - 15 * tau + 6 * tau**2), [0.4, 0.8, -1.2])
    table = replace(position_only, cycle=None, time=time, position=position)
    assert jumps(table, arm) == []
    assert [(row, joint) for _, row, joint in jumps(moved(table, slice(300, None), 1, 0.1), arm)] == [(300, "swing")]
