"""Jerk-limited, time-optimal, rest-to-rest timing of a fixed path by direct transcription (casadi, IPOPT).

States are s, s', s'' at the nodes of a mesh in time; the control s''' is linear within each interval and may jump
between intervals, so s(t) is an exact quartic there. Each polynomial span of the path has its own group of equal
intervals, with s pinned at its ends and a free time of its own: every constraint is then a smooth polynomial, and
jumps of q''' fall on nodes. The limits are imposed at five points of each interval; where the motion breaks them
in between, they are tightened in that interval and the problem is solved again, so the final motion is feasible
up to a tiny slowing. Direct transcription: Betts, Practical Methods for Optimal Control, 2010, ch. 4.
"""

from __future__ import annotations

from dataclasses import dataclass

import casadi as ca
import numpy as np
from cases import Case
from motion import Motion, advance, sampled, shares_of_limits, slowing, spans

POINTS = (0.0, 0.25, 0.5, 0.75, 1.0)  # where the limits are imposed, as shares of an interval
CLOSE = 0.6  # rows whose share stays below this in an earlier solution are left out at first, and checked after
WARM = 1e-5  # IPOPT's first barrier parameter from a start near an optimum
DENSE = 41  # samples of an interval in every check


@dataclass(frozen=True)
class Solution:
    """A motion; durations (s) before any tightening and slowed to be feasible everywhere; peak shares (N, 3, n)."""

    motion: Motion
    duration_nlp: float
    duration_feasible: float
    shares: np.ndarray


@dataclass(frozen=True)
class Problem:
    """Symbols of one mesh, scaled: s by the length of the path, time by the duration of the start."""

    variables: ca.MX
    defects: ca.MX
    rows: ca.MX
    duration: ca.MX


def row_kinds() -> list[tuple[float, int]]:
    """(share, kind) of each block of n rows of an interval; kind 0 velocity, 1 acceleration, 2 jerk.

    Velocity and acceleration are continuous over a node, so at the end of an interval the next one imposes them.
    """
    return [(share, kind) for share in POINTS for kind in range(3) if share < 1.0 or kind == 2]


BLOCKS = [kind for _, kind in row_kinds()]


def _interval(n: int, degree: int) -> ca.Function:
    """Of one interval: end state (3,) and the limited rows, joints varying fastest, blocks as in `row_kinds`."""
    state, jerk, h = ca.SX.sym("x", 3), ca.SX.sym("j", 2), ca.SX.sym("h")
    flat, origin = ca.SX.sym("c", (degree + 1) * n), ca.SX.sym("s0")
    coefficients = ca.reshape(flat, n, degree + 1)
    rows = []
    for share, kind in row_kinds():
        s, v, a, j = advance(ca.vertsplit(state), ca.vertsplit(jerk), h, share)
        c, derivatives = [coefficients[:, i] for i in range(degree + 1)], []
        for _ in range(3):
            c = [c[i] * (len(c) - 1 - i) for i in range(len(c) - 1)] or [ca.SX.zeros(n)]
            value = c[0]
            for factor in c[1:]:
                value = value * (s - origin) + factor
            derivatives.append(value)
        q1, q2, q3 = derivatives
        rows.append((q1 * v, q2 * v**2 + q1 * a, q3 * v**3 + 3 * q2 * v * a + q1 * j)[kind])
    end = ca.vertcat(*advance(ca.vertsplit(state), ca.vertsplit(jerk), h, 1.0)[:3])
    return ca.Function("interval", [state, jerk, h, flat, origin], [end, ca.vertcat(*rows)])


def _transcribe(case: Case, h0: np.ndarray, span_of: np.ndarray, unit: float) -> Problem:
    breaks, c = spans(case.spline)
    degree, n, count, length = c.shape[0] - 1, c.shape[2], len(h0), breaks[-1]
    powers = length ** np.arange(degree, -1, -1)[:, None]
    flat = np.stack([(c[:, p] * powers).ravel() for p in span_of], axis=1)
    x, j, h = ca.MX.sym("x", 3, count + 1), ca.MX.sym("j", 2, count), ca.MX.sym("h", 1, count)
    end, rows = _interval(n, degree).map(count)(x[:, :-1], j, h, flat, breaks[span_of][None] / length)
    limits = (case.velocity * unit, case.acceleration * unit**2, case.jerk * unit**3)
    scale = np.concatenate([limits[kind] for _, kind in row_kinds()])
    inside = np.flatnonzero(np.diff(span_of) == 0)
    # A chain of equal neighbours keeps the problem banded, where one variable a span would fill a column.
    uneven = (h[:, 1:] / h0[None, 1:] - h[:, :-1] / h0[None, :-1])[:, inside]
    defects = ca.veccat(end - x[:, 1:], uneven)
    return Problem(ca.veccat(x, j, h), defects, ca.vec(rows / scale[:, None]), ca.sum2(h))


class Optimiser:
    """The NLP on the mesh of a start, with the rows kept (N, 3, n) bool; run again and again with other bounds.

    barrier: IPOPT's first barrier parameter; small for starts that are near an optimum.
    """

    def __init__(self, case: Case, start: Motion, kept: np.ndarray, barrier: float) -> None:
        self.case, self.unit = case, start.duration
        self.breaks = spans(case.spline)[0]
        problem = _transcribe(case, start.h / self.unit, start.span_of, self.unit)
        self.defects = problem.defects.numel()
        self.imposed = np.flatnonzero(kept[:, BLOCKS].ravel())
        nlp = {"x": problem.variables, "f": problem.duration}
        nlp["g"] = ca.vertcat(problem.defects, problem.rows[self.imposed.tolist()])
        options = {
            "expand": True,
            "print_time": False,
            "ipopt.print_level": 0,
            "ipopt.sb": "yes",
            "ipopt.max_iter": 1500,
            "ipopt.tol": 1e-9,
            "ipopt.bound_relax_factor": 1e-10,
            "ipopt.mu_init": barrier,
            "ipopt.mu_strategy": "adaptive" if barrier > 1e-2 else "monotone",
        }
        self.solver = ca.nlpsol("timing", "ipopt", nlp, options)

    def run(self, guess: Motion, allowed: np.ndarray) -> Motion:
        """Locally time-optimal motion from a guess on the same mesh, which need not satisfy anything.

        allowed (N, 3, n): share of each limit that may be used in each interval. Raises RuntimeError if IPOPT
        does not converge.
        """
        count, unit, length = len(guess.h), self.unit, self.breaks[-1]
        low, high = np.full((count + 1, 3), -np.inf), np.full((count + 1, 3), np.inf)
        low[:, 1] = 0.0
        low[0] = high[0] = (0.0, 0.0, 0.0)
        low[-1] = high[-1] = (1.0, 0.0, 0.0)
        state = guess.state * unit ** np.arange(3) / length
        for k in np.flatnonzero(np.diff(guess.span_of)) + 1:
            low[k, 0] = high[k, 0] = state[k, 0] = self.breaks[guess.span_of[k]] / length
        unbounded, none = np.full(2 * count, np.inf), np.zeros(self.defects)
        bound, h = allowed[:, BLOCKS].ravel()[self.imposed], guess.h / unit
        answer = self.solver(
            x0=np.concatenate([state.ravel(), guess.jerk.ravel() * unit**3 / length, h]),
            lbx=np.concatenate([low.ravel(), -unbounded, h / 100]),
            ubx=np.concatenate([high.ravel(), unbounded, h * 100]),
            lbg=np.concatenate([none, -bound]),
            ubg=np.concatenate([none, bound]),
        )
        status = self.solver.stats()
        if not status["success"]:
            raise RuntimeError(f"{self.case.name}: {count} intervals: IPOPT: {status['return_status']}")
        values = np.asarray(answer["x"]).ravel()
        nodes = values[: 3 * (count + 1)].reshape(-1, 3) * length / unit ** np.arange(3)
        jerk = values[3 * (count + 1) : 5 * count + 3].reshape(count, 2) * length / unit**3
        return Motion(values[5 * count + 3 :] * unit, jerk, nodes, guess.span_of)


def widened(shares: np.ndarray, reach: int) -> np.ndarray:
    """The largest share (N, ...) within `reach` intervals on either side."""
    padded = np.concatenate([shares[:1]] * reach + [shares] + [shares[-1:]] * reach)
    return np.max([padded[k : k + len(shares)] for k in range(2 * reach + 1)], axis=0)


def solve(
    case: Case,
    start: Motion,
    *,
    barrier: float,
    near: np.ndarray | None = None,
    rounds: int = 5,
    enough: float = 2e-5,
) -> Solution:
    """Optimise, then tighten the limits in the intervals where the motion breaks them between the imposed points.

    near (N, 3, n): shares of the limits in an earlier motion on this mesh; without it all rows are imposed.
    Ends after `rounds` of tightening, or when slowing by a factor of 1 + enough makes the motion feasible.
    """
    allowed = np.ones((len(start.h), 3, len(case.velocity)))
    kept = allowed > 0 if near is None else widened(near, 2) > CLOSE
    optimiser = Optimiser(case, start, kept, barrier)
    motion, first = start, None
    for turn in range(rounds + 1):
        motion = optimiser.run(motion, allowed)
        first = motion.duration if first is None else first
        shares = shares_of_limits(case, sampled(motion.timing(), DENSE)).max(axis=1)
        if slowing(shares) < 1 + enough or turn == rounds:
            break
        allowed = allowed / np.maximum(shares, 1.0)
        missing = (shares > 1.0) & ~kept
        if turn == 0 or missing.any():
            kept = kept | missing
            optimiser = Optimiser(case, motion, kept, min(barrier, WARM))
    return Solution(motion, first, motion.duration * slowing(shares), shares)
