"""What drives are asked: closed forms of a hoist and a pendulum, pinocchio's torque, limits, jumps."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

import pathplan
from pathplan.arm import Arm, Joint, Link
from pathplan.auditing import audit
from pathplan.report import audit_screen
from pathplan.table import JointTable, tick_times
from tests.arm.conftest import pinocchio_model
from tests.auditing.cast import made_arm, min_jerk, move_table

ROOT = Path(__file__).parents[2]
G = 9.80665
CYCLE = 0.001
# of the minimum-jerk polynomial over 0..1 (Flash & Hogan 1985), by integrating it: of speed^2, of acceleration^2
SPEED_SQUARE, ACCELERATION_SQUARE, PEAK_SPEED = 10 / 7, 120 / 7, 15 / 8


def table_of(arm: Arm, start: float, distance: float, duration: float, holding: float = 0.0) -> JointTable:
    """One joint moves by minimum jerk and then holds; torque by the arm's own dynamics."""
    time = tick_times(np.arange(round((duration + holding) / CYCLE) + 1), CYCLE)
    shape = min_jerk(time / duration)
    q, v, a, j = (shape[k][:, None] * distance / duration**k + (start if k == 0 else 0.0) for k in range(4))
    v[time >= duration], a[time >= duration], j[time >= duration] = 0.0, 0.0, 0.0
    return JointTable(time, q, v, a, j, torque=arm.torque(q, v, a), joint_kinds=(arm.joints[0].kind,), cycle=CYCLE)


def hoist(**joint) -> Arm:
    """One vertical prismatic axis that carries 30 kg."""
    link = Link(30.0, np.zeros(3), np.zeros((3, 3)), joint.pop("viscous", 0.0), joint.pop("coulomb", (0.0, 0.0)))
    lift = Joint("lift", "prismatic", (-1.0, 2.0), 4.0, 40.0, 500.0, torque=900.0, **joint)
    return Arm.from_axes("hoist", [lift], [[0, 0, 0]], [[0, 0, 1]], np.eye(4), links=(link,))


def pendulum(**joint) -> Arm:
    """A point mass of 4 kg half a metre below a horizontal axis."""
    link = Link(4.0, np.array([0.0, 0.0, -0.5]), np.zeros((3, 3)))
    swing = Joint("swing", "revolute", (-3.0, 3.0), 4.0, 40.0, 900.0, torque=90.0, **joint)
    return Arm.from_axes("pendulum", [swing], [[0, 0, 0]], [[0, -1, 0]], np.eye(4), links=(link,))


def test_a_hoist_against_its_closed_form():
    """Up by h in T, then holding for as long: force m (g + a), power that times speed, energy m g h."""
    mass, height, duration = 30.0, 0.8, 0.6
    arm = hoist(gear_ratio=400.0, continuous_torque=400.0)
    (drive,) = audit(table_of(arm, 0.0, height, duration, holding=duration), arm).drives
    square = mass**2 * (2 * G**2 + ACCELERATION_SQUARE * height**2 / duration**4) / 2
    assert drive.rms == pytest.approx(np.sqrt(square), rel=1e-5)
    assert drive.rms_share == pytest.approx(np.sqrt(square) / 400.0, rel=1e-5)
    assert drive.motor_speed == pytest.approx(400.0 * PEAK_SPEED * height / duration, rel=1e-6)
    assert drive.motor_speed_limit == 1600.0
    tau = np.linspace(0, 1, 200_001)
    _, v, a, _ = min_jerk(tau)
    power = mass * (G + a * height / duration**2) * v * height / duration
    assert drive.power == pytest.approx(power.max(), rel=1e-5)
    assert drive.power_time == pytest.approx(tau[power.argmax()] * duration, abs=CYCLE)
    # it brakes harder than gravity does, so some of the work comes back: the net is what the height takes
    assert drive.returning == pytest.approx(-power.min(), rel=1e-4) and drive.returned > 0
    assert drive.net == pytest.approx(mass * G * height, rel=1e-6)
    work = np.trapezoid(np.maximum(power, 0.0), tau) * duration
    assert drive.work == pytest.approx(work, rel=1e-5)
    assert drive.torque.peak == pytest.approx(mass * (G + 10 / np.sqrt(3) * height / duration**2), rel=1e-4)
    assert (drive.torque.limit, drive.torque.share) == (900.0, drive.torque.peak / 900.0)


def test_a_hoist_gives_back_on_the_way_down():
    arm = hoist(viscous=50.0, coulomb=(20.0, 30.0))
    table = table_of(arm, 1.0, -0.5, 1.0)
    (drive,) = audit(table, arm).drives
    friction = 50.0 * SPEED_SQUARE * 0.5**2 + 30.0 * 0.5
    assert drive.net == pytest.approx(friction - 30.0 * G * 0.5, rel=1e-6)
    assert drive.work == 0.0 and drive.power == 0.0
    assert drive.continuous is None and drive.rms_share is None
    # the arm file says nothing of the gear, so nothing is said of the motor
    assert drive.motor_speed is None and drive.motor_speed_limit is None


def test_a_pendulum_against_its_closed_form():
    """From hanging to level: the net is the height of the mass, the torque that of m l (l a + g sin q)."""
    mass, length, duration = 4.0, 0.5, 1.0
    arm = pendulum(gear_ratio=-50.0)
    (drive,) = audit(table_of(arm, 0.0, np.pi / 2, duration), arm).drives
    assert drive.net == pytest.approx(mass * G * length, rel=1e-6)
    tau = np.linspace(0, 1, 400_001)
    q, v, a, _ = min_jerk(tau) * np.pi / 2
    torque = mass * length * (length * a / duration**2 + G * np.sin(q))
    assert drive.rms == pytest.approx(np.sqrt(np.trapezoid(torque**2, tau)), rel=1e-6)
    power = torque * v / duration
    assert drive.power == pytest.approx(power.max(), rel=1e-5)
    assert drive.work == pytest.approx(np.trapezoid(np.maximum(power, 0), tau) * duration, rel=1e-6)
    assert drive.returned == pytest.approx(np.trapezoid(np.maximum(-power, 0), tau) * duration, rel=1e-5, abs=1e-9)
    assert drive.motor_speed == pytest.approx(50.0 * PEAK_SPEED * np.pi / 2, rel=1e-6)
    assert drive.torque.peak == pytest.approx(torque.max(), rel=1e-5)


@pytest.fixture(scope="module")
def planned():
    return pathplan.plan(pathplan.load_task(ROOT / "examples" / "glazer6-pick-and-place.toml"))


@pytest.fixture(scope="module")
def steady():
    """A plan that carries the same all the way."""
    return pathplan.plan(pathplan.load_task(ROOT / "examples" / "glazer6-bead.toml"))


def test_rms_torque_agrees_with_pinocchio(steady):
    """Torque of every row by pinocchio, friction added by hand; sqrt(sum T^2 t / sum t), shared/checks.md."""
    import pinocchio as pin

    table = steady.table
    (arm,) = {id(s.arm): s.arm for s in steady.path.stretches}.values()
    model, data, _ = pinocchio_model(arm)
    model.armature = np.array([j.gear_ratio**2 * k.rotor_inertia for j, k in zip(arm.joints, arm.links, strict=True)])
    rows = zip(table.position, table.velocity, table.acceleration, strict=True)
    viscous = np.array([link.viscous for link in arm.links])
    positive, negative = np.array([link.coulomb for link in arm.links]).T
    v = table.velocity
    torque = np.array([pin.rnea(model, data, *row) for row in rows])
    torque += viscous * v + positive * (v > 0) - negative * (v < 0)
    expected = np.sqrt((torque[1:] ** 2).mean(axis=0))  # each row stands for the cycle before it
    rms = [drive.rms for drive in steady.audit.drives]
    np.testing.assert_allclose(rms, expected, rtol=5e-3)
    # ours takes torque as straight lines between the rows: the mean of its square over one is (a^2 + a b + b^2) / 3
    a, b = torque[:-1], torque[1:]
    np.testing.assert_allclose(rms, np.sqrt(((a * a + a * b + b * b) / 3).mean(axis=0)), rtol=1e-9)
    power = torque * v
    np.testing.assert_allclose([drive.power for drive in steady.audit.drives], power.max(axis=0), rtol=1e-9)
    net = np.trapezoid(power, dx=table.cycle, axis=0)
    np.testing.assert_allclose([drive.net for drive in steady.audit.drives], net, rtol=1e-9)


def test_waits_count_in_the_cycle(planned):
    """Without its waits the same table has another root-mean-square torque."""
    table = planned.table
    waits = [step.index for step in planned.task.steps if step.motion == "wait"]
    moving = ~np.isin(table.step, waits)
    assert 0 < moving.sum() < len(table)
    elbow = planned.audit.drives[2]
    whole, without = (np.sqrt((torque**2).mean()) for torque in (table.torque[1:, 2], table.torque[moving, 2]))
    assert abs(whole - without) > 0.01 * whole
    assert abs(elbow.rms - whole) < 0.1 * abs(elbow.rms - without)


def test_more_than_the_continuous_torque_is_an_exceedance():
    arm = hoist(continuous_torque=290.0)
    table = table_of(arm, 0.0, 0.2, 1.0, holding=1.0)
    found = audit(table, arm)
    assert not found.passed
    (finding,) = [f for f in found.findings if f.level == "exceedance"]
    (drive,) = found.drives
    assert (finding.joint, finding.quantity, finding.limit) == ("lift", "rms torque", 290.0)
    assert finding.value == drive.rms > 290.0
    assert finding.text == (
        f"lift: root-mean-square torque {drive.rms:.1f} N over the whole cycle exceeds the continuous torque 290 N, "
        f"{drive.rms / 2.9:.1f} %"
    )
    assert found.to_dict()["findings"][0]["unit"] == "N"
    assert "BREAKS LIMITS (1 exceedance)" in audit_screen(found)
    enough = replace(arm, joints=(replace(arm.joints[0], continuous_torque=drive.rms),))
    assert audit(table, enough).passed


def test_peak_torque_that_falls_with_speed():
    """Fast in the middle, where the drive has less left than the peak torque: judged against what it has there."""
    arm = pendulum(torque_corner=1.0, torque_at_velocity=15.0)
    table = table_of(arm, 0.2, 1.6, 1.2)
    found = audit(table, arm)
    speed, torque = table.velocity[:, 0], table.torque[:, 0]
    limit = np.where(np.abs(speed) <= 1.0, 90.0, 90.0 - (np.abs(speed) - 1.0) / 3.0 * 75.0)
    share = np.abs(torque) / limit
    row = int(share.argmax())
    peak = found.joints[0].torque
    assert (peak.row, peak.share) == (row, pytest.approx(share[row], rel=1e-12))
    assert abs(peak.limit) == pytest.approx(limit[row], rel=1e-12) and abs(speed[row]) > 1.0
    assert found.passed and found.drives[0].torque == peak
    weak = replace(arm, joints=(replace(arm.joints[0], torque_at_velocity=1.0, torque_corner=0.1, velocity=2.6),))
    broken = audit(table, weak)
    assert not broken.passed
    (finding,) = [f for f in broken.findings if f.quantity == "torque" and f.level == "exceedance"]
    assert " (what the drive gives at that speed)" in finding.text and "exceeds the limit" in finding.text


def test_friction_jumps_where_a_joint_turns_round():
    """Out and back without a stop: one turn of the friction, from its one side to the other."""
    arm = hoist(coulomb=(20.0, 30.0))
    time = tick_times(np.arange(2001), CYCLE)
    q = 0.3 * np.sin(np.pi * time / 2)[:, None] ** 2
    v = 0.3 * np.pi / 2 * np.sin(np.pi * time)[:, None]
    a = 0.3 * np.pi**2 / 2 * np.cos(np.pi * time)[:, None]
    v[np.abs(v) < 1e-9] = 0.0
    table = JointTable(time, q, v, a, 0 * a, torque=arm.torque(q, v, a), joint_kinds=("prismatic",), cycle=CYCLE)
    for rows in (table, list(table.chunks(7))):
        found = audit(rows, arm)
        jumps = {jump.cause: jump for jump in found.drives[0].jumps}
        turn = jumps["turns round"]
        assert (turn.count, turn.largest, turn.step) == (1, 50.0, 0)
        assert turn.time == pytest.approx(1.0, abs=1.5 * CYCLE)
        assert (jumps["starts or stops"].count, jumps["starts or stops"].largest) == (2, 30.0)
        notes = [f for f in found.findings if f.level == "note" and f.quantity == "torque"]
        assert [note.text for note in notes] == [
            f"lift: torque jumps by 50 N at {turn.time:g} s in step 1: Coulomb friction where the joint turns round"
        ]
        assert (notes[0].joint, notes[0].value, notes[0].time) == ("lift", 50.0, turn.time)


def test_a_rest_is_no_turn():
    arm = hoist(coulomb=(20.0, 30.0))
    there, back = table_of(arm, 0.0, 0.3, 0.5, holding=0.1), table_of(arm, 0.3, -0.3, 0.5)
    columns = {
        name: np.vstack([getattr(there, name), getattr(back, name)[1:]])
        for name in ("position", "velocity", "acceleration", "jerk", "torque")
    }
    count = len(columns["position"])
    table = JointTable(tick_times(np.arange(count), CYCLE), **columns, joint_kinds=("prismatic",), cycle=CYCLE)
    (jump,) = audit(table, arm).drives[0].jumps
    assert (jump.cause, jump.count, jump.largest) == ("starts or stops", 4, 30.0)


def test_a_load_that_changes_while_the_arm_stands():
    arm = hoist()
    still = np.zeros((101, 1))
    force = np.where(np.arange(101) < 60, 30.0 * G, 42.0 * G)[:, None]
    table = JointTable(
        tick_times(np.arange(101), CYCLE), still, still, still, still, torque=force, joint_kinds=("prismatic",)
    )
    found = audit(replace(table, cycle=CYCLE), arm)
    (note,) = [f for f in found.findings if f.quantity == "torque"]
    assert note.text == "lift: torque jumps by 117.7 N at 0.06 s in step 1: the load changes"
    assert note.value == pytest.approx(12.0 * G) and found.passed


def test_loads_of_a_plan(planned):
    """A tile that one step takes up and a later one leaves: the torque of every row, and the jumps, tell of it."""
    bare = planned.task
    held = [replace(step, payload="tile" if 2 <= step.index <= 6 else None) for step in bare.steps]
    task = replace(bare, arm=replace(bare.arm, payload=None), steps=tuple(held))
    plan = pathplan.plan(task)
    waiting = plan.table.step == 2
    assert waiting.any()
    q = plan.table.position[waiting]
    loaded = bare.arm.equipped(tool="cup", payload="tile")
    np.testing.assert_allclose(plan.table.torque[waiting], loaded.torque(q, 0 * q, 0 * q), rtol=1e-9, atol=1e-9)
    part = next(part for part in plan.parts if part.wait is not None)
    stop = part.rest[None]
    change = (loaded.torque(stop, 0 * stop, 0 * stop) - task.arm.torque(stop, 0 * stop, 0 * stop))[0]
    jumps = {jump.cause: jump for jump in plan.audit.drives[1].jumps}
    assert jumps["load changes"].count == 2
    first = plan.evidence.loads[0]
    assert (first.step, first.time) == (2, part.first * task.cycle)
    np.testing.assert_allclose(first.torque, change, rtol=1e-9, atol=1e-9)
    assert jumps["load changes"].largest >= abs(change[1]) * (1 - 1e-9)


def test_in_pieces_the_same(planned):
    whole, pieces = planned.audit.drives, audit(planned.table.chunks(101), planned.arm, plan=planned).drives
    for one, other in zip(whole, pieces, strict=True):
        assert one.rms == pytest.approx(other.rms, rel=1e-12)
        assert (one.work, one.returned) == pytest.approx((other.work, other.returned), rel=1e-11, abs=1e-12)
        assert (one.torque, one.power, one.motor_speed) == (other.torque, other.power, other.motor_speed)
        assert set(one.jumps) == set(other.jumps)


def test_without_velocities_the_differences_serve(planned):
    table = replace(planned.table, velocity=None, acceleration=None, jerk=None)
    for one, other in zip(audit(table, planned.arm).drives, planned.audit.drives, strict=True):
        assert one.rms == other.rms
        assert one.net == pytest.approx(other.net, rel=0.05, abs=0.05)
        assert one.motor_speed == pytest.approx(other.motor_speed, rel=0.01)


def test_a_drive_without_a_limit_still_has_its_largest_torque(calm_table):
    found = audit(calm_table, made_arm())
    bend = found.drives[2]
    assert (bend.torque.peak, bend.torque.limit, bend.torque.share) == (5.0, np.inf, 0.0)
    plain = found.to_dict()["drives"][2]
    assert (plain["torque"]["limit"], plain["torque_margin_percent"], plain["rms_percent"]) == (None, None, None)
    json.dumps(found.to_dict(), allow_nan=False)
    assert audit(replace(calm_table, torque=None), made_arm()).drives == ()


def test_what_is_not_finite_counts_as_nothing():
    arm, table = made_arm(), move_table([0, 0, 0], [0.1, 0.1, 0.1], 1.0)
    torque = np.full((251, 3), 10.0)
    torque[100] = np.nan
    found = audit(replace(table, torque=torque), arm)
    assert not found.passed
    assert found.drives[0].rms == pytest.approx(10.0, rel=0.01)


def test_the_block_on_the_screen(planned):
    lines = audit_screen(planned.audit).split("\n")
    at = next(i for i, line in enumerate(lines) if line.startswith("drive "))
    assert lines[at].split() == "drive peak torque rms used motor rpm peak power work returned".split()
    base = planned.audit.drives[0]
    assert lines[at + 1].startswith("base, N m ") and f"{base.rms_share * 100:.1f} %" in lines[at + 1]
    assert f"{base.motor_speed * 60 / 2 / np.pi:.0f} of 3630" in lines[at + 1]
    work, returned = sum(d.work for d in planned.audit.drives), sum(d.returned for d in planned.audit.drives)
    assert lines[at + 7] == (
        f"energy over the table: {work:.0f} J put in, {returned:.1f} J come back, net {work - returned:.0f} J"
    )
    assert max(map(len, lines)) <= 100
    weak = replace(planned.audit, drives=(replace(base, continuous=20.0), *planned.audit.drives[1:]))
    assert f"{base.rms / 0.2:.1f} %!" in audit_screen(weak)
