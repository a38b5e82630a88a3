"""A closed form: what solves an arm of a certain structure, as a value."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Literal

import numpy as np

from pathplan.arm.model import Array

__all__ = ["Form", "Structure", "backwards"]

Structure = Literal[
    "gantry",
    "scara",
    "spherical wrist",
    "spherical shoulder",
    "three meeting axes",
    "three parallel axes",
    "three slides",
    "general",
]


@dataclass(frozen=True)
class Form:
    """`solve(rotation (3, 3, N), shift (3, N))` gives joint values (m, B, N) with E_1 ... E_m = (rotation, shift), or
    near it where there are none (see `pathplan.arm.geometry`).
    """

    structure: Structure
    words: str  # what of the geometry it rests on
    labels: tuple[Mapping[str, str], ...]  # of length B
    steady: bool  # the branch index follows a path by itself, in whatever batch
    solve: Callable[[Array, Array], Array]


def backwards(form: Form, structure: Structure) -> Form:
    """The form of a chain whose reversal `form` solves."""

    return replace(form, structure=structure, solve=_Backwards(form.solve))


@dataclass(frozen=True)
class _Backwards:
    inner: Callable[[Array, Array], Array]

    def __call__(self, rotation: Array, shift: Array) -> Array:
        inverse = np.ascontiguousarray(rotation.swapaxes(0, 1))
        return self.inner(inverse, -np.einsum("ijn,jn->in", inverse, shift))[::-1]
