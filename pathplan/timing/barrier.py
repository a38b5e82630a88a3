"""Following the central path of many independent convex problems at once.

Every timing problem here is: minimise a convex cost minus mu times the logarithms of the slacks, for a falling mu
(Boyd & Vandenberghe 2004, ch. 11). Stretches between stop points do not influence each other, so their unknowns are
laid end to end in one vector, their Newton systems form one banded matrix, and only the step length and mu are kept
apart, one number per stretch: the cost of an iteration is a few dozen array operations however many stretches there
are.
"""

from __future__ import annotations

from typing import Protocol, TypeVar

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import PathplanError

Array = NDArray[np.float64]
State = TypeVar("State")

_SUFFICIENT = 1e-4  # Armijo: share of the predicted decrease that a step must deliver
_BOUNDARY = 0.98  # share of the way to the nearest wall that a step may go
_RAISED = (0.0, 1e-13, 1e-11, 1e-9, 1e-7)
_ROUND_OFF = 1e-12  # relative: a decrease smaller than this can't be told from rounding


def sum_by(owner: NDArray[np.intp], values: Array, count: int) -> Array:
    """(count,) sums of values (N,) by the group that `owner` (N,) says."""
    return np.asarray(np.bincount(owner, values, count), dtype=np.float64)


class BarrierProblem(Protocol[State]):
    """What `follow_central_path` needs: S independent problems laid end to end in one vector of unknowns."""

    owner: NDArray[np.intp]  # (unknowns,) which problem each unknown belongs to
    count: int  # S

    def state(self, x: Array) -> State:
        """Everything that is computed once from the unknowns."""

    def value(self, state: State) -> tuple[Array, Array]:
        """(S,) cost, and (S,) minus the logarithms of the slacks; inf where a wall is touched."""

    def direction(self, state: State, mu: Array) -> tuple[Array, Array]:
        """Newton step (unknowns,) and squared Newton decrement (S,)."""

    def reach(self, state: State, step: Array) -> Array:
        """(S,) an upper bound of the feasible step length along `step`."""


def follow_central_path(
    problem: BarrierProblem[State],
    x: Array,
    *,
    start: Array,
    final: Array,
    factor: float = 0.2,
    centred: float = 0.3,
    last: float | None = None,
    iterations: int = 300,
) -> tuple[Array, int]:
    """Newton steps from the strictly feasible x while mu (S,) falls from `start` to `final` by `factor`.

    A problem's mu falls as soon as its squared Newton decrement is below `centred` x mu; at the final mu it must be
    below `last` x mu (default: `centred`), which multipliers need more than unknowns do. Returns the unknowns and the
    number of Newton steps taken. Raises PathplanError when the steps run out: no unfinished answer is returned.
    """
    mu = np.maximum(start, final)
    done = np.zeros(problem.count, dtype=bool)
    state = problem.state(x)
    cost, barrier = problem.value(state)
    for iteration in range(iterations):
        step, decrement = problem.direction(state, mu)
        before = cost + mu * barrier
        length = np.where(done, 0.0, np.minimum(1.0, _BOUNDARY * problem.reach(state, step)))
        wanted = before + _ROUND_OFF * np.abs(before)
        for _ in range(60):
            moved = x + length[problem.owner] * step
            trial = problem.state(moved)
            moved_cost, moved_barrier = problem.value(trial)
            after = moved_cost + mu * moved_barrier
            short = ~(after <= wanted - _SUFFICIENT * length * decrement) & ~done
            if not short.any():
                break
            length = np.where(short, 0.5 * length, length)
        else:
            if np.any(decrement[short] > 1e-3 * mu[short]):
                raise PathplanError(_stuck("a step that lowers the barrier was not found", short, mu))
            moved, trial, moved_cost, moved_barrier = x, state, cost, barrier
            done |= short
        x, state, cost, barrier = moved, trial, moved_cost, moved_barrier
        finished = mu <= final
        small = decrement < np.where(finished, centred if last is None else last, centred) * mu
        done |= small & finished
        if done.all():
            return x, iteration + 1
        mu = np.where(small & ~finished, np.maximum(mu * factor, final), mu)
    raise PathplanError(_stuck(f"not converged in {iterations} Newton steps", ~done, mu))


def newton_step(band: Array, gradient: Array) -> Array:
    """-H^-1 gradient, H positive definite in upper banded form; LAPACK's banded Cholesky solver.

    Where rounding has cost H that, its diagonal is raised by the least of a few tiny shares that mends it: the step
    still lowers the barrier. Raises PathplanError where none does.
    """
    from scipy.linalg.lapack import dpbsv

    for share in _RAISED:
        if share:
            band = band.copy()
            band[-1] *= 1.0 + share
        _, solution, failed = dpbsv(band, gradient)
        if not failed:
            return np.asarray(-solution)
    raise PathplanError("timing: the Newton matrix of the barrier is not positive definite")


def _stuck(what: str, which: NDArray[np.bool_], mu: Array) -> str:
    first = int(np.flatnonzero(which)[0])
    return f"timing: {what} (stretch {first + 1} of {len(which)}, barrier weight {mu[first]:.3g})"
