"""What one would otherwise do with the toolbox alone: its multi-segment joint motion, slowed until it keeps the limits.

`roboticstoolbox.mstraj` joins straight joint segments by blends; it knows speed limits and segment times, but neither
acceleration nor jerk. What it does, measured with version 1.5.0: every blend is a quintic with acceleration zero at
both ends, so velocity and acceleration are continuous and jerk is bounded but jumps at both ends of a blend (third
differences converge as the step shrinks, fourth ones grow like 1 / step). The first and last blend cover the distance
of a full one in half the time, so there the speed overshoots that of the segment. Inner waypoints are cut and not
reached, which makes the motion shorter than one through them. The first row is left out: it is put back here.

The comparison is meant to be fair, so the best setting is searched for. `plain_motion` is what a user would do: one
blend time for all, segments by the slowest joint, speeds shared out among the joints in the best of four ways.
`toolbox_motion` goes on from there with a blend time and a duration for every segment, by a seeded random search. Each
candidate is scaled in time until the differences of its positions just keep all three limits; so only ratios of its
times matter. Long blends would make it ever faster by leaving out the waypoints: none may be missed by more than a
tenth of the shorter segment beside it. (Asked for speeds, mstraj makes segments at least two blends long; at a
reversal that is a miss of 3/32.)

    python -m tests.benchmarks.toolbox_motion
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

ROWS = 1500  # rows of a motion, roughly: the step of mstraj follows from it
ROUGH = 600  # rows of a candidate in the search
BLENDS = np.geomspace(0.02, 1.0, 25)  # blend times tried, as shares of the mean time of a segment
TRIES = 250  # of the random search, for each segment
REACH = (0.02, 0.1, 0.3)  # sizes of its steps, natural logarithm of a time
MISS = 0.1  # how far an inner waypoint may be missed, as a share of the shorter segment beside it


@dataclass(frozen=True)
class ToolboxMotion:
    """The best motion found: positions (N, n) at a step, s; blend (m - 1,) and segment times (m - 1,), s.

    miss (m - 2,): distance from each inner waypoint, as a share of the shorter segment beside it.
    """

    position: Array
    step: float
    blend: Array
    segment: Array
    miss: Array

    @property
    def duration(self) -> float:
        return (len(self.position) - 1) * self.step


def toolbox_duration(waypoints: Array, velocity: Array, acceleration: Array, jerk: Array) -> float:
    """The shortest duration, s, that the toolbox's motion along waypoints (m, n) reaches under the limits (n,)."""
    return toolbox_motion(waypoints, velocity, acceleration, jerk).duration


def plain_motion(waypoints: Array, velocity: Array, acceleration: Array, jerk: Array) -> ToolboxMotion:
    """The fastest motion along waypoints (m, n) under the limits (n,) with one blend time for all segments.

    Raises ValueError if there are fewer than two waypoints or none of the settings gives a motion.
    """
    points = np.asarray(waypoints, dtype=float)
    if points.ndim != 2 or len(points) < 2:
        raise ValueError(f"waypoints: expected (m, n) with m at least 2, got shape {points.shape}")
    limits = (np.asarray(velocity, float), np.asarray(acceleration, float), np.asarray(jerk, float))
    tried = (candidate(points, blend, segment, limits, ROWS) for blend, segment in settings(points, limits))
    found = [motion for motion in tried if motion is not None]
    if not found:
        raise ValueError("the toolbox finds no motion through these waypoints")
    return min(found, key=lambda motion: motion.duration)


def toolbox_motion(waypoints: Array, velocity: Array, acceleration: Array, jerk: Array) -> ToolboxMotion:
    """The fastest motion found along waypoints (m, n) under the limits (n,), every segment with times of its own.

    Raises ValueError as `plain_motion` does.
    """
    plain = plain_motion(waypoints, velocity, acceleration, jerk)
    points = np.asarray(waypoints, dtype=float)
    limits = (np.asarray(velocity, float), np.asarray(acceleration, float), np.asarray(jerk, float))
    rng, count = np.random.default_rng(0), len(plain.blend)
    best, ranking = plain, [plain]
    for _ in range(TRIES * count):
        # Small and large steps of some times at once: along the ridges of the limits single ones lead nowhere.
        steps = rng.choice(REACH) * rng.normal(size=(2, count)) * (rng.random((2, count)) < max(0.4, 1 / count))
        motion = candidate(points, best.blend * np.exp(steps[0]), best.segment * np.exp(steps[1]), limits, ROUGH)
        if motion is not None and motion.duration < best.duration:
            best = motion
            ranking.append(motion)
    # Coarse rows understate the jerk, and rounding to steps differs: the last ones are judged again with fine rows.
    again = (candidate(points, motion.blend, motion.segment, limits, ROWS) for motion in ranking[-10:])
    return min([plain, *(motion for motion in again if motion)], key=lambda motion: motion.duration)


def settings(points: Array, limits: tuple[Array, Array, Array]) -> Iterator[tuple[Array, Array]]:
    """Blend and segment times to start from: one blend time for all, segments by the slowest joint.

    Joints share out their speeds by their velocity, acceleration or jerk limits, or by the mean of all three.
    """
    moves = np.abs(np.diff(points, axis=0))
    shapes = [*limits, np.prod([limit / limit.max() for limit in limits], axis=0) ** (1 / 3)]
    for speeds in shapes:
        travel = (moves / speeds).max(axis=1)
        travel = np.maximum(travel, 1e-3 * travel.max()) / travel.mean()
        for share in BLENDS:
            # As mstraj does with qdmax: travel at full speed, the blend added, and at least two blends long.
            yield np.full(len(travel), share), np.maximum(travel + share, 2 * share)


def candidate(
    points: Array, blend: Array, segment: Array, limits: tuple[Array, Array, Array], count: int
) -> ToolboxMotion | None:
    """The motion of one setting in about `count` rows, scaled in time to just keep the limits.

    None where the blends overlap or a waypoint is missed too far.
    """
    from roboticstoolbox import mstraj

    step = segment.sum() / count
    # mstraj rounds blends up to steps and halves them, and segments that are no whole steps would jump.
    even = 2 * step * np.maximum(1, np.round(blend / step / 2))
    whole = step * np.round(segment / step)
    later = np.append(even[1:], even[-1])
    if (even / 2 + np.maximum(even, later) / 2 > whole + step / 2).any():
        return None
    motion = mstraj(points, dt=step, tacc=even, tsegment=whole)
    rows = np.concatenate([points[:1], np.asarray(motion.q)])
    lengths = np.linalg.norm(np.diff(points, axis=0), axis=1)
    away = np.array([np.linalg.norm(rows - point, axis=1).min() for point in points[1:-1]])
    shorter = np.minimum(lengths[:-1], lengths[1:])
    if (away > MISS * shorter + 1e-12).any():
        return None
    k = slowing(rows, step, limits)
    return ToolboxMotion(rows, step * k, even * k, whole * k, away / np.maximum(shorter, 1e-12))


def slowing(q: Array, step: float, limits: tuple[Array, Array, Array]) -> float:
    """Factor on time after which the differences of rows q (N, n), padded with rest, just keep the limits."""
    padded = np.concatenate([np.repeat(q[:1], 3, axis=0), q, np.repeat(q[-1:], 3, axis=0)])
    shares = [
        (np.abs(np.diff(padded, order, axis=0)).max(axis=0) / step**order / limit).max()
        for order, limit in enumerate(limits, start=1)
    ]
    return float(max(share ** (1 / order) for order, share in enumerate(shares, start=1)))


def main() -> None:
    import pathplan

    points = np.random.default_rng(0).uniform(-1.0, 1.0, (6, 6))
    limits = {"velocity": np.full(6, 3.0), "acceleration": np.full(6, 15.0), "jerk": np.full(6, 150.0)}
    plain, alone = plain_motion(points, *limits.values()), toolbox_motion(points, *limits.values())
    ours = pathplan.schedule(pathplan.JointPath.through(points), **limits).duration
    print(f"six waypoints, six axes: ours {ours:.3f} s")
    for name, motion in (("one blend time", plain), ("tuned by segments", alone)):
        missed = f"waypoints missed by up to {motion.miss.max():.0%} of a segment"
        print(f"toolbox alone, {name}: {motion.duration:.3f} s, ratio {motion.duration / ours:.3f}, {missed}")


if __name__ == "__main__":
    main()
