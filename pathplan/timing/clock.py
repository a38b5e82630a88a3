"""The clock tau that the fine timing is computed on: a smooth rest-to-rest motion s(tau) of the right shape.

Near rest the best jerk-limited motion grows with the cube of time. On a clock that does so too, b = (dtau/dt)^2 is
finite and nearly one everywhere, which is what makes it easy to approximate. The clock is the coarse timing averaged
over a sliding window, which turns its steps of acceleration into ramps (a moving average of a ramp-limited motion is
a jerk-limited one: Biagiotti & Melchiorri 2008, sec. 4.5), laid into a quintic B-spline by Schoenberg's
variation-diminishing approximation, which keeps it increasing.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from pathplan.timing.coarse import CoarseTiming

Array = NDArray[np.float64]

_DEGREE = 5
_KNOTS_PER_WINDOW = 3
_FEWEST_KNOTS, _MOST_KNOTS = 10, 4000
_SAMPLES_PER_KNOT = 8
_FALLING = [[math.perm(_DEGREE - k, order) for k in range(_DEGREE + 1)] for order in range(4)]  # of derivatives
_LEAST_SLOPE = 1e-6  # of the mean speed: keeps s(tau) strictly increasing


@dataclass(frozen=True)
class Clock:
    """s(tau) on tau in [0, duration]: quintic, C4, increasing, at rest with finite jerk at both ends."""

    knots: Array  # (K+1,) distinct knots
    coefficients: Array  # (6, K) local powers, highest first

    @property
    def duration(self) -> float:
        """Length of tau."""
        return float(self.knots[-1])

    def derivatives(self, tau: Array, highest: int = 3) -> list[Array]:
        """s and its derivatives by tau, each shaped like tau."""
        cell = np.clip(np.searchsorted(self.knots, tau, side="right") - 1, 0, len(self.knots) - 2)
        x = tau - self.knots[cell]
        c = self.coefficients[:, cell]
        out = []
        for order in range(highest + 1):
            value = _FALLING[order][0] * c[0]
            for k in range(1, _DEGREE - order + 1):
                value *= x
                value += _FALLING[order][k] * c[k]
            out.append(value)
        return out

    def inverse(self, s: Array) -> Array:
        """tau at which s is reached (s strictly inside), by bisection-guarded Newton steps to rounding."""
        table = np.linspace(0.0, self.duration, 8 * len(self.knots) + 1)
        reached = self.derivatives(table, 0)[0]
        at = np.clip(np.searchsorted(reached, s), 1, len(table) - 1)
        low, high = table[at - 1], table[at]
        tau = 0.5 * (low + high)
        for _ in range(60):
            value, slope = self.derivatives(tau, 1)
            low = np.where(value < s, tau, low)
            high = np.where(value < s, high, tau)
            with np.errstate(divide="ignore", invalid="ignore"):
                new = tau - (value - s) / slope
            new = np.where((new > low) & (new < high), new, 0.5 * (low + high))
            if np.all(np.abs(new - tau) <= 4e-16 * self.duration):
                return new
            tau = new
        return tau  # the bracket has shrunk to rounding after 60 halvings


def make_clock(coarse: CoarseTiming, window: float) -> Clock:
    """The coarse timing averaged over `window` seconds, as a clock of duration coarse duration + window."""
    end, length = float(coarse.time[-1]), float(coarse.s[-1])
    duration = end + window
    count = int(np.clip(np.ceil(duration / window * _KNOTS_PER_WINDOW), _FEWEST_KNOTS, _MOST_KNOTS))
    knots = np.linspace(0.0, duration, count + 1)
    t = np.concatenate([np.zeros(_DEGREE), knots, np.full(_DEGREE, duration)])
    greville = np.convolve(t[1:-1], np.full(_DEGREE, 1.0 / _DEGREE), mode="valid")
    sample = np.linspace(-window, duration, _SAMPLES_PER_KNOT * count + 1)
    position = coarse(sample)
    travelled = np.concatenate([[0.0], np.cumsum(0.5 * (position[1:] + position[:-1]) * np.diff(sample))])
    mean = np.interp(greville, sample, travelled) - np.interp(greville - window, sample, travelled)
    control = mean / window
    # strictly increasing between the ends; the first three and last three make position, speed and acceleration rest
    least = np.linspace(0.0, _LEAST_SLOPE * length, len(control))
    control = np.maximum.accumulate(np.clip(control, 0.0, length)) * (1.0 - _LEAST_SLOPE) + least
    control[:3], control[-3:] = 0.0, length
    return Clock(knots, _taylor(t, control))


def _taylor(t: Array, control: Array) -> Array:
    """(6, K) local powers at the K distinct knots of a clamped quintic B-spline, highest first.

    De Boor's algorithm on the spline and its derivatives, at all knots at once (de Boor 1978, ch. X). Our own, because
    importing scipy's splines takes longer than planning a task.
    """
    spans = np.arange(_DEGREE, len(t) - _DEGREE - 1)
    x = t[spans]
    powers, factorial = [], 1.0
    for order in range(_DEGREE + 1):
        degree = _DEGREE - order
        knots = t[order : len(t) - order]
        j = spans - order
        values = [control[j - degree + i] for i in range(degree + 1)]
        for r in range(1, degree + 1):
            for i in range(degree, r - 1, -1):
                left, right = knots[i + j - degree], knots[i + 1 + j - r]
                share = (x - left) / (right - left)
                values[i] = (1.0 - share) * values[i - 1] + share * values[i]
        powers.append(values[degree] / factorial)
        factorial *= order + 1
        if degree:
            control = degree * np.diff(control) / (knots[degree + 1 : -1] - knots[1 : -degree - 1])
    return np.stack(powers[::-1])
