"""How planning, audit and writing grow with the task, as ratios measured in one run: python -m tests.benchmarks.scale

Pick-and-place over patterns of places, 100 to 10,000 steps, of the six-axis arm (torque in the timing) and of the
gantry. Every measurement is a process of its own, so that peak memory is that of the work and of nothing before it.
Never a test: takes some minutes; run on a quiet machine, with one thread for linear algebra.
"""

from __future__ import annotations

import os

os.environ.setdefault("OMP_NUM_THREADS", "1")

from pathlib import Path

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
