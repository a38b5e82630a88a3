"""All branches of any six turns, by elimination: random arms with and without special axes."""

import numpy as np
import pytest

from pathplan.arm.elimination import BRANCHES, Version, distinct, eliminate, versions
from pathplan.arm.geometry import Geometry
from pathplan.arm.refine import _linear, apart, canonical, reached

UP = np.array([0, 0, 1.0])


def six_turns(seed: int, oblique: bool) -> Geometry:
    """A chain whose neighbouring axes are parallel, square, meeting or nothing of it, as drawn from the seed."""
    r = np.random.default_rng(seed)
    while True:
        pose, points, axes = np.eye(4), [], []
        for _ in range(6):
            alpha = r.uniform(-2, 2) if oblique else r.choice([0, np.pi / 2, -np.pi / 2, np.pi / 2, 0.7])
            a = r.uniform(0.1, 0.6) if oblique else r.choice([0, 0, r.uniform(0.1, 0.6)])
            d = r.uniform(0.1, 0.6) if oblique else r.choice([0, 0, r.uniform(0.1, 0.6)])
            c, s = np.cos(alpha), np.sin(alpha)
            pose = pose @ np.array([[1, 0, 0, a], [0, c, -s, -s * d], [0, s, c, c * d], [0, 0, 0, 1.0]])
            points.append(pose[:3, 3].copy())
            axes.append(pose[:3, 2].copy())
        g = Geometry(("revolute",) * 6, np.array(points), np.array(axes), pose, UP, 0.6)
        q = r.uniform(-3, 3, (20, 6))
        if np.linalg.svd(_linear(g, q, reached(g, q))[1], compute_uv=False)[:, -1].max() > 1e-2:
            return g


@pytest.mark.parametrize("seed", range(6))
@pytest.mark.parametrize("oblique", [True, False])
def test_one_version_or_another_finds_every_branch(seed, oblique):
    """Every joint vector is found from its pose, and away from singularities branches come in pairs. Some arms with
    special axes make all versions singular; they are left to their closed form, and `versions` says so.
    """
    g = six_turns(seed, oblique)
    order, share = versions(g)
    if share < 1.0:
        assert not oblique
        return
    q = np.random.default_rng(100 + seed).uniform(-np.pi, np.pi, (150, 6))
    poses = reached(g, q)
    answers, filled = distinct(g, *eliminate(g, order[0], poses), BRANCHES)
    gap = np.where(filled, apart(g, answers, q[:, None]), np.inf).min(axis=1)
    assert (gap > 1e-5).sum() == 0
    assert (filled.sum(axis=1) % 2 == 0).all()
    rows, places = np.nonzero(filled)
    assert np.abs(reached(g, answers[rows, places]) - poses[rows]).max() < 1e-9


def test_versions_agree():
    """The loop opened at another axis, or read backwards, gives the same answers."""
    g = six_turns(2, oblique=True)
    poses = reached(g, np.random.default_rng(1).uniform(-np.pi, np.pi, (30, 6)))
    first, filled = distinct(g, *eliminate(g, Version(False, 0), poses), BRANCHES)
    for version in (Version(True, 0), Version(False, 3), Version(True, 5)):
        other, good = distinct(g, *eliminate(g, version, poses), BRANCHES)
        np.testing.assert_array_equal(good.sum(axis=1), filled.sum(axis=1))
        gap = np.where(good[:, None], apart(g, first[:, :, None], other[:, None]), np.inf).min(axis=2)
        assert gap[filled].max() < 1e-7


def test_half_turns_are_angles_like_others():
    """Joints at exactly half a turn, where a tangent of the half angle would be infinite."""
    g = six_turns(3, oblique=True)
    q = np.random.default_rng(2).uniform(-np.pi, np.pi, (40, 6))
    for joint in range(6):
        at = q.copy()
        at[:, joint] = np.pi
        answers, good = eliminate(g, Version(False, 0), reached(g, at))
        gap = np.where(good, apart(g, answers, canonical(g, at)[:, None]), np.inf).min(axis=1)
        assert (gap < 1e-5).all()


def test_distinct_keeps_the_first_of_equal_answers():
    g = six_turns(0, oblique=True)
    q = np.zeros((1, 4, 6))
    q[0, 1, 0], q[0, 2, 0], q[0, 3, 0] = 1e-9, 1.0, 2.0
    answers, filled = distinct(g, q, np.array([[True, True, True, False]]), 3)
    np.testing.assert_array_equal(filled, [[True, True, False]])
    np.testing.assert_array_equal(answers[0, :2, 0], [0.0, 1.0])
