"""Whatever happens to a task file, loading it gives a task or one line of complaint."""

import re

import numpy as np
import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from pathplan.errors import InputError
from pathplan.task import Task

# Pieces that are likely to hurt: other types, other units, what floats can't hold, names of other things.
PIECES = [
    *(
        "nan",
        "-inf",
        "0",
        "-1",
        "1e300",
        "-1e-300",
        "9" * 30,
        "9" * 400,
        "true",
        '""',
        "[]",
        "[[]]",
        "{}",
        '"base"',
    ),
    *(
        '"home"',
        '"parked"',
        '"belt"',
        '"car"',
        '"20 kg"',
        '"5 %"',
        '"1 mm"',
        "1979-05-27",
        "[0, 0, 0]",
        "[nan, 1, 1]",
    ),
    *(
        '"a\\nb"',
        '"\\u0000"',
        "{ xyz = [1, 2, 3] }",
        "{ joints = [0, 0, 0, 0, 0, 0] }",
        '{ elbow = "up" }',
        "''",
    ),
]
KEYS = (
    "title arm cycle tool payload start return speed acceleration frames poses step parent xyz rpy quat "
    "joints frame motion to offset via centre axis angle tool_along blend configuration mark wait name "
    "repeat as with include along patterns curves taught count pitch order skip points"
).split()


def outcome(load, text):
    """The task, or None after a complaint on one line."""
    try:
        task = load(text)
    except InputError as error:
        assert str(error).isprintable()
        assert str(error).startswith("pick.toml: ")
        assert all(line.isprintable() for line in error.problems)
        return None
    assert isinstance(task, Task)
    assert np.isfinite(task.start).all()
    for step in task.steps:
        for array in (step.via, step.centre, step.axis, step.target and step.target.frame_from_tool):
            assert array is None or np.isfinite(array).all()
    return task


any_load = settings(suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None, max_examples=150)


@any_load
@given(data=st.data())
def test_values_of_other_kinds(load, text, data):
    lines = text.splitlines()
    keyed = [k for k, line in enumerate(lines) if " = " in line]
    for _ in range(data.draw(st.integers(1, 3))):
        k = data.draw(st.sampled_from(keyed))
        key, value = lines[k].split(" = ", 1)
        if data.draw(st.booleans()):
            key = data.draw(st.sampled_from(KEYS))
        else:
            value = data.draw(st.sampled_from(PIECES))
        lines[k] = f"{key} = {value}"
    outcome(load, "\n".join(lines))


@any_load
@given(data=st.data())
def test_numbers_inside_values(load, text, data):
    numbers = list(re.finditer(r"(?<![\w\"])-?\d+(?![\w\"])", text))
    number = data.draw(st.sampled_from(numbers))
    other = data.draw(st.one_of(st.floats().map(repr), st.integers().map(str), st.sampled_from(PIECES)))
    outcome(load, text[: number.start()] + other + text[number.end() :])


@any_load
@given(data=st.data())
def test_lines_lost_doubled_or_moved(load, text, data):
    lines = text.splitlines()
    for _ in range(data.draw(st.integers(1, 4))):
        k = data.draw(st.integers(0, len(lines) - 1))
        line = lines.pop(k)
        for _ in range(data.draw(st.integers(0, 2))):
            lines.insert(data.draw(st.integers(0, len(lines))), line)
    outcome(load, "\n".join(lines))


@any_load
@given(data=st.data())
def test_characters_lost_and_added(load, text, data):
    k = data.draw(st.integers(0, len(text)))
    cut = data.draw(st.integers(0, 30))
    extra = data.draw(st.text(st.characters(exclude_categories=["Cs"]), max_size=5))
    outcome(load, text[:k] + extra + text[k + cut :])


@pytest.mark.parametrize("key", KEYS)
def test_each_key_with_each_piece_at_the_top_and_in_a_step(load, text, key):
    others = re.sub(rf"(?m)^{key} = .*\n", "", text[: text.index("[frames")]) + text[text.index("[frames") :]
    for piece in PIECES:
        outcome(load, f"{key} = {piece}\n{others}")
        outcome(load, f"{text}\n[[step]]\n{key} = {piece}\n")
