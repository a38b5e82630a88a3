"""Patterns: where their places are, in which order, and what is said of bad ones."""

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pathplan.errors import InputError
from pathplan.task.patterns import MOST_PLACES, read_pattern
from pathplan.tomlfile import Table

FIRST = {"xyz": [100, 20, 8], "rpy": [180, 0, 0]}


def pattern(**keys):
    return read_pattern("stack", Table({**FIRST, **keys}, "pick.toml", "patterns.stack"), "car")


def positions(found):
    """mm from the first place, by place."""
    return np.round([(place.frame_from_tool[:3, 3] - [0.1, 0.02, 0.008]) * 1e3 for place in found.places], 9)


def test_rows_run_along_x_then_y_then_z():
    found = pattern(count=[3, 4, 5], pitch=[310, 210, 9])
    expected = [(310 * i, 210 * j, 9 * k) for k in range(5) for j in range(4) for i in range(3)]
    np.testing.assert_allclose(positions(found), expected, atol=1e-9)
    assert found.labels[0] == "stack [1, 1, 1]" and found.labels[-1] == "stack [3, 4, 5]"
    assert {place.frame for place in found.places} == {"car"}
    for place in found.places:  # the tool stands the same everywhere
        np.testing.assert_allclose(place.frame_from_tool[:3, :3], np.diag([1.0, -1.0, -1.0]), atol=1e-15)


@given(count=st.lists(st.integers(1, 5), min_size=1, max_size=3))
def test_a_serpentine_visits_every_place_once_by_steps_of_one_pitch(count):
    found = pattern(count=count, pitch=[10, 20, 30][: len(count)], order="serpentine")
    at = np.round(positions(found)[:, : len(count)] / [10, 20, 30][: len(count)]).astype(int)
    assert sorted(map(tuple, at)) == sorted(itertools.product(*map(range, count)))
    assert (np.abs(np.diff(at, axis=0)).sum(axis=1) == 1).all()


def test_a_serpentine_of_two_layers():
    found = pattern(count=[2, 2, 2], pitch=[1, 1, 1], order="serpentine")
    assert [label[6:] for label in found.labels] == [
        *("[1, 1, 1]", "[2, 1, 1]", "[2, 2, 1]", "[1, 2, 1]"),
        *("[1, 2, 2]", "[2, 2, 2]", "[2, 1, 2]", "[1, 1, 2]"),
    ]


def test_directions_as_vectors_and_in_any_order():
    found = pattern(count=[2, 2], pitch=[[0, 0, 9], [5, 6, 0]])
    np.testing.assert_allclose(positions(found), [[0, 0, 0], [0, 0, 9], [5, 6, 0], [5, 6, 9]], atol=1e-9)


@pytest.mark.parametrize(("pitch", "step"), [(-40, [-40, 0, 0]), ([1, 2, 3], [1, 2, 3]), ("4 cm", [40, 0, 0])])
def test_one_direction(pitch, step):
    found = pattern(count=3, pitch=pitch)
    np.testing.assert_allclose(positions(found), np.outer([0, 1, 2], step), atol=1e-9)
    assert found.labels == ("stack [1]", "stack [2]", "stack [3]")


def test_places_left_out():
    assert pattern(count=4, pitch=1, skip=[2, 3]).labels == ("stack [1]", "stack [4]")
    found = pattern(count=[2, 2], pitch=[1, 1], skip=[[2, 1], [2, 1]], order="serpentine")
    assert found.labels == ("stack [1, 1]", "stack [2, 2]", "stack [1, 2]")


def test_a_stack_is_taken_down_from_its_end():
    up, down = pattern(count=[2, 3], pitch=[1, 1]), pattern(count=[2, 3], pitch=[1, 1], reverse=True)
    assert down.labels == up.labels[::-1]


def test_one_place_needs_no_pitch_in_its_direction():
    assert len(pattern(count=[2, 1], pitch=[5, 0]).places) == 2


BAD = {
    "no count": ({"pitch": 1}, 'patterns.stack: missing key "count"'),
    "no pitch": ({"count": 2}, 'patterns.stack: missing key "pitch"'),
    "count zero": (
        {"count": [3, 0], "pitch": [1, 1]},
        "patterns.stack.count: expected 1 to 3 whole numbers above zero such as [3, 4, 5], got [3, 0]",
    ),
    "count a float": (
        {"count": 2.0, "pitch": 1},
        "patterns.stack.count: expected 1 to 3 whole numbers above zero such as [3, 4, 5], got 2.0",
    ),
    "four directions": (
        {"count": [1, 1, 1, 1], "pitch": [1, 1, 1, 1]},
        "patterns.stack.count: expected 1 to 3 whole numbers above zero such as [3, 4, 5], got [1, 1, 1, 1]",
    ),
    "absurd": (
        {"count": [1000, 1000, 1000], "pitch": [1, 1, 1]},
        "patterns.stack.count: expected at most 100000 places, got [1000, 1000, 1000]",
    ),
    "more digits than a number has": (
        {"count": 10**400, "pitch": 1},
        "patterns.stack.count: expected at most 100000 places, got an integer of many digits",
    ),
    "pitch for another count": (
        {"count": [2, 2], "pitch": [1, 1, 1]},
        "patterns.stack.pitch: expected a list of 2 lengths or vectors, as many as count has directions, got 3 of them",
    ),
    "pitch no list": (
        {"count": [2, 2], "pitch": 5},
        "patterns.stack.pitch: expected a list of 2 lengths or vectors, as many as count has directions, got 5",
    ),
    "pitch unit": (
        {"count": [2, 2], "pitch": [1, "2 deg"]},
        'patterns.stack.pitch[2]: expected a length such as "20 mm", got "2 deg"',
    ),
    "pitch zero": (
        {"count": [2, 2], "pitch": [1, 0]},
        "patterns.stack.pitch[2]: expected a length other than zero for 2 places, got 0",
    ),
    "pitch vector of two": (
        {"count": [2], "pitch": [[1, 0]]},
        "patterns.stack.pitch[1]: expected a length or a vector [x, y, z], got [1, 0]",
    ),
    "pitch NaN": (
        {"count": 2, "pitch": float("nan")},
        'patterns.stack.pitch: expected a length such as "20 mm", got nan',
    ),
    "far": ({"count": 2, "pitch": "2000 m"}, 'patterns.stack.pitch: expected a length within 1000 m, got "2000 m"'),
    "further": ({"count": 1000, "pitch": "2 m"}, "patterns.stack.pitch: the pattern reaches beyond 1000 m"),
    "order": (
        {"count": 2, "pitch": 1, "order": "serpent"},
        'patterns.stack.order: expected "rows" or "serpentine", got "serpent", did you mean "serpentine"?',
    ),
    "skip outside": (
        {"count": [2, 3], "pitch": [1, 1], "skip": [[1, 1], [3, 1]]},
        "patterns.stack.skip[2]: expected a place among 2 x 3, counted from 1, got [3, 1]",
    ),
    "skip of another size": (
        {"count": [2, 3], "pitch": [1, 1], "skip": [4]},
        "patterns.stack.skip[1]: expected a place among 2 x 3, counted from 1, got 4",
    ),
    "skip no list": (
        {"count": [2, 3], "pitch": [1, 1], "skip": 4},
        "patterns.stack.skip: expected a list of places such as [[1, 1]], got 4",
    ),
    "skip all": ({"count": 2, "pitch": 1, "skip": [1, 2]}, "patterns.stack.skip: leaves out every place"),
    "reverse": ({"count": 2, "pitch": 1, "reverse": 1}, "patterns.stack.reverse: expected true or false, got 1"),
}


@pytest.mark.parametrize("case", BAD)
def test_the_exact_line(case):
    keys, line = BAD[case]
    with pytest.raises(InputError) as caught:
        pattern(**keys)
    assert str(caught.value) == f"pick.toml: {line}"


def test_as_many_places_as_there_may_be():
    assert len(pattern(count=MOST_PLACES, pitch="1 um").places) == MOST_PLACES
