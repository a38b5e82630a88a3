"""Where cells are too wide: what makes a timing optimal is that some limit is in use at every instant."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from pathplan.timing.fine import FineProblem, limit_shares
from pathplan.timing.mesh import GAUSS_LOBATTO, LOOKED, Mesh, Rows, hermite, rows_at

Array = NDArray[np.float64]

LOSS = 2e-3  # a stretch is refined while more than this share of its time leaves every limit unused
_HALVED_SHARE = 0.85  # the cells that together hold this share of the loss are halved
_QUARTERED_SHARE = 0.5  # and of a stretch that loses _MUCH or more, those that hold this share halved again
_MUCH = 4.0 * LOSS
_HELD_CARE = 10.0  # where a tool speed is held time counts this many times: ripple shows in the work
_OVERSTEP = 0.02  # a cell that oversteps a limit by more between its points is halved too
_LEAST_DIP = 0.1  # of its neighbours, that a new node between them is above zero
_BASIS = hermite(LOOKED)
_BETWEEN = np.diff(GAUSS_LOBATTO)
# Simpson's rule between collocation points, which every second of `LOOKED` is.
_WEIGHTS = (np.kron(np.append(_BETWEEN, 0), [1, 4]) + np.kron(np.append(0, _BETWEEN), [1, 0]))[:-1] / 6


def unused(problem: FineProblem, rows: Rows, x: Array) -> tuple[Array, NDArray[np.bool_]]:
    """(cells,) share of its stretch's time that each cell leaves unused, and whether it oversteps a limit.

    `rows` are those of the problem at `LOOKED`.
    """
    b = problem.evaluate(x, _BASIS)
    used = np.where(b[0] > 0, limit_shares(rows, b).largest(), np.inf)  # the spline may dip below zero between points
    lost = problem.width * (_WEIGHTS @ (1.0 - np.minimum(used, 1.0))) / problem.duration[problem.cell_owner]
    lost *= np.concatenate([_care(mesh) for mesh in problem.meshes])
    return lost, used.max(axis=0) > 1.0 + _OVERSTEP


def parts(lost: Array, over: NDArray[np.bool_]) -> NDArray[np.intp]:
    """(cells,) how many cells each cell of a stretch becomes: 1, 2 or 4."""
    total = lost.sum()
    halved = over | _largest(lost, _HALVED_SHARE * total if total > LOSS else 0.0)
    quartered = _largest(lost, _QUARTERED_SHARE * total if total > _MUCH else 0.0)
    return np.where(quartered, 4, np.where(halved, 2, 1))


def divided(mesh: Mesh, rows: Rows, x: Array, parts: NDArray[np.intp]) -> tuple[Mesh, Rows, Array]:
    """The mesh with its cells divided into `parts`, its rows at `LOOKED`, and the same spline on it."""
    finer, nodes = _halved(mesh, x, parts > 1)
    if (parts > 2).any():
        finer, nodes = _halved(finer, nodes, np.repeat(parts > 2, np.minimum(parts, 2)))
    fresh = np.flatnonzero(np.repeat(parts > 1, parts))
    return finer, rows.divided(parts, rows_at(finer, LOOKED, fresh)), nodes


def _care(mesh: Mesh) -> Array:
    """(N,) how much the time lost in every cell counts."""
    if not any(cap.held for cap in mesh.motion.caps):
        return np.ones(len(mesh.width))
    middle = mesh.clock.derivatives(0.5 * (mesh.tau[:-1] + mesh.tau[1:]), 0)[0]
    return np.where(mesh.motion.held(middle), _HELD_CARE, 1.0)


def _largest(values: Array, total: float) -> NDArray[np.bool_]:
    """The fewest largest values that together make up `total`."""
    order = np.argsort(-values)
    count = int(np.searchsorted(np.cumsum(values[order]), total)) + 1 if total > 0 else 0
    chosen = np.zeros(len(values), dtype=bool)
    chosen[order[:count]] = True
    return chosen


def _halved(mesh: Mesh, x: Array, split: NDArray[np.bool_]) -> tuple[Mesh, Array]:
    """The mesh with the marked cells halved, and the same spline on it."""
    nodes = x.reshape(-1, 2)
    centre = 0.5 * (mesh.tau[:-1] + mesh.tau[1:])[split]
    corner = np.stack([nodes[:-1, 0], nodes[:-1, 1], nodes[1:, 0], nodes[1:, 1]])[:, split]
    ratio = mesh.width[split] / mesh.unit
    corner[1::2] *= ratio
    value, slope, _ = hermite(np.array([0.5]))[:, 0] @ corner
    middle = np.stack([np.maximum(value, _LEAST_DIP * np.minimum(corner[0], corner[2])), slope / ratio], axis=1)
    nodes = np.insert(nodes, np.flatnonzero(split) + 1, middle, axis=0)
    finer = Mesh(mesh.motion, mesh.clock, np.insert(mesh.tau, np.flatnonzero(split) + 1, centre), mesh.unit)
    # a slope of at most 3 b over the width of either cell keeps a cubic Hermite spline above zero
    widest = np.maximum(np.append(finer.width, 0.0), np.insert(finer.width, 0, 0.0)) / mesh.unit
    if np.any(value <= 0):
        nodes[:, 1] = np.clip(nodes[:, 1], -2.9 * nodes[:, 0] / widest, 2.9 * nodes[:, 0] / widest)
    return finer, nodes.ravel()
