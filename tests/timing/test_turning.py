"""Caps on the angular speed of the tool in the timing, its bound and its multipliers."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from pathplan.timing.bound import bound_durations
from pathplan.timing.motion import Cap
from pathplan.timing.sensitivity import sensitivity
from pathplan.timing.solve import time_motions
from tests.timing.cases import CAST, motion_of, seven_phases, straight, wavy


def wrist(q, q1):
    """Three joints that turn about x, y and z: near enough to a wrist for a norm of three rates."""
    return q1[:, 3:6]


def turning(case, *caps):
    return motion_of(case, caps=caps, turning=wrist)


def test_a_capped_turn_takes_as_long_as_the_seven_phases():
    """Joints 4 and 5 turn together by 0.6 and 0.8 rad: the tool turns by 1 rad, at most at 0.5 rad/s."""
    case = straight([0.0, 0.0, 0.0, 0.6, 0.8, 0.0], 5.0, 20.0, 300.0)
    stretch = time_motions([turning(case, Cap(0.0, 1.0, turning_speed=0.5))])[0]
    assert stretch.duration == pytest.approx(seven_phases(1.0, 0.5, 25.0, 375.0), rel=2e-3)
    rate = stretch.derivatives(np.linspace(0, stretch.duration, 20001))[1]
    assert 0.4999 <= np.linalg.norm(rate[:, 3:], axis=1).max() <= 0.5000001


def test_a_cap_below_what_the_joints_reach_is_no_cap_above_it():
    case = CAST["wavy"]
    free = time_motions([motion_of(case)])[0].duration
    assert time_motions([turning(case, Cap(0.0, case.path.length, turning_speed=50.0))])[0].duration == free


@pytest.mark.parametrize("seed", [7, 8])
def test_caps_hold_on_curves_where_they_apply_and_in_the_bound(seed):
    case = wavy(seed, 8)
    half = case.path.length / 2
    motion = turning(case, Cap(0.0, half, turning_speed=0.4))
    stretch = time_motions([motion])[0]
    t = np.linspace(0, stretch.duration, 20001)
    rate = np.linalg.norm(stretch.derivatives(t)[1][:, 3:], axis=1)
    inside = stretch.parameter(t) <= half
    assert rate[inside].max() <= 0.4000001 and rate[~inside].max() > 0.8
    free, capped = bound_durations([motion_of(case), motion])
    # half the path at no more than 0.4 rad/s: what it turns there by, a lower bound without any optimisation
    s = np.linspace(0, half, 4001)
    turned = np.trapezoid(np.linalg.norm(case.path.derivatives(s, 1)[1][:, 3:], axis=1), s)
    assert max(free, turned / 0.4) <= capped <= stretch.duration
    assert capped >= 0.9 * stretch.duration


def test_multipliers_foretell_what_a_turning_cap_is_worth():
    """Against planning with the cap 2 % higher."""
    case = CAST["wavy"]
    cap = Cap(0.0, case.path.length, turning_speed=0.6)
    motion = turning(case, cap)
    timing = time_motions([motion])[0]
    worth = sensitivity(motion, timing)
    saved = timing.duration - time_motions([turning(case, replace(cap, turning_speed=0.612))])[0].duration
    assert worth.tool_turning_speed.sum() * 0.02 == pytest.approx(saved, abs=2.5e-3 * timing.duration)
    assert saved > 0.005 * timing.duration and not worth.tool_speed.any()


def test_a_cap_without_a_way_to_tell_how_the_tool_turns_is_an_error():
    case = CAST["one joint"]
    with pytest.raises(ValueError, match="no way to compute how it turns"):
        time_motions([motion_of(case, caps=(Cap(0.0, 0.7, turning_speed=1.0),))])
