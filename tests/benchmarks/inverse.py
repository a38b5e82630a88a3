"""What the inverse of each structure costs in a batch, a pose and branch: python -m tests.benchmarks.inverse [poses]

As microseconds of processor time, and as a ratio to the forward kinematics of one pose of the same arm, measured in
the same run. Never a test: times depend on the machine. Run on a quiet one.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import sys

import numpy as np

from tests.arm.completeness import _range, serial
from tests.arm.structures import STRUCTURES
from tests.benchmarks.figures import best_of


def measured(label: str, poses: int) -> tuple[float, float, int, str]:
    """Seconds a pose and branch, the same over forward kinematics of a pose, branches, method."""
    make, held = STRUCTURES[label]
    arm, value = make().equipped(), np.full(len(held), 0.4)
    left = serial(arm, held, value)
    low, high = (np.array(side) for side in zip(*(_range(joint) for joint in left.joints), strict=True))
    q = np.random.default_rng(1).uniform(low, high, (poses, left.n))
    targets = left.forward(q)

    def inverse(some: np.ndarray) -> np.ndarray:
        return arm.inverse_free(some, list(held), value[None]).q[:, 0] if held else arm.inverse_batch(some).q

    branches = inverse(targets[:1]).shape[1]
    method = arm.free_solver(list(held)).typical.method if held else arm.solver.method
    each = best_of(5, lambda: inverse(targets)) / poses / branches
    return each, each / (best_of(5, lambda: left.forward(q)) / poses), branches, method


def main(poses: int = 4096) -> None:
    print(f"{poses} poses; a pose and branch:                us  of forward  branches  method")
    for label in STRUCTURES:
        each, ratio, branches, method = measured(label, poses)
        print(f"{label:42s} {1e6 * each:7.2f} {ratio:11.2f}  {branches:8d}  {method}", flush=True)


if __name__ == "__main__":
    main(*map(int, sys.argv[1:2]))
