"""Corners: how two steps run into one another within a region, and how large that region may be.

In a corner both steps move at once. The incoming one eases out and the outgoing one eases in over u in
[-1, 1]:

    s1 = length - delta f(-u)      s2 = delta f(u)
    f(u) = u/2 + 3 u^2/8 - u^4/16 + 3/16          f'' = 3/4 (1 - u^2)

while the path parameter advances by delta u, and their displacements from the corner add up: between lines
and arcs p = p1(s1) + p2(s2) - p_c and R = R1(s1) R_c^T R2(s2); where a joint step takes part
q = q1(s1) + q2(s2) - q_c. At u = -1 f, f' and f'' are 0, at u = 1 f = u, f' = 1 and f'' = 0: the corner
meets both steps with its first two derivatives, so q(s) is C2 and its third derivative bounded. f(u) -
f(-u) = u: a corner between steps that run straight on reproduces them. f(u) + f(-u) <= 1: the path stays
within the region, and between two lines within the triangle of entry, corner and exit.

What `blend` means. The corner takes the same stretch delta of the path parameter from both steps, the largest
for which:

- a length ("20 mm"): the tool centre point leaves the incoming step at most that far before the corner point,
  and joins the outgoing one at most that far after it: along a line or arc measured on the path, on a
  joint step as the distance to the corner point. The region is the ball of that radius about the corner
  point.
- an angle ("10 deg"): the tool turns by at most that much on either side; the region is every orientation
within
  that angle of the corner's. Where a joint step takes part: no revolute joint changes by more on either
  side, and the region is every joint vector within that angle of the corner's.
- a share ("15 %"): it is that share of the shorter of the two steps, in the path parameter.

Between lines and arcs the region is kept by the formula; where a joint step takes part it is verified by
dense samples, and delta shrunk until it is kept. A step too short for both of its corners shrinks them:
each at most so that both fit, and what one does not need the other keeps.
"""

from __future__ import annotations

import numpy as np

from pathplan.path.joint import Array

__all__ = ["LEAST_REST", "REVERSAL", "fit_into_steps", "incoming", "outgoing", "ramp"]

REVERSAL = np.deg2rad(2.5)  # nearer than this to opposite, the tangents of two steps make a reversal
# Share of a step between two corners: less than this, and not none, is too short a piece to fit.
LEAST_REST = 1e-3


def ramp(u: Array) -> tuple[Array, Array, Array, Array]:
    """f and its three derivatives at u in [-1, 1]."""
    square = u * u
    return (
        u / 2 + 3 * square / 8 - square * square / 16 + 3 / 16,
        0.5 + 0.75 * u - square * u / 4,
        0.75 * (1 - square),
        -1.5 * u,
    )


def outgoing(u: Array, delta: Array) -> tuple[Array, Array]:
    """s2 (N,) on the outgoing step and its derivatives (3, N) by the path parameter."""
    f, f1, f2, f3 = ramp(u)
    return delta * f, np.stack([f1, f2 / delta, f3 / delta**2])


def incoming(u: Array, delta: Array) -> tuple[Array, Array]:
    """s1 - length (N,), so zero or less, on the incoming step and its derivatives (3, N) by the path
    parameter.
    """
    f, f1, f2, f3 = ramp(-u)
    return -delta * f, np.stack([f1, -f2 / delta, f3 / delta**2])


def fit_into_steps(asked: Array, length: Array) -> Array:
    """Corner sizes delta (m-1,) that fit into steps of lengths (m,), from those asked for (m-1,); 0 is a
    stop point.

    On every step the two corners together take at most its length; each gets at least half if it wants
    that much.
    """
    left = np.concatenate([[0.0], asked[:-1]])  # the other corner of the incoming step
    right = np.concatenate([asked[1:], [0.0]])
    used = np.minimum(asked, np.maximum(length[:-1] / 2, length[:-1] - left))
    used = np.minimum(used, np.maximum(length[1:] / 2, length[1:] - right))
    for j in np.flatnonzero(used < asked):  # what a neighbour gave up on its other side can be kept here
        before = used[j - 1] if j > 0 else 0.0
        after = used[j + 1] if j + 1 < len(used) else 0.0
        used[j] = max(used[j], min(asked[j], length[j] - before, length[j + 1] - after))
    return _without_slivers(used, length)


def _without_slivers(used: Array, length: Array) -> Array:
    """Shrink the larger corner of a step whose rest is too short to be a piece of its own, though not
    nothing.
    """
    for k in range(len(length)):
        before = used[k - 1] if k > 0 else 0.0
        after = used[k] if k < len(used) else 0.0
        rest = length[k] - before - after
        if 1e-12 * length[k] < rest < LEAST_REST * length[k]:
            larger = k - 1 if before >= after else k
            used[larger] -= LEAST_REST * length[k] - rest
    return used
