"""What a motion asks of the drives: torque over the whole cycle, motor speed, power and energy, joint by joint.

Torque is that of the joint, friction and rotor included, so torque times joint speed is the mechanical power of the
motor. Between rows torque and power are taken as straight lines. Root-mean-square torque is
sqrt(sum T^2 t / sum t) over the whole table, waits and holding included, as is common practice in servo sizing; a
continuous torque below it is an exceedance. Energy is told as the work that the drive puts in (power above zero) and
what comes back from the load (power below zero); net is the difference.

Torque jumps that physics makes are allowed, and noted: Coulomb friction where a joint turns round, and a load that
changes at a stop. The friction that sets in and ends where a joint starts and stops is counted beside them.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass
from functools import partial
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from pathplan.arm import Arm
from pathplan.arm.drive import falls_with_speed, peak_torque_share
from pathplan.auditing.exceedances import clock, percent
from pathplan.auditing.model import TOLERANCE, Finding, Peak
from pathplan.auditing.shares import Array, Rows, peaks_of
from pathplan.auditing.words import apart, dimension_of, shown

__all__ = ["DriveUse", "Drives", "LoadChange", "TorqueJumps", "jump_notes", "overloads", "rpm", "torque_limits"]

AT_REST = 1e-9  # of the velocity limit: a joint slower than this stands
SHORT_REST = 1  # rows at rest in the middle of turning round; more of them are a stop and a start
SAME_LOAD = 1e-6  # of the largest torque: a smaller change while the arm stands is rounding
Cause = Literal["turns round", "starts or stops", "load changes"]


@dataclass(frozen=True)
class TorqueJumps:
    """Jumps of one joint's torque with one cause: how many, and the largest with its time (s) and step."""

    cause: Cause
    count: int
    largest: float  # N m or N
    time: float
    step: int

    def joined(self, later: TorqueJumps) -> TorqueJumps:
        worst = later if later.largest > self.largest else self
        return TorqueJumps(self.cause, self.count + later.count, worst.largest, worst.time, worst.step)


@dataclass(frozen=True)
class LoadChange:
    """A stop at which the arm takes up or leaves a load: the torque that holds it changes by `torque` (n,)."""

    time: float
    step: int
    torque: Array


@dataclass(frozen=True)
class DriveUse:
    """What one drive does over the table. SI; torque on the joint's side, speed on the motor's.

    `torque` is where most of the peak torque is used, at the speed of that row; without a limit it is the largest
    torque, with the limit infinite. `motor_speed` and its limit (rad/s) are None where the arm states no gear ratio
    of a prismatic joint. `work` and `returned` (J, both positive) are what the drive puts in and what comes back.
    """

    name: str
    kind: str
    torque: Peak
    rms: float
    continuous: float | None
    motor_speed: float | None
    motor_speed_limit: float | None
    power: float  # W, the largest put in
    power_time: float
    power_step: int
    returning: float  # W, the largest that comes back, zero or more
    work: float
    returned: float
    jumps: tuple[TorqueJumps, ...] = ()

    @property
    def rms_share(self) -> float | None:
        """Of the continuous torque."""
        return None if self.continuous is None else self.rms / self.continuous

    @property
    def net(self) -> float:
        """J over the table, what comes back taken off."""
        return self.work - self.returned


def rpm(speed: float | None) -> float | None:
    """A speed in rad/s as turns a minute."""
    return None if speed is None else speed * 30.0 / np.pi


def torque_limits(arm: Arm, velocity: Array | None) -> Array:
    """Torque limits of the joints: (n, 2), or (N, n, 2) at velocities (N, n) where one depends on the speed."""
    limits = arm.limits.torque[: arm.n]
    if velocity is None or not falls_with_speed(arm.joints).any():
        return limits
    return np.asarray(limits * peak_torque_share(arm.joints, np.nan_to_num(velocity))[:, :, None])


@dataclass
class _Turning:
    """Goes along with one joint and tells where its Coulomb friction jumps."""

    friction: tuple[float, float]  # moving positive, moving negative
    note: Callable[[Cause, float, tuple[float, int]], None]

    def __post_init__(self) -> None:
        self.way = 0.0  # the joint moved last
        self.stop: tuple[int, float, tuple[float, int]] | None = None  # row, size, place: not told yet

    def change(self, row: int, before: float, now: float, place: tuple[float, int]) -> None:
        """From this row on the joint moves another way: 1, -1 or, at rest, 0."""
        if now == 0:
            self.stop = (row, self._size(before), place)
            return
        rested = row - self.stop[0] if self.stop is not None else 0
        if before != 0 or (self.stop is not None and self.way * now < 0 and rested <= SHORT_REST):
            self.note("turns round", sum(self.friction), place)
        else:
            self.finish()
            self.note("starts or stops", self._size(now), place)
        self.way, self.stop = now, None

    def finish(self) -> None:
        """The joint stays at rest."""
        if self.stop is not None:
            self.note("starts or stops", *self.stop[1:])
            self.stop = None

    def _size(self, way: float) -> float:
        return self.friction[0] if way > 0 else self.friction[1]


class Drives:
    """Goes over a table in pieces."""

    def __init__(self, arm: Arm) -> None:
        self.arm = arm
        self.sums = np.zeros(3 * arm.n + 1)  # integrals of torque squared, power above zero, power below zero; time
        self.peaks: list[Peak | None] = [None] * arm.n
        self.power: list[tuple[float, float, int]] = [(0.0, 0.0, 0)] * arm.n
        self.returning = np.zeros(arm.n)
        self.speed = np.zeros(arm.n)
        self.jumps: list[dict[Cause, TorqueJumps]] = [{} for _ in arm.joints]
        self.slow = AT_REST * np.array([min(joint.velocity, 1e6) for joint in arm.joints])
        friction = [link.coulomb for link in arm.links] if arm.links else [(0.0, 0.0)] * arm.n
        self.turning = [_Turning(pair, partial(self._note, j)) for j, pair in enumerate(friction)]
        self._before: tuple[float, int, Array, Array, Array] | None = None  # time, step, velocity, torque, power

    def add(self, rows: Rows, velocity: Array, torque: Array, *, jumps_of_load: bool) -> None:
        """The next rows: velocity and torque (N, n). What is not finite counts as zero.

        `jumps_of_load`: find loads that change from the torque of an arm that stands (a plan knows them itself).
        """
        velocity, torque = (np.nan_to_num(value, nan=0.0, posinf=0.0, neginf=0.0) for value in (velocity, torque))
        power = velocity * torque
        self._extremes(rows, velocity, torque, power)
        if self._before is None:
            self._before = (float(rows.time[0]), int(rows.step[0]), velocity[0], torque[0], power[0])
        was = self._before
        time = np.concatenate([[was[0]], rows.time])
        step = np.concatenate([[was[1]], rows.step])
        v, tau, p = (np.vstack([a, b]) for a, b in zip(was[2:], (velocity, torque, power), strict=True))
        self._add_up(np.maximum(np.nan_to_num(np.diff(time)), 0.0), tau, p)
        self._turns(rows.first - 1, time, step, v)
        if jumps_of_load:
            self._loads(time, step, v, tau)
        self._before = (float(rows.time[-1]), int(rows.step[-1]), velocity[-1], torque[-1], power[-1])

    def _extremes(self, rows: Rows, velocity: Array, torque: Array, power: Array) -> None:
        limits = torque_limits(self.arm, velocity)
        found, _ = peaks_of(torque, limits, rows)
        largest = np.argmax(np.abs(torque), axis=0)
        most = np.argmax(power, axis=0)
        for j, i in enumerate(largest):
            peak = found[j] or rows.peak(int(i), torque[i, j], np.copysign(np.inf, torque[i, j]), 0.0)
            before = self.peaks[j]
            if before is None or (peak.share, abs(peak.peak)) > (before.share, abs(before.peak)):
                self.peaks[j] = peak
            if power[most[j], j] > self.power[j][0]:
                place = float(rows.time[most[j]]), int(rows.step[most[j]])
                self.power[j] = (float(power[most[j], j]), *place)
        self.returning = np.maximum(self.returning, -power.min(axis=0))
        self.speed = np.maximum(self.speed, np.abs(velocity).max(axis=0))

    def _add_up(self, interval: Array, torque: Array, power: Array) -> None:
        """Integrals of what runs straight between rows (N + 1, n) that lie these intervals (N,) apart."""
        a, b = torque[:-1], torque[1:]
        p, r = power[:-1], power[1:]
        means = np.hstack([(a * a + a * b + b * b) / 3, _positive_mean(p, r), _positive_mean(-p, -r)])
        terms = np.column_stack([interval[:, None] * means, interval])
        # one after the other, so that the sums don't depend on the pieces that the table comes in
        self.sums = np.cumsum(np.vstack([self.sums, terms]), axis=0)[-1]

    def _turns(self, first: int, time: Array, step: NDArray[np.int64], velocity: Array) -> None:
        """Coulomb friction that turns round, sets in or ends; `first` is the number of the first of these rows."""
        ways = np.where(np.abs(velocity) > self.slow, np.sign(velocity), 0.0)
        for j, turning in enumerate(self.turning):
            for i in np.flatnonzero(np.diff(ways[:, j])).tolist():
                place = float(time[i + 1]), int(step[i + 1])
                turning.change(first + i + 1, float(ways[i, j]), float(ways[i + 1, j]), place)

    def _loads(self, time: Array, step: NDArray[np.int64], velocity: Array, torque: Array) -> None:
        """Torque that changes while the whole arm stands."""
        still = np.all(np.abs(velocity) <= self.slow, axis=1)
        least = SAME_LOAD * np.maximum(np.abs(torque).max(axis=0), 1e-9)
        change = np.diff(torque, axis=0)
        changed = np.asarray(still[1:] & still[:-1])[:, None] & (np.abs(change) > least)
        for j in range(self.arm.n):
            for i in np.flatnonzero(changed[:, j]).tolist():
                place = float(time[i + 1]), int(step[i + 1])
                self._note(j, "load changes", float(abs(change[i, j])), place)

    def _note(self, joint: int, cause: Cause, size: float, place: tuple[float, int]) -> None:
        if size > 0:
            found, mine = TorqueJumps(cause, 1, size, *place), self.jumps[joint]
            mine[cause] = mine[cause].joined(found) if cause in mine else found

    def finish(self, loads: Sequence[LoadChange]) -> None:
        """After the last row, with the loads that change as the plan knows them."""
        for turning in self.turning:
            turning.finish()
        for load in loads:
            for j, size in enumerate(np.abs(load.torque).tolist()):
                if size > SAME_LOAD:
                    self._note(j, "load changes", size, (load.time, load.step))

    def uses(self) -> tuple[DriveUse, ...]:
        """Every drive, in the order of the joints; () before the first row."""
        if self._before is None:
            return ()
        last = self._before[3]
        square, work, returned = self.sums[:-1].reshape(3, -1)
        square = square / self.sums[-1] if self.sums[-1] > 0 else last * last
        energies = zip(np.sqrt(square).tolist(), work.tolist(), returned.tolist(), strict=True)
        return tuple(self._use(j, *sums) for j, sums in enumerate(energies))

    def _use(self, j: int, rms: float, work: float, returned: float) -> DriveUse:
        joint, peak = self.arm.joints[j], self.peaks[j]
        assert peak is not None
        geared = joint.kind == "revolute" or joint.gear_ratio != 1.0
        ratio = abs(joint.gear_ratio)
        return DriveUse(
            name=joint.name,
            kind=joint.kind,
            torque=peak,
            rms=rms,
            continuous=joint.continuous_torque,
            motor_speed=float(self.speed[j]) * ratio if geared else None,
            motor_speed_limit=joint.velocity * ratio if geared else None,
            power=self.power[j][0],
            power_time=self.power[j][1],
            power_step=self.power[j][2],
            returning=abs(float(self.returning[j])),
            work=work,
            returned=returned,
            jumps=tuple(self.jumps[j].values()),
        )


def _positive_mean(a: Array, b: Array) -> Array:
    """Mean of the part above zero of straight lines from a to b."""
    high, low = np.maximum(a, b), np.minimum(a, b)
    with np.errstate(divide="ignore", invalid="ignore"):
        crossing = 0.5 * high * high / (high - low)
    return np.where(low >= 0, 0.5 * (a + b), np.where(high > 0, crossing, 0.0))


def overloads(drives: Sequence[DriveUse]) -> Iterator[Finding]:
    """Continuous torques that are passed."""
    for drive in drives:
        share = drive.rms_share
        if share is not None and drive.continuous is not None and share > 1 + TOLERANCE:
            dimension = dimension_of(drive.kind, "torque")
            value, limit = apart(drive.rms, drive.continuous, dimension)
            text = (
                f"{drive.name}: root-mean-square torque {value} over the whole cycle exceeds the continuous torque "
                f"{limit}, {percent(share)}"
            )
            yield Finding("exceedance", text, None, None, drive.name, "rms torque", drive.rms, drive.continuous)


def jump_notes(drives: Sequence[DriveUse]) -> Iterator[Finding]:
    """The torque jumps that physics makes, once for each joint and cause."""
    for drive in drives:
        for jumps in drive.jumps:
            if jumps.cause != "starts or stops":
                yield _jump_note(drive, jumps)


def _jump_note(drive: DriveUse, jumps: TorqueJumps) -> Finding:
    size = shown(jumps.largest, dimension_of(drive.kind, "torque"))
    why = "Coulomb friction where the joint turns round" if jumps.cause == "turns round" else "the load changes"
    text = f"{drive.name}: torque jumps by {size} at {clock(jumps.time)} in step {jumps.step + 1}: {why}"
    if jumps.count > 1:
        text += f"; the largest of {jumps.count}"
    place = (jumps.time, jumps.step, drive.name, "torque")
    return Finding("note", text, *place, value=jumps.largest)
