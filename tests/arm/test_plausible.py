"""What looks wrong though it can be planned with; the weight at home against pinocchio."""

from dataclasses import replace

import numpy as np
import pytest

from pathplan.arm import Arm, Joint
from pathplan.arm.plausible import holding_torque, plausibility

FINE = {"position": (-2.0, 2.0), "velocity": 3.0, "acceleration": 10.0, "jerk": 100.0}


def one(kind="revolute", **changes) -> Arm:
    values = {**FINE, **changes}
    return Arm("one", (Joint("a", kind, **values),), np.eye(4)[None], np.array([[0, 0, 1.0]]))


@pytest.mark.parametrize(
    ("kind", "changes", "text"),
    [
        ("revolute", {"velocity": 180.0}, "a: velocity 10313 deg/s is much for a revolute joint"),
        ("prismatic", {"velocity": 1e-3}, "a: velocity 1 mm/s is little for a prismatic joint"),
        ("revolute", {"acceleration": 0.01}, "a: acceleration 0.573 deg/s^2 would take 300 s to full velocity"),
        ("revolute", {"jerk": 1e6}, "a: jerk 57295780 deg/s^3 would take 0.00001 s to full acceleration"),
        ("revolute", {"position": (-400.0, 400.0)}, "a: position limits allow 127 turns: unlimited?"),
        ("prismatic", {"position": (0.0, 900.0)}, "a: travels 900000 mm: a slip of units?"),
        ("revolute", {"position": (0.0, 1e-3)}, "a: may move by 0.0573 deg only"),
        ("revolute", {"position": (0.0, np.inf)}, "a: is limited on one side only"),
    ],
)
def test_each_kind_of_slip_is_named(kind, changes, text):
    assert text in plausibility(one(kind, **changes))


def test_what_is_fine_is_not_named(cast):
    assert plausibility(one()) == ()
    for name in ("glazer6", "loader4", "sorter4"):
        assert cast(name).warnings == ()


def test_limits_that_are_all_the_same_look_copied(cast):
    arm = cast("glazer6")
    same = tuple(replace(joint, velocity=2.0) for joint in arm.joints)
    lines = plausibility(replace(arm, joints=same, limits=None))
    assert lines == ("every revolute joint has velocity 114.6 deg/s: copied from one?",)


def test_a_weak_joint_is_named_with_what_it_has_to_hold(cast):
    arm = cast("glazer6").equipped()
    weak = replace(arm.joints[1], torque=5.0)
    lines = plausibility(replace(arm, joints=(arm.joints[0], weak, *arm.joints[2:]), limits=None))
    assert len(lines) == 1 and lines[0].startswith("shoulder: holding the arm at home takes")
    assert lines[0].endswith("its torque limit is 5 N m")


@pytest.mark.parametrize("name", ["glazer6", "puma", "heavy gantry"])
def test_holding_torque_against_pinocchio(name, cast, spread, referee):
    import pinocchio as pin

    arm = cast(name).equipped()
    model, data, _ = referee(arm)
    for q in spread(arm, 5, seed=2):
        np.testing.assert_allclose(holding_torque(arm, q), pin.computeGeneralizedGravity(model, data, q), atol=1e-11)


def test_links_that_no_body_has(cast):
    arm = cast("glazer6").equipped()
    links = list(arm.links)
    links[0] = replace(links[0], inertia=np.diag([0.1, 0.1, 0.5]))
    links[1] = replace(links[1], com=np.array([500.0, 0, 0]), mass=1e-6)
    links[2] = replace(links[2], inertia=np.diag([300.0, 300, 300]))
    links[3] = replace(links[3], mass=0.0)
    lines = "\n".join(plausibility(replace(arm, links=tuple(links))))
    assert "base: no body has its link's principal moments, 0.1, 0.1, 0.5 kg m^2" in lines
    assert "shoulder: its link's centre of mass lies 500000 mm away" in lines
    assert "elbow: inertia 300 kg m^2 is that of a link larger than the arm" in lines
    assert "roll: moves a link of mass 0" in lines
