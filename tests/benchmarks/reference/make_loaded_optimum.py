"""Time-optimal timing of loaded six-axis paths, with and without torque limits, by casadi and IPOPT.

    python -m tests.benchmarks.reference.make_loaded_optimum

writes loaded_optimum.json beside this file. Independent of the planner's timing: states s, s', s'' on a uniform time
mesh, s''' constant within an interval (so s is an exact cubic there), velocity, acceleration, jerk and torque limits
imposed at four points of every interval (direct transcription: Betts, Practical Methods for Optimal Control, 2010,
ch. 4). Torque along the path comes from pinocchio on a model built from the arm's axes and links, as splines over s;
Coulomb friction is left out of the arm, since its jumps have no place in a smooth transcription. Each mesh halves the
intervals of the one before, which says how far the result may be from its limit; durations are slowed until the limits
hold at 21 points of every interval.
"""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path
from typing import NamedTuple

import numpy as np
from scipy.interpolate import BSpline, make_interp_spline

import pathplan

ROOT = Path(__file__).parent.parent.parent.parent
TABLE = Path(__file__).parent / "loaded_optimum.json"
CASES = {  # seed, points, share of the peak torque that may be used (None: torque is not limited)
    "six points": (12, 6, 0.42),
    "seven points": (15, 7, 0.42),
    "eight points": (13, 8, 0.42),
    "six points, no torque": (12, 6, None),
    "seven points, no torque": (15, 7, None),
    "eight points, no torque": (13, 8, None),
    "ten points, no torque": (21, 10, None),
}
MESHES = (40, 80, 160)


class Loaded(NamedTuple):
    """A path of the six-axis arm with the tile in its cup, and its limits."""

    arm: pathplan.Arm
    spline: BSpline
    torque: np.ndarray  # (n,), inf for no limit


def loaded(seed: int, count: int, share: float | None) -> Loaded:
    """A quintic spline through random points near the home position; `share` of the arm's peak torque."""
    arm = pathplan.load_arm(ROOT / "robots" / "glazer6.toml").equipped(tool="cup", payload="tile")
    arm = replace(arm, links=tuple(replace(link, coulomb=(0.0, 0.0)) for link in arm.links))
    points = arm.positions["home"] + np.random.default_rng(seed).uniform(-0.8, 0.8, (count, 6))
    chord = np.concatenate([[0.0], np.cumsum(np.linalg.norm(np.diff(points, axis=0), axis=1))])
    spline = make_interp_spline(chord, points, k=5)
    return Loaded(arm, spline, arm.limits.torque[:6, 1] * (np.inf if share is None else share))


def torque_splines(case: Loaded) -> tuple[BSpline, BSpline, BSpline]:
    """Torque per s'', per s'^2 and at rest, over s, by pinocchio's recursive Newton-Euler."""
    import pinocchio as pin

    from tests.arm.conftest import pinocchio_model

    model, data, _ = pinocchio_model(case.arm)
    drives = zip(case.arm.joints, case.arm.links, strict=True)
    rotor = np.array([joint.gear_ratio**2 * link.rotor_inertia for joint, link in drives])
    s = np.linspace(0.0, case.spline.t[-1], 801)
    q, q1, q2 = (case.spline(s, nu=order) for order in range(3))
    zero = np.zeros(6)
    rest = np.array([pin.rnea(model, data, x, zero, zero) for x in q])
    inertia = np.array([pin.rnea(model, data, x, zero, a) for x, a in zip(q, q1, strict=True)]) - rest + rotor * q1
    speed = np.array([pin.rnea(model, data, x, v, a) for x, v, a in zip(q, q1, q2, strict=True)]) - rest + rotor * q2
    return tuple(make_interp_spline(s, values, k=5) for values in (inertia, speed, rest))


def optimise(case: Loaded, count: int, start: np.ndarray | None) -> tuple[float, np.ndarray]:
    """Duration, slowed to be feasible, and the solution (T, then s, v, a, j) on `count` intervals."""
    import casadi as ca

    length, n = float(case.spline.t[-1]), 6
    names = ("velocity", "acceleration", "jerk")
    limits = [np.array([getattr(joint, name) for joint in case.arm.joints]) for name in names]
    viscous = np.array([link.viscous for link in case.arm.links])
    x = ca.MX.sym("x")

    def curve(spline: BSpline) -> ca.MX:
        used = spline.c[: len(spline.t) - spline.k - 1]  # scipy pads the coefficients of derivatives
        return ca.bspline(x, ca.DM(used.ravel().tolist()), [spline.t.tolist()], [int(spline.k)], n, {})

    derivatives = [case.spline.derivative(order) for order in (1, 2, 3)]
    functions = ca.Function("along", [x], [curve(f) for f in (*derivatives, *torque_splines(case))])
    state, jerk, h, share = ca.MX.sym("state", 3), ca.MX.sym("jerk"), ca.MX.sym("h"), ca.MX.sym("share")
    d = h * share
    s = state[0] + d * state[1] + d**2 / 2 * state[2] + d**3 / 6 * jerk
    v = state[1] + d * state[2] + d**2 / 2 * jerk
    a = state[2] + d * jerk
    q1, q2, q3, inertia, speed, rest = functions(s)
    torque = inertia * a + speed * v**2 + rest + viscous * q1 * v
    rows = ca.vertcat(
        q1 * v / limits[0],
        (q2 * v**2 + q1 * a) / limits[1],
        (q3 * v**3 + 3 * q2 * v * a + q1 * jerk) / limits[2],
        torque / case.torque,
    )
    at = ca.Function("at", [state, jerk, h, share], [rows])
    flow = ca.Function("flow", [state, jerk, h, share], [ca.vertcat(s, v, a)])

    T = ca.MX.sym("T")
    X, J = ca.MX.sym("X", 3, count + 1), ca.MX.sym("J", 1, count)
    step = ca.repmat(T / count, 1, count)
    defects = flow.map(count)(X[:, :-1], J, step, ca.DM.ones(1, count)) - X[:, 1:]
    limited = [at.map(count)(X[:, :-1], J, step, ca.DM.ones(1, count) * k) for k in (0.0, 1 / 3, 2 / 3, 1.0)]
    variables = ca.vertcat(T, ca.vec(X), ca.vec(J))
    nlp = {"x": variables, "f": T, "g": ca.vertcat(ca.vec(defects), *[ca.vec(block) for block in limited])}
    solver = ca.nlpsol("timing", "ipopt", nlp, {"print_time": False, "ipopt.print_level": 0, "ipopt.sb": "yes",
                                                "ipopt.max_iter": 3000, "ipopt.tol": 1e-8})  # fmt: skip
    if start is None:
        duration, u = 25.0, np.linspace(0, 1, count + 1)
        states = length * np.stack([10 * u**3 - 15 * u**4 + 6 * u**5, (30 * u**2 - 60 * u**3 + 30 * u**4) / duration,
                                    (60 * u - 180 * u**2 + 120 * u**3) / duration**2])  # fmt: skip
        start = np.concatenate([[duration], states.T.ravel(), np.diff(states[2]) * count / duration])
    low, high = np.full((count + 1, 3), -np.inf), np.full((count + 1, 3), np.inf)
    low[:, 0], high[:, 0], low[:, 1] = 0.0, length, 0.0
    low[0] = high[0] = 0.0
    low[-1] = high[-1] = (length, 0.0, 0.0)
    free = np.full(count, np.inf)
    equal, wide = np.zeros(3 * count), np.ones(4 * count * 4 * n)
    answer = solver(
        x0=start,
        lbx=np.concatenate([[0.05], low.ravel(), -free]), ubx=np.concatenate([[200.0], high.ravel(), free]),
        lbg=np.concatenate([equal, -wide]), ubg=np.concatenate([equal, wide]),
    )  # fmt: skip
    if not solver.stats()["success"]:
        raise RuntimeError(f"IPOPT: {solver.stats()['return_status']}")
    values = np.array(answer["x"]).ravel()
    duration, states, control = values[0], values[1 : 3 * count + 4].reshape(-1, 3), values[3 * count + 4 :]
    dense = at.map(count * 21)
    order = np.repeat(np.arange(count), 21)
    seen = np.array(dense(states[order].T, control[order][None], np.full((1, len(order)), duration / count),
                          np.tile(np.linspace(0, 1, 21), count)[None]))  # fmt: skip
    shares = [np.abs(seen[6 * k : 6 * k + 6]).max() for k in range(4)]
    slow = max(shares[0], shares[1] ** 0.5, shares[2] ** (1 / 3), 1.0)
    if count == MESHES[-1] and shares[3] > 1.001:
        raise RuntimeError(f"torque exceeded by {shares[3] - 1:.2%} between the points: use a finer mesh")
    return float(duration * slow), values


def refined(values: np.ndarray, count: int) -> np.ndarray:
    """The same motion on twice as many intervals."""
    states, control = values[1 : 3 * count + 4].reshape(-1, 3), values[3 * count + 4 :]
    h = values[0] / count / 2
    s, v, a = states[:-1].T
    further = s + h * v + h**2 / 2 * a + h**3 / 6 * control
    middle = np.stack([further, v + h * a + h**2 / 2 * control, a + h * control], axis=1)
    both = np.empty((2 * count + 1, 3))
    both[::2], both[1::2] = states, middle
    return np.concatenate([values[:1], both.ravel(), np.repeat(control, 2)])


def main() -> None:
    table = {}
    for name, (seed, points, share) in CASES.items():
        case, values, durations = loaded(seed, points, share), None, []
        for count in MESHES:
            start = None if values is None else refined(values, count // 2)
            duration, values = optimise(case, count, start)
            durations.append(duration)
            print(name, count, duration, flush=True)
        table[name] = {"seed": seed, "points": points, "torque_share": share, "meshes": MESHES, "durations": durations}
    TABLE.write_text(json.dumps(table, indent=1) + "\n")


if __name__ == "__main__":
    main()
