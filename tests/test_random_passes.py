"""Random lines near, through, into and out of singularities, judged by differences of the table and by pinocchio.

Run as a script to judge many: python -m tests.test_random_passes 1000
"""

from __future__ import annotations

import sys
from collections import Counter
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

import pathplan
from tests.arm.conftest import pinocchio_model
from tests.path.test_crossing import line_about, shoulder_singular
from tests.random_tasks import ROOT, _numbers, _pose, broken_limits

ALLOWED = np.deg2rad(2.0)


def random_pass(seed: int) -> tuple[str, np.ndarray, np.ndarray, str]:
    """Text of a task of one line near a wrist or shoulder singularity, or one that ends there and one back; the ends of
    the line, and what it tolerates.
    """
    rng = np.random.default_rng([7, seed])
    arm = pathplan.load_arm(ROOT / "robots" / "glazer6.toml")
    if rng.random() < 0.7:
        q = np.concatenate([rng.uniform(-1, 1, 1), rng.uniform(-0.3, 0.6, 2), rng.uniform(-1.5, 1.5, 3) * [1, 0, 1]])
    else:
        q = shoulder_singular(arm, float(rng.uniform(-1, 1)))
    middle = arm.forward(q)
    middle[:3, 3] += rng.normal(size=3) * rng.choice([0.0, 10.0 ** rng.uniform(-5, -2)])
    half = rng.normal(size=3)
    half *= rng.uniform(0.04, 0.12) / np.linalg.norm(half)
    while not arm.inverse_batch(np.array(line_about(middle, half))).valid.any(axis=1).all():
        half /= 2.0  # near the reach of the arm
    a, b = line_about(middle, half)
    back = rng.random() < 0.35
    if back:
        b = middle
    key = str(rng.choice(["", "orientation_tolerance", "tilt"]))
    starts = arm.inverse(a)
    start = starts[np.argmin(np.abs(starts - q).max(axis=1))]
    text = f'title = "pass"\narm = "{(ROOT / "robots" / "glazer6.toml").as_posix()}"\ncycle = "2 ms"\n'
    text += f'start = {_numbers(np.rad2deg(start))}\n[[step]]\nmotion = "line"\nto = {_pose(b)}\n'
    text += f'{key} = "2 deg"\n' if key else ""
    return text + (f'[[step]]\nmotion = "line"\nto = {_pose(a)}\n' if back else ""), a, b, key


def judge(seed: int, folder: Path) -> str:
    """What became of it; raises AssertionError where a table breaks a limit or leaves its line."""
    import pinocchio as pin

    text, a, b, key = random_pass(seed)
    file = folder / "pass.toml"
    file.write_text(text)
    try:
        plan = pathplan.plan(pathplan.load_task(file))
    except pathplan.UnreachableError as refusal:
        assert {"step", "share", "pose", "best"} <= set(refusal.data), text
        return f"refused{' singular' if 'singular' in refusal.data else ''}"
    assert not broken_limits(plan.task.arm, plan.table.position, plan.task.cycle), text
    assert plan.audit.passed, text
    model, data, frame = pinocchio_model(plan.task.arm)
    along = (b - a)[:3, 3] / np.linalg.norm((b - a)[:3, 3])
    turned = []
    for q in plan.table.position:
        pin.framesForwardKinematics(model, data, q)
        off = data.oMf[frame].translation - a[:3, 3]
        assert np.linalg.norm(off - along * (along @ off)) < 1e-6, text
        turned.append(np.linalg.norm(Rotation.from_matrix(a[:3, :3].T @ data.oMf[frame].rotation).as_rotvec()))
    assert max(turned) < (ALLOWED if key else 0.0) + 1e-6, text
    return "bent" if max(turned) > 1e-5 else "planned"


@pytest.mark.parametrize("seed", range(12))
def test_random_lines_near_singularities(seed: int, tmp_path: Path) -> None:
    judge(seed, tmp_path)


def main(count: int) -> None:
    """Judge `count` lines and print what became of them."""
    from tempfile import TemporaryDirectory

    seen: Counter[str] = Counter()
    with TemporaryDirectory() as folder:
        for seed in range(count):
            seen[judge(seed, Path(folder))] += 1
    print(dict(seen))


if __name__ == "__main__":
    main(int(sys.argv[1]))
