"""Tool speeds to be held: shares against closed forms, what stopped them and where, and the words for it."""

from __future__ import annotations

import math
from dataclasses import replace

import numpy as np
import pytest
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from pathplan.auditing.held import HELD_WITHIN, Holding, held_findings
from pathplan.task.model import Frame, Step, Target, Task
from tests.auditing.cast import made_arm

LABELS = [("swing", "jerk"), ("bend", "velocity"), (None, "tool speed")]
ASKED, CYCLE = 0.2, 0.004


def task_of(count=1, **more):
    steps = tuple(Step(k, "line", "", name=f"bead {k + 1}", held_speed=ASKED) for k in range(count))
    return Task("", None, made_arm(), np.zeros(3), steps, CYCLE, **more)


def held(speed, limit=0, *, step=None, chunk=10**6, cap=math.inf, pace=1.0, task=None, cycle=CYCLE):
    """What is found of rows (N,) with a tool speed, all of them (or by row) limited by one of the LABELS."""
    speed = np.asarray(speed, dtype=float)
    step = np.zeros(len(speed), dtype=np.int64) if step is None else step
    task = task or task_of(int(step.max()) + 1)
    shares = np.zeros((len(speed), len(LABELS)))
    shares[np.arange(len(speed)), limit] = 1.0
    times = np.full(len(speed), cycle)
    times[0] = 0.0
    holding = Holding(task, np.full(len(task.steps), cap), LABELS, pace)
    for first in range(0, len(speed), chunk):
        rows = slice(first, first + chunk)
        holding.add(speed[rows], step[rows], times[rows], shares[rows])
    return holding.found()


def ramps(up=40, on=100, down=20):
    return np.concatenate([np.linspace(0, ASKED, up + 1), np.full(on, ASKED), np.linspace(ASKED, 0, down + 1)[1:]])


def places(found):
    return {(m.where, m.joint, m.quantity): m for m in found.missed}


def test_straight_ramps_by_hand():
    """99 % of the speed is reached after 99 % of a ramp: of its length 0.99^2 is missed."""
    (found,) = held(ramps())
    time, length = 160 * CYCLE, ASKED * CYCLE * (20 + 100 + 10)
    assert found.time == pytest.approx(time) and found.length == pytest.approx(length)
    assert found.time_part == pytest.approx((100 + 0.01 * 60) / 160)
    missed = 0.99**2 * ASKED * CYCLE * 30
    assert found.length_part == pytest.approx(1 - missed / length)
    assert (found.speed, found.cap, found.reached) == (ASKED, ASKED, ASKED)
    assert found.begins_at_rest and found.ends_at_rest
    start, end = places(found)["start", "swing", "jerk"], places(found)["end", "swing", "jerk"]
    assert start.length_part == pytest.approx(2 / 3 * missed / length)
    assert end.time_part == pytest.approx(0.99 * 20 / 160)
    assert len(found.missed) == 2


def test_a_dip_between_names_its_limit():
    dip = ASKED * (1 - 0.3 * np.sin(np.linspace(0, np.pi, 41)))
    speed = np.concatenate([ramps(on=60, down=1)[:-1], dip, np.full(60, ASKED), np.linspace(ASKED, 0, 21)])
    limit = np.zeros(len(speed), dtype=int)
    limit[95:150] = 1
    (found,) = held(speed, limit)
    assert set(places(found)) == {("start", "swing", "jerk"), ("along", "bend", "velocity"), ("end", "swing", "jerk")}
    inside = np.arcsin(HELD_WITHIN / 0.3) / np.pi
    along = places(found)["along", "bend", "velocity"]
    assert along.time_part * found.time == pytest.approx((1 - 2 * inside) * 40 * CYCLE, rel=0.02)
    parts = sum(m.time_part for m in found.missed) + found.time_part
    assert parts == pytest.approx(1.0)


def test_steps_that_are_flown_through_begin_and_end_with_corners():
    """A corner dips between two steps: its first half ends one, its second begins the other."""
    dip = ASKED * (1 - 0.5 * np.cos(np.linspace(-np.pi / 2, np.pi / 2, 61)))
    speed = np.concatenate([ramps(down=1)[:-1], dip, ramps()[41:]])
    step = (np.arange(len(speed)) > len(ramps(down=1)) + 28).astype(np.int64)
    one, two = held(speed, step=step)
    assert [m.where for m in one.missed] == ["start", "corner after"] and not one.ends_at_rest
    assert [m.where for m in two.missed] == ["corner before", "end"] and not two.begins_at_rest
    late, early = held(speed, step=(np.arange(len(speed)) > len(ramps(down=1)) + 20).astype(np.int64))
    assert [m.where for m in early.missed] == ["corner before", "end"]  # although it falls further at first
    assert [m.where for m in late.missed] == ["start", "corner after"]


def test_a_limit_on_the_way_is_no_start():
    """A level stretch below the speed after the start: it is the limit's, not the start's."""
    level = np.full(50, 0.8 * ASKED)
    speed = np.concatenate([np.linspace(0, 0.8 * ASKED, 33), level, np.linspace(0.8 * ASKED, ASKED, 9), ramps()[41:]])
    (found,) = held(speed)
    assert places(found)["along", "swing", "jerk"].time_part * found.time > 50 * CYCLE
    assert places(found)["start", "swing", "jerk"].time_part * found.time <= 33 * CYCLE


@settings(deadline=None, max_examples=60)
@given(st.integers(0, 2**32 - 1), st.integers(1, 40))
def test_pieces_of_a_table_tell_the_same(seed, chunk):
    rng = np.random.default_rng(seed)
    speed = np.clip(np.cumsum(rng.normal(size=120)) * 0.02 + 0.15, 0.002, 0.25)
    limit = rng.integers(0, 2, 120)
    step = np.sort(rng.integers(0, 3, 120))
    task = task_of(3)
    for whole, part in zip(
        held(speed, limit, step=step, task=task), held(speed, limit, step=step, task=task, chunk=chunk), strict=True
    ):
        assert part.length_part == pytest.approx(whole.length_part) and 0 <= part.time_part <= 1 + 1e-12
        assert {key: pytest.approx(m.time_part) for key, m in places(whole).items()} == {
            key: m.time_part for key, m in places(part).items()
        }
        assert sum(m.time_part for m in whole.missed) + whole.time_part == pytest.approx(1.0)
        assert sum(m.length_part for m in whole.missed) + whole.length_part == pytest.approx(1.0)


@given(st.floats(0.5, 1.5), st.floats(0.5, 1.5))
def test_between_two_rows_the_speed_is_straight(one, two):
    """Against a fine quadrature of the interval, which can't tell a speed that stays at the border of what is held."""
    assume(min(abs(abs(x - 1.0) - HELD_WITHIN) for x in (one, two)) > 1e-4)
    (found,) = held(np.array([one, two]) * ASKED, cycle=1.0)
    speed = ASKED * np.linspace(one, two, 200001)
    inside = np.abs(speed / ASKED - 1) <= HELD_WITHIN
    assert found.time_part == pytest.approx(inside.mean(), abs=2e-5)
    assert found.length_part * found.length == pytest.approx((speed * inside).mean(), abs=2e-5)


def texts(found, task=None, pace=1.0):
    return [finding.text for finding in held_findings(found, task or task_of(len(found)), pace)]


def test_words():
    (text,) = texts(held(ramps()))
    assert text == (
        "step 1 (bead 1): 200 mm/s is held to 1 % over 77.3 % of its length (62.8 % of its time); not in the start from"
        " rest (15.0 %: swing jerk), the stop at its end (7.5 %: swing jerk); its run-in and run-out lie on the work:"
        " blend with a step of the same speed"
    )
    (text,) = texts(held(np.full(20, ASKED)))
    assert text == "step 1 (bead 1) holds its tool speed to 1 % over its whole length"
    (text,) = texts(held(0.5 * ramps(), 1))
    assert text == "step 1 (bead 1): 200 mm/s is never reached, at most 100 mm/s (bend velocity)"
    (text,) = texts(held(np.zeros(20)))
    assert "there is no speed to hold, the tool stays on the spot" in text
    whole = held(np.full(20, ASKED), step=np.repeat([0, 1], 10))
    assert texts(whole) == ["2 steps hold their tool speed to 1 % over their whole length"]
    assert [f.level for f in held_findings(whole, task_of(2), 1.0)] == ["note"]


def test_many_short_steps_are_told_together():
    found = held(np.tile(ramps(10, 20, 10), 30), step=np.repeat(np.arange(30), 41))
    told = texts(found)
    assert len(told) == 11 and told[-1].startswith("20 more steps with a tool speed to be held: held over 6")


@pytest.mark.parametrize(
    ("cap", "pace", "more", "why"),
    [
        (0.1, 1.0, {"speed": 0.1}, "the tool speed of the whole task is capped at 100 mm/s"),
        (0.1, 1.0, {}, "the tool speed of tool nozzle is capped at 100 mm/s"),
        (math.inf, 0.5, {}, "the pace of 50 % slows it to 100 mm/s at most"),
    ],
)
def test_what_makes_it_impossible_is_named(cap, pace, more, why):
    task = task_of(**more)
    task = Task(**{**vars(task), "steps": tuple(Step(**{**vars(s), "tool": "nozzle"}) for s in task.steps)})
    found = held(0.5 * ramps(), cap=cap, pace=pace, task=task)
    assert found[0].cap == pytest.approx(0.1) and found[0].length_part == 0
    assert texts(found, task, pace) == [f"step 1 (bead 1): 200 mm/s is not held at all: {why}"]


def test_a_workpiece_that_is_carried_is_told_once():
    """The speed over it is not the one that is held."""
    step = Step(0, "line", "", target=Target(frame="disc", frame_from_tool=np.eye(4)), held_speed=ASKED)
    frames = {"disc": Frame("disc", "base", np.eye(4), joint="swing")}
    task = Task("", None, made_arm(), np.zeros(3), (step, replace(step, index=1)), CYCLE, frames=frames)
    found = held(np.full(20, ASKED), step=np.repeat([0, 1], 10), task=task)
    assert texts(found, task)[1:] == [
        "step 1: its tool speed counts in the base frame; over the workpiece that swing carries it is another while"
        " that moves"
    ]


def test_a_cap_within_the_tolerance_is_no_obstacle():
    (found,) = held(0.995 * ramps(), 2, cap=0.995 * ASKED)
    assert found.length_part > 0.7
