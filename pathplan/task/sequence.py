"""The steps of a task in the order in which they are carried out: repeats unrolled, included files read, tools changed.

[[step]]            a step that repeats others, or itself:
    repeat          the name of a pattern: once at each of its places, in order, where its name is the pose there
                    and, as a frame, the axes of the pattern's frame moved to that place; or a list of names of
                    poses, with `as`; or a number of times
    as              the name that means each of the poses of such a list in turn, as a pose and as a frame
    with            further patterns (one name or several) of as many places, which go along place by place
[[step.step]]       the steps that are repeated, if not the step itself; they may repeat others in turn

[[step]]            a step that stands for the steps of another task file:
    include         the file, relative to this one. Its frames, poses, patterns and curves are its own; its speed
                    and acceleration cap its steps too. Its arm, tool and payload, where it names them, must be
                    those that are carried here; cycle, start and return are for when it is planned by itself
    frame           where its base frame comes to lie, default "base"; joint positions stay as they are

In any other step:
    tool, payload   names of the arm's, or "none": carried from this step on; the arm stops before it
"""

from __future__ import annotations

import hashlib
from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from pathlib import Path, PurePosixPath
from typing import Any

from pathplan.arm import Arm
from pathplan.arm.arm import NOTHING
from pathplan.errors import InputError
from pathplan.task.model import Step, Target
from pathplan.task.places import Places, read_places
from pathplan.task.steps import Caps, read_caps, read_step
from pathplan.tomlfile import Problems, Table, listed, nearest, read_toml
from pathplan.units import toml_text

__all__ = ["MAX_STEPS", "Reader", "carried"]

MAX_STEPS = 100_000
DEEPEST = 8  # repeats inside repeats, and files included by files
_TOGETHER = ("repeat", "as", "with")


@dataclass(frozen=True)
class _Around:
    """What a step stands in: the places as they are there, caps, and words that tell where that is."""

    places: Places
    caps: Caps
    folder: Path
    label: PurePosixPath  # the folder as seen from the task's own
    words: str = ""
    depth: int = 0
    files: tuple[Path, ...] = ()  # that include one another, the outermost first


@dataclass(frozen=True)
class _File:
    """An included file, read once."""

    root: Table
    places: Places
    caps: Caps
    steps: list[Table]


@dataclass
class Reader:
    """Reads steps one after the other; `steps` and `sources` grow, `arm` is what is carried at the moment."""

    arm: Arm
    problems: Problems
    steps: list[Step] = field(default_factory=list)
    sources: dict[str, str] = field(default_factory=dict)
    _written: list[Table] = field(default_factory=list)  # where each step stands
    _files: dict[Path, _File] = field(default_factory=dict)
    _arms: dict[tuple[str, str | None], Arm] = field(default_factory=dict)
    _full: bool = False

    def read(self, root: Table, file: Path, places: Places, caps: Caps, *, returns: bool) -> None:
        """All steps of a task file. `returns`: a way back to the start follows the last."""
        tables = root.tables("step")
        if not tables:
            raise root.error("step", "expected at least one step [[step]], got none")
        if len(tables) > MAX_STEPS:
            raise root.error("step", f"expected at most {MAX_STEPS} steps, got {len(tables)}")
        around = _Around(places, caps, file.parent, PurePosixPath(), files=(_resolved(file),))
        self._sequence(tables, around)
        if self.problems.found:
            return
        self._check_stops(returns=returns)
        if all(step.motion == "wait" for step in self.steps):
            raise root.error("step", "expected at least one step that moves, got only waits")

    def _sequence(self, tables: Sequence[Table], around: _Around) -> None:
        for table in tables:
            if self._full:
                return  # what else is wrong would be said of a task that nobody can mean
            with self.problems.gather():
                if table.has("include"):
                    self._include(table, around)
                elif table.has("repeat"):
                    self._repeat(table, around)
                elif table.has("step"):
                    raise table.error("step", "steps inside a step go with repeat, which is missing")
                else:
                    self._single(table, around)

    def _single(self, table: Table, around: _Around) -> None:
        for key in ("as", "with"):
            if table.has(key):
                raise table.error(key, f"{key} goes with repeat, which is missing")
        arm = carried(table, self.arm, self._arms)
        self._full = len(self.steps) >= MAX_STEPS
        if self._full:
            raise InputError.at(table.where, f"expected at most {MAX_STEPS} steps with all repeats, got more")
        where = table.where + around.words
        step = read_step(table, len(self.steps), where, around.places.carrying(arm), around.caps)
        table.finish()
        self.arm = arm
        self.steps.append(step)
        self._written.append(table)

    def _repeat(self, table: Table, around: _Around) -> None:
        if around.depth >= DEEPEST:
            raise table.error("repeat", f"repeats stand in one another more than {DEEPEST} deep")
        rounds = _rounds(table, around.places)
        if table.has("step"):
            _only(table, (*_TOGETHER, "step"), "a step that repeats others takes only repeat, as and with beside them")
            tables = table.tables("step")
            if not tables:
                raise table.error("step", "expected at least one step to repeat, got none")
        else:
            own = {key: value for key, value in table.data.items() if key not in _TOGETHER}
            tables = [Table(own, table.file, table.path, problems=self.problems)]
        self._check_count(table, len(rounds), tables, around)
        found = len(self.problems.found)
        for label, names in rounds:
            places = around.places
            for name, target in names.items():
                places = places.at(name, target)
            words = f"{around.words} at {label}"
            self._sequence(tables, replace(around, places=places, words=words, depth=around.depth + 1))
            if len(self.problems.found) > found:
                return  # the same would be said at every place

    def _check_count(self, table: Table, rounds: int, tables: Sequence[Table], around: _Around) -> None:
        """Refuse what would be too much before it is read."""
        least = rounds * sum(_least(inner, around.places) for inner in tables)
        if len(self.steps) + least > MAX_STEPS:
            expected = f"expected at most {MAX_STEPS} steps with all repeats"
            raise table.error("repeat", f"{expected}, got {rounds} rounds that make {least} steps")

    def _include(self, table: Table, around: _Around) -> None:
        _only(table, ("include", "frame"), "a step that includes a file takes only frame beside it")
        name = table.text("include")
        tie = around.places.tie(table.text("frame", "base"), table.at("frame"))
        path = around.folder / name
        resolved = _resolved(path)
        if resolved in around.files:
            chain = [*around.files[around.files.index(resolved) :], resolved]
            shown = " -> ".join(file.name for file in chain)
            raise table.error("include", f"files include each other: {shown}")
        if len(around.files) > DEEPEST:
            raise table.error("include", f"files include one another more than {DEEPEST} deep")
        if not path.exists():
            raise table.error("include", f"no such file {toml_text(name)}")
        label = around.label / PurePosixPath(name)
        if resolved not in self._files:
            self._files[resolved] = self._file(path, label)
        file = self._files[resolved]
        _check_carried(file.root, self.arm, table.where)
        self._sequence(
            file.steps,
            replace(
                around,
                places=file.places.under(tie).carrying(self.arm),
                caps=file.caps.within(around.caps),
                folder=path.parent,
                label=label.parent,
                words=f" (from {table.where}{around.words})",
                files=(*around.files, resolved),
            ),
        )

    def _file(self, path: Path, label: PurePosixPath) -> _File:
        """Read an included file; its problems are raised together."""
        data, digest = read_toml(path)
        problems = Problems()
        root = Table(data, path.name, problems=problems)
        with problems.gather():
            root.text("title", None)
            _check_arm(root, path.parent, self.arm)
            for key in ("cycle", "start", "return", "tool", "payload"):
                root.has(key)
        caps = Caps()
        with problems.gather():
            caps = read_caps(root)
        places, sources = read_places(root, self.arm, problems, path.parent)
        steps: list[Table] = []
        with problems.gather():
            steps = root.tables("step")
            if not steps:
                raise root.error("step", "expected at least one step [[step]], got none")
        root.finish()
        problems.check()
        for table in steps:
            table.problems = self.problems
        self.sources[_shown(label)] = digest
        self.sources |= {_shown(label.parent / name): sha for name, sha in sources.items()}
        return _File(root, places, caps, steps)

    def _check_stops(self, *, returns: bool) -> None:
        """Refuse a blend where the arm must stop; where it need not in other rounds of a repeat, it is left off."""
        needless: dict[int, str] = {}
        useful: set[int] = set()
        dropped: list[int] = []
        for i, (step, table) in enumerate(zip(self.steps, self._written, strict=True)):
            if step.blend is None:
                continue
            why = self._why_stop(i, returns=returns)
            if not why:
                useful.add(id(table))
            else:
                needless.setdefault(id(table), why)
                dropped += [i] if i == len(self.steps) - 1 else []
        for table in self._written:
            if id(table) in needless and id(table) not in useful:
                with self.problems.gather():
                    raise table.error("blend", needless.pop(id(table)))
        for i in dropped:
            self.steps[i] = replace(self.steps[i], blend=None)

    def _why_stop(self, i: int, *, returns: bool) -> str:
        """Why the arm stops after step i in any case, "" if it need not."""
        step = self.steps[i]
        if i + 1 == len(self.steps):
            return "" if returns else "the last step ends at a stop point"
        following = self.steps[i + 1]
        there = self._written[i + 1]
        shown = there.path if there.file == self._written[i].file else there.where
        if following.motion == "wait":
            return f"{shown} is a wait, so this step ends at a stop point"
        for what in ("tool", "payload"):
            if getattr(following, what) != getattr(step, what):
                return f"the {what} changes at {shown}, so this step ends at a stop point"
        return ""


def _only(table: Table, keys: Sequence[str], complaint: str) -> None:
    for key in table.data:
        if key not in keys:
            hint = nearest(key, keys)
            raise table.error(key, f"unknown key{hint}" if hint else complaint)


def carried(table: Table, arm: Arm, made: dict[tuple[str, str | None], Arm]) -> Arm:
    """The arm with the tool and payload that a table names; what it does not name stays. `made`: arms so far."""
    names = {}
    for key, things in (("tool", arm.tools), ("payload", arm.payloads)):
        name = table.text(key, None)
        if name is not None and name != NOTHING and name not in things:
            hint = nearest(name, [*things, NOTHING])
            raise table.error(key, f"arm {arm.name} has no {key} {toml_text(name)}{hint}")
        names[key] = name
    if names == {"tool": None, "payload": None}:
        return arm
    tool = names["tool"] or arm.tool.name
    payload = names["payload"] or (arm.payload.name if arm.payload is not None else NOTHING)
    if (tool, payload) not in made:
        # A tool or payload that the arm carries need not be one of those it knows by name.
        own_tool, own_payload = tool == arm.tool.name, arm.payload is not None and payload == arm.payload.name
        made[tool, payload] = arm.equipped(
            tool=arm.tool if own_tool else tool, payload=arm.payload if own_payload else payload
        )
    return made[tool, payload]


def _rounds(table: Table, places: Places) -> list[tuple[str, dict[str, Target]]]:
    """What is repeated: words for each round, and what names mean in it."""
    value: Any = table.take("repeat")
    if type(value) is int:
        for key in ("as", "with"):
            if table.has(key):
                raise table.error(key, f"{key} goes with places to repeat over, not with a number of times")
        if not 1 <= value <= MAX_STEPS:
            raise table.error("repeat", f"expected 1 to {MAX_STEPS} times, got {toml_text(value)}")
        return [(f"round {k + 1} of {value}", {}) for k in range(value)]
    if isinstance(value, list):
        rounds = _named_rounds(table, value, places)
    elif isinstance(value, str):
        if table.has("as"):
            raise table.error("as", "goes with a list of names, a pattern has its own name")
        rounds = _places_of(table, "repeat", value, places)
    else:
        expected = "expected the name of a pattern, a list of names of poses, or a number of times"
        raise table.error("repeat", f"{expected}, got {toml_text(value)}")
    also = table.take("with", [])
    for name in also if isinstance(also, list) else [also]:
        if not isinstance(name, str):
            raise table.error("with", f"expected names of patterns, got {toml_text(also)}")
        if name in rounds[0][1]:
            raise table.error("with", f"{toml_text(name)} is repeated already")
        others = _places_of(table, "with", name, places)
        if len(others) != len(rounds):
            raise table.error("with", f"pattern {toml_text(name)} has {len(others)} places, expected {len(rounds)}")
        rounds = [
            (f"{words}, {more}", {**names, **other})
            for (words, names), (more, other) in zip(rounds, others, strict=True)
        ]
    return rounds


def _places_of(table: Table, key: str, name: str, places: Places) -> list[tuple[str, dict[str, Target]]]:
    if name not in places.patterns:
        raise table.error(key, f"no pattern {toml_text(name)} in [patterns]{nearest(name, places.patterns)}")
    if name in places.here:
        raise table.error(key, f"pattern {toml_text(name)} is repeated by a step around this one already")
    pattern = places.patterns[name]
    places.tie(pattern.frame, table.at(key))
    pairs = zip(pattern.labels, pattern.places, strict=True)
    return [(label, {name: place}) for label, place in pairs]


def _named_rounds(table: Table, value: list[Any], places: Places) -> list[tuple[str, dict[str, Target]]]:
    if not value or not all(isinstance(name, str) for name in value):
        raise table.error("repeat", f"expected a list of names of poses, got {toml_text(value)}")
    alias = table.text("as")
    if alias in (*places.names(), *places.ties, *places.moving):
        raise table.error("as", f"{toml_text(alias)} means something already, expected a name that is free")
    found = []
    for number, name in enumerate(value, start=1):
        target = places.named(name, f"{table.at('repeat')}[{number}]")
        found.append((f"{alias} = {toml_text(name)}", {alias: target}))
    return found


def _least(table: Table, places: Places) -> int:
    """How many steps a table stands for at least."""
    value = table.data.get("repeat")
    inner = table.data.get("step")
    steps = 1
    if isinstance(inner, list) and value is not None:
        steps = sum(_least(Table(row, table.file), places) for row in inner[:MAX_STEPS] if isinstance(row, dict))
    if type(value) is int:
        return max(value, 1) * steps
    if isinstance(value, list):
        return max(len(value), 1) * steps
    pattern = places.patterns.get(value) if isinstance(value, str) else None
    return (1 if pattern is None else len(pattern.places)) * steps


def _check_arm(root: Table, folder: Path, arm: Arm) -> None:
    """An included file that names an arm must mean the same."""
    name = root.text("arm", None)
    if name is None or arm.file is None:
        return
    try:
        digest = hashlib.sha256((folder / name).read_bytes()).hexdigest()
    except (OSError, ValueError):
        raise root.error("arm", f"no such file {toml_text(name)}") from None
    if digest not in arm.sources.values():
        raise root.error("arm", f"{toml_text(name)} is another arm than {arm.name}, which the task is for")


def _check_carried(root: Table, arm: Arm, where: str) -> None:
    """An included file that names a tool or payload must be met with it."""
    for key, there in (("tool", arm.tool.name), ("payload", arm.payload.name if arm.payload else NOTHING)):
        name = root.text(key, None)
        if name is not None and name != there:
            raise root.error(key, f"expected {listed([there])}, which is carried at {where}, got {toml_text(name)}")


def _resolved(path: Path) -> Path:
    try:
        return path.resolve()
    except (OSError, ValueError, RuntimeError):
        return path


def _shown(label: PurePosixPath) -> str:
    return label.name if label.is_absolute() else label.as_posix()
