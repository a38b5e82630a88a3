"""What became of the cycle time from one plan of a task to the next, step by step."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from difflib import SequenceMatcher

from pathplan.report.gather import Picture
from pathplan.report.markup import esc, tag
from pathplan.report.plan_data import bound_at_pace
from pathplan.report.screen import verdict
from pathplan.report.sections import section, table
from pathplan.report.text import clock

__all__ = ["Change", "Gist", "changes", "changes_section", "gist_of", "signed"]

MOST_STEPS = 200
NOTHING = 5e-5  # s: less than any time that is shown


@dataclass(frozen=True)
class Gist:
    """What of a plan is held against the next one. Times in s; `steps`: (what the step is known by, its time)."""

    verdict: str
    times: tuple[tuple[str, float], ...]  # what -> s
    steps: tuple[tuple[str, float], ...]


@dataclass(frozen=True)
class Change:
    """A time before and now, s; None where there was or is no such step."""

    what: str
    before: float | None
    now: float | None

    @property
    def by(self) -> float:
        return (self.now or 0.0) - (self.before or 0.0)


def gist_of(picture: Picture) -> Gist:
    """The gist of a plan's picture."""
    plan = picture.plan
    assert plan is not None
    times = (
        ("cycle time", plan.duration),
        ("motion", plan.duration - plan.waiting_time),
        ("waiting", plan.waiting_time),
        ("bound", bound_at_pace(plan)),
    )
    spent = {step.step: step.duration for step in picture.audit.pacing}
    steps = tuple((step.name or step.motion, spent.get(step.index, 0.0)) for step in plan.task.steps)
    return Gist(verdict(picture.audit), times, steps)


def changes(before: Gist, now: Gist) -> tuple[Change, ...]:
    """Cycle time, motion, waiting and bound; then the steps in the order of now, those that went where they were.

    Steps are matched by what they are known by (name or motion) and their order.
    """
    found = [Change(what, old, new) for (what, old), (_, new) in zip(before.times, now.times, strict=True)]
    old, new = before.steps, now.steps
    matcher = SequenceMatcher(None, [name for name, _ in old], [name for name, _ in new], autojunk=False)
    for kind, i0, i1, j0, j1 in matcher.get_opcodes():
        if kind == "equal" or (kind == "replace" and i1 - i0 == j1 - j0):  # renamed, as far as can be told
            pairs = zip(old[i0:i1], range(j0, j1), strict=True)
            found += [Change(_label(j, new[j][0]), was, new[j][1]) for (_, was), j in pairs]
        else:
            found += [Change(f"{name} (gone)", was, None) for name, was in old[i0:i1]]
            found += [Change(f"{_label(j, new[j][0])} (new)", None, new[j][1]) for j in range(j0, j1)]
    return tuple(found)


def _label(index: int, name: str) -> str:
    return f"{index + 1} {name}"


def signed(seconds: float) -> str:
    """'+0.12 s', '-0.12 s', or 'same'."""
    if abs(seconds) < NOTHING:
        return "same"
    return ("+" if seconds > 0 else "-") + _clock(abs(seconds))


def _clock(seconds: float) -> str:
    """To a tenth of a millisecond."""
    return clock(round(seconds, 4))


def changes_section(before: Gist, now: Gist) -> str:
    """The comparison as a section of the live page."""
    found = changes(before, now)
    total = found[0].by
    words = "The cycle time is the same as in the last plan."
    if abs(total) >= NOTHING:
        words = f"The cycle time is {clock(abs(total))} {'longer' if total > 0 else 'shorter'} than in the last plan."
    if before.verdict != now.verdict:
        words += f" Before: {before.verdict}; now: {now.verdict}."
    shown = [change for change in found[4:] if abs(change.by) >= NOTHING or None in (change.before, change.now)]
    rows = [list(_cells(change)) for change in (*found[:4], *shown[:MOST_STEPS])]
    left = len(found) - 4 - len(shown)
    more = f"{left} step{'s' * (left != 1)} as before." if left else ""
    body = table("Against the last plan", ["", "before", "now", "change"], rows, numbers=(1, 2, 3), small=True)
    return section("changes", "Against the last plan", tag("p", esc(words)), body, tag("p", more, class_="small"))


def _cells(change: Change) -> Iterator[str]:
    yield esc(change.what)
    for time in (change.before, change.now):
        yield "–" if time is None else _clock(time)
    kind = "worse" if change.by >= NOTHING else "better" if change.by <= -NOTHING else None
    yield tag("span", signed(change.by), class_=kind)
