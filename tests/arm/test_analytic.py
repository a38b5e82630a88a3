"""All branches of roboticstoolbox's analytic inverse (version 1.5), as tests.arm.analytic kept them: every one must be
ours, and ours are no more.
"""

from __future__ import annotations

import json

import numpy as np
import pytest

from tests.arm.analytic import ARMS, TABLE
from tests.arm.structures import from_rows


@pytest.mark.parametrize("name", ARMS)
def test_every_branch_of_the_analytic_inverse_is_ours(name: str) -> None:
    arm = from_rows(name, ARMS[name])
    entries = json.loads(TABLE.read_text())[name]
    assert len(entries) >= 20
    poses = np.tile(np.eye(4), (len(entries), 1, 1))
    poses[:, :3] = [entry["pose"] for entry in entries]
    ours = arm.inverse_batch(poses)
    for k, entry in enumerate(entries):
        theirs = np.array(entry["branches"])
        gap = np.abs((ours.q[k][None] - theirs[:, None] + np.pi) % (2 * np.pi) - np.pi).max(axis=2)
        gap[:, ~ours.valid[k]] = np.inf
        assert gap.min(axis=1).max() < 1e-5
        assert len(set(gap.argmin(axis=1))) == ours.valid[k].sum() <= 8
