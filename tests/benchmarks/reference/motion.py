"""Motions s(t) along a fixed path q(s): what they use of the joint limits, and slow ones to start from.

A timing is a scipy PPoly s(t) from rest at s = 0 to rest at the end of the path. No casadi here: the committed
motions can be checked with numpy and scipy alone.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import factorial

import numpy as np
from cases import Case
from numpy.polynomial import Polynomial
from scipy.interpolate import BSpline, PPoly
from scipy.optimize import brentq


@dataclass(frozen=True)
class Motion:
    """A motion whose third derivative is linear within each of N intervals and may jump between them.

    h (N,): lengths of the intervals, s; jerk (N, 2): s''' at both ends of each; state (N + 1, 3): s, s', s'' at
    the nodes; span_of (N,): polynomial span of the path in which each interval lies.
    """

    h: np.ndarray
    jerk: np.ndarray
    state: np.ndarray
    span_of: np.ndarray

    @property
    def duration(self) -> float:
        return float(self.h.sum())

    def timing(self) -> PPoly:
        """The same as a piecewise quartic, the nodes integrated anew from rest by `integrated`."""
        s, v, a = integrated(self.h, self.jerk)[:-1].T
        start, slope = self.jerk[:, 0], (self.jerk[:, 1] - self.jerk[:, 0]) / self.h
        return PPoly(np.stack([slope / 24, start / 6, a / 2, v, s]), np.append(0.0, np.cumsum(self.h)))

    def halved(self) -> Motion:
        """The same motion with every interval cut into two."""
        t = np.append(0.0, np.cumsum(np.repeat(self.h / 2, 2)))
        middle = self.jerk.mean(axis=1)
        jerk = np.stack([self.jerk[:, 0], middle, middle, self.jerk[:, 1]], axis=1).reshape(-1, 2)
        return Motion(np.diff(t), jerk, states(self.timing(), t), np.repeat(self.span_of, 2))


def advance(state, jerk, h, share):
    """s, s', s'', s''' at `share` of an interval of length h; works on numbers, arrays and casadi symbols."""
    s, v, a = state
    start, slope, t = jerk[0], jerk[1] - jerk[0], share
    return (
        s + h * t * v + (h * t) ** 2 / 2 * a + h**3 * (start * t**3 / 6 + slope * t**4 / 24),
        v + h * t * a + h**2 * (start * t**2 / 2 + slope * t**3 / 6),
        a + h * (start * t + slope * t**2 / 2),
        start + slope * t,
    )


def integrated(h: np.ndarray, jerk: np.ndarray) -> np.ndarray:
    """States (N + 1, 3) at the nodes, from rest at s = 0."""
    state = np.zeros((len(h) + 1, 3))
    for k in range(len(h)):
        state[k + 1] = advance(state[k], jerk[k], h[k], 1.0)[:3]
    return state


def states(timing: PPoly, t: np.ndarray) -> np.ndarray:
    """s, s', s'' (len(t), 3)."""
    return np.stack([timing(t, order) for order in range(3)], axis=1)


def sampled(timing: PPoly, per_piece: int) -> np.ndarray:
    """(pieces, per_piece, 4): s and its three derivatives, each piece up to and including both its ends."""
    t = np.diff(timing.x)[:, None] * np.linspace(0.0, 1.0, per_piece)
    degree, values = len(timing.c) - 1, []
    for order in range(4):
        value = np.zeros_like(t)
        for power in range(degree, order - 1, -1):
            value = value * t + timing.c[degree - power][:, None] * factorial(power) / factorial(power - order)
        values.append(value)
    return np.stack(values, axis=-1)


def spans(spline: BSpline) -> tuple[np.ndarray, np.ndarray]:
    """Breaks (m + 1,) and coefficients (k + 1, m, n), highest power first, of the local variable s - break."""
    breaks = np.unique(spline.t[spline.k : len(spline.t) - spline.k])
    # A BSpline is continuous from the right at its knots, so this is the polynomial of the span that begins there.
    return breaks, np.stack([spline(breaks[:-1], m) / factorial(m) for m in range(spline.k, -1, -1)])


def shares_of_limits(case: Case, motion: np.ndarray) -> np.ndarray:
    """Shares of the limits (pieces, samples, 3, n) used by `sampled` values (pieces, samples, 4) of s and derivatives.

    Evaluated with scipy's own spline, not with the polynomials of the NLP.
    """
    s, v, a, j = np.moveaxis(motion, -1, 0)[..., None]
    at, end = s[..., 0].copy(), case.spline.t[-1]
    # q''' and s''' may both jump where two pieces meet: each piece takes the side of the path it lies on.
    at[:, 0] += 1e-9 * end
    at[:, -1] -= 1e-9 * end
    q1, q2, q3 = (case.spline(np.clip(at, 0.0, end), order) for order in (1, 2, 3))
    rows = (
        q1 * v / case.velocity,
        (q2 * v**2 + q1 * a) / case.acceleration,
        (q3 * v**3 + 3 * q2 * v * a + q1 * j) / case.jerk,
    )
    return np.abs(np.stack(rows, axis=-2))


def slowing(shares: np.ndarray) -> float:
    """Factor on time that brings the peak of the shares (..., 3, n) to 1: by k they fall by k, k^2, k^3."""
    peaks = shares.reshape(-1, 3, shares.shape[-1]).max(axis=(0, 2))
    return float(np.max(peaks ** (1.0 / np.arange(1, 4))))


def slow_timing(case: Case, stops: int = 0, skew: float = 0.0) -> PPoly:
    """Minimum-jerk polynomial (Flash & Hogan 1985), slowed until every limit holds.

    stops: rests on the way, equally spaced in s, every part slowed by itself. skew in (-1, 1): hurries the first
    half (positive) or the second by the warp u + skew u (1 - u) of the normalised time.
    """
    u = Polynomial([0.0, 1.0])
    rise = Polynomial([0, 0, 0, 10, -15, 6])(u + skew * u * (1 - u))
    edges = np.linspace(0.0, case.spline.t[-1], stops + 2)
    times, pieces = [0.0], []
    for start, end in zip(edges[:-1], edges[1:], strict=True):
        part = start + (end - start) * rise
        unit = PPoly(part.coef[::-1][:, None], np.array([0.0, 1.0]))
        k = slowing(shares_of_limits(case, sampled(unit, 2001)))
        pieces.append(part.coef[::-1] / k ** np.arange(len(part.coef))[::-1])
        times.append(times[-1] + k)
    return PPoly(np.stack(pieces, axis=1), np.array(times))


def on_mesh(case: Case, timing: PPoly, count: int, least: int = 4) -> Motion:
    """A timing put on about `count` intervals: equal within each span of the path, shared out by the spans' times.

    The nodes keep their values; s''' is taken at the middle of each interval, so between them it is approximated.
    """
    breaks, _ = spans(case.spline)
    end = timing.x[-1]
    inner = [brentq(lambda t, s=s: float(timing(t)) - s, 0.0, end) for s in breaks[1:-1]]
    passed = np.array([0.0, *inner, end])
    number = np.maximum(least, np.round(np.diff(passed) / end * count)).astype(int)
    pieces = zip(passed[:-1], passed[1:], number, strict=True)
    t = np.concatenate([[0.0], *(np.linspace(a, b, m + 1)[1:] for a, b, m in pieces)])
    jerk = timing((t[:-1] + t[1:]) / 2, 3)
    state = states(timing, t)
    span_of = np.repeat(np.arange(len(number)), number)
    return Motion(np.diff(t), np.stack([jerk, jerk], axis=1), state, span_of)
