"""An arm on the screen and as data, and the template of its file."""

import json
import tomllib
from pathlib import Path

import numpy as np
import pytest

from pathplan import errors
from pathplan.arm import Arm, load_arm
from pathplan.arm.load_urdf import sketch
from pathplan.arm.reach import reach
from pathplan.report.arm_screen import arm_as_dict, arm_screen
from pathplan.report.arm_template import arm_template
from tests.arm.structures import loaded, on_track, seven, skew_shoulder, with_turntable

ROBOTS = Path(__file__).parents[2] / "robots"


@pytest.mark.parametrize(
    "name", ["glazer6", "loader4", "sorter4", "stacker6", "stacker7", "stacker6-pallet", "sorter4-spline"]
)
def test_the_screen_of_every_robot_fits(name):
    arm = loaded(name)
    text = arm_screen(arm)
    assert max(map(len, text.splitlines())) <= 100 and text.isascii()
    for word in ("structure", "inverse", "branches", "serves", "reach", "home", *arm.joint_names, *arm.tools):
        assert word in text
    json.dumps(arm_as_dict(arm), allow_nan=False)


def test_what_the_screen_says_of_an_arm():
    text = arm_screen(loaded("stacker6"))
    assert "structure  three parallel axes" in text
    assert "inverse    closed form (axes of joints 2, 3 and 4 parallel)" in text
    assert "branches   8: shoulder left or right, wrist positive or negative, elbow up or down" in text
    assert "serves     every pose" in text
    assert "unlimited" in text and "stacker6.toml, stacker6.urdf" in text


def test_what_is_missing_is_named_so():
    text = arm_screen(sketch(ROBOTS / "stacker6.urdf"))
    assert "missing" in text
    assert "? stacker6.urdf: no acceleration and jerk limits: they come from an arm file, see --template" in text
    json.dumps(arm_as_dict(sketch(ROBOTS / "stacker6.urdf")), allow_nan=False)


def test_more_axes_than_a_pose_asks_for():
    text = arm_screen(on_track(loaded("glazer6")))
    assert "free       track: one more than a pose asks for" in text
    assert "structure  spherical wrist" in text
    assert "free       j3" in arm_screen(seven())


def test_coupled_drives_are_shown():
    """The nut of a screw spline: 18 deg a mm of lift and the wrist's own turns, as its arm file says."""
    arm = loaded("sorter4-spline")
    lines = arm_screen(arm).splitlines()
    assert "nut = 18 screw + wrist: a coupled drive" in lines
    (nut,) = [line.split() for line in lines if line.startswith("nut  ")]
    assert nut == "nut coupled -3800 to 250 deg 18000 deg/s 110000 deg/s^2 1600000 deg/s^3 -".split()
    (data,) = arm_as_dict(arm)["coupled"]
    np.testing.assert_allclose(data["row"], [0, 0, np.deg2rad(18) * 1e3, 1])
    np.testing.assert_allclose(data["position"], np.deg2rad([-3800, 250]))


def test_five_axes_serve_places_and_directions():
    text = arm_screen(five_axes())
    assert "serves     every place with the direction of the tool's z axis; its roll follows from them" in text


def test_joints_beside_the_arm_and_branches_without_names():
    text = arm_screen(with_turntable(loaded("glazer6")))
    assert "6 axes between base and tool, table beside them" in text and "table (beside)" in text
    assert "branches   8, without names: followed from pose to pose" in arm_screen(skew_shoulder())


@pytest.mark.parametrize("name", ["glazer6", "sorter4", "stacker6", "loader4"])
def test_reach_is_reached_and_not_passed(name):
    """Random postures within the limits never pass the extremes, and the extremes are no farther than an arm can be."""
    arm = loaded(name)
    far = reach(arm)
    low, high = np.clip(np.array([joint.position for joint in arm.joints]).T, -np.pi * 2, np.pi * 2)
    points = arm.forward(np.random.default_rng(9).uniform(low, high, (20_000, arm.n)))[:, :3, 3]
    assert (points >= far.low - 1e-4).all() and (points <= far.high + 1e-4).all()
    assert (points.min(axis=0) - far.low < 0.25).all() and (far.high - points.max(axis=0) < 0.25).all()


def test_reach_of_a_scara_and_of_a_gantry():
    """Stretched out: arms of 350 and 300 mm; the gantry's travels from where it stands at zero."""
    assert reach(loaded("sorter4")).from_first_axis == pytest.approx(0.65, abs=1e-6)
    far = reach(loaded("loader4"))
    np.testing.assert_allclose([far.low, far.high], [[0.12, 0, 0.65], [2.12, 1.2, 1.25]], atol=1e-9)


def five_axes() -> Arm:
    """glazer6 without its last joint, the tool standing along the fourth axis' plane."""
    arm = loaded("glazer6")
    tip = arm.parent_from_joint[5] @ arm.tip_from_flange
    return Arm("five", arm.joints[:5], arm.parent_from_joint[:5], arm.axes[:5], tip)


# ---- template


def test_nothing_is_wished_of_a_file_that_says_it_all():
    assert arm_template(ROBOTS / "glazer6.toml") == (
        "# glazer6.toml says everything of its joints that an arm file has a place for."
    )


def test_the_template_of_a_urdf_file_needs_only_what_it_lacks(tmp_path):
    text = arm_template(ROBOTS / "stacker6.urdf")
    (tmp_path / "stacker6.urdf").write_bytes((ROBOTS / "stacker6.urdf").read_bytes())
    file = tmp_path / "arm.toml"
    file.write_text(text)
    with pytest.raises(
        errors.InputError, match=r'joint.1..acceleration: expected an angular acceleration .* got "fill in"'
    ) as caught:
        load_arm(file)
    assert len(caught.value.problems) == 6  # the first thing missing of each joint
    filled = text.replace('acceleration = "fill in"', "acceleration = 500").replace('jerk = "fill in"', "jerk = 5000")
    file.write_text(filled)
    arm = load_arm(file)
    ours = loaded("stacker6")
    np.testing.assert_array_equal(arm.limits.position, ours.limits.position)
    np.testing.assert_array_equal(arm.limits.velocity, ours.limits.velocity)
    np.testing.assert_array_equal(arm.forward(np.full(6, 0.2)), ours.forward(np.full(6, 0.2)))


def test_what_the_comments_of_a_template_offer_may_be_taken(tmp_path):
    """Every commented value of the URDF file, uncommented, is accepted and changes nothing but rounding."""
    lines = []
    for line in arm_template(ROBOTS / "stacker6.urdf").splitlines():
        lines.append(
            line[2:] if line.startswith("# ") and "as in the URDF file" in line and "mass" not in line else line
        )
    (tmp_path / "stacker6.urdf").write_bytes((ROBOTS / "stacker6.urdf").read_bytes())
    (tmp_path / "arm.toml").write_text("\n".join(lines).replace('"fill in"', "900"))
    arm, ours = load_arm(tmp_path / "arm.toml"), loaded("stacker6")
    np.testing.assert_allclose(arm.limits.position, ours.limits.position, rtol=1e-6)
    np.testing.assert_allclose(arm.limits.torque, ours.limits.torque, rtol=1e-6)


def test_the_template_of_an_arm_file_keeps_what_it_has():
    text = arm_template(ROBOTS / "stacker6.toml")
    assert tomllib.loads(text)["joint"][0] == {
        "name": "base",
        "acceleration": 400,
        "jerk": 4000,
        "continuous_torque": 150,
        "gear_ratio": 121,
    }
    assert "fill in" not in text
    native = arm_template(ROBOTS / "sorter4.toml")
    assert "# mass =    # kg, of the link that the joint moves" in native and "gear_ratio" not in native
    assert tomllib.loads(native) == {}


def test_an_unfinished_arm_file_gets_its_template(tmp_path):
    (tmp_path / "stacker6.urdf").write_bytes((ROBOTS / "stacker6.urdf").read_bytes())
    (tmp_path / "arm.toml").write_text('urdf = "stacker6.urdf"\n[[joint]]\nname = "base"\njerk = 7\n')
    tables = tomllib.loads(arm_template(tmp_path / "arm.toml"))["joint"]
    assert tables[0] == {"name": "base", "jerk": 7, "acceleration": "fill in"}
    assert tables[5] == {"name": "flange", "jerk": "fill in", "acceleration": "fill in"}
