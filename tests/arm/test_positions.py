"""Three joints that carry a point, every mix of kinds; arms whose axes meet or are parallel elsewhere."""

from itertools import product

import numpy as np
import pytest

from pathplan.arm.geometry import Geometry
from pathplan.arm.positions import position_problem
from pathplan.arm.refine import apart, canonical, reached
from pathplan.arm.solver import solver_of

UP = np.array([0, 0, 1.0])
AXES = np.concatenate([np.eye(3), -np.eye(3)])


def unit(vectors):
    return vectors / np.linalg.norm(vectors, axis=-1, keepdims=True)


def random_chain(kinds: str, r: np.random.Generator) -> Geometry:
    """Joints along the main axes or oblique, sometimes meeting, then three turns that meet in a point."""
    axes = np.where(r.random((3, 1)) < 0.75, AXES[r.integers(6, size=3)], unit(r.normal(size=(3, 3))))
    points = r.uniform(-0.5, 0.5, (3, 3))
    if r.random() < 0.4:
        points[1] = points[r.integers(0, 3, 1)[0]]
    centre = r.uniform(-0.5, 0.5, 3)
    zero = np.eye(4)
    zero[:3, 3] = centre + r.uniform(-0.1, 0.1, 3)
    words = {"R": "revolute", "P": "prismatic"}
    every = tuple(words[kind] for kind in kinds) + ("revolute",) * 3
    return Geometry(
        every, np.vstack([points, [centre] * 3]), np.vstack([axes, unit(r.normal(size=(3, 3)))]), zero, UP, 0.5
    )


def round_trip(g: Geometry, r: np.random.Generator, count: int = 40):
    """Fraction of joint values not found again, over poses with a regular Jacobian; and the largest error."""
    solver = solver_of(g)
    q = r.uniform(-np.pi, np.pi, (count, g.m)) * [1.0 if kind == "revolute" else 0.2 for kind in g.kinds]
    answers = solver.solve(reached(g, q))
    good = (answers.position_error < 1e-9) & (answers.angle_error < 1e-9)
    gap = np.where(good, apart(g, canonical(g, answers.q), canonical(g, q)[:, None]), np.inf).min(axis=1)
    return solver, gap, good


@pytest.mark.parametrize("kinds", ["".join(kinds) for kinds in product("RP", repeat=3)])
def test_every_mix_of_turns_and_slides_before_a_wrist(kinds):
    r = np.random.default_rng(sum(map(ord, kinds)))
    seen = set()
    for _ in range(12):
        g = random_chain(kinds, r)
        if position_problem(g.of((0, 1, 2)), g.points[3]) is None or degenerate(g, r):
            continue
        solver, gap, good = round_trip(g, r)
        assert solver.structure == "spherical wrist"
        assert gap.max() < 1e-5
        assert (good.sum(axis=1) % 2 == 0).all()
        seen.add(solver.form.words)
    assert seen


def degenerate(g: Geometry, r: np.random.Generator) -> bool:
    from pathplan.arm.refine import _linear

    q = r.uniform(-1, 1, (8, 6))
    matrices = _linear(g, q, reached(g, q))[1]
    return bool(np.linalg.svd(matrices, compute_uv=False)[:, -1].max() < 1e-2)


@pytest.mark.parametrize("place", [0, 1, 2])
def test_three_axes_that_meet_elsewhere(place):
    """Axes 1, 2, 3 or 2, 3, 4 or 3, 4, 5 through one point; the others square, parallel, meeting or skew."""
    r = np.random.default_rng(place)
    served = 0
    for _ in range(12):
        axes, points = unit(r.normal(size=(6, 3))), r.uniform(-0.5, 0.5, (6, 3))
        if r.random() < 0.6:
            outer = [i for i in range(6) if not place <= i < place + 3]
            axes[outer[:2]] = AXES[r.integers(6, size=2)]
        points[place : place + 3] = r.uniform(-0.3, 0.3, 3)
        g = Geometry(("revolute",) * 6, points, axes, np.eye(4), UP, 0.5)
        if degenerate(g, r):
            continue
        solver, gap, good = round_trip(g, r)
        assert solver.structure == ("spherical shoulder" if place == 0 else "three meeting axes")
        assert gap.max() < 1e-5 and (good.sum(axis=1) % 2 == 0).all()
        served += 1
    assert served > 5


@pytest.mark.parametrize("place", [0, 1, 2, 3])
def test_three_parallel_axes_wherever_they_are(place):
    r = np.random.default_rng(20 + place)
    for _ in range(8):
        axes, points = unit(r.normal(size=(6, 3))), r.uniform(-0.5, 0.5, (6, 3))
        axes[place : place + 3] = axes[place] * r.choice([-1.0, 1.0], 3)[:, None]
        g = Geometry(("revolute",) * 6, points, axes, np.eye(4), UP, 0.5)
        solver, gap, good = round_trip(g, r)
        assert solver.structure == "three parallel axes"
        assert gap.max() < 1e-5 and (good.sum(axis=1) % 2 == 0).all()


def test_three_slides_and_three_turns_in_any_order():
    r = np.random.default_rng(7)
    for _ in range(10):
        kinds = r.permutation(["revolute"] * 3 + ["prismatic"] * 3)
        g = Geometry(tuple(kinds), r.uniform(-0.5, 0.5, (6, 3)), unit(r.normal(size=(6, 3))), np.eye(4), UP, 0.5)
        solver, gap, good = round_trip(g, r)
        assert solver.structure == "three slides"
        assert gap.max() < 1e-6 and (good.sum(axis=1) == 2).all()


def test_a_point_out_of_reach_gets_something_near():
    r = np.random.default_rng(1)
    g = random_chain("RRR", r)
    solver = solver_of(g)
    far = np.eye(4)
    far[:3, 3] = [30.0, 0, 0]
    answers = solver.solve(far[None])
    assert np.isfinite(answers.q).all()
    assert (answers.position_error[np.isfinite(answers.position_error)] > 20).all()
