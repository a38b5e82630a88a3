"""Times that repeat, go back or leave the grid, and numbers that are none."""

from dataclasses import replace

import numpy as np
import pytest

from pathplan.auditing import audit
from tests.auditing.cast import min_jerk, with_cell


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
                "row 102: time goes from 0.396 s to 0.404 s: 1 row missing at 4 ms",
            ],
        ),
        (
            shift(slice(100, 101), -0.006),
            [
                "row 101: time goes back from 0.396 s to 0.394 s",
                "row 101: time is 0.394 s, where the cycle of 4 ms puts 0.392 s",
                "row 102: time goes from 0.394 s to 0.404 s: 1 row missing at 4 ms",
            ],
        ),
        (shift(slice(100, None), 0.004), ["row 101: time goes from 0.396 s to 0.404 s: 1 row missing at 4 ms"]),
        (shift(slice(100, None), 4.0), ["row 101: time goes from 0.396 s to 4.4 s: 1000 rows missing at 4 ms"]),
        (shift(slice(7, 8), 1e-8), ["row 8: time is 0.028 s, where the cycle of 4 ms puts 0.028 s"]),
        (
            shift(slice(7, 300, 7), 1e-3),
            ["row 8: time is 0.029 s, where the cycle of 4 ms puts 0.028 s; 41 more rows like it"],
        ),
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


@pytest.mark.parametrize(
    ("change", "texts"),
    [
        (
            shift(slice(100, 101), -0.004),
            [
                "row 101: time repeats 0.396 s",
                "row 102: time goes from 0.396 s to 0.404 s: 1 row missing at 4 ms",
            ],
        ),
        (shift(slice(7, 8), 5e-4), ["row 8: time is 0.0285 s, where the cycle of 4 ms puts 0.028 s"]),
        (shift(slice(7, 8), 2e-5), []),  # a stated cycle is kept to more strictly
    ],
)
def test_a_cycle_that_most_times_keep_is_found_and_the_others_are_told(arm, position_only, change, texts):
    table = retimed(replace(position_only, cycle=None), change)
    assert exceedances(table, arm) == texts and audit(table, arm).cycle == 0.004


def test_times_without_any_cycle_must_rise_too(arm, position_only):
    rng = np.random.default_rng(4)
    time = np.cumsum(rng.uniform(0.003, 0.006, 751))
    position = np.outer(min_jerk((time - time[0]) / np.ptp(time))[0], [0.4, 0.8, -1.2])
    table = replace(position_only, cycle=None, time=time, position=position)
    assert audit(table, arm).cycle is None and exceedances(table, arm) == []
    found = exceedances(retimed(table, lambda time: time.__setitem__(100, time[99])), arm)
    assert found[0].startswith("row 101: time repeats ")


def test_times_that_were_rounded_find_their_cycle(arm, position_only):
    """3 1/3 ms written to the millisecond: 3, 3 and 4 ms by turns."""
    time = np.round(position_only.time / 1.2, 3)
    found = audit(replace(position_only, cycle=None, time=time), arm)
    assert found.cycle == pytest.approx(1 / 300, rel=1e-3)
    assert [f.text for f in found.findings if f.level == "exceedance"] == []


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
    text = "row 1: tool_speed is not a finite number; 750 more rows like it"
    assert audit(table, arm).findings[0].text == text


def test_every_joint_with_numbers_that_are_none_is_told(arm, calm_table):
    position = calm_table.position.copy()
    position[300:303, 1] = np.nan
    position[700, 2] = np.nan
    for size in (100, 751):
        found = audit(replace(calm_table, position=position).chunks(size), arm).findings
        assert [(f.text, f.row, f.joint) for f in found if f.level == "exceedance"] == [
            ("row 301: position of swing is not a finite number; 2 more rows like it", 300, "swing"),
            ("row 701: position of bend is not a finite number", 700, "bend"),
        ]
