"""Durations against independent optima by direct transcription with casadi and IPOPT.

Table and the script that made it: tests/benchmarks/reference/make_loaded_optimum.py.
"""

from __future__ import annotations

import json
from dataclasses import replace

import numpy as np
import pytest

import pathplan
from pathplan.planning import torque_limits
from pathplan.timing.batch import time_batch
from pathplan.timing.motion import Motion, two_sided
from tests.benchmarks.reference.make_loaded_optimum import CASES, TABLE, loaded

OPTIMA = json.loads(TABLE.read_text())


def test_the_table_is_that_of_the_script():
    assert {name: (e["seed"], e["points"], e["torque_share"]) for name, e in OPTIMA.items()} == CASES


@pytest.mark.parametrize("name", CASES)
def test_within_half_a_per_cent_of_the_optimum(name):
    case, entry = loaded(*CASES[name]), OPTIMA[name]
    arm = replace(case.arm, limits=replace(case.arm.limits, torque=np.stack([-case.torque, case.torque], axis=1)))
    kinds = ("velocity", "acceleration", "jerk")
    rows = [two_sided([getattr(joint, kind) for joint in arm.joints], 6, kind) for kind in kinds]
    motion = Motion(pathplan.JointPath(case.spline), np.eye(6), *rows, torque=torque_limits(arm))
    timed = time_batch([motion])[0]
    *_, coarse, fine = entry["durations"]
    optimum = fine - (coarse - fine) / 3  # Richardson: the error falls with the square of the interval
    assert timed.bound <= optimum
    assert 0.997 <= timed.timing.duration / optimum <= 1.005
    if not np.isinf(case.torque).all():
        _check_torque_by_pinocchio(arm, timed.timing, case.torque)


def _check_torque_by_pinocchio(arm, timing, limit):
    import pinocchio as pin

    from tests.arm.conftest import pinocchio_model

    model, data, _ = pinocchio_model(arm)
    drives = zip(arm.joints, arm.links, strict=True)
    rotor = np.array([joint.gear_ratio**2 * link.rotor_inertia for joint, link in drives])
    viscous = np.array([link.viscous for link in arm.links])
    q, qd, qdd, _ = timing.derivatives(np.linspace(0.0, timing.duration, 4001))
    rigid = np.array([pin.rnea(model, data, *row) for row in zip(q, qd, qdd, strict=True)])
    torque = rigid + rotor * qdd + viscous * qd
    assert 0.999 <= (np.abs(torque) / limit).max() <= 1 + 1e-6
