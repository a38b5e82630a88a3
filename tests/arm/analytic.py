"""Our closed forms against roboticstoolbox's analytic inverse, which derives a solver of its own for an arm.

    python -m tests.arm.analytic [poses]

It takes a minute an arm, sympy and python-flint (pip install "roboticstoolbox-python[ik]"), and arms in standard DH
rows: a spherical wrist, and three parallel axes with an offset wrist. Every branch that it finds must be ours. What it
found is kept in `reference/analytic.json`, for `test_analytic.py`, which needs none of that.
"""

from __future__ import annotations

import json
import sys
import time
from pathlib import Path

import numpy as np

from pathplan.arm.chain import DHRow
from tests.arm.structures import from_rows

Q = np.pi / 2
ARMS = {
    "offset wrist": [
        DHRow(0, Q, 0.18),
        DHRow(-0.61),
        DHRow(-0.57),
        DHRow(0, Q, 0.17),
        DHRow(0, -Q, 0.12),
        DHRow(0, 0, 0.11),
    ],
    "spherical wrist": [
        DHRow(0.08, -Q, 0.45),
        DHRow(0.5),
        DHRow(0.06, -Q),
        DHRow(0, Q, 0.52),
        DHRow(0, -Q),
        DHRow(0, 0, 0.1),
    ],
}


PATIENCE = 3600.0  # s for the derivation: it gives up after two minutes if it is not told, which a busy machine exceeds
TABLE = Path(__file__).parent / "reference" / "analytic.json"


def main(poses: int = 20) -> None:
    from roboticstoolbox import DHRobot, RevoluteDH
    from roboticstoolbox.robot.symbolic_ik_rr import make_solver

    table: dict[str, list[dict[str, list]]] = {}
    for name, rows in ARMS.items():
        arm = from_rows(name, rows)
        began = time.perf_counter()
        robot = DHRobot([RevoluteDH(a=r.a, alpha=r.alpha, d=r.d, offset=r.theta) for r in rows], name=name)
        solver = make_solver(robot, max_time=PATIENCE)
        derived = time.perf_counter() - began
        theirs, missed = 0, 0
        for q in np.random.default_rng(0).uniform(-3, 3, (poses, 6)):
            pose = arm.forward(q)
            ours = arm.inverse_batch(pose[None])
            answers = np.atleast_2d(np.array(solver.solve(pose, joint_limits=False).q))
            table.setdefault(name, []).append({"pose": pose[:3].tolist(), "branches": answers.tolist()})
            for answer in answers:
                gap = np.abs((ours.q[0] - answer + np.pi) % (2 * np.pi) - np.pi).max(axis=1)
                theirs += 1
                missed += bool(np.where(ours.valid[0], gap, np.inf).min() > 1e-5)
        print(
            f"{name}: {poses} poses, {theirs} branches of the toolbox's, {missed} not among ours; "
            f"derived in {derived:.0f} s"
        )
    TABLE.parent.mkdir(exist_ok=True)
    TABLE.write_text(json.dumps(table, indent=None, separators=(",", ":")) + "\n")


if __name__ == "__main__":
    main(*map(int, sys.argv[1:2]))
