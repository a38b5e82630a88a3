"""Random task files for an arm, and a judge of joint tables that shares nothing with our own audit.

Run as a script to judge many: python -m tests.random_tasks 10000
"""

from __future__ import annotations

import sys
from collections import Counter
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

import pathplan

ROOT = Path(__file__).parent.parent
ARMS = ("loader4", "sorter4", "glazer6", "sorter4-spline")
FREE_ARMS = ("glazer6", "loader4", "stacker7", "stacker6-pallet")  # in tasks that leave a roll or an axis free
Array = NDArray[np.float64]
_POINTS = 64  # of a cell: none but its ends is among those that the timing itself looks at


def random_task(arm: pathplan.Arm, rng: np.random.Generator, *, free: bool = False) -> str:
    """TOML text of a task of 1 to 7 motions: joint steps, lines, arcs and patterns with blends, waits, caps, a tool,
    payloads that change, rarely another tool. `free`: rolls are free, and some poses lie on a pallet that turns.
    """
    loose = rng.spawn(1)[0]
    tool = str(rng.choice(["none", *arm.tools]))
    arm = arm.equipped(tool=tool)
    low, high = np.array([joint.position for joint in arm.joints]).T
    low, high = np.where(np.isfinite(low), low, -np.pi), np.where(np.isfinite(high), high, np.pi)
    middle, half = (low + high) / 2, (high - low) / 2
    unit = np.array([1000.0 if joint.kind == "prismatic" else 180 / np.pi for joint in arm.joints])
    q = middle + half * rng.uniform(-0.7, 0.7, arm.n)
    lines = [
        'title = "random"',
        f'arm = "{(ROOT / "robots" / (arm.name + ".toml")).as_posix()}"',
        f'cycle = "{rng.choice([1, 2, 4, 8])} ms"',
        f"start = {_numbers(q * unit)}",
        f'tool = "{tool}"',
    ]
    if rng.random() < 0.3:
        lines.append(f'speed = "{rng.uniform(50, 800):.0f} mm/s"')
    if rng.random() < 0.2:
        lines.append(f'turning_speed = "{rng.uniform(5, 200):.0f} deg/s"')
    count = int(rng.integers(1, 8))
    patterns = {i: f"places{i}" for i in range(count) if rng.random() < 0.12}
    for i in range(count):
        if i in patterns:
            q = np.clip(q + half * rng.uniform(-0.1, 0.1, arm.n), low + 0.1 * half, high - 0.1 * half)
            lines += _pattern(arm, patterns[i], arm.forward(q), rng)
            continue
        lines.append("\n[[step]]")
        motion = rng.choice(["joint", "joint", "line", "line", "line", "arc"])
        far = 0.8 if motion == "joint" else 0.12
        before = q
        q = np.clip(q + half * rng.uniform(-far, far, arm.n), low + 0.05 * half, high - 0.05 * half)
        lines.append(f'motion = "{motion}"')
        if motion == "joint" and rng.random() < 0.5:
            lines.append(f"to = {{ joints = {_numbers(q * unit)} }}")
        elif motion == "arc":
            q = before  # an arc in the horizontal plane the tool is in
            centre = arm.forward(q)[:3, 3] * 1000 + [*rng.uniform(-60, 60, 2), 0.0]
            lines.append(f"centre = {{ xyz = {_numbers(centre)} }}")
            lines.append("axis = [0, 0, 1]")
            lines.append(f"angle = {rng.uniform(-360, 360):.2f}")
        else:
            lines += _loose_target(arm, q, loose) if free else [f"to = {_pose(arm.forward(q))}"]
        if i < count - 1 and i + 1 not in patterns and rng.random() < 0.6:
            size = rng.choice([f'"{rng.uniform(1, 60):.1f} mm"', f'"{rng.uniform(1, 50):.1f} %"', '"5 deg"'])
            lines.append(f"blend = {size}")
        elif rng.random() < 0.2:
            lines.append('mark = "here"')
            lines.append('\n[[step]]\nwait = "0.0505 s"')
            if rng.random() < 0.6:
                lines.append(f'payload = "{rng.choice(["none", *arm.payloads])}"')
            if rng.random() < 0.1:
                lines.append(f'tool = "{rng.choice(["none", *arm.tools])}"')
    if free and "pallet" in arm.joint_names:
        lines.append('\n[frames.pallet]\njoint = "pallet"')
    return "\n".join(lines) + "\n"


def _loose_target(arm: pathplan.Arm, q: Array, rng: np.random.Generator) -> list[str]:
    """The pose of the tool at q as a target that leaves something free: the roll, a track, or where a pallet stands."""
    lines, pose = [], arm.forward(q)
    if rng.random() < 0.6:
        lines.append('roll = "free"')
    if "pallet" not in arm.joint_names:
        return [*lines, f"to = {_pose(pose)}"]
    if rng.random() < 0.3:
        lines.append(f"axes = {{ pallet = {np.rad2deg(q[-1]):.3f} }}")
    if rng.random() < 0.3:
        return [*lines, f"to = {_pose(pose)}"]
    on_pallet = np.linalg.inv(arm.base_from_joint("pallet", q)) @ pose
    return [*lines, 'to = { frame = "pallet", ' + _pose(on_pallet)[2:]]


def _pattern(arm: pathplan.Arm, name: str, first: Array, rng: np.random.Generator) -> list[str]:
    """A pattern about a pose, and a step that goes to each of its places, sometimes with a load."""
    count = [int(n) for n in rng.integers(1, 4, rng.integers(1, 4))]
    while np.prod(count) > 6:
        count.pop()
    pitch = [float(v) for v in rng.uniform(5, 40, len(count)) * rng.choice([-1, 1], len(count))]
    lines = [
        f'\n[[step]]\nrepeat = "{name}"',
        f'\n[[step.step]]\nmotion = "{rng.choice(["joint", "line"])}"\nto = "{name}"',
        f'offset = {{ frame = [0, 0, {rng.uniform(5, 40):.2f}] }}\nblend = "{rng.uniform(1, 20):.1f} mm"',
        f'\n[[step.step]]\nmotion = "line"\nto = "{name}"',
    ]
    if rng.random() < 0.5:
        for load in (str(rng.choice(list(arm.payloads))), "none"):
            lines.append(f'\n[[step.step]]\nwait = "20 ms"\npayload = "{load}"')
    order = rng.choice(["rows", "serpentine"])
    table = (
        f'count = {count}\npitch = {pitch}\norder = "{order}"\n{_pose(first)[2:-2].replace(", quat", chr(10) + "quat")}'
    )
    return [*lines, f"\n[patterns.{name}]\n{table}"]


def _numbers(values: Array) -> str:
    return "[" + ", ".join(repr(float(value)) for value in values) + "]"


def _pose(matrix: Array) -> str:
    from scipy.spatial.transform import Rotation

    x, y, z, w = Rotation.from_matrix(matrix[:3, :3]).as_quat()
    return f"{{ xyz = {_numbers(matrix[:3, 3] * 1000)}, quat = {_numbers(np.array([w, x, y, z]))} }}"


def broken_limits(arm: pathplan.Arm, position: Array, cycle: float) -> list[str]:
    """What finite differences of a column of positions (N, n) break, padded with rest; SI."""
    padded = np.concatenate([np.repeat(position[:1], 4, axis=0), position, np.repeat(position[-1:], 4, axis=0)])
    broken = []
    for k, joint in enumerate(arm.joints):
        rounding = np.spacing(np.abs(position[:, k]).max())
        if position[:, k].min() < joint.position[0] - 1e-9 or position[:, k].max() > joint.position[1] + 1e-9:
            broken.append(f"{joint.name} position")
        for n, limit in enumerate((joint.velocity, joint.acceleration, joint.jerk), start=1):
            if np.abs(np.diff(padded[:, k], n)).max() > (limit * (1 + 1e-6)) * cycle**n + 8 * rounding:
                broken.append(f"{joint.name} derivative {n}")
    return broken + _broken_sums(arm, padded, cycle)


def _broken_sums(arm: pathplan.Arm, padded: Array, cycle: float) -> list[str]:
    """The same of the rows that limit sums of joints."""
    broken = []
    for k in range(arm.n, len(arm.limits.names)):
        row = arm.limits.matrix[k]
        motor, rounding = padded @ row, float(np.abs(row) @ np.spacing(np.abs(padded).max(axis=0)))
        bounds = (arm.limits.position, arm.limits.velocity, arm.limits.acceleration, arm.limits.jerk)
        for n, (low, high) in enumerate(bound[k] for bound in bounds):
            seen, slack = np.diff(motor, n), 8 * rounding + 1e-9 * (n == 0)
            top, bottom = (limit * (1 + 1e-6 * (n > 0)) * cycle**n for limit in (high, low))
            if seen.max() > top + slack or seen.min() < bottom - slack:
                broken.append(f"{arm.limits.names[k]} derivative {n}")
    return broken


def broken_between_rows(plan: pathplan.Plan) -> list[str]:
    """What the trajectory's own derivatives break, at the rows and at many points of every cell of its timing."""
    limits = plan.task.arm.limits
    kinds = {"velocity": limits.velocity, "acceleration": limits.acceleration, "jerk": limits.jerk}
    table = plan.table
    seen = [(table.velocity, table.acceleration, table.jerk)]
    for timing in plan.timings:
        cells = len(timing.tau) - 1
        u = np.tile(np.linspace(0.0, 1.0, _POINTS), cells)
        seen.append(tuple(timing.at(np.repeat(np.arange(cells), _POINTS), u)[1:]))
    broken = []
    for derivatives in seen:
        for values, (kind, limit) in zip(derivatives, kinds.items(), strict=True):
            rows = values @ limits.matrix.T
            slack = 1e-6 * np.abs(limit)
            over = (rows > limit[:, 1] + slack[:, 1]) | (rows < limit[:, 0] - slack[:, 0])
            broken += [f"{limits.names[k]} {kind} between rows" for k in np.flatnonzero(over.any(axis=0))]
    return broken


def broken_caps(plan: pathplan.Plan) -> list[str]:
    """What the written poses break of the caps on the tool of the whole task: a chord is never longer than its arc."""
    from scipy.spatial.transform import Rotation

    task, pose = plan.task, plan.table.pose
    assert pose is not None
    same = np.array([task.steps[k].tool for k in plan.table.step])
    same = same[1:] == same[:-1]  # another tool has another point
    turning = Rotation.from_matrix(pose[:, :3, :3])
    seen = {
        "tool speed": (np.linalg.norm(np.diff(pose[:, :3, 3], axis=0), axis=1)[same], task.speed),
        "tool turning speed": ((turning[:-1].inv() * turning[1:]).magnitude()[same], task.turning_speed),
    }
    # 1e-12 m and rad: the rounding of poses
    return [name for name, (way, cap) in seen.items() if cap and way.max() > cap * (1 + 1e-6) * task.cycle + 1e-12]


def judge(text: str, folder: Path) -> str:
    """'planned' or 'refused'; raises AssertionError with the task when a table breaks a limit."""
    file = folder / "random.toml"
    file.write_text(text)
    try:
        plan = pathplan.plan(pathplan.load_task(file))
    except pathplan.PathplanError as error:
        assert str(error) and "\n" not in str(error), text
        return "refused"
    broken = broken_limits(plan.task.arm, plan.table.position, plan.task.cycle) + broken_between_rows(plan)
    broken += broken_caps(plan)
    assert not broken, f"{broken}\n{text}"
    assert plan.bound <= plan.duration + 1e-12, text
    return "planned"


def main(count: int, seed: int = 0) -> None:
    """Judge `count` random tasks over the arms and print what became of them."""
    from tempfile import TemporaryDirectory

    seen: Counter[str] = Counter()
    with TemporaryDirectory() as folder:
        cases = [(name, False) for name in ARMS] + [(name, True) for name in FREE_ARMS]
        arms = [(pathplan.load_arm(ROOT / "robots" / f"{name}.toml"), free) for name, free in cases]
        for i in range(count):
            arm, free = arms[i % len(arms)]
            rng = np.random.default_rng([seed, i])
            case = f"{arm.name}{' free' if free else ''}"
            try:
                seen[f"{case} {judge(random_task(arm, rng, free=free), Path(folder))}"] += 1
            except Exception as broken:  # whatever it is: the rest is judged all the same
                seen["broken"] += 1
                print(f"task {i}, {case}: {broken!r}", flush=True)
            if (i + 1) % 500 == 0:
                print(i + 1, dict(seen), flush=True)
    print(dict(seen))
    if seen["broken"]:
        raise SystemExit(1)


if __name__ == "__main__":
    main(int(sys.argv[1]), int(sys.argv[2]) if len(sys.argv) > 2 else 0)
