"""Tool speeds that steps are to hold: over which part of a step they were held, and what stopped it elsewhere.

Held means within `HELD_WITHIN` of the speed asked. Between rows the speed counts as straight over time, so that parts
are good to a small part of a row. The share that is stated first is that of the step's length: a bead is as long as its
line.
"""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from pathplan.auditing.model import Finding
from pathplan.auditing.pacing import PACING
from pathplan.auditing.shares import Array
from pathplan.units import format_quantity

__all__ = ["HELD_WITHIN", "HeldSpeed", "Holding", "Missed", "held_findings", "held_percent"]

HELD_WITHIN = 0.01  # of the speed asked
REST = 1e-3  # of the speed asked: slower is at rest
SLOW = 0.01  # of the speed asked: slower belongs to the start or the end in any case
STEEP = 0.1  # of the speed asked per s: what rises or falls less steeply does not come from a start or go to an end
SPOT = 1e-6  # m: a step that is shorter has no speed to hold
MOST_FINDINGS = 10  # told one by one, those with the smallest shares; --json lists all
MOST_LIMITS = 2  # named of each place
LEAST_LIMIT = 0.1  # of what was missed there, for a limit to be named
ALL = 1 - 5e-4  # of a length is shown as 100 %
LEAST = 1e-9  # part of a step that is told
AT, NEAR_REST, RISES, FALLS, LEVEL = range(5)
_WORDS = {
    "start": "the start from rest",
    "end": "the stop at its end",
    "corner before": "the corner at its beginning",
    "corner after": "the corner at its end",
    "along": "places between",
}


@dataclass(frozen=True)
class Missed:
    """Parts (0..1) of a step's time and length in which the speed was not held, by place and the limit in use there.

    `where` is "start" or "end" (rising from rest at its beginning, falling to rest at its end), "corner before" or
    "corner after" (the same without rest), or "along". `joint` is None for the tool; `quantity` is "none" where no
    limit is in use to 90 %.
    """

    where: str
    joint: str | None
    quantity: str
    time_part: float
    length_part: float


@dataclass(frozen=True)
class HeldSpeed:
    """What became of the tool speed (m/s) that a step is to hold.

    `cap`: the lowest cap on the tool in that step at the pace of the plan, m/s; `reached`: the largest tool speed;
    `length` (m) and `time` (s) of the step, and the parts (0..1) of them with the speed held.
    """

    step: int
    name: str
    speed: float
    cap: float
    reached: float
    length: float
    time: float
    length_part: float
    time_part: float
    begins_at_rest: bool
    ends_at_rest: bool
    missed: tuple[Missed, ...]


class _Run(NamedTuple):
    """Rows of a step that follow one another with one way of the speed and one limit in use, and what they missed."""

    way: int
    label: int
    time: float
    length: float


@dataclass
class _Seen:
    """What is known of a step after the rows so far. `total` and `held`: time and length."""

    first: float  # m/s, speed at its beginning
    last: float = 0.0
    largest: float = 0.0
    total: Array = field(default_factory=lambda: np.zeros(2))
    held: Array = field(default_factory=lambda: np.zeros(2))
    runs: list[_Run] = field(default_factory=list)


class Holding:
    """Goes over a table in pieces and keeps, for every step that is to hold a speed, what was held and what not."""

    def __init__(self, task: Any, caps: Array, labels: Sequence[tuple[str | None, str]], pace: float) -> None:
        """caps (S,) m/s on the tool speed by step; labels of the limits whose shares `add` gets."""
        self.asked: Mapping[int, float] = {
            step.index: step.held_speed for step in (task.steps if task else ()) if step.held_speed is not None
        }
        self.names = {step.index: step.name for step in task.steps} if task else {}
        self.caps, self.pace = caps, pace
        self.labels = [*labels, (None, "none")]
        self.speed_label = self.labels.index((None, "tool speed"))
        self.seen: dict[int, _Seen] = {}
        self.before: float | None = None

    def add(self, speed: Array, step: NDArray[np.int64], times: Array, shares: Array) -> None:
        """Of the next rows: tool speed (N,) m/s, step (N,), time since the row before (N,) s, shares (N, L)."""
        if not self.asked:
            return
        speed = np.where(np.isfinite(speed), speed, 0.0)
        before = np.concatenate([[speed[0] if self.before is None else self.before], speed[:-1]])
        self.before = float(speed[-1])
        for number in np.unique(step).tolist():
            if number in self.asked:
                mine = step == number
                self._add(number, before[mine], speed[mine], times[mine], shares[mine])

    def _add(self, number: int, before: Array, speed: Array, times: Array, shares: Array) -> None:
        asked = self.asked[number]
        low, high = (1 - HELD_WITHIN) * asked, (1 + HELD_WITHIN) * asked
        seen = self.seen.setdefault(number, _Seen(float(before[0])))
        seen.last, seen.largest = float(speed[-1]), max(seen.largest, float(speed.max()))
        total = np.stack([times, times * (before + speed) / 2])
        held = _above(before, speed, times, low) - _above(before, speed, times, high)
        seen.total += total.sum(axis=1)
        seen.held += held.sum(axis=1)
        way, label, missed = _ways(before, speed, times, asked), self._label(number, speed, shares), total - held
        first = np.flatnonzero(np.diff(way, prepend=-1) | np.diff(label, prepend=-1))
        sums = np.add.reduceat(missed, first, axis=1)
        for k, i in enumerate(first.tolist()):
            run = _Run(int(way[i]), int(label[i]), float(sums[0, k]), float(sums[1, k]))
            last = seen.runs[-1] if seen.runs else None
            if last is not None and (last.way, last.label) == (run.way, run.label):
                seen.runs[-1] = _Run(run.way, run.label, last.time + run.time, last.length + run.length)
            else:
                seen.runs.append(run)

    def _label(self, number: int, speed: Array, shares: Array) -> NDArray[np.intp]:
        """Index (N,) of the limit in use; the tool's own speed only where a cap below the speed asked is."""
        known = np.where(np.isnan(shares), 0.0, shares)
        known[:, self.speed_label] = 0.0
        label = np.where(known.max(axis=1) >= PACING, np.argmax(known, axis=1), len(self.labels) - 1)
        capped = speed >= (1 - 1e-3) * self.cap(number)
        return np.where(capped & (self.cap(number) < self.asked[number]), self.speed_label, label)

    def cap(self, number: int) -> float:
        """The lowest cap on the tool speed of a step at the pace of the plan, m/s."""
        return float(min(self.caps[min(number, len(self.caps) - 1)], self.asked[number])) * self.pace

    def found(self) -> tuple[HeldSpeed, ...]:
        """All steps, in order."""
        return tuple(self._found(number, seen) for number, seen in sorted(self.seen.items()))

    def _found(self, number: int, seen: _Seen) -> HeldSpeed:
        asked = self.asked[number]
        begins, ends = seen.first <= REST * asked, seen.last <= REST * asked
        whole = np.where(seen.total > 0, seen.total, 1.0)
        up, down = _ends(seen.runs)
        sums: dict[tuple[str, int], Array] = {}
        for k, run in enumerate(seen.runs):
            where = "along"
            if k < up:
                where = "start" if begins else "corner before"
            elif k >= down:
                where = "end" if ends else "corner after"
            sums[where, run.label] = sums.get((where, run.label), 0.0) + np.array([run.time, run.length]) / whole
        missed = [
            Missed(where, *self.labels[label], *parts.tolist())
            for (where, label), parts in sums.items()
            if parts.max() > LEAST
        ]
        held = (seen.held / whole).tolist()
        return HeldSpeed(
            number,
            self.names.get(number, ""),
            speed=asked,
            cap=self.cap(number),
            reached=seen.largest,
            length=float(seen.total[1]),
            time=float(seen.total[0]),
            length_part=held[1],
            time_part=held[0],
            begins_at_rest=begins,
            ends_at_rest=ends,
            missed=tuple(missed),
        )


def _ways(before: Array, speed: Array, times: Array, asked: float) -> NDArray[np.intp]:
    """What the speed of each row does: at the one asked, rising, falling, level, or near rest."""
    steep = STEEP * asked * times
    there = (speed >= (1 - HELD_WITHIN) * asked) & (speed <= (1 + HELD_WITHIN) * asked)
    ways = [there, speed <= SLOW * asked, speed - before > steep, before - speed > steep]
    return np.select(ways, [AT, NEAR_REST, RISES, FALLS], LEVEL)


def _ends(runs: Sequence[_Run]) -> tuple[int, int]:
    """How many runs lead up to the first maximum of the speed, or to the speed asked; the first of those that lead down
    from the last of either.
    """

    def lead(ways: Sequence[int], going: int, *, last: bool) -> int:
        gone = False
        for k, way in enumerate(ways):
            if way == AT or (gone and way not in (going, NEAR_REST)):
                return (k + (way == AT and last)) if gone else 0
            gone = gone or way == going
        return len(ways) if gone else 0

    ways = [run.way for run in runs]
    up = lead(ways, RISES, last=True)  # a row that comes to the speed asked is one of those that lead there
    return up, max(up, len(ways) - lead(ways[::-1], FALLS, last=False))


def _above(before: Array, speed: Array, times: Array, level: float) -> Array:
    """Time and length (2, N) above a level of intervals over which the speed goes straight from `before` to `speed`."""
    low, high = np.minimum(before, speed), np.maximum(before, speed)
    rise = high - low
    part = np.where(rise > 0, np.clip((high - level) / np.where(rise > 0, rise, 1.0), 0.0, 1.0), high >= level)
    return np.stack([part * times, part * times * (high + np.maximum(low, level)) / 2])


def held_findings(found: Sequence[HeldSpeed], task: Any, pace: float) -> Iterator[Finding]:
    """What became of the speeds to be held, in words: smallest shares one by one; together what was held throughout."""
    short = sorted((held for held in found if held.length_part < ALL), key=lambda held: held.length_part)
    whole = [held for held in found if held.length_part >= ALL]
    for held in sorted(short[:MOST_FINDINGS], key=lambda held: held.step):
        text = f"{_name(held)}: {_text(held, task, pace)}"
        value, limit = (None, None) if held.length < SPOT else (held.reached, held.speed)
        yield Finding("warning", text, step=held.step, quantity="tool speed", value=value, limit=limit)
    left = short[MOST_FINDINGS:]
    if left:
        least, most = (held_percent(held.length_part) for held in (left[0], left[-1]))
        steps = f"{len(left)} more step{'s' * (len(left) > 1)}"
        text = f"{steps} with a tool speed to be held: held over {least} to {most} of the length"
        yield Finding("warning", text, step=left[0].step, quantity="tool speed")
    if whole:
        within = format_quantity(HELD_WITHIN, "ratio")
        names = f"{len(whole)} steps" if len(whole) > 1 else _name(whole[0])
        verb, whose = ("hold", "their") if len(whole) > 1 else ("holds", "its")
        text = f"{names} {verb} {whose} tool speed to {within} over {whose} whole length"
        yield Finding("note", text, step=whole[0].step, quantity="tool speed")
    for held in found:
        carrier = task.carrier(task.steps[held.step])
        if carrier is not None:
            text = f"{_name(held)}: its tool speed counts in the base frame; over the workpiece that {carrier} carries"
            yield Finding("warning", f"{text} it is another while that moves", step=held.step, quantity="tool speed")
            return  # said once


def _name(held: HeldSpeed) -> str:
    return f"step {held.step + 1}{f' ({held.name})' if held.name else ''}"


def _text(held: HeldSpeed, task: Any, pace: float) -> str:
    speed = format_quantity(held.speed, "speed")
    if held.length < SPOT:
        return f"there is no speed to hold, the tool stays on the spot (asked: {speed})"
    if held.cap < (1 - HELD_WITHIN) * held.speed:
        return f"{speed} is not held at all: {_why_slower(held, task, pace)}"
    if not held.length_part:
        return f"{speed} is never reached, at most {format_quantity(held.reached, 'speed')} ({_limits(held.missed)})"
    within = format_quantity(HELD_WITHIN, "ratio")
    text = f"{speed} is held to {within} over {held_percent(held.length_part)} of its length"
    text += f" ({held_percent(held.time_part)} of its time)"
    text += "; not in " + ", ".join(_places(held))
    rest = [word for word, at in (("run-in", held.begins_at_rest), ("run-out", held.ends_at_rest)) if at]
    if rest:
        verb = "lies" if len(rest) == 1 else "lie"
        text += f"; its {' and '.join(rest)} {verb} on the work: blend with a step of the same speed"
    return text


def _places(held: HeldSpeed) -> Iterator[str]:
    """What stopped it and where: 'the start from rest (1.4 %: pitch jerk)'; at least the largest place."""
    parts = {where: sum(m.length_part for m in held.missed if m.where == where) for where in _WORDS}
    least = min(1 - ALL, max(parts.values()))
    for where, part in parts.items():
        if part >= least:
            limits = _limits([m for m in held.missed if m.where == where])
            yield f"{_WORDS[where]} ({held_percent(part)}: {limits})"


def _limits(missed: Sequence[Missed]) -> str:
    """The limits in use, the longest first."""
    times: dict[str, float] = {}
    for m in missed:
        name = f"{m.joint or ''} {m.quantity}".strip() if m.quantity != "none" else "no limit in use"
        times[name] = times.get(name, 0.0) + m.time_part
    order = sorted(times, key=lambda name: -times[name])
    named = [name for name in order[:MOST_LIMITS] if times[name] >= LEAST_LIMIT * sum(times.values())]
    return ", ".join(named)


def held_percent(part: float, decimals: int = 1) -> str:
    """A part of a step, rounded down so that 100 % is said of the whole alone."""
    shown = 1.0 if part >= ALL else math.floor(100 * 10**decimals * part) / 100 / 10**decimals
    return f"{100 * shown:.{decimals}f} %"


def _why_slower(held: HeldSpeed, task: Any, pace: float) -> str:
    """Which cap or pace lets the tool never go as fast as asked."""
    step = task.steps[held.step]
    cap = held.cap / pace
    if cap >= (1 - HELD_WITHIN) * held.speed:
        slow = format_quantity(held.cap, "speed")
        return f"the pace of {format_quantity(pace, 'ratio')} slows it to {slow} at most"
    whose = f"tool {step.tool}" if step.tool else "the tool"
    if task.speed is not None and task.speed <= cap:
        whose = "the whole task"
    elif step.speed is not None and step.speed <= cap:
        whose = "the step or the file it stands in"
    return f"the tool speed of {whose} is capped at {format_quantity(cap, 'speed')}"
