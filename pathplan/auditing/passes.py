"""Where a planned tool path comes near a singularity, and what that costs."""

from __future__ import annotations

from collections.abc import Iterable, Iterator
from dataclasses import dataclass

import numpy as np

from pathplan.auditing.model import Finding
from pathplan.auditing.shares import Array
from pathplan.path.refusals import place_text
from pathplan.path.singular import Nearness, distance_words, singular_words
from pathplan.units import format_quantity

__all__ = ["NEAR", "Dip", "Pass", "pass_findings", "speed_dip"]

NEAR = 0.02  # smallest singular value below which a path counts as near a singularity
_AT_END = 1e-9  # share of a step
THROUGH = 1e-6  # and up to which it runs through it
_FALL = 0.1  # by which the speed falls again behind a peak: further on, something else holds the tool
_HELD = 0.9  # of the speed on both sides: a tool that is slower is held
_WORTH_SAYING = 5e-3  # s


@dataclass(frozen=True)
class Dip:
    """A tool held up on its way: rows of the peaks on both sides and of the least speed between, and the time lost.

    `lost` (s) is against the same way with the speed going evenly from one peak to the other; 0 where the tool is not
    held: slower than 90 % of the lower peak.
    """

    before: int
    slowest: int
    behind: int
    lost: float


@dataclass(frozen=True, eq=False)
class Pass:
    """A planned line, arc or curve comes nearest to a singularity.

    `value`: smallest singular value of the Jacobian; `angle` and `distance` as in `pathplan.path.singular`. `joint`
    (a row of the limits), `speed` of the tool (m/s; rad/s where `turning`: it only turns) and `lost` (s): what holds
    the tool there, to what speed, and the time that costs, see `Dip`; None and 0 where nothing does.
    """

    step: int
    time: float  # s
    share: float  # of the step
    pose: Array  # (4, 4)
    kind: str
    value: float
    angle: float | None
    distance: float | None
    joint: str | None = None
    speed: float | None = None
    turning: bool = False
    lost: float = 0.0

    @property
    def through(self) -> bool:
        return self.value <= THROUGH


def speed_dip(time: Array, speed: Array, low: int, high: int) -> Dip:
    """How a tool is held among rows low to high of one step, from times (N,) s and speeds (N,) of all its rows.

    From the slowest of these rows the peaks are looked for on both sides, up to where the speed has fallen a tenth
    below a peak.
    """
    slowest = low + int(np.argmin(speed[low : high + 1]))
    before = slowest - _peak(speed[slowest::-1])
    behind = slowest + _peak(speed[slowest:])
    if speed[slowest] >= _HELD * min(speed[before], speed[behind]):
        return Dip(before, slowest, behind, 0.0)
    way = float(np.trapezoid(speed[before : behind + 1], time[before : behind + 1]))
    evenly = 2.0 * way / float(speed[before] + speed[behind])
    return Dip(before, slowest, behind, max(0.0, float(time[behind] - time[before]) - evenly))


def _peak(speed: Array) -> int:
    """The row of the first peak of speeds (N,), counted from the first of them."""
    highest = np.maximum.accumulate(speed)
    fallen = np.flatnonzero(speed < (1.0 - _FALL) * highest)
    return int(np.argmax(speed[: fallen[0]] if len(fallen) else speed))


def pass_findings(passes: Iterable[Pass]) -> Iterator[Finding]:
    """A note for each pass."""
    for found in passes:
        near = Nearness(found.kind, found.value, found.angle, found.distance)
        yield Finding("note", _text(found, near), found.time, found.step)


def _text(found: Pass, near: Nearness) -> str:
    name, place = singular_words(near.kind), place_text(found.pose).split(", rpy")[0]
    away = f"{distance_words(near)} from {name}" if distance_words(near) else f"{name} (smallest singular value"
    away += "" if distance_words(near) else f" {near.value:.2g})"
    met = "starts in" if found.share <= _AT_END else "ends in" if found.share >= 1.0 - _AT_END else "runs through"
    text = f"step {found.step + 1}: {f'{met} {name}' if found.through else f'passes {away}'} at {place}"
    if found.lost < _WORTH_SAYING or found.speed is None:
        return f"{text}, no time lost"
    speed = format_quantity(found.speed, "angular_speed" if found.turning else "speed", 3)
    holds = f"joint {found.joint} holds" if found.joint else "the joints' limits hold"
    return f"{text}: {holds} the tool to {speed} here, {format_quantity(found.lost, 'time', 2)} lost"
