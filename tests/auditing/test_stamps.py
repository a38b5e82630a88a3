"""Times that repeat, go back or leave the grid, and numbers that are none."""

from dataclasses import replace

import numpy as np
import pytest

from pathplan.auditing import audit
from tests.auditing.cast import with_cell


def exceedances(table, arm):
    return [finding.text for finding in audit(table, arm).findings if finding.level == "exceedance"]


def retimed(table, change):
    time = table.time.copy()
    change(time)
    return replace(table, time=time)


def shift(rows, by):
    def change(time):
        time[rows] += by

    return change


@pytest.mark.parametrize(
    ("change", "texts"),
    [
        (
            shift(slice(100, 101), -0.004),
            [
                "row 101: time repeats 0.396 s",
                "row 101: time is 0.396 s where the cycle of 4 ms puts 0.4 s",
            ],
        ),
        (
            shift(slice(100, 101), -0.006),
            [
                "row 101: time goes back from 0.396 s to 0.394 s",
                "row 101: time is 0.394 s where the cycle of 4 ms puts 0.4 s",
            ],
        ),
        (
            shift(slice(100, None), 0.004),
            ["row 101: time is 0.404 s where the cycle of 4 ms puts 0.4 s, and 650 more rows like it"],
        ),
        (shift(slice(7, 8), 1e-8), ["row 8: time is 0.028 s where the cycle of 4 ms puts 0.028 s"]),
        (shift(slice(None), 0.4), []),  # a table may start late
        (shift(slice(7, 8), 1e-10), []),
    ],
)
@pytest.mark.parametrize("size", [50, 101, 751])
def test_times_off_the_grid(arm, calm_table, change, texts, size):
    table = retimed(calm_table, change)
    found = audit(table.chunks(size), arm)
    assert [f.text for f in found.findings if f.level == "exceedance"] == texts
    assert found.passed is not bool(texts)


def test_times_without_a_cycle_must_rise_too(arm, position_only):
    table = retimed(replace(position_only, cycle=None), shift(slice(100, 101), -0.004))
    found = exceedances(table, arm)
    assert found[0] == "row 101: time repeats 0.396 s" and audit(table, arm).cycle is None


@pytest.mark.parametrize(
    ("quantity", "value", "text"),
    [
        ("position", np.nan, "row 301: position of swing is not a finite number"),
        ("velocity", np.nan, "row 301: velocity of swing is not a finite number"),
        ("jerk", -np.inf, "row 301: jerk of swing is not a finite number"),
        ("torque", np.nan, "row 301: torque of swing is not a finite number"),
        ("position", np.inf, "row 301: position of swing is not a finite number"),
    ],
)
def test_numbers_that_are_none(arm, calm_table, quantity, value, text):
    found = audit(with_cell(calm_table, quantity, 300, 1, value), arm)
    assert not found.passed and found.findings[0].text == text
    assert found.findings[0].joint == "swing" and found.singularity is not None
    assert found.joints[0] == audit(calm_table, arm).joints[0]
    found.to_dict()


def test_times_that_are_none(arm, calm_table):
    found = audit(retimed(calm_table, lambda time: time.__setitem__(5, np.nan)), arm)
    assert found.findings[0].text == "row 6: time is not a finite number" and not found.passed
    table = replace(calm_table, tool_speed=np.full(751, np.nan))
    assert audit(table, arm).findings[0].text == "row 1: tool_speed is not a finite number"
