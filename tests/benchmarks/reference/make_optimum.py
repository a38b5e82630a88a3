"""Make optimum.json, the outside referee of the timing room: optimal durations of fixed joint paths.

Run: python tests/benchmarks/reference/make_optimum.py            (about ten minutes on one core; needs casadi)
     python tests/benchmarks/reference/make_optimum.py line corner    only these cases, printed, nothing written

Shares no code with the planner: numpy, scipy and casadi with IPOPT alone. cases.py makes the paths and limits,
jerk_limited.py solves the jerk-limited problem, acceleration_limited.py the convex one without jerk limits,
load_optimum.py reads the table. What is stored for a case, SI and rad:

degree, knots, coefficients     the path as a scipy BSpline; s from 0 to its last knot
velocity, acceleration, jerk    limits (n,)
duration                        best estimate of the optimum: the durations of three nested meshes extrapolated
error                           its uncertainty, relative: the distance of the extrapolation from the finest mesh
duration_nlp                    finest mesh, limits imposed at five points of each interval only
duration_feasible               finest mesh, limits kept at 41 points of each interval: an upper bound of the optimum
motion                          that motion: intervals and time of each span of the path, s\''' at both ends of each
meshes                          intervals, duration_nlp, duration_feasible of each mesh
starts                          durations on the coarse mesh from starts far apart, as a search for other optima
duration_without_jerk           velocity and acceleration limits alone, extrapolated likewise from midpoint collocation
error_without_jerk              relative, the distance between the extrapolation and the finest mesh
duration_without_jerk_feasible  an upper bound of it: limits imposed all over each interval
"""

from __future__ import annotations

import json
import sys
import time
from pathlib import Path

import acceleration_limited
import casadi
import jerk_limited
import numpy as np
import scipy
from cases import Case, all_cases
from motion import Motion, on_mesh, sampled, shares_of_limits, slow_timing, slowing

# Starts of different shape: (rests on the way, skew), see motion.slow_timing.
STARTS = {"slow": (0, 0.0), "hurried": (0, 0.7), "late": (0, -0.7), "two rests": (2, 0.0)}
SECONDS_PER_COARSE_INTERVAL = 0.125


def extrapolated(coarse: float, middle: float, fine: float) -> float:
    """Limit of the durations of meshes halved twice (Richardson), for an observed order between 1 and 2."""
    step = middle - fine
    ratio = (coarse - middle) / step if step else 4.0
    return fine - step / (min(max(ratio, 2.0), 4.0) - 1.0)


def with_jerk(case: Case, expected: float) -> dict:
    """The jerk-limited part of the entry; expected: a rough duration, s, from which the mesh is chosen."""
    count = 40 * max(1, round(expected / (40 * SECONDS_PER_COARSE_INTERVAL)))
    tried = {}
    for name, (stops, skew) in STARTS.items():
        start = on_mesh(case, slow_timing(case, stops, skew), count)
        tried[name] = jerk_limited.solve(case, start, barrier=0.1, rounds=0)
    best = min(tried.values(), key=lambda solution: solution.duration_nlp).motion
    motion, near, barrier, found = on_mesh(case, best.timing(), 2 * count), None, 1e-2, []
    for _ in range(3):
        found.append(jerk_limited.solve(case, motion, barrier=barrier, near=near))
        motion, barrier = found[-1].motion.halved(), jerk_limited.WARM
        near = shares_of_limits(case, sampled(motion.timing(), 21)).max(axis=1)
    duration = extrapolated(*(solution.motion.duration for solution in found))
    return {
        "duration": duration,
        "error": abs(found[-1].motion.duration - duration) / duration,
        "duration_nlp": found[-1].duration_nlp,
        "duration_feasible": found[-1].duration_feasible,
        "meshes": [
            {
                "intervals": len(solution.motion.h),
                "duration_nlp": solution.duration_nlp,
                "duration_feasible": solution.duration_feasible,
            }
            for solution in found
        ],
        "starts": {name: solution.duration_nlp for name, solution in tried.items()},
        "motion": stored(case, found[-1].motion),
    }


def stored(case: Case, motion: Motion) -> dict:
    """The motion slowed to be feasible; the intervals of a span are equal, so their number and time say all."""
    k = slowing(shares_of_limits(case, sampled(motion.timing(), jerk_limited.DENSE)))
    intervals = np.bincount(motion.span_of)
    times = np.bincount(motion.span_of, weights=motion.h) * k
    jerk = [[float(f"{value:.12g}") for value in pair] for pair in motion.jerk / k**3]
    return {"intervals": intervals.tolist(), "times": times.tolist(), "jerk": jerk}


def without_jerk(case: Case) -> dict:
    """The acceleration-limited part of the entry."""
    meshes = (1000, 2000, 4000)
    middle = [acceleration_limited.solve(case, n, acceleration_limited.MIDDLE).duration_nlp for n in meshes]
    above = acceleration_limited.solve(case, meshes[0], acceleration_limited.EVERYWHERE)
    duration = extrapolated(*middle)
    return {
        "duration_without_jerk": duration,
        "error_without_jerk": abs(middle[-1] - duration) / duration,
        "duration_without_jerk_feasible": above.duration_feasible,
        "meshes_without_jerk": [{"intervals": n, "duration_nlp": t} for n, t in zip(meshes, middle, strict=True)],
    }


def entry(case: Case) -> dict:
    """Everything stored for one case."""
    began = time.perf_counter()
    convex = without_jerk(case)
    result = {
        "name": case.name,
        "about": case.about,
        "degree": int(case.spline.k),
        "knots": case.spline.t.tolist(),
        "coefficients": case.spline.c.tolist(),
        "velocity": case.velocity.tolist(),
        "acceleration": case.acceleration.tolist(),
        "jerk": case.jerk.tolist(),
        **convex,
        **with_jerk(case, convex["duration_without_jerk"]),
    }
    starts = ", ".join(f"{name} {value:.5f}" for name, value in result["starts"].items())
    meshes = ", ".join(f"{m['intervals']}: {m['duration_nlp']:.5f} {m['duration_feasible']:.5f}" for m in result["meshes"])
    print(f"{case.name}: {result['duration']:.5f} s +- {result['error']:.1e}, feasible {result['duration_feasible']:.5f}")
    print(f"    without jerk {convex['duration_without_jerk']:.5f} s +- {convex['error_without_jerk']:.1e}, "
          f"feasible {convex['duration_without_jerk_feasible']:.5f}")  # fmt: skip
    print(f"    meshes {meshes}\n    starts {starts}\n    {time.perf_counter() - began:.0f} s", flush=True)
    return result


def main(names: list[str]) -> None:
    cases = [case for case in all_cases() if not names or case.name in names]
    unknown = set(names) - {case.name for case in cases}
    if unknown:
        raise SystemExit(f"no such case: {', '.join(sorted(unknown))}")
    entries = [entry(case) for case in cases]
    if names:
        return
    table = {
        "made_by": "tests/benchmarks/reference/make_optimum.py",
        "versions": {"casadi": casadi.__version__, "scipy": scipy.__version__, "numpy": np.__version__},
        "cases": entries,
    }
    text = json.dumps(table, separators=(",", ":"))
    # A line for every key of a case keeps the file readable and its differences small.
    for key in entries[0]:
        text = text.replace(f'"{key}":', f'\n"{key}":') if key != "jerk" else text
    Path(__file__).with_name("optimum.json").write_text(text + "\n", encoding="utf-8")


if __name__ == "__main__":
    main(sys.argv[1:])
