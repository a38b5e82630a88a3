"""Arms of different structure: recognised, every branch found, exact. `completeness.py` does more poses."""

import numpy as np
import pytest

from tests.arm.completeness import examine
from tests.arm.structures import STRUCTURES, loaded, sixteen

EXPECTED = {
    "gantry": ("gantry", True, 1),
    "SCARA": ("scara", True, 2),
    "wrist, axes 2 and 3 parallel": ("spherical wrist", True, 8),
    "wrist, axes 1 and 2 meeting": ("spherical wrist", True, 8),
    "wrist, first axes skew": ("spherical wrist", False, 8),
    "wrist, third joint slides": ("spherical wrist", True, 8),
    "axes 2, 3, 4 parallel": ("three parallel axes", True, 8),
    "axes 2, 3, 4 parallel, hand skew": ("three parallel axes", False, 8),
    "axes 1, 2, 3 meeting": ("spherical shoulder", False, 8),
    "three slides, three turns": ("three slides", True, 2),
    "4-5 and 5-6 meeting apart": ("general", False, 16),
    "general": ("general", False, 16),
    "general, 16 branches": ("general", False, 16),
    "wrist axes nearly meeting": ("spherical wrist", True, 8),
    "seven axes, one held": ("spherical wrist", True, 8),
    "turntable held": ("three parallel axes", True, 8),
}


@pytest.mark.parametrize("label", STRUCTURES)
def test_structure_steadiness_and_places(label):
    """8 branches for a spherical wrist and for three parallel axes, at most 16 in general (Raghavan & Roth 1993)."""
    make, held = STRUCTURES[label]
    arm = make()
    solver = arm.free_solver(list(held)).typical if held else arm.solver
    assert (solver.structure, solver.steady, len(solver.labels)) == EXPECTED[label]
    assert all(solver.labels) is (solver.steady and label != "gantry")


@pytest.mark.parametrize("label", STRUCTURES)
def test_every_branch_that_a_search_finds_is_ours(label):
    """Referee: roboticstoolbox's numeric inverse, 60 starts a pose."""
    outcome = examine(label, 12, 60, seed=4, timed=False)
    assert outcome.alone == 0
    assert outcome.missed == []
    assert outcome.referee >= 0.9 * outcome.branches  # and ours are no more than are there
    assert outcome.position_error < 1e-9 and outcome.angle_error < 1e-9


def test_sixteen_real_branches():
    """A pose with 16 real branches: Manocha & Canny 1994, "Efficient Inverse Kinematics for General 6R Manipulators",
    their example after Wampler & Morgan 1991 (arm and pose from memory; the number is what the paper says).
    """
    arm = sixteen()
    pose = np.eye(4)
    pose[:3] = [
        [-0.760117, -0.641689, 0.102262, -1.140175],
        [0.133333, 0.0, 0.991071, 0.0],
        [-0.635959, 0.766965, 0.085558, 0.0],
    ]
    left, _, right = np.linalg.svd(pose[:3, :3])
    pose[:3, :3] = left @ right
    branches = arm.inverse_batch(pose[None])
    assert branches.valid.sum() == 16
    assert np.abs(arm.forward(branches.q[0]) - pose).max() < 1e-11


@pytest.mark.parametrize("label", ["axes 2, 3, 4 parallel", "wrist, third joint slides", "wrist, axes 1 and 2 meeting"])
def test_the_branch_index_follows_a_path_in_whatever_batch(label):
    arm = STRUCTURES[label][0]()
    q = np.array([0.3, 0.9, -0.2, 0.5, 0.7, 0.4]) + np.linspace(0, 0.4, 200)[:, None]
    poses = arm.forward(q)
    branches = arm.inverse_batch(poses)
    steps = np.abs((np.diff(branches.q, axis=0) + np.pi) % (2 * np.pi) - np.pi)
    followed = branches.valid.all(axis=0)
    assert followed.sum() >= 2
    assert steps[:, followed].max() < 0.1
    shuffled = np.random.default_rng(0).permutation(200)
    again = arm.inverse_batch(poses[shuffled])
    np.testing.assert_allclose(again.q, branches.q[shuffled], atol=1e-9)


@pytest.mark.parametrize("label", ["wrist, first axes skew", "4-5 and 5-6 meeting apart", "general, 16 branches"])
def test_within_a_batch_a_branch_keeps_its_place(label):
    arm = STRUCTURES[label][0]()
    q = np.array([0.3, 0.9, -0.2, 0.5, 0.7, 0.4]) + np.linspace(0, 0.2, 300)[:, None]
    branches = arm.inverse_batch(arm.forward(q))
    own = np.abs((branches.q - q[:, None] + np.pi) % (2 * np.pi) - np.pi).max(axis=2)
    places = np.where(branches.valid, own, np.inf).argmin(axis=1)
    assert (places == places[0]).all()
    both = branches.valid[1:] & branches.valid[:-1]
    steps = np.abs((np.diff(branches.q, axis=0) + np.pi) % (2 * np.pi) - np.pi).max(axis=2)
    assert (steps[both] < 0.2).mean() > 0.97


def test_labels_of_three_parallel_axes_mean_what_they_say():
    arm = loaded("stacker6")
    low, high = np.clip(np.array([joint.position for joint in arm.joints]).T, -3, 3)
    q = np.random.default_rng(3).uniform(low, high, (40, 6))
    branches = arm.inverse_batch(arm.forward(q))
    for k in range(40):
        for answer, valid, label in zip(branches.q[k], branches.valid[k], branches.labels, strict=True):
            if not valid:
                continue
            frames = [arm.base_from_joint(name, answer) for name in arm.joint_names]
            shoulder, elbow, bend, cross = (frames[i][:3, 3] for i in (1, 2, 3, 4))
            h = frames[1][:3, 2]
            facing = frames[4][:3, 3] - frames[0][:3, 3]
            offset = h * (h @ facing)
            assert (label["shoulder"] == "left") == (np.cross([0, 0, 1.0], facing) @ offset > 0)
            assert (label["wrist"] == "positive") == (np.sin(answer[4]) > 0)
            reach = bend - shoulder
            level = facing - h * (h @ facing)
            level[2] = 0.0
            outward = np.cross(level, [0, 0, 1.0])
            reach, up = reach - h * (h @ reach), elbow - shoulder
            assert (label["elbow"] == "up") == (np.cross(reach, up) @ outward > 0)
            assert cross is not None


def test_a_rounded_file_is_solved_by_its_nearest_structure(tmp_path):
    """Axes that nearly meet and are nearly parallel, as rounded angles make them: answers exact all the same."""
    text = (loaded("stacker6").file.parent / "stacker6.urdf").read_text()
    text = text.replace('xyz="0.56 0 0.065"', 'xyz="0.56 0 0.065" rpy="0 0.0002 0"').replace(
        "1.5707963267948966", "1.5708"
    )
    (tmp_path / "stacker6.urdf").write_text(text)
    (tmp_path / "arm.toml").write_text((loaded("stacker6").file).read_text())
    from pathplan.arm import load_arm

    arm = load_arm(tmp_path / "arm.toml")
    assert (arm.structure, arm.solver.exact) == ("three parallel axes", False)
    q = np.random.default_rng(5).uniform(-2.5, 2.5, (200, 6))
    branches = arm.inverse_batch(arm.forward(q))
    gap = np.abs((branches.q - q[:, None] + np.pi) % (2 * np.pi) - np.pi).max(axis=2)
    assert np.where(branches.valid, gap, np.inf).min(axis=1).max() < 1e-6
    assert branches.position_error[branches.valid].max() < 1e-9
