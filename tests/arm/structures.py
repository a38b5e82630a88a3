"""Arms of different structure, labelled by it: ours, ones built from published DH tables, and invented ones."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np

from pathplan.arm import Arm, Joint, load_arm
from pathplan.arm.chain import DHRow, chain_from_dh, rot_x, rot_z, translation

ROBOTS = Path(__file__).parents[2] / "robots"
Q = np.pi / 2


def joint(name: str, kind: str = "revolute", reach: float = np.pi) -> Joint:
    return Joint(name, kind, (-reach, reach), 3.0, 10.0, 100.0)


def from_rows(name: str, rows: list[DHRow], convention: str = "standard", kinds: str = "RRRRRR") -> Arm:
    fixed, axes, tip, _ = chain_from_dh(rows, convention)
    words = {"R": ("revolute", np.pi), "P": ("prismatic", 0.6)}
    return Arm(name, tuple(joint(f"j{i + 1}", *words[k]) for i, k in enumerate(kinds)), fixed, axes, tip)


def from_lines(name: str, points: list, axes: list, flange: np.ndarray, kinds: str = "RRRRRR") -> Arm:
    words = {"R": ("revolute", np.pi), "P": ("prismatic", 0.6)}
    return Arm.from_axes(name, [joint(f"j{i + 1}", *words[k]) for i, k in enumerate(kinds)], points, axes, flange)


def loaded(name: str) -> Arm:
    return load_arm(ROBOTS / f"{name}.toml")


def slide_arm() -> Arm:
    """Two turns, a slide, and a spherical wrist: the DH table of Paul, "Robot Manipulators" (1981), ch. 2, with the
    lengths of the toolbox's model of it (0.412 and 0.154 m).
    """
    rows = [DHRow(0, -Q, 0.412), DHRow(0, Q, 0.154), DHRow(0, 0, 0.45), DHRow(0, -Q), DHRow(0, Q), DHRow(0, 0, 0.263)]
    return from_rows("turn, turn, slide and wrist", rows, kinds="RRPRRR")


def meeting_shoulder() -> Arm:
    """Axes 1 and 2 meet, axes 2 and 3 are skew, spherical wrist: like a seven-axis arm with one axis held."""
    rows = [DHRow(0, -Q, 0.36), DHRow(0.06, 0.9, 0.42), DHRow(0.05, Q), DHRow(0, -Q, 0.4), DHRow(0, Q)]
    return from_rows("axes 1 and 2 meeting, wrist", [*rows, DHRow(0, 0, 0.12)])


def skew_shoulder() -> Arm:
    """No two of the first three axes parallel or meeting, spherical wrist: position needs a quartic."""
    rows = [DHRow(0.12, -1.2, 0.4), DHRow(0.38, 0.7, 0.09), DHRow(0.07, -Q, 0.11), DHRow(0, Q, 0.41), DHRow(0, -Q)]
    return from_rows("skew axes, wrist", [*rows, DHRow(0, 0, 0.09)])


def skew_hand() -> Arm:
    """Axes 2, 3, 4 parallel, axes 5 and 6 skew."""
    rows = [DHRow(0, Q, 0.18), DHRow(-0.61), DHRow(-0.57)]
    rows += [DHRow(0, Q, 0.17), DHRow(0.06, -1.2, 0.12), DHRow(0, 0, 0.11)]
    return from_rows("axes 2, 3, 4 parallel, skew hand", rows)


def meeting_base() -> Arm:
    """A ball shoulder: axes 1, 2, 3 meet, the wrist has offsets."""
    rows = [DHRow(0, -Q, 0.3), DHRow(0, Q), DHRow(0, -Q, 0.4), DHRow(0.05, Q, 0.1), DHRow(0.07, -Q, 0.3)]
    rows.append(DHRow(0, 0, 0.1))
    return from_rows("axes 1, 2, 3 meeting", rows)


def hollow_gantry() -> Arm:
    """Three slides and three turns that don't meet."""
    points = [[0, 0, 2], [0, 0, 2], [0.1, 0, 1.8], [0.1, 0, 1.5], [0.1, 0.05, 1.4], [0.14, 0.05, 1.3]]
    axes = [[1, 0, 0], [0, 1, 0], [0, 0, 1], [0, 0, 1], [0, 0.8, 0.6], [0, 0, 1]]
    return from_lines("three slides, turns apart", points, axes, translation(0.2, 0.05, 1.2) @ rot_x(np.pi), "PPPRRR")


def offset_welder() -> Arm:
    """Axes 2 and 3 parallel, 4 and 5 meet, 5 and 6 meet elsewhere: no closed form."""
    rows = [DHRow(0.15, -Q, 0.45), DHRow(0.6), DHRow(0.12, -Q), DHRow(0, Q, 0.62), DHRow(0, -Q, 0.09), DHRow(0, 0, 0.1)]
    return from_rows("axes 4-5 and 5-6 meeting apart", rows)


def sixteen() -> Arm:
    """Six turns with 16 real branches: Wampler & Morgan 1991, also Manocha & Canny 1994, example (from memory)."""
    degree = np.deg2rad(1.0)
    rows = [DHRow(0.3, Q), DHRow(1.0, degree), DHRow(0, Q, 0.2), DHRow(1.5, degree), DHRow(0, Q), DHRow(0, 0)]
    return from_rows("general, 16 real branches", rows)


def oblique() -> Arm:
    r = np.random.default_rng(11)
    rows = [DHRow(r.uniform(0.1, 0.5), alpha, r.uniform(0.1, 0.4), r.uniform(-1, 1)) for alpha in r.uniform(-2, 2, 6)]
    return from_rows("general", rows)


def measured() -> Arm:
    """glazer6 as a calibration would find it: axes off by some tenths of a millimetre and of a milliradian."""
    arm = loaded("glazer6")
    r = np.random.default_rng(2)
    frames = np.array([arm.base_from_joint(name, np.zeros(6)) for name in arm.joint_names])
    points = frames[:, :3, 3] + 2e-4 * r.normal(size=(6, 3))
    axes = frames[:, :3, 2] + 2e-4 * r.normal(size=(6, 3))
    return Arm.from_axes("wrist axes that nearly meet", arm.joints, points, axes, arm.forward(np.zeros(6)))


def seven() -> Arm:
    rows = [DHRow(0, -Q, 0.34), DHRow(0, Q), DHRow(0, Q, 0.4), DHRow(0, -Q), DHRow(0, -Q, 0.4), DHRow(0, Q)]
    return from_rows("seven axes", [*rows, DHRow(0, 0, 0.13)], kinds="R" * 7)


def with_turntable(arm: Arm) -> Arm:
    """An arm with a turntable in front of it, slightly tilted, listed last."""
    stand = translation(0.7, 0.1, 0.3) @ rot_x(0.1) @ rot_z(0.2)
    return replace(
        arm,
        name=f"{arm.name} with turntable",
        joints=(*arm.joints, Joint("table", "revolute", (-np.inf, np.inf), 1.5, 3.0, 30.0)),
        parent_from_joint=np.concatenate([arm.parent_from_joint, stand[None]]),
        axes=np.concatenate([arm.axes, [[0.0, 0.0, 1.0]]]),
        parents=(*arm.parents, -1),
        tip=arm.tip,
        links=None,
        limits=None,
        positions={name: np.append(q, 0.0) for name, q in arm.positions.items()},
    )


def on_track(arm: Arm) -> Arm:
    """An arm on a track of 3 m, which comes first."""
    fixed = np.concatenate([np.eye(4)[None], arm.parent_from_joint])
    return replace(
        arm,
        name=f"{arm.name} on a track",
        joints=(Joint("track", "prismatic", (-1.5, 1.5), 1.0, 2.0, 20.0), *arm.joints),
        parent_from_joint=fixed,
        axes=np.concatenate([[[1.0, 0.0, 0.0]], arm.axes]),
        parents=(-1, *(parent + 1 for parent in arm.parents)),
        tip=arm.tip + 1,
        links=None,
        limits=None,
        positions={name: np.insert(q, 0, 0.0) for name, q in arm.positions.items()},
    )


# What is solved, and the joints that are held for it.
STRUCTURES: dict[str, tuple[Callable[[], Arm], tuple[str, ...]]] = {
    "gantry": (lambda: loaded("loader4"), ()),
    "SCARA": (lambda: loaded("sorter4"), ()),
    "wrist, axes 2 and 3 parallel": (lambda: loaded("glazer6"), ()),
    "wrist, axes 1 and 2 meeting": (meeting_shoulder, ()),
    "wrist, first axes skew": (skew_shoulder, ()),
    "wrist, third joint slides": (slide_arm, ()),
    "axes 2, 3, 4 parallel": (lambda: loaded("stacker6"), ()),
    "axes 2, 3, 4 parallel, hand skew": (skew_hand, ()),
    "axes 1, 2, 3 meeting": (meeting_base, ()),
    "three slides, three turns": (hollow_gantry, ()),
    "4-5 and 5-6 meeting apart": (offset_welder, ()),
    "general": (oblique, ()),
    "general, 16 branches": (sixteen, ()),
    "wrist axes nearly meeting": (measured, ()),
    "seven axes, one held": (seven, ("j3",)),
    "turntable held": (lambda: with_turntable(loaded("stacker6")).seen_from("table"), ("table",)),
}
