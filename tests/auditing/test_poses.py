"""Whether a table passes the targets of a task."""

import dataclasses
import itertools
import math
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import pathplan
from pathplan.auditing.poses import _in_order, pass_findings, passes
from pathplan.errors import InputError

ROOT = Path(pathplan.__file__).parents[1]


@pytest.fixture(scope="module")
def task():
    return pathplan.load_task(ROOT / "examples" / "glazer6-pick-and-place.toml")


@pytest.fixture(scope="module")
def table(task):
    return pathplan.plan(task).table


def test_a_plan_passes_its_own_targets(task, table):
    found = passes(table, task)
    assert [target.step for target in found] == [0, 1, 3, 4, 5, 6, 8, 9]
    assert [target.kind for target in found] == ["fly-by", "stop", *["fly-by"] * 3, "stop", "fly-by", "stop"]
    assert all(target.passed for target in found) and pass_findings(found, task.arm) == []
    rows = [target.row for target in found]
    assert rows == sorted(rows) and rows[-1] == len(table) - 1
    for target in found:
        pose, reached = table.pose[target.row], task.steps[target.step].target
        asked = task.arm.forward(reached.joints) if reached.joints is not None else task.pose(reached)
        assert target.distance == pytest.approx(np.linalg.norm(pose[:3, 3] - asked[:3, 3]), abs=1e-12)
        turn = math.acos(min(1.0, (np.trace(pose[:3, :3].T @ asked[:3, :3]) - 1) / 2))
        assert target.angle == pytest.approx(turn, abs=3e-8)
        if target.kind == "stop":
            assert target.distance < 1e-9 and target.angle < 1e-9


def test_a_target_that_is_missed(task, table):
    stop = passes(table, task)[1]
    position = table.position.copy()
    position[: stop.row + 100, 4] += np.radians(0.3)  # the pitch stands 0.3 deg off while the tile is taken
    moved = dataclasses.replace(table, position=position)
    (finding,) = pass_findings(passes(moved, task), task.arm)
    assert (finding.level, finding.step, finding.joint, finding.quantity) == ("exceedance", 1, "pitch", "target")
    assert finding.text.startswith("step 2 (onto the tile): its target is not passed: nearest is row ")
    assert finding.text.endswith(" away, pitch by -0.3 deg") and ", " in finding.text
    target = passes(moved, task)[1]
    assert target.angle == pytest.approx(np.radians(0.3), rel=1e-6) and target.off == pytest.approx(-np.radians(0.3))
    assert pass_findings(passes(moved, task, near=(0.01, np.radians(0.5))), task.arm) == []


def test_a_table_that_ends_early_misses_what_follows(task, table):
    found = passes(table.part(0, 700), task)
    assert [target.step for target in found if not target.passed] == [6, 8, 9]
    assert [target.row for target in found][-3:] == [699, 699, 699]


def test_the_order_of_the_steps_counts(task, table):
    """A table played backwards passes every pose, and none in turn."""
    backward = dataclasses.replace(table, position=table.position[::-1].copy())
    assert sum(target.passed and target.kind == "stop" for target in passes(backward, task)) <= 2


def test_a_joint_target_names_its_joint(task, table):
    position = table.position.copy()
    position[-1, 2] += 0.01
    target = passes(dataclasses.replace(table, position=position), task)[-1]
    assert target.row == len(table) - 2 and target.distance > 0
    position[-300:, 2] += 0.02
    target = passes(dataclasses.replace(table, position=position), task)[-1]
    assert target.joint == "elbow" and not target.passed


def test_rows_that_are_no_numbers_are_far_away(task, table):
    stop = passes(table, task)[1]
    position = table.position.copy()
    position[stop.row - 5 : stop.row + 5] = np.nan
    assert passes(dataclasses.replace(table, position=position), task)[1].passed  # it waits there for longer
    assert not passes(dataclasses.replace(table, position=np.full_like(position, np.nan)), task)[1].passed


def test_tables_that_can_not_be_compared(task, table, monkeypatch):
    fewer = dataclasses.replace(
        table,
        position=table.position[:, :4],
        joint_names=(),
        joint_kinds=(),
        **dict.fromkeys(("velocity", "acceleration", "jerk", "torque")),
    )
    with pytest.raises(InputError) as error:
        passes(fewer, task)
    assert str(error.value) == "table: has 4 joints, glazer6 has 6"
    monkeypatch.setattr("pathplan.auditing.poses.MOST_ROWS", 100)
    with pytest.raises(InputError) as error:
        passes(table, task)
    assert str(error.value) == f"table: {len(table)} rows are too many to be compared with 8 targets"


@settings(deadline=None, max_examples=200)
@given(st.data())
def test_rows_in_order_are_the_best_there_are(data):
    """Against all ways there are, tried one by one."""
    rows, costs = [], []
    for _ in range(data.draw(st.integers(1, 4))):
        some = data.draw(st.sets(st.integers(1, 8), max_size=3))
        rows.append(np.array(sorted({0, 9, *some})))
        costs.append(np.array([data.draw(st.floats(0, 1)) for _ in rows[-1]]))
    chosen = _in_order(rows, costs)
    assert chosen == sorted(chosen)
    cost = sum(float(c[r.tolist().index(row)]) for r, c, row in zip(rows, costs, chosen, strict=True))
    ways = itertools.product(*(range(len(r)) for r in rows))
    best = min(
        sum(float(c[i]) for c, i in zip(costs, way, strict=True))
        for way in ways
        if all(rows[k][way[k]] <= rows[k + 1][way[k + 1]] for k in range(len(rows) - 1))
    )
    assert cost == pytest.approx(best, abs=1e-12)
