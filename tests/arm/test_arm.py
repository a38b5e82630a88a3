"""The arm as a value: equipped with tools, checked, pickled, its characteristic length."""

import pickle
import re

import numpy as np
import pytest

from pathplan import errors
from pathplan.arm import Arm, Joint
from pathplan.arm.chain import translation

ONE = (Joint("a", "revolute", (-1, 1), 1, 1, 1),)
GOOD = {"name": "one", "joints": ONE, "parent_from_joint": np.eye(4)[None], "axes": np.array([[0, 0, 1.0]])}


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"joints": ()}, "one: an arm needs at least one joint"),
        ({"axes": np.zeros((2, 3))}, "one: axes: expected shape (1, 3), got (2, 3)"),
        ({"axes": np.array([[0, 0, 1.1]])}, "one: axes: expected unit vectors"),
        ({"gravity": np.array([0, 0, np.nan])}, "one: gravity: expected finite numbers"),
        ({"parents": (0,)}, "one: parents: expected 1 indices of other joints or -1, without a loop"),
        ({"positions": {"up": np.zeros(2)}}, "one: positions.up: expected 1 joint values, got 2"),
        ({"links": ()}, "one: links: expected 1, got 0"),
    ],
)
def test_parts_that_do_not_fit_are_refused(change, message):
    with pytest.raises(errors.InputError, match=re.escape(message)):
        Arm(**(GOOD | change))


def test_two_joints_of_one_name_are_refused():
    with pytest.raises(errors.InputError, match="one: joints: names must differ"):
        Arm("one", ONE * 2, np.tile(np.eye(4), (2, 1, 1)), np.tile([0, 0, 1.0], (2, 1)))


def test_arrays_are_read_only_copies():
    axes = np.array([[0, 0, 1.0]])
    arm = Arm(**(GOOD | {"axes": axes}))
    axes[0, 2] = 0.5
    assert arm.axes[0, 2] == 1.0
    with pytest.raises(ValueError, match="read-only"):
        arm.axes[0, 2] = 0.5
    with pytest.raises(ValueError, match="read-only"):
        arm.limits.position[0, 0] = 0.5


def test_equipped_moves_the_tool_centre_point(cast):
    bare, cup = cast("glazer6").equipped(), cast("glazer6").equipped(tool="cup", payload="tile")
    q = bare.positions["home"]
    np.testing.assert_allclose(cup.forward(q), bare.forward(q) @ translation(0, 0, 0.12), atol=1e-15)
    assert (cup.tool.name, cup.payload.name) == ("cup", "tile")
    assert (bare.tool.name, bare.payload) == ("none", None)
    assert cup.equipped(tool=cup.tool).payload is None
    assert cup.length == bare.length


def test_an_unknown_tool_or_payload_is_named_with_those_there_are(cast):
    with pytest.raises(errors.InputError, match='glazer6: unknown tool "saw", there is "nozzle", "cup"'):
        cast("glazer6").equipped(tool="saw")
    with pytest.raises(errors.InputError, match='glazer6: unknown payload "car", there is "tile", "tile stack"'):
        cast("glazer6").equipped(payload="car")


def test_an_unknown_joint_is_refused(cast):
    with pytest.raises(
        errors.InputError, match='sorter4: unknown joint "knee", there is shoulder, elbow, screw, wrist'
    ):
        cast("sorter4").base_from_joint("knee", np.zeros(4))


def test_an_arm_pickles_with_what_it_carries(cast, spread):
    arm = cast("glazer6 stacking")
    q = spread(arm, 3)
    torque = arm.torque(q, q, q)  # builds the toolbox robot, which must not travel along
    again = pickle.loads(pickle.dumps(arm))
    np.testing.assert_array_equal(again.forward(q), arm.forward(q))
    np.testing.assert_array_equal(again.torque(q, q, q), torque)
    assert again.payload.name == "tile stack"
    assert "rigid_body" in again.__dict__ and again.__dict__["rigid_body"] is not arm.__dict__["rigid_body"]


def test_characteristic_length(cast):
    assert cast("planar three").length == pytest.approx(4.5)  # links 4, 3, 2
    assert cast("loader4").length == pytest.approx(np.sqrt(2.0**2 + 1.2**2 + 0.6**2) / 2)
    # screw 200 mm, arms 350 and 300 mm with the screw's zero 40 mm down
    assert cast("sorter4").length == pytest.approx((0.35 + np.hypot(0.3, 0.04) + 0.2) / 2)
    assert Arm(**GOOD).length == 1.0


def test_what_each_arm_serves(cast):
    level = {"x", "y", "z", "rotation about z"}
    assert cast("loader4").serves == cast("sorter4").serves == level
    assert cast("planar three").serves == {"x", "y", "rotation about z"}
    assert len(cast("glazer6").serves) == len(cast("seven").serves) == 6
