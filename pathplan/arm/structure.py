"""What structure the axes make, judged from their geometry at q = 0 and never from a name or the form of a
file."""

from __future__ import annotations

from collections.abc import Callable, Collection, Iterator
from dataclasses import replace
from functools import partial
from typing import TYPE_CHECKING

import numpy as np

from pathplan.arm.closed_form import gantry, scara
from pathplan.arm.geometry import EXACT, Geometry, Tolerance, meeting_point, zero_axes
from pathplan.arm.inverse_form import Form, Structure, backwards
from pathplan.arm.kinematics import forward, jacobian
from pathplan.arm.model import Array
from pathplan.arm.parallels import inner_parallel, outer_parallel
from pathplan.arm.wrists import meeting_elsewhere, three_slides, wrist

if TYPE_CHECKING:
    from pathplan.arm.arm import Arm

__all__ = ["COMPONENTS", "geometry_of", "meeting_point", "recognise", "served_components", "zero_axes"]

COMPONENTS = ("x", "y", "z", "rotation about x", "rotation about y", "rotation about z")


def geometry_of(arm: Arm, q: Array | None = None, held: Collection[int] = ()) -> Geometry:
    """The axes of an arm between base and tool as they stand at q = 0, or at q (n,) with joints `held` left out: those
    stand still at their value in q, the others count from it.
    """
    points, axes, zero_pose = zero_axes(arm, q)
    kinds = tuple(arm.joints[i].kind for i in arm.tool_joints)
    main = kinds.index("revolute") if "revolute" in kinds else 0
    # Up is the side of the main axis that opposes gravity; of a level main axis, its own positive side.
    against = -float(axes[main] @ arm.gravity)
    up = axes[main] * (-1.0 if against < -1e-6 else 1.0)
    numbers = tuple(i + 1 for i in arm.tool_joints)
    whole = Geometry(kinds, points, axes, zero_pose, up, arm.length, numbers=numbers)
    free = [k for k, i in enumerate(arm.tool_joints) if i not in held]
    return replace(whole.of(free), zero_pose=zero_pose)


def recognise(g: Geometry, tolerance: Tolerance = EXACT) -> Form | None:
    """The closed form that fits the axes within a tolerance, None if none does.

    Of several forms one with steady branches is taken.
    """
    unsteady = None
    for form in forms(g, tolerance):
        if form.steady:
            return form
        unsteady = unsteady or form
    return unsteady


def forms(g: Geometry, tolerance: Tolerance = EXACT) -> Iterator[Form]:
    """Every closed form that fits the axes, in order of preference."""
    g = replace(g, tolerance=tolerance)
    found = (form for make in (_FORMS_OF_SIX if g.m == 6 else _FORMS_OF_FOUR if g.m == 4 else ()) if (form := make(g)))
    return found


def _backwards(make: Callable[[Geometry], Form | None], structure: Structure, g: Geometry) -> Form | None:
    """The form of the reversed chain. What its labels say holds for the chain read backwards: they become numbers."""
    form = make(g.reversed())
    if form is None:
        return None
    labels = tuple({"branch": str(k + 1)} if form.steady else {} for k in range(len(form.labels)))
    return backwards(replace(form, labels=labels), structure)


_FORMS_OF_FOUR: tuple[Callable[[Geometry], Form | None], ...] = (gantry, scara)
_FORMS_OF_SIX: tuple[Callable[[Geometry], Form | None], ...] = (
    wrist,
    inner_parallel,
    partial(_backwards, wrist, "spherical shoulder"),
    partial(_backwards, inner_parallel, "three parallel axes"),
    three_slides,
    meeting_elsewhere,
    partial(_backwards, meeting_elsewhere, "three meeting axes"),
    outer_parallel,
    partial(_backwards, outer_parallel, "three parallel axes"),
)


def served_components(arm: Arm) -> frozenset[str]:
    """See `Arm.serves`: the twist components that lie in the range of the Jacobian at configurations in
    general position."""
    generator = np.random.default_rng(7)
    served = set(COMPONENTS)
    for jac in jacobian(arm, generator.uniform(-1.0, 1.0, (4, arm.n))):
        jac[:3] /= arm.length
        left, size, _ = np.linalg.svd(jac, full_matrices=False)
        basis = left[:, size > 1e-9 * size[0]]
        inside = np.linalg.norm(basis, axis=1) > 1.0 - 1e-9
        served &= {name for name, is_in in zip(COMPONENTS, inside, strict=True) if is_in}
    return frozenset(served)


def serves_pointing(arm: Arm) -> bool:
    """See `Arm.serves_pointing`."""
    q = np.random.default_rng(7).uniform(-1.0, 1.0, (4, arm.n))
    for pose, jac in zip(forward(arm, q), jacobian(arm, q), strict=True):
        rows = np.vstack([jac[:3] / arm.length, pose[:3, :2].T @ jac[3:]])
        if np.linalg.svd(rows, compute_uv=False)[-1] < 1e-9:
            return False
    return True
