"""URDF files against pinocchio reading the same text; what they lack from the arm file; what can't be used."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest

from pathplan import errors
from pathplan.arm import load_arm
from pathplan.arm.load_urdf import sketch
from pathplan.arm.urdf import read_urdf

ROBOTS = Path(__file__).parents[2] / "robots"
KINDS = ("revolute", "continuous", "prismatic")


def numbers(values) -> str:
    return " ".join(repr(float(value)) for value in values)


def link(name: str, r: np.random.Generator, bare: float = 0.0) -> str:
    """A link with a body of random mass and inertia, sometimes without."""
    if r.random() < bare:
        return f'<link name="{name}"/>'
    half = r.uniform(0.02, 0.2, 3)
    mass = r.uniform(0.5, 6)
    moments = mass / 3 * (np.sum(half**2) - half**2)
    turned = np.linalg.qr(r.normal(size=(3, 3)))[0]
    inertia = turned @ np.diag(moments) @ turned.T
    keys = {"ixx": (0, 0), "ixy": (0, 1), "ixz": (0, 2), "iyy": (1, 1), "iyz": (1, 2), "izz": (2, 2)}
    cells = " ".join(f'{key}="{float(inertia[at])!r}"' for key, at in keys.items())
    origin = f'<origin xyz="{numbers(r.uniform(-0.2, 0.2, 3))}" rpy="{numbers(r.uniform(-3, 3, 3))}"/>'
    body = f'<inertial>{origin}<mass value="{float(mass)!r}"/><inertia {cells}/></inertial>'
    return f'<link name="{name}">{body}</link>'


def joint(name: str, kind: str, parent: str, child: str, r: np.random.Generator, more: str = "") -> str:
    axis = r.normal(size=3)
    axis /= np.linalg.norm(axis)
    limit = "" if kind == "fixed" else '<limit lower="-1.5" upper="2" velocity="2" effort="50"/>'
    origin = f'<origin xyz="{numbers(r.uniform(-0.4, 0.4, 3))}" rpy="{numbers(r.uniform(-3, 3, 3))}"/>'
    ends = f'<parent link="{parent}"/><child link="{child}"/>'
    return f'<joint name="{name}" type="{kind}">{ends}{origin}<axis xyz="{numbers(axis)}"/>{limit}{more}</joint>'


def random_urdf(seed: int) -> tuple[str, list[str]]:
    """A robot of 3 to 7 moving joints in a chain, fixed joints between and twigs on the way: text, joints in order."""
    r = np.random.default_rng(seed)
    parts, moving, here = [link("l0", r, 0.2)], [], "l0"
    count = int(r.integers(3, 8))
    for i in range(1, 2 * count):
        kind = str(r.choice(KINDS)) if len(moving) < count and r.random() < 0.6 else "fixed"
        parts += [link(f"l{i}", r, 0.2), joint(f"j{i}", kind, here, f"l{i}", r)]
        here = f"l{i}"
        if kind != "fixed":
            moving.append(f"j{i}")
        if r.random() < 0.3:  # a twig: something bolted on
            parts += [link(f"t{i}", r, 0.2), joint(f"tj{i}", "fixed", here, f"t{i}", r)]
    if not moving:
        parts += [link("end", r), joint("jend", "revolute", here, "end", r)]
        here, moving = "end", ["jend"]
    return f'<robot name="r{seed}">{"".join(parts)}</robot>', [*moving, here]


def arm_file(folder: Path, urdf: str, names: list[str], tip: str, extra: str = "") -> Path:
    (folder / "robot.urdf").write_text(urdf)
    tables = "".join(f'[[joint]]\nname = "{name}"\nacceleration = 900\njerk = 9000\n' for name in names)
    home = ", ".join("0" for _ in names)
    file = folder / "robot.toml"
    file.write_text(f'urdf = "robot.urdf"\ntip_link = "{tip}"\n{extra}\n{tables}\n[positions]\nhome = [{home}]\n')
    return file


@pytest.mark.parametrize("seed", range(8))
def test_forward_jacobian_and_torque_agree_with_pinocchio_reading_the_same_file(seed, tmp_path):
    import pinocchio as pin

    text, names = random_urdf(seed)
    tip = names.pop()
    arm = load_arm(arm_file(tmp_path, text, names, tip))
    model = pin.buildModelFromXML(text)
    data = model.createData()
    frame = model.getFrameId(tip)
    assert arm.joint_names == tuple(names)
    r = np.random.default_rng(seed)
    q, qd, qdd = r.uniform(-1.4, 1.9, (3, 20, arm.n))
    torque = arm.torque(q, qd, qdd) if arm.links is not None else None
    model.gravity.linear = np.array(arm.gravity)
    for k in range(20):
        theirs = pin_configuration(model, names, q[k])
        pin.framesForwardKinematics(model, data, theirs)
        np.testing.assert_allclose(arm.forward(q[k]), data.oMf[frame].homogeneous, rtol=0, atol=1e-13)
        jac = pin.computeFrameJacobian(model, data, theirs, frame, pin.ReferenceFrame.LOCAL_WORLD_ALIGNED)
        order = [model.joints[model.getJointId(name)].idx_v for name in names]
        np.testing.assert_allclose(arm.jacobian(q[k]), jac.reshape(6, -1)[:, order], rtol=0, atol=1e-12)
        if torque is not None:
            asked = np.empty((2, model.nv))
            asked[:, order] = qd[k], qdd[k]
            needed = pin.rnea(model, data, theirs, *asked)[order]
            np.testing.assert_allclose(torque[k], needed, rtol=0, atol=1e-10 * max(1.0, np.abs(needed).max()))


def pin_configuration(model, names, q):
    """A joint vector as pinocchio counts it: joints without limits by cosine and sine."""
    theirs = np.zeros(model.nq)
    for name, value in zip(names, q, strict=True):
        item = model.joints[model.getJointId(name)]
        theirs[item.idx_q : item.idx_q + item.nq] = [value] if item.nq == 1 else [np.cos(value), np.sin(value)]
    return theirs


def test_the_stacking_arm_agrees_with_pinocchio():
    import pinocchio as pin

    arm = load_arm(ROBOTS / "stacker6.toml")
    assert arm.warnings == ()
    assert arm.structure == "three parallel axes"
    assert set(arm.sources) == {"stacker6.toml", "stacker6.urdf"}
    model = pin.buildModelFromUrdf(str(ROBOTS / "stacker6.urdf"))
    data, frame = model.createData(), model.getFrameId("tool_face")
    q = arm.positions["home"]
    theirs = pin_configuration(model, arm.joint_names, q)
    pin.framesForwardKinematics(model, data, theirs)
    np.testing.assert_allclose(arm.forward(q), data.oMf[frame].homogeneous, rtol=0, atol=1e-14)
    model.gravity.linear = np.array(arm.gravity)
    needed = pin.rnea(model, data, theirs, np.zeros(6), np.zeros(6))
    still = np.zeros((1, 6))
    np.testing.assert_allclose(arm.torque(q[None], still, still)[0], needed, rtol=0, atol=1e-11)


def test_limits_of_the_urdf_file_and_of_the_arm_file(tmp_path):
    r = np.random.default_rng(0)
    text = f'<robot name="two">{link("a", r)}{link("b", r)}{link("c", r)}'
    text += joint("turn", "revolute", "a", "b", r, '<dynamics damping="3" friction="0.5"/>')
    text += joint("slide", "prismatic", "b", "c", r) + "</robot>"
    file = arm_file(tmp_path, text, ["turn", "slide"], "c")
    arm = load_arm(file)
    assert arm.name == "two"
    turn, slide = arm.joints
    assert (turn.position, turn.velocity, turn.torque) == ((-1.5, 2.0), 2.0, 50.0)
    assert turn.acceleration == pytest.approx(np.deg2rad(900))
    assert (slide.position, slide.velocity, slide.jerk) == ((-1.5, 2.0), 2.0, pytest.approx(9.0))
    assert (arm.links[0].viscous, arm.links[0].coulomb) == (3.0, (0.5, 0.5))
    own = 'velocity = 30\nposition = [-20, 40]\ntorque = 7\nviscous_friction = 1\nmass = "2 kg"\ncom = [10, 0, 0]\n'
    file.write_text(file.read_text().replace('name = "turn"\n', f'name = "turn"\n{own}'))
    turn, link_ = load_arm(file).joints[0], load_arm(file).links[0]
    assert turn.velocity == pytest.approx(np.deg2rad(30)) and turn.torque == 7.0
    np.testing.assert_allclose(turn.position, np.deg2rad([-20, 40]))
    assert (link_.mass, link_.viscous, link_.coulomb) == (2.0, 1.0, (0.5, 0.5))
    np.testing.assert_allclose(link_.com, [0.01, 0, 0])


def test_a_track_of_the_arm_file_carries_the_urdf_arm(tmp_path):
    r = np.random.default_rng(1)
    text = f'<robot name="two">{link("a", r)}{link("b", r)}{joint("turn", "revolute", "a", "b", r)}</robot>'
    file = arm_file(tmp_path, text, ["turn"], "b")
    alone = load_arm(file)
    track = (
        '[[joint]]\nname = "track"\nkind = "prismatic"\norigin = [500, 0, 100]\naxis = [0, 1, 0]\n'
        'position = [0, 3000]\nvelocity = 1000\nacceleration = 2000\njerk = 20000\nmass = "80 kg"\n'
    )
    table = '[[joint]]\nname = "table"\nkind = "revolute"\norigin = [2000, 0, 0]\naxis = [0, 0, 1]\nparent = "base"\n'
    table += 'position = "unlimited"\nvelocity = 90\nacceleration = 200\njerk = 2000\nmass = "40 kg"\n'
    body = file.read_text().replace('tip_link = "b"\n', 'tip_link = "b"\nmounted_on = "track"\n')
    body = body.replace("[[joint]]", track + "\n[[joint]]", 1).replace("[positions]", table + "\n[positions]")
    file.write_text(
        body.replace("home = [0]", "home = [200, 0, 0]").replace("[positions]", "[mount]\nxyz = [1, 2, 3]\n[positions]")
    )
    arm = load_arm(file)
    assert arm.joint_names == ("track", "turn", "table")
    assert arm.tool_joints == (0, 1)
    expected = alone.forward([0.4])
    expected[:3, 3] += [0.001, 0.002 + 1.5, 0.003]
    np.testing.assert_allclose(arm.forward([1.5, 0.4, 9.0]), expected, atol=1e-14)
    np.testing.assert_allclose(arm.base_from_joint("table", [1.5, 0.4, np.pi])[:3, 3], [2, 0, 0], atol=1e-14)


def test_warnings_say_what_looks_wrong(tmp_path):
    r = np.random.default_rng(2)
    text = '<robot name="x"><link name="a"/>'
    for i, name in enumerate("bcdef"):
        text += link(name, r) if name != "d" else '<link name="d"/>'
        text += joint(f"j{i}", "revolute", "abcdef"[i], name, r)
    text += joint("finger", "prismatic", "f", "g", r) + '<link name="g"/></robot>'
    text = text.replace('effort="50"', 'effort="0"', 1)
    arm = load_arm(arm_file(tmp_path, text, [f"j{i}" for i in range(5)], "f"))
    warnings = "\n".join(arm.warnings)
    assert "j0: no torque limit (effort 0 in robot.urdf)" in warnings
    assert "robot.urdf: joint finger beside the chain, held still at zero" in warnings
    assert "j2: moves a link of mass 0" in warnings
    assert "every revolute joint has velocity 114.6 deg/s: copied from one?" in warnings


def test_a_urdf_file_without_masses_has_no_torque(tmp_path):
    r = np.random.default_rng(3)
    text = f'<robot name="x"><link name="a"/><link name="b"/>{joint("turn", "revolute", "a", "b", r)}</robot>'
    arm = load_arm(arm_file(tmp_path, text, ["turn"], "b"))
    assert arm.links is None and arm.joints[0].torque is None
    assert "turn: torque limit left aside: robot.urdf has no masses to judge it by" in arm.warnings


def test_alone_it_can_be_looked_at_but_not_planned_with():
    file = ROBOTS / "stacker6.urdf"
    with pytest.raises(
        errors.InputError, match=re.escape("stacker6.urdf: a URDF file has no acceleration and jerk limits")
    ):
        load_arm(file)
    arm = sketch(file)
    assert np.isinf(arm.joints[0].jerk)
    np.testing.assert_array_equal(arm.forward(np.zeros(6)), load_arm(ROBOTS / "stacker6.toml").forward(np.zeros(6)))


# ---- what can't be used

SIMPLE = """<robot name="simple">
  <link name="a"/> <link name="b"/> <link name="c"/>
  <joint name="one" type="revolute"> <parent link="a"/> <child link="b"/> <axis xyz="0 0 1"/>
    <limit lower="-1" upper="1" velocity="2" effort="3"/> </joint>
  <joint name="two" type="revolute"> <parent link="b"/> <child link="c"/> <origin xyz="1 0 0"/>
    <limit lower="-1" upper="1" velocity="2" effort="3"/> </joint>
</robot>
"""


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ("</robot>", "", "simple.urdf: line 8, column 1: broken XML: no element found"),
        ('<link name="b"/>', '<link name="b">', "simple.urdf: line 7, column 3: broken XML: mismatched tag"),
        ("<robot", "<!DOCTYPE robot [<!ENTITY e 'x'>]><robot", "simple.urdf: has a document type declaration"),
        ("<robot", '<robot xmlns:m="http://m" m:size="${1+1}"', "simple.urdf: is a template with macros"),
        ('robot name="simple"', 'machine name="simple"', "simple.urdf: line 7, column 3: broken XML: mismatched tag"),
        (
            '<parent link="a"/>',
            '<parent link="aa"/>',
            'joint "one": its parent link "aa" does not exist, did you mean "a"?',
        ),
        ('<parent link="a"/>', "", 'joint "one": has no <parent link=...>'),
        ('<link name="b"/>', '<link name="a"/>', 'link "a": there are two of that name'),
        ('name="two"', 'name="one"', 'joint "one": there are two of that name'),
        ('name="two" type', 'name="" type', "a <joint> without a name"),
        ('type="revolute"', 'type="screw"', 'joint "one": type "screw" is unknown, expected revolute, continuous'),
        (
            'type="revolute"',
            'type="floating"',
            'joint "one": is floating, which no single drive moves; expected revolute',
        ),
        ('type="revolute"', 'type="planar"', 'joint "one": is planar, which no single drive moves'),
        ('<axis xyz="0 0 1"/>', '<axis xyz="0 0 0"/>', 'joint "one": axis: expected a direction that is not zero'),
        ('<axis xyz="0 0 1"/>', '<axis xyz="0 1"/>', 'joint "one": axis xyz: expected three numbers, got "0 1"'),
        ('<origin xyz="1 0 0"/>', '<origin xyz="1 0 z"/>', 'joint "two": origin xyz: expected a number, got "z"'),
        ('<origin xyz="1 0 0"/>', '<origin xyz="1e9 0 0"/>', 'joint "two": origin: expected coordinates within 1000 m'),
        ('velocity="2"', 'velocity="nan"', 'joint "one": limit velocity: expected a number, got "nan"'),
        ('lower="-1"', 'lower="4"', 'joint "one": limit: lower 4 is above upper 1'),
        ('<child link="c"/>', '<child link="b"/>', 'link "b": is carried by two joints, "one" and "two": a loop'),
        ('<parent link="a"/>', '<parent link="c"/>', 'a loop of joints without a base: "one", "two"'),
        (
            '<axis xyz="0 0 1"/>',
            '<mimic joint="two"/>',
            'joint "one": follows joint "two" (mimic): it has no drive of its own',
        ),
        (
            '<link name="b"/>',
            '<link name="b"><inertial><mass value="-1"/></inertial></link>',
            'link "b": mass -1 kg is below',
        ),
    ],
)
def test_what_can_not_be_used_is_said_in_one_line(old, new, message, tmp_path):
    assert old in SIMPLE
    (tmp_path / "simple.urdf").write_text(SIMPLE.replace(old, new, 1))
    with pytest.raises(errors.InputError, match=re.escape(message)) as caught:
        read_urdf(tmp_path / "simple.urdf").chain()
    assert "\n" not in str(caught.value) and "simple.urdf" in str(caught.value)


@pytest.mark.parametrize(
    ("base", "tip", "message"),
    [
        ("floor", None, 'base_link: no link "floor", there is "a", "b", "c"'),
        (None, "cc", 'tip_link: no link "cc", did you mean "c"?'),
        ("b", "a", 'tip_link: link "a" does not hang on link "b" but on "a", expected one of "c"'),
        ("c", "c", 'no joint moves between link "c" and link "c"'),
    ],
)
def test_links_that_make_no_chain(base, tip, message, tmp_path):
    (tmp_path / "simple.urdf").write_text(SIMPLE)
    with pytest.raises(errors.InputError, match=re.escape(message)):
        read_urdf(tmp_path / "simple.urdf").chain(base, tip)


def test_several_tips_are_named(tmp_path):
    other = '<link name="d"/><joint name="three" type="fixed"><parent link="b"/><child link="d"/></joint></robot>'
    (tmp_path / "simple.urdf").write_text(SIMPLE.replace("</robot>", other))
    assert read_urdf(tmp_path / "simple.urdf").chain().tip == "c"  # more joints move it
    two = other.replace('parent link="b"', 'parent link="c"').replace("</robot>", '<link name="e"/></robot>')
    two = two.replace("</robot>", '<joint name="4" type="fixed"><parent link="c"/><child link="e"/></joint></robot>')
    (tmp_path / "simple.urdf").write_text(SIMPLE.replace("</robot>", two))
    with pytest.raises(errors.InputError, match=re.escape('several tips are as far: "d", "e"; expected tip_link')):
        read_urdf(tmp_path / "simple.urdf").chain()


def test_an_entity_is_never_read(tmp_path):
    secret = tmp_path / "secret.txt"
    secret.write_text("0 0 1")
    evil = f'<!DOCTYPE robot [<!ENTITY e SYSTEM "file://{secret}">]>' + SIMPLE.replace("0 0 1", "&e;")
    (tmp_path / "simple.urdf").write_text(evil)
    with pytest.raises(errors.InputError, match="document type declaration"):
        read_urdf(tmp_path / "simple.urdf")


ARM = """urdf = "simple.urdf"
[[joint]]
name = "one"
acceleration = 100
jerk = 1000
[[joint]]
name = "two"
acceleration = 100
jerk = 1000
[positions]
home = [0, 0]
"""


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        ('"simple.urdf"', '"other.urdf"', "other.urdf: no such file, expected a URDF file"),
        ('"simple.urdf"', '"simple.txt"', 'arm.toml: urdf: expected the name of a URDF file such as "arm.urdf"'),
        ("jerk = 1000\n", "", 'arm.toml: joint[1]: missing key "jerk"'),
        (
            'name = "two"',
            'name = "tow"',
            'joint[2].name: no moving joint "tow" between link "a" and link "c", did you mean "two"?',
        ),
        (
            'name = "two"\n',
            'name = "two"\nkind = "revolute"\n',
            "joint[2].kind: is revolute by simple.urdf, expected no kind here",
        ),
        (
            'name = "two"\n',
            'name = "two"\norigin = [0, 0, 0]\n',
            "joint[2].origin: comes from simple.urdf, expected limits",
        ),
        ('urdf = "simple.urdf"', 'urdf = "simple.urdf"\ndh = "modified"', "arm.toml: dh: given together with urdf"),
        ('urdf = "simple.urdf"', 'urdf = "simple.urdf"\nbase_link = "z"', 'simple.urdf: base_link: no link "z"'),
        (
            'urdf = "simple.urdf"',
            'urdf = "simple.urdf"\nmounted_on = "z"',
            "arm.toml: mounted_on: expected a joint of this file",
        ),
        ('name = "two"\n', 'name = "two"\ncom = [0, 0, 0]\n', 'joint[2]: missing key "mass": "com" needs it'),
        ("home = [0, 0]", "home = [90, 0]", "arm.toml: positions.home: one at 90 deg is outside its limits"),
    ],
)
def test_arm_files_that_do_not_fit_their_urdf(old, new, message, tmp_path):
    (tmp_path / "simple.urdf").write_text(SIMPLE)
    assert old in ARM
    (tmp_path / "arm.toml").write_text(ARM.replace(old, new, 1))
    with pytest.raises(errors.InputError, match=re.escape(message)):
        load_arm(tmp_path / "arm.toml")


@pytest.mark.parametrize(
    ("old", "new", "message"),
    [
        (
            'velocity="2"',
            'velocity="0"',
            'joint[1]: missing key "velocity": simple.urdf says 0, expected an angular speed',
        ),
        ('velocity="2"', "", 'joint[1]: missing key "velocity": simple.urdf gives none'),
        ('lower="-1" upper="1"', "", 'joint[1]: missing key "position": simple.urdf says 0 to 0, expected [low, high]'),
    ],
)
def test_limits_that_are_needed_and_missing(old, new, message, tmp_path):
    (tmp_path / "simple.urdf").write_text(SIMPLE.replace(old, new, 1))
    (tmp_path / "arm.toml").write_text(ARM)
    with pytest.raises(errors.InputError, match=re.escape(message)):
        load_arm(tmp_path / "arm.toml")


def test_a_joint_without_a_table_is_named(tmp_path):
    (tmp_path / "simple.urdf").write_text(SIMPLE)
    (tmp_path / "arm.toml").write_text('urdf = "simple.urdf"\n[positions]\nhome = [0, 0]\n')
    with pytest.raises(errors.InputError, match=r'joint "one" of simple\.urdf has no table') as caught:
        load_arm(tmp_path / "arm.toml")
    assert len(caught.value.problems) == 2


def test_limits_beyond_any_turn_are_endless(tmp_path):
    (tmp_path / "simple.urdf").write_text(SIMPLE.replace('lower="-1" upper="1"', 'lower="-1e16" upper="1e16"', 1))
    (tmp_path / "arm.toml").write_text(ARM)
    arm = load_arm(tmp_path / "arm.toml")
    assert arm.joints[0].position == (-np.inf, np.inf)
    assert any("taken as unlimited" in text for text in arm.warnings)


def test_a_damaged_file_never_ends_in_a_traceback(tmp_path):
    text = (ROBOTS / "stacker6.urdf").read_bytes()
    r = np.random.default_rng(5)
    file = tmp_path / "damaged.urdf"
    for _ in range(300):
        damaged = bytearray(text)
        for _ in range(int(r.integers(1, 4))):
            at = int(r.integers(len(damaged)))
            what = int(r.integers(3))
            if what == 0:
                damaged[at] = int(r.integers(256))
            elif what == 1:
                del damaged[at : at + int(r.integers(1, 30))]
            else:
                damaged[at:at] = bytes(r.choice([b"<", b'"', b"&", b"9", b"\xff", b"1e999"]))
        file.write_bytes(bytes(damaged))
        try:
            chain = read_urdf(file).chain("floor", "tool_face")
            assert len(chain.joints) >= 1
        except errors.InputError as error:
            assert "\n" not in str(error)
