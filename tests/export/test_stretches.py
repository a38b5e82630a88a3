"""One table a stretch: from rest to rest, on its own clock, the same rows as the whole."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.errors import InputError
from pathplan.export.stretches import numbered, other_pieces, plans_of_stretches, tables_of_stretches


def test_stretches_of_a_plan(plan):
    pieces = plans_of_stretches(plan)
    whole = plan.table
    places = [place for _, place in pieces]
    assert places == [
        {
            "number": 1,
            "of": 2,
            "start_s": 0.052,
            "wait_before_s": 0.052,
            "marks_before": ["ready"],
            "wait_after_s": 0.1,
            "marks_after": ["vacuum on"],
        },
        {"number": 2, "of": 2, "start_s": pytest.approx(whole.time[-1] - pieces[1][0].duration)},
    ]
    for piece, place in pieces:
        table = piece.table
        first = round(place["start_s"] / 0.004)
        same = whole.part(first, first + len(table))
        assert np.array_equal(table.position, same.position) and np.array_equal(table.jerk[1:], same.jerk[1:])
        assert np.array_equal(table.time, np.round(table.time, 9)) and table.time[0] == 0.0
        assert not table.velocity[[0, -1]].any() and np.array_equal(table.step[1:], same.step[1:])
        assert pathplan.audit(table, plan.arm).passed
    (turned,) = pieces[0][0].marks
    assert turned.name == "turned" and turned.row + 13 == plan.marks[1].row


def test_stretches_of_a_table_are_found_by_its_rows_at_rest(plan):
    tables = tables_of_stretches(plan.table)
    for table, (piece, place) in zip(tables, plans_of_stretches(plan), strict=True):
        assert np.array_equal(table.position, piece.table.position)
        assert np.array_equal(table.time, piece.table.time) and np.array_equal(table.step, piece.table.step)
        assert table.marks == piece.marks and table.meta["stretch"] == place


def test_a_table_without_a_cycle(plan):
    shifted = replace(plan.table, cycle=None, time=plan.table.time + 3.0)
    tables = tables_of_stretches(shifted)
    assert tables[1].time[0] == 0.0 and tables[1].meta["stretch"]["start_s"] > 3.0
    assert tables[0].meta["stretch"]["wait_after_s"] == pytest.approx(0.1)


def test_tables_that_can_not_be_split(plan):
    refusals = {
        "the table has no velocity and acceleration, by which its stop points could be told": {"velocity": None},
        "nothing moves in this table": {
            "velocity": 0 * plan.table.velocity,
            "acceleration": 0 * plan.table.velocity,
        },
    }
    for complaint, changes in refusals.items():
        with pytest.raises(InputError) as error:
            tables_of_stretches(replace(plan.table, **changes))
        assert str(error.value) == f"split: {complaint}"
    for part, end in (((50, len(plan.table)), "start"), ((0, 50), "end")):
        with pytest.raises(InputError) as error:
            tables_of_stretches(plan.table.part(*part))
        assert str(error.value) == f"split: the table does not {end} at rest"


def test_names(tmp_path):
    assert numbered(Path("out/pick.csv"), 3, 9) == Path("out/pick-3.csv")
    assert numbered(Path("pick.pvt.csv"), 3, 120) == Path("pick.pvt-003.csv")
    for name in ("pick-1.csv", "pick-3.csv", "pick-03.csv", "pick-x.csv", "pick-1.npz", "pick-1-2.csv"):
        (tmp_path / name).touch()
    assert [path.name for path in other_pieces(tmp_path / "pick.csv", 2)] == ["pick-03.csv", "pick-3.csv"]
    assert other_pieces(tmp_path / "gone" / "pick.csv", 2) == []
