"""How planning, audit and writing grow with the task, as ratios measured in one run: python -m tests.benchmarks.scale

Pick-and-place over patterns of places, 100 to 10,000 steps, of the six-axis arm (torque in the timing) and of the
gantry. Every measurement is a process of its own, so that peak memory is that of the work and of nothing before it.
Times are process times, wall times where processes share the work. Never a test: it takes half an hour; run on a
quiet machine, with one thread for linear algebra.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

import json
import resource
import subprocess
import sys
import tempfile
import time
import zlib
from pathlib import Path

import numpy as np

ROOT = Path(__file__).parent.parent.parent
ARMS = ("glazer6", "loader4")
COUNTS = {100: (5, 2), 1000: (10, 10), 10_000: (40, 25)}  # steps: places along x and y, ten steps each

GLAZER6 = """
title = "Tiles from the belt onto the car"
arm = "{robots}/glazer6.toml"
cycle = "{cycle}"
tool = "cup"
start = "home"
frames.belt = {{ xyz = [540, -320, 260], rpy = [0, 0, -8] }}
frames.car = {{ xyz = [540, 260, 250], rpy = [0, 0, 90] }}
poses.tile = {{ frame = "belt", xyz = [0, 0, 9], rpy = [180, 0, 0] }}
poses."over the rail" = {{ xyz = [550, 20, 490], rpy = [172, 0, 40] }}
patterns.places = {{ frame = "car", xyz = [100, 50, 9], rpy = [180, 0, 0], count = [{x}, {y}], pitch = [{dx}, {dy}] }}
"""
LOADER4 = """
title = "Tiles from the belt onto the kiln car"
arm = "{robots}/loader4.toml"
cycle = "{cycle}"
tool = "vacuum gripper"
start = "home"
frames.belt = {{ xyz = [420, 300, 520] }}
frames.car = {{ xyz = [1990, 200, 560], rpy = [0, 0, 90] }}
poses.tile = {{ frame = "belt", xyz = [0, 0, 8], rpy = [180, 0, 0] }}
poses."over the rail" = {{ xyz = [760, 480, 860], rpy = [180, 0, 45] }}
patterns.places = {{ frame = "car", xyz = [160, 160, 8], rpy = [180, 0, 0], count = [{x}, {y}], pitch = [{dx}, {dy}] }}
"""
STEPS = """
[[step]]
repeat = "places"
step = [
  {{ motion = "joint", to = "tile", offset = {{ frame = [0, 0, 120] }}, blend = "50 mm" }},
  {{ motion = "line", to = "tile", speed = "400 mm/s" }},
  {{ wait = "{wait}", payload = "tile", mark = "suction on" }},
  {{ motion = "line", to = "tile", offset = {{ tool = [0, 0, -150] }}, blend = "60 mm" }},
  {{ motion = "line", to = "over the rail", blend = "80 mm" }},
  {{ motion = "joint", to = "places", offset = {{ frame = [0, 0, 140] }}, blend = "20 %" }},
  {{ motion = "line", to = "places", speed = "250 mm/s", acceleration = "1500 mm/s^2" }},
  {{ wait = "{wait}", payload = "none", mark = "suction off" }},
  {{ motion = "line", to = "places", offset = {{ tool = [0, 0, -160] }}, blend = "80 mm" }},
  {{ motion = "joint", to = "over the rail", blend = "20 %" }},
]
"""


def task_text(arm: str, steps: int, *, cycle: str = "4 ms", wait: str = "0.25 s") -> str:
    """A pick-and-place task of so many steps, one of COUNTS."""
    x, y = COUNTS[steps]
    head, area = (GLAZER6, (160, 120)) if arm == "glazer6" else (LOADER4, (620, 930))
    numbers = {"x": x, "y": y, "dx": area[0] / x, "dy": area[1] / y, "cycle": cycle, "wait": wait}
    return (head + STEPS).format(robots=ROOT / "robots", **numbers)


def measure(*words: str) -> dict[str, float]:
    """One measurement in a process of its own: see MEASURES."""
    done = subprocess.run(
        [sys.executable, "-m", "tests.benchmarks.scale", *words], cwd=ROOT, capture_output=True, text=True, check=True
    )
    return {name: float(value) for name, value in json.loads(done.stdout).items()}


def planned(file: str, jobs: str) -> dict[str, float]:
    """A task planned and judged: process time by part (s), wall time (s), peak memory (MiB) of the largest process."""
    import pathplan
    from pathplan.report.outputs import json_text
    from pathplan.report.plan_data import plan_as_dict

    pathplan.plan(pathplan.load_task(ROOT / "examples" / "glazer6-pick-and-place.toml")).judge()  # imports
    laps, start = [(0.0, spent())], time.perf_counter()
    task = pathplan.load_task(file)
    laps.append((0.0, spent()))
    plan = pathplan.plan(task, jobs=int(jobs))
    planning = time.perf_counter() - start
    laps.append((planning, spent()))
    plan.judge(jobs=int(jobs))
    judging = time.perf_counter() - start - planning
    laps.append((judging, spent()))
    text = json_text(plan_as_dict(plan))
    laps.append((0.0, spent()))
    reading, timing, audit, telling = np.diff([lap[1] for lap in laps]).tolist()
    return {
        "steps": len(task.steps),
        "reading": reading,
        "planning": timing,
        "audit": audit,
        "telling": telling,
        "wall": planning + judging,
        "peak": peak(),
        "text": len(text),
        "digest": zlib.crc32(text.encode()),
    }


def written(file: str, suffix: str) -> dict[str, float]:
    """An hour at 1 kHz planned, judged and written by the command line: rows, process time (s), peak memory (MiB)."""
    from pathplan.cli import main

    with tempfile.TemporaryDirectory() as folder:
        output = Path(folder) / f"hour{suffix}"
        assert main(["plan", file, "-o", str(output), "--quiet", "--jobs", "1"]) == 0
        audit = json.loads(output.with_suffix(".audit.json").read_text())
        size = output.stat().st_size
    return {"rows": audit["plan"]["rows"], "seconds": spent(), "peak": peak(), "size": size}


def spent() -> float:
    """Process time of this process and those that it has waited for, s."""
    used = [resource.getrusage(whose) for whose in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)]
    return sum(one.ru_utime + one.ru_stime for one in used)


def peak() -> float:
    """Largest resident memory of this process, or of one of those that it has waited for, MiB."""
    used = [resource.getrusage(whose) for whose in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)]
    return max(one.ru_maxrss for one in used) / 1024  # Linux counts KiB


MEASURES = {"planned": planned, "written": written}


def growth(folder: Path) -> None:
    """Process time per step and peak memory from 100 to 10,000 steps."""
    for arm in ARMS:
        found = {}
        for steps in COUNTS:
            file = folder / f"{arm}-{steps}.toml"
            file.write_text(task_text(arm, steps))
            found[steps] = one = measure("planned", str(file), "1")
            parts = ("reading", "planning", "audit", "telling")
            times = ", ".join(f"{part} {1e3 * one[part] / steps:.2f}" for part in parts)
            print(f"{arm}, {steps} steps: ms a step: {times}; peak {one['peak']:.0f} MiB", flush=True)
        for part in ("planning", "audit"):
            ratio = found[10_000][part] / found[100][part] / 100
            say(f"{arm}: {part} a step, 10,000 steps over 100", ratio, "at most 1.3")
        say(f"{arm}: peak memory of planning 10,000 steps, MiB", found[10_000]["peak"], "below 2048")


def cores_used(folder: Path) -> None:
    """Wall time by two processes over that by one, in turn, and whether the documents are the same bytes."""
    for arm in ARMS:
        for steps in (100, 1000):
            file = folder / f"{arm}-{steps}.toml"
            ratios = []
            for _ in range(3 if steps == 100 else 1):
                one, two = (measure("planned", str(file), jobs) for jobs in ("1", "2"))
                assert one["digest"] == two["digest"], "two processes give another plan than one"
                ratios.append(two["wall"] / one["wall"])
            say(f"{arm}, {steps} steps: wall time by two processes over one", float(np.median(ratios)), "below 1")


def an_hour(folder: Path) -> None:
    """Peak memory of planning, judging and writing an hour at 1 kHz for six axes."""
    file = folder / "hour.toml"
    file.write_text(task_text("glazer6", 100, cycle="1 ms", wait="178 s"))
    for suffix in (".csv", ".npz"):
        found = measure("written", str(file), suffix)
        rows, rate = found["rows"], 1e6 * found["seconds"] / found["rows"]
        what = f"an hour at 1 kHz, {rows:.0f} rows as {suffix}, {found['size'] / 1e6:.0f} MB, {rate:.0f} us a row"
        say(f"{what}: peak, MiB", found["peak"], "below 300")


def say(what: str, figure: float, asked: str) -> None:
    print(f"{what:84s} {figure:9.3f}   {asked}", flush=True)


def main() -> None:
    if sys.argv[1:]:
        print(json.dumps(MEASURES[sys.argv[1]](*sys.argv[2:])))
        return
    with tempfile.TemporaryDirectory() as folder:
        for section in (an_hour, growth, cores_used):
            section(Path(folder))


if __name__ == "__main__":
    main()
