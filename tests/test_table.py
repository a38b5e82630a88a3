"""The joint table: shapes, read-only, pieces, and tick times that print cleanly."""

import copy
import pickle
from decimal import Decimal

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pathplan.errors import InputError
from pathplan.table import JointTable, Mark, tick_times


def small(**more):
    values = {"time": [0.0, 0.1, 0.2], "position": np.arange(6.0).reshape(3, 2)}
    return JointTable(**{**values, **more})


def test_a_foreign_table_needs_only_time_and_position():
    table = small()
    assert table.velocity is None and table.torque is None and table.pose is None and table.cycle is None
    assert table.step.tolist() == [0, 0, 0]
    assert table.joint_names == ("joint1", "joint2") and table.joint_kinds == ()
    assert len(table) == 3 and table.n == 2


def test_arrays_are_read_only_copies():
    mine = np.zeros((3, 2))
    table = small(position=mine, step=[0, 0, 1])
    mine[0, 0] = 5.0
    assert table.position[0, 0] == 0.0
    for array in (table.time, table.position, table.step):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1
    with pytest.raises(TypeError, match="does not support item assignment"):
        table.meta["task"] = "other"


def test_pieces_share_memory_and_carry_marks_and_meta():
    mark = Mark("gripper closed", 0.2, 2, 0)
    poses = np.tile(np.eye(4), (3, 1, 1))
    table = small(marks=[mark], meta={"task": "t"}, velocity=np.ones((3, 2)), pose=poses)
    pieces = list(table.chunks(2))
    assert [len(piece) for piece in pieces] == [2, 1]
    assert np.shares_memory(pieces[1].position, table.position)
    assert np.array_equal(np.concatenate([piece.position for piece in pieces]), table.position)
    assert all(piece.marks == (mark,) and piece.meta == {"task": "t"} for piece in pieces)
    assert pieces[1].pose.shape == (1, 4, 4) and pieces[1].torque is None


@pytest.mark.parametrize("again", [copy.deepcopy, lambda table: pickle.loads(pickle.dumps(table))])
def test_survives_copying_and_pickling(again):
    table = small(meta={"task": "t"}, step=[0, 0, 1])
    other = again(table)
    assert np.array_equal(other.position, table.position) and other.meta == table.meta
    assert not other.position.flags.writeable


@pytest.mark.parametrize(
    ("more", "message"),
    [
        (
            {"position": np.zeros(3)},
            "table: position: expected shape (rows, joints), at least one of each, got (3,)",
        ),
        (
            {"position": np.zeros((0, 2))},
            "table: position: expected shape (rows, joints), at least one of each, got (0, 2)",
        ),
        ({"time": [0.0, 1.0]}, "table: time: expected shape (3,), got (2,)"),
        ({"time": None}, "table: time: expected shape (3,), got ()"),
        ({"velocity": np.zeros((3, 1))}, "table: velocity: expected shape (3, 2), got (3, 1)"),
        ({"pose": np.zeros((3, 3, 3))}, "table: pose: expected shape (3, 4, 4), got (3, 3, 3)"),
        ({"step": [0.0, 0.0, 1.0]}, "table: step: expected 3 whole numbers, got float64 of shape (3,)"),
        ({"step": [0, 0, -1]}, "table: step: expected 0-based step numbers, got -1"),
        ({"joint_names": ("a", "a")}, "table: joint_names: expected 2 different names, got ['a', 'a']"),
        (
            {"joint_kinds": ("revolute", "screw")},
            """table: joint_kinds: expected 2 times "revolute" or "prismatic", got ['revolute', 'screw']""",
        ),
        ({"cycle": 0.0}, "table: cycle: expected a positive time in s or None, got 0.0"),
        (
            {"velocity": [["a", "b"]] * 3},
            "table: velocity: expected an array of numbers (could not convert string to float: 'a')",
        ),
    ],
)
def test_what_is_refused(more, message):
    with pytest.raises(InputError) as error:
        small(**more)
    assert str(error.value) == message


def test_tick_times_print_cleanly():
    assert [repr(t) for t in tick_times(range(5), 0.1).tolist()] == ["0.0", "0.1", "0.2", "0.3", "0.4"]
    hour = tick_times(np.arange(3_600_000), 0.001)  # an hour at 1 kHz
    assert repr(hour[-1].item()) == "3599.999" and repr(hour[1_234_567].item()) == "1234.567"
    assert tick_times([300], 1 / 300)[0] == 1.0


@settings(deadline=None)
@given(
    st.integers(0, 10**7),
    st.sampled_from("0.001 0.004 0.0025 0.012 0.1 0.000125 0.007 0.0333 2.5 0.000062".split()),
)
def test_tick_times_are_the_nearest_floats_to_the_decimal_product(tick, cycle):
    assert tick_times([tick], float(cycle))[0] == float(tick * Decimal(cycle))


@settings(deadline=None)
@given(st.integers(0, 10**7), st.floats(1e-6, 10.0))
def test_tick_times_of_any_cycle_are_within_one_ulp_of_the_product(tick, cycle):
    exact = tick * cycle
    assert abs(tick_times([tick], cycle)[0] - exact) <= np.spacing(exact)


@pytest.mark.parametrize("cycle", [0.0, -0.004, float("nan"), float("inf")])
def test_a_cycle_must_be_positive(cycle):
    with pytest.raises(InputError) as error:
        tick_times([1], cycle)
    assert str(error.value) == f"cycle: expected a positive time in s, got {cycle!r}"
