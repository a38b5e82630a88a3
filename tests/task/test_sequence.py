"""Repeats, included files, and tools and payloads that change: what steps become of them."""

import numpy as np
import pytest
from spatialmath import SE3

from pathplan.errors import InputError
from pathplan.task import load_task

HEAD = """\
title = "stack"
arm = "bench6.toml"
cycle = "4 ms"
tool = "gripper"
start = "home"

[frames.cell]
xyz = [600, 0, 100]

[frames.car]
parent = "cell"
xyz = [0, 300, 50]
rpy = [0, 0, 90]

[poses.belt]
frame = "cell"
xyz = [0, -200, 0]
rpy = [180, 0, 0]

[poses.parked]
joints = [10, -30, 60, 0, 60, 0]

[patterns.stack]
frame = "car"
xyz = [20, 10, 8]
rpy = [180, 0, 0]
count = [2, 2]
pitch = [50, 40]

[patterns.rack]
frame = "cell"
xyz = [0, 0, 0]
rpy = [180, 0, 30]
count = 4
pitch = [0, 25, 0]

[frames.tile]
parent = "stack"
xyz = [0, 0, 2]
rpy = [0, 0, 10]

[poses.corner]
frame = "tile"
xyz = [3, 4, 0]
rpy = [180, 0, 0]
"""
STACK = """
[[step]]
repeat = "stack"

[[step.step]]
motion = "line"
to = "belt"

[[step.step]]
motion = "line"
to = "stack"
offset = { frame = [0, 0, 30] }
"""
LINE = '\n[[step]]\nmotion = "line"\nto = "belt"\n'
CELL = SE3(0.6, 0.0, 0.1)
CAR = CELL * SE3(0.0, 0.3, 0.05) * SE3.Rz(90, "deg")
DOWN = SE3.Rx(180, "deg")


def places():
    """(i, j, place of the stack as a frame) by hand."""
    for j in range(2):
        for i in range(2):
            yield i, j, CAR * SE3(0.02 + 0.05 * i, 0.01 + 0.04 * j, 0.008)


def close(pose):
    return pytest.approx(np.asarray(pose), abs=1e-12)


def complaint(load, text):
    with pytest.raises(InputError) as caught:
        load(text)
    assert str(caught.value).isprintable()
    return str(caught.value)


def test_a_group_is_repeated_at_every_place(load):
    task = load(HEAD + STACK)
    assert [step.index for step in task.steps] == list(range(8))
    assert [step.where for step in task.steps[:3]] == [
        "pick.toml: step[1].step[1] at stack [1, 1]",
        "pick.toml: step[1].step[2] at stack [1, 1]",
        "pick.toml: step[1].step[1] at stack [2, 1]",
    ]
    for (_, _, place), step in zip(places(), task.steps[1::2], strict=True):
        assert task.pose(step.target) == close(place * SE3(0, 0, 0.03) * DOWN)  # offset along the axes of the car
        assert step.target.frame == "car"


def test_one_step_repeats_itself(load):
    task = load(HEAD + '\n[[step]]\nrepeat = "stack"\nmotion = "line"\nto = "stack"\n')
    assert [step.where for step in task.steps][1] == "pick.toml: step[1] at stack [2, 1]"
    for (_, _, place), step in zip(places(), task.steps, strict=True):
        assert task.pose(step.target) == close(place * DOWN)


def test_frames_and_poses_hang_on_a_pattern(load):
    step = '\n[[step]]\nrepeat = "stack"\nmotion = "arc"\nto = "corner"\noffset = { frame = [1, 0, 0] }\n'
    task = load(HEAD + step + 'via = { frame = "tile", xyz = [0, 0, 5] }\n')
    for (_, _, place), found in zip(places(), task.steps, strict=True):
        tile = place * SE3(0, 0, 0.002) * SE3.Rz(10, "deg")
        assert task.pose(found.target) == close(tile * SE3(0.004, 0.004, 0) * DOWN)
        assert found.via == close((tile * SE3(0, 0, 0.005)).t)
        assert found.target.frame == "car"  # a frame that the task itself knows


def test_a_pose_may_be_given_in_the_place(load):
    to = 'to = { frame = "stack", xyz = [0, 0, 9], rpy = [180, 0, 45] }'
    task = load(HEAD + f'\n[[step]]\nrepeat = "stack"\nmotion = "line"\n{to}\n')
    for (_, _, place), found in zip(places(), task.steps, strict=True):
        assert task.pose(found.target) == close(place * SE3(0, 0, 0.009) * SE3.Rz(45, "deg") * DOWN)


def test_patterns_go_along(load):
    text = (
        HEAD
        + '\n[[step]]\nrepeat = "stack"\nwith = "rack"\n'
        + "".join(f'\n[[step.step]]\nmotion = "line"\nto = "{name}"\n' for name in ("rack", "stack"))
    )
    task = load(text)
    assert task.steps[2].where == "pick.toml: step[1].step[1] at stack [2, 1], rack [2]"
    for k, step in enumerate(task.steps[::2]):
        assert task.pose(step.target) == close(CELL * SE3(0, 0.025 * k, 0) * DOWN * SE3.Rz(-30, "deg"))


def test_a_loop_over_named_poses(load):
    text = (
        HEAD
        + """
[[step]]
repeat = ["belt", "parked"]
as = "spot"

[[step.step]]
motion = "joint"
to = "spot"
"""
    )
    task = load(text)
    assert [step.where.partition(" at ")[2] for step in task.steps] == ['spot = "belt"', 'spot = "parked"']
    assert task.pose(task.steps[0].target) == close(CELL * SE3(0, -0.2, 0) * DOWN)
    assert task.steps[1].target.joints == pytest.approx(np.deg2rad([10, -30, 60, 0, 60, 0]))


def test_so_many_times(load):
    task = load(HEAD + '\n[[step]]\nrepeat = 3\nwait = "0.1 s"\nmark = "blink"\n' + LINE)
    assert [step.motion for step in task.steps] == ["wait"] * 3 + ["line"]
    assert task.steps[2].where == "pick.toml: step[1] at round 3 of 3"


def test_repeats_in_repeats(load):
    text = (
        HEAD
        + """
[[step]]
repeat = "rack"

[[step.step]]
repeat = "stack"

[[step.step.step]]
motion = "line"
to = "stack"

[[step.step]]
motion = "line"
to = "rack"
"""
    )
    task = load(text)
    assert len(task.steps) == 4 * (4 + 1)
    assert task.steps[1].where == "pick.toml: step[1].step[1].step[1] at rack [1] at stack [2, 1]"


def test_a_pattern_stands_in_the_place_of_another(load):
    text = (
        HEAD.replace('[patterns.rack]\nframe = "cell"', '[patterns.rack]\nframe = "stack"')
        + """
[[step]]
repeat = "stack"

[[step.step]]
repeat = "rack"
motion = "line"
to = "rack"
"""
    )
    task = load(text)
    expected = [place * SE3(0, 0.025 * k, 0) for _, _, place in places() for k in range(4)]
    for found, place in zip(task.steps, expected, strict=True):
        assert task.pose(found.target) == close(place * DOWN * SE3.Rz(-30, "deg"))


def test_the_blend_into_the_next_round_is_left_off_at_the_end(load):
    text = HEAD + STACK + 'blend = "10 mm"\n'
    task = load(text)
    assert [step.blend is not None for step in task.steps] == [False, True] * 3 + [False, False]
    returning = load(text.replace('start = "home"', 'start = "home"\nreturn = true'))
    assert all(step.blend for step in returning.steps[1:8:2])


BAD = {
    "no such pattern": (
        STACK.replace('repeat = "stack"', 'repeat = "stak"'),
        'step[1].repeat: no pattern "stak" in [patterns], did you mean "stack"?',
    ),
    "pattern outside": (
        '\n[[step]]\nmotion = "line"\nto = "stack"\n',
        'step[1].to: "stack" is a pattern, expected inside a step that repeats it',
    ),
    "pose that hangs on it": (
        '\n[[step]]\nmotion = "line"\nto = "corner"\n',
        'step[1].to: "corner" moves with pattern "stack", expected inside a step that repeats it',
    ),
    "frame that hangs on it": (
        '\n[[step]]\nmotion = "line"\nto = { frame = "tile", xyz = [0, 0, 0] }\n',
        'step[1].to.frame: frame "tile" moves with pattern "stack", expected inside a step that repeats it',
    ),
    "repeated twice": (
        '\n[[step]]\nrepeat = "stack"\n[[step.step]]\nrepeat = "stack"\nmotion = "line"\nto = "stack"\n',
        'step[1].step[1].repeat: pattern "stack" is repeated by a step around this one already',
    ),
    "steps without repeat": (
        '\n[[step]]\n[[step.step]]\nmotion = "line"\nto = "belt"\n',
        "step[1].step: steps inside a step go with repeat, which is missing",
    ),
    "nothing to repeat": (
        "\n[[step]]\nrepeat = 2\nstep = []\n",
        "step[1].step: expected at least one step to repeat, got none",
    ),
    "motion beside steps": (
        STACK.replace('repeat = "stack"', 'repeat = "stack"\nmotion = "line"'),
        "step[1].motion: a step that repeats others takes only repeat, as and with beside them",
    ),
    "repeat of a table": (
        LINE + "repeat = {}\n",
        "step[1].repeat: expected the name of a pattern, a list of names of poses, or a number of times, got a table",
    ),
    "no times": (LINE + "repeat = 0\n", "step[1].repeat: expected 1 to 100000 times, got 0"),
    "too many rounds": (
        STACK.replace('"stack"', "100000", 1),
        "step[1].repeat: expected at most 100000 steps with all repeats, got 100000 rounds that make 200000 steps",
    ),
    "too many rounds of rounds": (
        '\n[[step]]\nrepeat = 1000\n[[step.step]]\nrepeat = 1000\nmotion = "line"\nto = "belt"\n',
        "step[1].repeat: expected at most 100000 steps with all repeats, got 1000 rounds that make 1000000 steps",
    ),
    "list without as": (LINE + 'repeat = ["belt"]\n', 'step[1]: missing key "as"'),
    "as that is taken": (
        LINE + 'repeat = ["belt"]\nas = "parked"\n',
        'step[1].as: "parked" means something already, expected a name that is free',
    ),
    "as of a pattern": (
        LINE + 'repeat = "stack"\nas = "spot"\n',
        "step[1].as: goes with a list of names, a pattern has its own name",
    ),
    "as without repeat": (LINE + 'as = "spot"\n', "step[1].as: as goes with repeat, which is missing"),
    "as of a number": (
        LINE + 'repeat = 2\nas = "spot"\n',
        "step[1].as: as goes with places to repeat over, not with a number of times",
    ),
    "list of no poses": (LINE + "repeat = [1]\n", "step[1].repeat: expected a list of names of poses, got [1]"),
    "list of an unknown pose": (
        LINE + 'repeat = ["belt", "bolt"]\nas = "spot"\n',
        'step[1].repeat[2]: no pose "bolt" in [poses], did you mean "belt"?',
    ),
    "with of another size": (
        LINE + 'repeat = ["belt"]\nas = "spot"\nwith = "rack"\n',
        'step[1].with: pattern "rack" has 4 places, expected 1',
    ),
    "with itself": (LINE + 'repeat = "stack"\nwith = ["stack"]\n', 'step[1].with: "stack" is repeated already'),
    "with a number": (LINE + 'repeat = "stack"\nwith = 3\n', "step[1].with: expected names of patterns, got 3"),
    "said once for all places": (
        STACK.replace("offset", "ofset"),
        'step[1].step[2].ofset: unknown key, did you mean "offset"?',
    ),
}


@pytest.mark.parametrize("case", BAD)
def test_the_exact_line(load, case):
    text, line = BAD[case]
    assert complaint(load, HEAD + text) == f"pick.toml: {line}"


def test_a_blend_that_never_has_effect_is_refused_where_it_is_written(load):
    text = HEAD + STACK + 'blend = 5\n\n[[step.step]]\nwait = "0.1 s"\n'
    line = "step[1].step[2].blend: step[1].step[3] is a wait, so this step ends at a stop point"
    assert complaint(load, text) == f"pick.toml: {line}"


def test_repeats_nest_only_so_deep(load):
    inner = '{ motion = "line", to = "belt" }'
    for _ in range(9):
        inner = f"{{ repeat = 1, step = [{inner}] }}"
    assert complaint(load, f"step = [{inner}]\n" + HEAD).endswith("repeats stand in one another more than 8 deep")


ONE = "xyz = [0, 0, 0]\ncount = 1\npitch = 0"
TAKEN = "has that name, expected another name"


@pytest.mark.parametrize(
    ("table", "line"),
    [
        ("[frames.stack]\nxyz = [0, 0, 0]", f"frames.stack: a pattern {TAKEN}"),
        (f"[patterns.belt]\n{ONE}", f"patterns.belt: a pose {TAKEN}"),
        (f"[patterns.home]\n{ONE}", f"patterns.home: a position of the arm {TAKEN}"),
        (f'[patterns.own]\nframe = "own"\n{ONE}', "patterns.own.frame: a pattern can't stand in itself"),
        (
            f'[patterns.lost]\nframe = "sell"\n{ONE}',
            'patterns.lost.frame: no frame "sell" in [frames], did you mean "cell"?',
        ),
    ],
)
def test_names_of_patterns(load, table, line):
    assert complaint(load, f"{HEAD}{table}\n{LINE}") == f"pick.toml: {line}"


# Tools and payloads

PICK = """
[[step]]
motion = "line"
to = "belt"

[[step]]
wait = "0.2 s"
payload = "tile"

[[step]]
motion = "line"
to = "belt"
offset = { frame = [0, 0, 50] }

[[step]]
motion = "joint"
to = "parked"
payload = "none"
tool = "none"

[[step]]
motion = "line"
to = "parked"
"""


def test_what_is_carried_from_which_step_on(load, bench6):
    task = load(HEAD + PICK)
    assert [step.payload for step in task.steps] == [None, "tile", "tile", None, None]
    assert [step.tool for step in task.steps] == ["gripper"] * 3 + ["none"] * 2
    assert task.tools == ("gripper", "none") and task.payloads == ("tile",)
    assert (task.arm.tool.name, task.arm.payload) == ("gripper", None)
    parked = np.deg2rad([10, -30, 60, 0, 60, 0])
    assert task.pose(task.steps[4].target) == close(bench6.forward(parked))  # of the bare mechanical interface


def test_the_first_step_may_change_what_the_task_says(load):
    task = load(HEAD + PICK.replace('to = "belt"\n', 'to = "belt"\npayload = "tile"\n', 1))
    assert task.arm.payload.name == "tile"
    assert load(HEAD.replace('tool = "gripper"', 'tool = "none"') + LINE).arm.tool.name == "none"


def test_it_stays_for_the_way_back_and_over_rounds(load):
    task = load(HEAD.replace('start = "home"', 'start = "home"\nreturn = true') + PICK)
    assert (task.steps[-1].tool, task.steps[-1].payload) == ("none", None)
    inner = PICK.replace("[[step]]", "[[step.step]]").rpartition('tool = "none"\n')[0]
    rounds = load(f"{HEAD}\n[[step]]\nrepeat = 2\n{inner}")
    assert [step.payload for step in rounds.steps] == [None, "tile", "tile", None] * 2


@pytest.mark.parametrize(
    ("old", "new", "line"),
    [
        (
            'payload = "tile"',
            'payload = "tail"',
            'step[2].payload: arm bench6 has no payload "tail", did you mean "tile"?',
        ),
        ('tool = "none"', 'tool = "cup"', 'step[4].tool: arm bench6 has no tool "cup"'),
        ('tool = "none"', "tool = 3", "step[4].tool: expected a text on one line, got 3"),
        (
            "offset = { frame = [0, 0, 50] }",
            "offset = { frame = [0, 0, 50] }\nblend = 5",
            "step[3].blend: the tool changes at step[4], so this step ends at a stop point",
        ),
    ],
)
def test_bad_changes(load, old, new, line):
    assert complaint(load, HEAD + PICK.replace(old, new, 1)) == f"pick.toml: {line}"


# Included files

PART = """\
title = "part"
speed = 80

[frames.edge]
xyz = [10, 0, 0]
rpy = [0, 0, 90]

[poses.begin]
frame = "edge"
xyz = [0, 5, 1]
rpy = [180, 0, 0]

[poses.rest]
joints = [0, -90, 90, 0, 90, 0]

[patterns.dots]
frame = "edge"
xyz = [0, 0, 0]
rpy = [180, 0, 0]
count = 2
pitch = 7

[[step]]
motion = "line"
to = "begin"
speed = 120

[[step]]
repeat = "dots"
motion = "line"
to = "dots"

[[step]]
motion = "joint"
to = "rest"
"""
INCLUDE = '\n[[step]]\ninclude = "parts/part.toml"\nframe = "car"\n'


@pytest.fixture
def part(tmp_path):
    """Writes the part that INCLUDE names."""
    (tmp_path / "parts").mkdir()

    def write(text, name="part.toml"):
        (tmp_path / "parts" / name).write_text(text)

    write(PART)
    return write


def test_a_file_is_included_with_its_frame_moved(load, part):
    task = load(HEAD + INCLUDE)
    assert [step.motion for step in task.steps] == ["line", "line", "line", "joint"]
    edge = CAR * SE3(0.01, 0, 0) * SE3.Rz(90, "deg")
    assert task.pose(task.steps[0].target) == close(edge * SE3(0, 0.005, 0.001) * DOWN)
    assert task.pose(task.steps[2].target) == close(edge * SE3(0.007, 0, 0) * DOWN)
    assert task.steps[3].target.joints == pytest.approx(np.deg2rad([0, -90, 90, 0, 90, 0]))
    assert task.steps[0].target.frame == "car" and "edge" not in task.frames
    assert [step.speed for step in task.steps] == [0.08] * 4  # its own cap holds for its steps
    assert task.steps[1].where == "part.toml: step[2] (from pick.toml: step[1]) at dots [1]"
    import hashlib

    assert task.sources["parts/part.toml"] == hashlib.sha256(PART.encode()).hexdigest()


def test_a_file_is_included_at_every_place_of_a_pattern(load, part):
    task = load(HEAD + '\n[[step]]\nrepeat = "stack"\n[[step.step]]\ninclude = "parts/part.toml"\nframe = "stack"\n')
    assert len(task.steps) == 16
    for (_, _, place), step in zip(places(), task.steps[::4], strict=True):
        edge = place * SE3(0.01, 0, 0) * SE3.Rz(90, "deg")
        assert task.pose(step.target) == close(edge * SE3(0, 0.005, 0.001) * DOWN)
    assert task.steps[5].where == "part.toml: step[2] (from pick.toml: step[1].step[1] at stack [2, 1]) at dots [1]"


def test_files_include_files_relative_to_themselves(load, part):
    part(
        '[[step]]\ninclude = "../parts/part.toml"\n[[step]]\nmotion = "line"\nto = { xyz = [1, 2, 3] }\n', "outer.toml"
    )
    task = load(HEAD + INCLUDE.replace("part.toml", "outer.toml"))
    assert task.pose(task.steps[-1].target) == close(CAR * SE3(0.001, 0.002, 0.003))
    assert set(task.sources) == {"pick.toml", "parts/outer.toml", "parts/../parts/part.toml"}


def test_names_of_an_included_file_are_its_own(load, part):
    """A frame of the same name in both files: the one that the task knows is not the one meant."""
    part(PART.replace("edge", "car"))
    task = load(HEAD + INCLUDE)
    edge = CAR * SE3(0.01, 0, 0) * SE3.Rz(90, "deg")
    assert task.pose(task.steps[0].target) == close(edge * SE3(0, 0.005, 0.001) * DOWN)


@pytest.mark.parametrize(
    ("old", "new", "line"),
    [
        ('to = "begin"', 'to = "bgin"', 'part.toml: step[1].to: no pose "bgin" in [poses], did you mean "begin"?'),
        ("[poses.begin]", "[poses.begin]\nxzy = 1", 'part.toml: poses.begin.xzy: unknown key, did you mean "xyz"?'),
        (
            'frame = "edge"',
            'frame = "cell"',
            'part.toml: poses.begin.frame: no frame "cell" in [frames] (and 1 more problem)',
        ),
        ("speed = 80", "sped = 80", 'part.toml: sped: unknown key, did you mean "speed"?'),
        (
            "speed = 80",
            'tool = "cup"',
            'part.toml: tool: expected "gripper", which is carried at pick.toml: step[1], got "cup"',
        ),
        ("speed = 80", "payload = 7", "part.toml: payload: expected a text on one line, got 7"),
        ('"part"', "5", "part.toml: title: expected a text on one line, got 5"),
        (PART, "", "part.toml: step: expected at least one step [[step]], got none"),
        (PART, "step = 4", "part.toml: step: expected a list of tables [[step]], got 4"),
        (PART, "=", "part.toml: line 1: not TOML: Invalid statement"),
    ],
)
def test_errors_name_the_included_file(load, part, old, new, line):
    part(PART.replace(old, new))
    assert complaint(load, HEAD + INCLUDE) == line


@pytest.mark.parametrize(
    ("old", "new", "line"),
    [
        ("parts/part.toml", "parts/prat.toml", 'pick.toml: step[1].include: no such file "parts/prat.toml"'),
        ('"car"', '"cra"', 'pick.toml: step[1].frame: no frame "cra" in [frames], did you mean "car"?'),
        (
            'frame = "car"',
            "speed = 5",
            "pick.toml: step[1].speed: a step that includes a file takes only frame beside it",
        ),
        (
            'frame = "car"',
            "repeat = 5",
            "pick.toml: step[1].repeat: a step that includes a file takes only frame beside it",
        ),
        ("parts/part.toml", "parts", "parts: is a directory, expected a TOML file"),
        (
            "parts/part.toml",
            "pick.toml",
            "pick.toml: step[1].include: files include each other: pick.toml -> pick.toml",
        ),
    ],
)
def test_bad_includes(load, part, old, new, line):
    found = complaint(load, HEAD + INCLUDE.replace(old, new))
    assert found.endswith(line)


def test_files_that_include_each_other(load, part):
    part('[[step]]\ninclude = "b.toml"\n', "a.toml")
    part('[[step]]\ninclude = "a.toml"\n', "b.toml")
    line = "b.toml: step[1].include: files include each other: a.toml -> b.toml -> a.toml"
    assert complaint(load, HEAD + INCLUDE.replace("part.toml", "a.toml")) == line


def test_an_included_file_for_another_arm(tmp_path, part):
    from pathlib import Path

    robots = Path(__file__).parents[2] / "robots"
    task = tmp_path / "pick.toml"
    head = f'arm = "{robots.as_posix()}/glazer6.toml"\ncycle = 0.004\nstart = "home"\n'
    task.write_text(head + INCLUDE.replace('frame = "car"\n', ""))
    part('arm = "{}"\n[[step]]\nmotion = "joint"\nto = "parked"\n'.format((robots / "glazer6.toml").as_posix()))
    assert len(load_task(task).steps) == 1
    part('arm = "{}"\n[[step]]\nmotion = "joint"\nto = "parked"\n'.format((robots / "loader4.toml").as_posix()))
    with pytest.raises(InputError, match=r"loader4.toml\" is another arm than glazer6, which the task is for$"):
        load_task(task)


def test_includes_that_multiply_are_stopped(load, part, monkeypatch):
    """Eight files, each of which includes the next one ten times, would make ten million steps."""
    monkeypatch.setattr("pathplan.task.sequence.MAX_STEPS", 500)
    for k in range(7):
        part("".join(f'[[step]]\ninclude = "f{k + 1}.toml"\n' for _ in range(10)), f"f{k}.toml")
    part(LINE.replace('"belt"', "{ xyz = [0, 0, 0] }"), "f7.toml")
    line = complaint(load, HEAD + INCLUDE.replace("part.toml", "f0.toml"))
    assert line.startswith("f7.toml: step[1]: expected at most 500 steps with all repeats, got more")
