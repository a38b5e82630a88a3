"""The lower bound: never above a feasible duration, and tight where jerk hardly binds."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import pathplan
from pathplan.timing.bound import bound_durations
from tests.timing.cases import CAST, Case, motion_of, straight, wavy


def trapezoid(distance: float, velocity: float, acceleration: float) -> float:
    """Least time of one axis without a jerk limit: closed form (Siciliano et al. 2009, ch. 4; from memory)."""
    if distance * acceleration <= velocity**2:
        return 2 * np.sqrt(distance / acceleration)
    return distance / velocity + velocity / acceleration


@settings(max_examples=30, deadline=None)
@given(*(st.floats(low, high) for low, high in ((-4, 1.5), (-1, 1), (-0.5, 2))))
def test_straight_lines_are_bounded_by_the_trapezoid(distance, velocity, acceleration):
    numbers = [10.0**x for x in (distance, velocity, acceleration)]
    bound = bound_durations([motion_of(straight([numbers[0]], *numbers[1:], 1.0))])[0]
    assert 0.995 <= bound / trapezoid(*numbers) <= 1 + 1e-9


@pytest.mark.parametrize("name", CAST)
def test_no_timing_beats_the_bound(name):
    case = CAST[name]
    bound = pathplan.lower_bound(case.path, velocity=case.velocity, acceleration=case.acceleration)
    timing = pathplan.schedule(case.path, velocity=case.velocity, acceleration=case.acceleration, jerk=case.jerk)
    assert 0 < bound <= timing.duration


@pytest.mark.parametrize("seed", range(4))
def test_tight_where_jerk_hardly_binds(seed):
    case = wavy(seed, 5 + seed)
    quick = Case(case.path, case.velocity, case.acceleration, case.jerk * 1e3)
    bound = pathplan.lower_bound(case.path, velocity=case.velocity, acceleration=case.acceleration)
    timing = pathplan.schedule(quick.path, velocity=quick.velocity, acceleration=quick.acceleration, jerk=quick.jerk)
    assert bound <= timing.duration <= 1.015 * bound


def test_stretches_together_are_bounded_as_alone():
    cases = [CAST["wavy"], CAST["one joint"], CAST["corner"]]
    together = bound_durations([motion_of(case) for case in cases])
    alone = [bound_durations([motion_of(case)])[0] for case in cases]
    np.testing.assert_allclose(together, alone, rtol=1e-3)
