"""Bad task files: the exact line that is said of each."""

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from pathplan.errors import InputError
from pathplan.task import load_task
from pathplan.task.sequence import MAX_STEPS

STEP4 = '[[step]]\nmotion = "line"\nto = "belt"\noffset = { tool = [0, 0, -80] }\nblend = "20 mm"\n'
ARC = 'via = { frame = "cell", xyz = [0, 0, 200] }'
CENTRE = 'centre = { frame = "car", xyz = [150, 20, 0] }'
LAST = 'motion = "joint"\nto = "parked"'
BELT = '[poses.belt]\nframe = "cell"\nxyz = [0, -200, 0]\nrpy = [180, 0, 0]'
OFFSET = "offset = { tool = [0, 0, -80] }"

# (what to replace, by what, the line after "pick.toml: ")
BAD = {
    "unknown key": ('title = "', 'titel = "', 'titel: unknown key, did you mean "title"?'),
    "unknown step key": (
        'blend = "20 mm"',
        'blnd = "20 mm"',
        'step[4].blnd: unknown key, did you mean "blend"?',
    ),
    "steps": ("[[step]]", "[[steps]]", 'steps: unknown key, did you mean "step"?'),
    "frame key": (
        'parent = "cell"',
        'parrent = "cell"',
        'frames.car.parrent: unknown key, did you mean "parent"?',
    ),
    "pose key": ("quat =", "quad =", 'poses.shelf.quad: unknown key, did you mean "quat"?'),
    "target key": (ARC, ARC.replace("xyz", "xy"), 'step[5].via: missing key "xyz" (is "xy" meant for it?)'),
    "offset key": (
        OFFSET,
        "offset = { tol = [0, 0, -80] }",
        'step[4].offset.tol: unknown key, did you mean "tool"?',
    ),
    "empty offset": (
        OFFSET,
        "offset = {}",
        'step[4].offset: expected "frame", "tool" or "rpy", got an empty table',
    ),
    "no cycle": ('cycle = "4 ms"', 'cycel = "4 ms"', 'missing key "cycle" (is "cycel" meant for it?)'),
    "zero cycle": ('"4 ms"', "0", "cycle: expected a time from 50 us to 1 s, got 0"),
    "negative cycle": ('"4 ms"', '"-4 ms"', 'cycle: expected a time from 50 us to 1 s, got "-4 ms"'),
    "cycle in ms": ('"4 ms"', "4", "cycle: expected a time from 50 us to 1 s, got 4"),
    "cycle unit": ('"4 ms"', '"4 mm"', 'cycle: expected a time such as "0.2 s", got "4 mm"'),
    "cycle NaN": ('"4 ms"', "nan", 'cycle: expected a time such as "0.2 s", got nan'),
    "tool": (
        'tool = "gripper"',
        'tool = "griper"',
        'tool: arm bench6 has no tool "griper", did you mean "gripper"?',
    ),
    "payload": ('tool = "gripper"', 'payload = "brick"', 'payload: arm bench6 has no payload "brick"'),
    "return": (
        "return = true",
        'return = "arc"',
        'return: expected true, false, "joint" or "line", got "arc"',
    ),
    "start missing": ('start = [0, -30, 60, 0, "60 deg", 0]\n', "", 'missing key "start"'),
    "start length": (
        "start = [0, ",
        "start = [",
        "start: expected a list of 6 joint positions, got 5 of them",
    ),
    "start outside": (
        "start = [0, -30, 60,",
        "start = [0, -30, -130.5,",
        "start: joint bend at -130.5 deg, expected from -120 deg to 170 deg",
    ),
    "start unit": (
        '"60 deg"',
        '"60 mm"',
        'start[5]: expected an angle such as "10 deg", got "60 mm"',
    ),
    "start NaN": ('"60 deg"', "nan", 'start[5]: expected an angle such as "10 deg", got nan'),
    "start name": (
        'start = [0, -30, 60, 0, "60 deg", 0]',
        'start = "hime"',
        'start: no pose "hime" in [poses], did you mean "home"?',
    ),
    "start pose": (
        'start = [0, -30, 60, 0, "60 deg", 0]',
        'start = "belt"',
        'start: "belt" is a tool pose, expected joint positions or their name',
    ),
    "joints outside": (
        "joints = [10,",
        "joints = [190,",
        "poses.parked.joints: joint turn at 190 deg, expected from -170 deg to 170 deg",
    ),
    "joints and xyz": (
        "joints = [10,",
        "xyz = [0, 0, 0]\njoints = [10,",
        "poses.parked.xyz: given together with joints, expected a pose or a joint vector",
    ),
    "frame of a pose": (
        BELT,
        BELT.replace("cell", "sell"),
        'poses.belt.frame: no frame "sell" in [frames], did you mean "cell"?',
    ),
    "frame of a via": (
        ARC,
        ARC.replace("cell", "kiln"),
        'step[5].via.frame: no frame "kiln" in [frames]',
    ),
    "parent": (
        'parent = "cell"',
        'parent = "sell"',
        'frames.car.parent: no frame "sell" in [frames], did you mean "cell"?',
    ),
    "cycle of frames": (
        "[frames.cell]",
        '[frames.cell]\nparent = "car"',
        "frames.cell.parent: frames in a cycle: cell -> car -> cell",
    ),
    "own parent": ('parent = "cell"', 'parent = "car"', "frames.car.parent: frames in a cycle: car -> car"),
    "base": (
        "[frames.car]",
        "[frames.base]\n[frames.car]",
        "frames.base: base is the name of the arm's own frame, expected another name",
    ),
    "quaternion": (
        "quat = [0, 1, 0, 0]",
        "quat = [0, 1, 0.1, 0]",
        "poses.shelf.quat: expected a quaternion [w, x, y, z] of length 1, got length 1.00498756",
    ),
    "pose NaN": (
        "xyz = [100, 20, 0]",
        "xyz = [100, nan, 0]",
        'poses.shelf.xyz[2]: expected a length such as "20 mm", got nan',
    ),
    "pose unit": (
        "xyz = [100, 20, 0]",
        'xyz = [100, "20 deg", 0]',
        'poses.shelf.xyz[2]: expected a length such as "20 mm", got "20 deg"',
    ),
    "pose named like a position": (
        "[poses.parked]",
        "[poses.home]\nxyz = [0, 0, 0]\n[poses.parked]",
        "poses.home: arm bench6 has a position of that name, expected another name",
    ),
    "no motion": (
        LAST,
        'to = "parked"',
        'step[7]: expected a motion ("joint", "line", "arc", "curve" or "taught") or a wait, got neither',
    ),
    "misspelt motion": (LAST, 'motoin = "joint"', 'step[7].motoin: unknown key, did you mean "motion"?'),
    "curve": (LAST, 'motion = "curve"', 'step[7]: missing key "along"'),
    "curve with a target": (
        LAST,
        'motion = "curve"\nto = "parked"',
        'step[7].to: motion = "curve" ends where its points do, expected along = NAME and no target',
    ),
    "no such curve": (
        LAST,
        'motion = "curve"\nalong = "rim"',
        'step[7].along: no path "rim" in [curves]',
    ),
    "no such taught path": (
        LAST,
        'motion = "taught"\nalong = "rim"',
        'step[7].along: no path "rim" in [taught]',
    ),
    "line along": (
        LAST,
        LAST + '\nalong = "rim"',
        'step[7].along: only a curve or a taught path takes along, this motion is "joint"',
    ),
    "motion": (
        LAST,
        'motion = "lines"',
        'step[7].motion: expected "joint", "line", "arc", "curve" or "taught", got "lines", did you mean "line"?',
    ),
    "no target": (LAST, 'motion = "joint"', 'step[7]: missing key "to"'),
    "unknown pose": (
        LAST,
        LAST.replace("parked", "parkd"),
        'step[7].to: no pose "parkd" in [poses], did you mean "parked"?',
    ),
    "target no pose": (
        LAST,
        'motion = "joint"\nto = 5',
        "step[7].to: expected the name of a pose or a table with one, got 5",
    ),
    "via no point": (ARC, "via = 5", "step[5].via: expected the name of a pose or a table with xyz, got 5"),
    "offset of joints": (
        LAST,
        LAST + "\noffset = { tool = [0, 0, 1] }",
        "step[7].offset: the target is a joint vector, expected a pose to offset",
    ),
    "configuration of joints": (
        LAST,
        LAST + '\nconfiguration = { elbow = "up" }',
        "step[7].configuration: the target is a joint vector, which leaves nothing to choose",
    ),
    "configuration key": (
        "{ elbow =",
        "{ elbo =",
        'step[1].configuration.elbo: expected "shoulder", "elbow" or "wrist", did you mean "elbow"?',
    ),
    "configuration value": (
        '{ elbow = "up" }',
        '{ elbow = "left" }',
        'step[1].configuration.elbow: expected "up" or "down", got "left"',
    ),
    "blend number": (
        'blend = "20 mm"',
        "blend = -5",
        'step[4].blend: expected a length such as "20 mm", got -5',
    ),
    "blend zero": (
        'blend = "20 mm"',
        'blend = "0 deg"',
        'step[4].blend: expected an angle such as "10 deg", got "0 deg"',
    ),
    "blend unit": (
        'blend = "20 mm"',
        'blend = "20 kg"',
        'step[4].blend: expected a length such as "20 mm", an angle such as "10 deg" '
        'or a share such as "15 %", got "20 kg"',
    ),
    "blend share": ('"15 %"', '"60 %"', 'step[1].blend: expected a share of at most 50 %, got "60 %"'),
    "blend tiny": ('"20 mm"', "1e-9", "step[4].blend: expected a length of at least 0.001 mm, got 1e-09"),
    "blend before a wait": (
        "speed = 250",
        "blend = 5",
        "step[2].blend: step[3] is a wait, so this step ends at a stop point",
    ),
    "speed zero": ("speed = 250", "speed = 0", 'step[2].speed: expected a speed such as "250 mm/s", got 0'),
    "speed unit": (
        "speed = 250",
        'speed = "250 mm"',
        'step[2].speed: expected a speed such as "250 mm/s", got "250 mm"',
    ),
    "turning speed zero": (
        "speed = 250",
        "turning_speed = 0",
        'step[2].turning_speed: expected an angular speed such as "180 deg/s", got 0',
    ),
    "turning speed unit": (
        "speed = 250",
        'turning_speed = "90 mm/s"',
        'step[2].turning_speed: expected an angular speed such as "180 deg/s", got "90 mm/s"',
    ),
    "turning speed tiny": (
        "speed = 250",
        "turning_speed = 1e-6",
        "step[2].turning_speed: expected an angular speed of at least 0.001 deg/s, got 1e-06",
    ),
    "turning speed of the task": (
        'cycle = "4 ms"',
        'cycle = "4 ms"\nturning_speed = -5',
        'turning_speed: expected an angular speed such as "180 deg/s", got -5',
    ),
    "held speed zero": (
        "speed = 250",
        "held_speed = 0",
        'step[2].held_speed: expected a speed such as "250 mm/s", got 0',
    ),
    "held speed of a joint motion": (
        LAST,
        LAST + "\nheld_speed = 100",
        'step[7].held_speed: only "line", "arc" or "curve" holds a tool speed, this motion is "joint"',
    ),
    "held speed above the step's own": (
        "speed = 250",
        'speed = 250\nheld_speed = "300 mm/s"',
        "step[2].held_speed: 300 mm/s can't be held, the speed of this step is capped at 250 mm/s",
    ),
    "speed tiny": (
        "speed = 250",
        "speed = 1e-6",
        "step[2].speed: expected a speed of at least 0.01 mm/s, got 1e-06",
    ),
    "acceleration": (
        '"2 m/s^2"',
        '"2 m/s"',
        'step[5].acceleration: expected an acceleration such as "2000 mm/s^2", got "2 m/s"',
    ),
    "wait and motion": (
        'wait = "0.3 s"',
        'wait = "0.3 s"\nmotion = "line"',
        "step[3].motion: this step is a wait, which takes only mark, name, tool and payload beside it",
    ),
    "wait zero": (
        'wait = "0.3 s"',
        "wait = 0",
        'step[3].wait: expected a time above zero such as "0.2 s", got 0',
    ),
    "wait long": (
        'wait = "0.3 s"',
        "wait = 4000",
        "step[3].wait: expected a time of at most 3600 s, got 4000",
    ),
    "mark": ('mark = "gripper closed"', "mark = 3", "step[3].mark: expected a text on one line, got 3"),
    "via of a line": (
        STEP4,
        STEP4 + 'via = "belt"\n',
        'step[4].via: only an arc takes via, this motion is "line"',
    ),
    "arc with neither": (
        ARC,
        "",
        "step[5].motion: an arc takes via and to, or centre, axis and angle, got neither",
    ),
    "arc with both": (
        ARC,
        ARC + '\ncentre = "belt"',
        "step[5].motion: an arc takes via and to, or centre, axis and angle, got both",
    ),
    "via with orientation": (
        ARC,
        ARC.replace("] }", "], rpy = [0, 0, 0] }"),
        "step[5].via.rpy: only the position of a via point counts: "
        "the orientation of an arc runs on the shortest rotation from start to target",
    ),
    "angle of a via arc": (
        ARC,
        ARC + "\nangle = 90",
        "step[5].angle: angle goes with centre, which is missing",
    ),
    "centre with target": (
        CENTRE,
        CENTRE + '\nto = "belt"',
        "step[6].to: an arc by its centre ends where its angle says, expected no target",
    ),
    "axis zero": (
        "axis = [0, 0, 2]",
        "axis = [0, 0, 0]",
        "step[6].axis: expected a direction, got [0, 0, 0]",
    ),
    "angle zero": (
        "angle = -180",
        "angle = 0",
        "step[6].angle: expected an angle other than zero up to 3600 deg either way, got 0",
    ),
    "tool_along": (
        "tool_along = true",
        "tool_along = 1",
        "step[6].tool_along: expected true or false, got 1",
    ),
}


def complaint(load, text):
    with pytest.raises(InputError) as caught:
        load(text)
    assert str(caught.value).isprintable()
    return str(caught.value)


@pytest.mark.parametrize("case", BAD)
def test_the_exact_line(load, text, case):
    old, new, line = BAD[case]
    assert old in text
    assert complaint(load, text.replace(old, new)) == f"pick.toml: {line}"


def head(text):
    return text[: text.index("[[step]]")]


def test_an_empty_task(load, text):
    line = "pick.toml: step: expected at least one step [[step]], got none"
    assert complaint(load, head(text)) == line
    assert complaint(load, "step = []\n" + head(text)) == line


def test_an_empty_file(load):
    assert complaint(load, "") == 'pick.toml: missing key "cycle"'


def test_only_waits(load, text):
    line = "pick.toml: step: expected at least one step that moves, got only waits"
    assert complaint(load, head(text) + "[[step]]\nwait = 1\n") == line


def test_a_blend_at_the_very_end(load, text):
    line = "pick.toml: step[7].blend: the last step ends at a stop point"
    assert complaint(load, text.replace("return = true", "") + "blend = 5\n") == line


def test_too_many_steps(load, text):
    line = f"pick.toml: step: expected at most {MAX_STEPS} steps, got {MAX_STEPS + 1}"
    assert complaint(load, f"step = [{'{wait=1},' * (MAX_STEPS + 1)}]\n" + head(text)) == line


def test_a_long_cycle_of_frames_is_cut_short(load, text):
    ring = "".join(f'[frames.f{k}]\nparent = "f{(k + 1) % 50}"\n' for k in range(50))
    line = "pick.toml: frames.f0.parent: frames in a cycle: f0 -> f1 -> f2 -> f3 -> f4 -> f5 -> ... -> f0"
    assert complaint(load, text.replace("[frames.cell]", ring + "[frames.cell]")) == line


def test_several_problems_are_listed(load, text):
    with pytest.raises(InputError) as caught:
        load(text.replace("speed = 250", "speed = 0").replace('"20 mm"', "-5").replace('to = "parked"', 'to = "p"'))
    assert caught.value.problems == (
        'pick.toml: step[2].speed: expected a speed such as "250 mm/s", got 0',
        'pick.toml: step[4].blend: expected a length such as "20 mm", got -5',
        'pick.toml: step[7].to: no pose "p" in [poses]',
    )
    assert str(caught.value) == caught.value.problems[0] + " (and 2 more problems)"


def test_a_start_outside_its_limits_carries_the_numbers(load, text):
    with pytest.raises(InputError, match="joint bend at -130 deg") as caught:
        load(text.replace("start = [0, -30, 60,", "start = [0, -30, -130,"))
    assert caught.value.data["joint"] == "bend"
    assert caught.value.data["value"] == pytest.approx(-2.2689, abs=1e-4)


def test_a_start_outside_a_coupled_limit_names_the_row(load, text, bench6):
    plain = bench6.limits
    coupled = replace(
        plain,
        names=(*plain.names, "wrist sum"),
        matrix=np.vstack([plain.matrix, [0, 0, 0, 1, 1, 0]]),
        **{
            kind: np.vstack([getattr(plain, kind), np.deg2rad([-50, 50])])
            for kind in ("position", "velocity", "acceleration", "jerk", "torque")
        },
    )
    with pytest.raises(InputError) as caught:
        load(text, replace(bench6, limits=coupled))
    line = "pick.toml: start: joint wrist sum at 60 deg, expected from -50 deg to 50 deg"
    assert caught.value.problems[-1] == line


def test_files_that_are_none(tmp_path):
    def line(call):
        with pytest.raises(InputError) as caught:
            call()
        return str(caught.value)

    assert line(lambda: load_task(tmp_path / "none.toml")) == f"{tmp_path}/none.toml: no such file"
    assert line(lambda: load_task(tmp_path)) == f"{tmp_path}: is a directory, expected a TOML file"
    path = tmp_path / "pick.toml"
    path.write_text("motion: joint\n")
    assert line(lambda: load_task(path)) == (
        "pick.toml: line 1: not TOML: Expected '=' after a key in a key/value pair"
    )


@pytest.mark.parametrize(
    ("arm", "line"),
    [
        ('"none.toml"', 'pick.toml: arm: no such file "none.toml"'),
        ('"."', 'pick.toml: arm: "." is a directory, expected an arm file'),
        ("5", "pick.toml: arm: expected a text on one line, got 5"),
        ('"broken.toml"', "broken.toml: line 1: not TOML: Invalid value"),
    ],
)
def test_arm_files_that_are_none(tmp_path, text, arm, line):
    (tmp_path / "broken.toml").write_text("name = ")
    path = tmp_path / "pick.toml"
    path.write_text(text.replace('"bench6.toml"', arm))
    with pytest.raises(InputError) as caught:
        load_task(path)
    assert str(caught.value) == line


@pytest.mark.parametrize(
    ("keys", "line"),
    [
        (
            'motion = "line"\norientation_tolerance = "2 deg"\ntilt = "2 deg"',
            "step[1].tilt: expected either orientation_tolerance or tilt, got both",
        ),
        ('motion = "line"\ntilt = "-2 deg"', 'step[1].tilt: expected an angle such as "10 deg", got "-2 deg"'),
        ('motion = "line"\ntilt = "2 mm"', 'step[1].tilt: expected an angle such as "10 deg", got "2 mm"'),
        (
            'motion = "line"\norientation_tolerance = "40 deg"',
            'step[1].orientation_tolerance: expected at most 30 deg, got "40 deg"',
        ),
        (
            'motion = "joint"\ntilt = "2 deg"',
            'step[1].tilt: only a line, an arc or a curve takes tilt, this motion is "joint"',
        ),
        (
            'motion = "line"\ntilt = "2 deg"\nroll = "free"',
            'step[1].tilt: tilt goes with roll = "fixed", got "free"',
        ),
    ],
)
def test_tolerances_of_the_orientation(tmp_path, keys, line):
    robot = Path(__file__).parents[2] / "robots" / "glazer6.toml"
    file = tmp_path / "pick.toml"
    head = f'title = "t"\narm = "{robot.as_posix()}"\ncycle = "4 ms"\nstart = "home"\n'
    file.write_text(f"{head}[[step]]\n{keys}\nto = {{ xyz = [550, -100, 350], rpy = [180, 0, 0] }}\n")
    with pytest.raises(InputError) as caught:
        load_task(file)
    assert str(caught.value) == f"pick.toml: {line}"


def test_tolerance_of_an_arm_that_makes_no_use_of_it(tmp_path):
    robot = Path(__file__).parents[2] / "robots" / "sorter4.toml"
    file = tmp_path / "sort.toml"
    head = f'title = "t"\narm = "{robot.as_posix()}"\ncycle = "4 ms"\nstart = "home"\n'
    file.write_text(
        f'{head}[[step]]\nmotion = "line"\ntilt = "2 deg"\nto = {{ xyz = [300, 0, 100], rpy = [180, 0, 0] }}\n'
    )
    with pytest.raises(
        InputError, match=r"tilt: helps where six axes end in a spherical wrist, which arm sorter4 has not$"
    ):
        load_task(file)
