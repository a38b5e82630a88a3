"""Damaged task, arm and table files put to the command line: no traceback, one line a problem, the right exit status.

Run as a script to damage many: python -m tests.damage 100000
"""

from __future__ import annotations

import contextlib
import io
import re
import sys
import time
import warnings
from collections import Counter
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from pathlib import Path

import numpy as np

import pathplan
from pathplan.cli import main as command

ROOT = Path(__file__).parent.parent
PLANNED = 0.004  # of the task files that still can be loaded: planned as well
ROWS = 40
PIECES = [
    *("nan", "-inf", "inf", "0", "-0", "-1", "1e300", "-1e-300", "1e-320", "9" * 25, "9" * 400, "1e999", "0x10", "1_0"),
    *('""', "''", "[]", "[[]]", "{}", "true", "null", "None", '"a\\nb"', '"\\u0000"', "1979-05-27", "[0, 0, 0]"),
    *('"20 kg"', '"5 %"', '"1 mm"', '"deg"', '"base"', '"home"', '"line"', '"wait"', "step", "rows", "#", ",", ";"),
    *("\n", "\r", "\t", "\0", "\x1b[2J", "\ufeff", "\u2028", "ä", "漢", '"' * 3, "'" * 3, "=", "[[step]]", "[", "]"),
]


@dataclass(frozen=True)
class Case:
    """A whole file and the command line that reads it: FILE stands for its damaged copy."""

    kind: str
    name: str
    content: bytes
    argv: tuple[str, ...]
    text: bool


def cases(folder: Path) -> list[Case]:
    """Whole files of every kind, written into a folder, with the arms beside them."""
    found = []
    for arm in sorted((ROOT / "robots").iterdir()):  # arm files, and URDF files that they name
        (folder / arm.name).write_bytes(arm.read_bytes())
    (folder / "parts").mkdir(exist_ok=True)
    parts = sorted((ROOT / "examples" / "parts").glob("*"))
    for part in parts:
        (folder / "parts" / part.name).write_bytes(part.read_bytes())
    for task in sorted((ROOT / "examples").glob("*.toml")):
        text = task.read_text("utf-8").replace("../robots/", "")
        found.append(Case("task", task.name, text.encode(), ("audit", "FILE", "--quiet"), True))
        for part in parts:  # points and included tasks that it reads
            if f"parts/{part.name}" in text:
                reader = folder / f"{task.stem}-{part.stem}.toml"
                reader.write_text(text.replace(f"parts/{part.name}", f"damaged{part.suffix}"), "utf-8")
                found.append(Case("part", part.name, part.read_bytes(), ("audit", reader.name, "--quiet"), True))
    for name, tool in (("glazer6", "cup"), ("loader4", "vacuum gripper"), ("sorter4", "cup")):
        found += _of_arm(folder, name, tool)
    return found


def _of_arm(folder: Path, name: str, tool: str) -> Iterator[Case]:
    """Tables of a short motion of an arm, and the arm itself judging one of them."""
    arm = pathplan.load_arm(folder / f"{name}.toml")
    table = _motion(arm)
    judge = ("--arm", f"{name}.toml", "--tool", tool, "--quiet")
    for suffix in (".csv", ".jsonl", ".npz", ".parquet"):
        file = folder / f"{name}{suffix}"
        pathplan.write_table(table, file, overwrite=True)
        text = suffix in (".csv", ".jsonl")
        yield Case(f"own {suffix}", file.name, file.read_bytes(), ("audit", "FILE", *judge), text)
    arm_file = (folder / f"{name}.toml").read_bytes()
    yield Case("arm", f"{name}.toml", arm_file, ("audit", f"{name}.csv", "--arm", "FILE", "--quiet"), True)
    yield from _from_elsewhere(folder, arm, table, judge)


def _motion(arm: pathplan.Arm) -> pathplan.JointTable:
    """A slow minimum-jerk move of every joint, every column there is."""
    ticks = np.arange(ROWS)
    tau = ticks / (ROWS - 1)
    shape = [tau**3 * (10 - 15 * tau + 6 * tau**2), 30 * tau**2 * (1 - tau) ** 2]
    shape += [60 * tau * (1 - 3 * tau + 2 * tau**2), 60 * (1 - 6 * tau + 6 * tau**2)]
    start, duration = arm.positions["home"], 0.1 * (ROWS - 1)
    middle = np.array([sum(joint.position) / 2 for joint in arm.joints])
    way = np.where(start > middle, -0.01, 0.01)
    q, v, a, j = (s[:, None] * way / duration**k for k, s in enumerate(shape))
    return pathplan.JointTable(
        *(0.1 * ticks, start + q, v, a, j),
        torque=0.1 * q,
        pose=arm.forward(start + q),
        tool_speed=np.zeros(ROWS),
        joint_names=arm.joint_names,
        joint_kinds=tuple(joint.kind for joint in arm.joints),
        cycle=0.1,
        meta={"arm": arm.name, "task": "damage", "task_file": "damage.toml"},
    )


def _from_elsewhere(
    folder: Path, arm: pathplan.Arm, table: pathplan.JointTable, judge: tuple[str, ...]
) -> Iterator[Case]:
    """The same motion as others write it."""
    import pyarrow
    import pyarrow.parquet

    units = [("deg", 180 / np.pi) if joint.kind == "revolute" else ("mm", 1000.0) for joint in arm.joints]
    columns = {"t_ms": table.time * 1000}
    columns |= {
        f"{n}_{u}": table.position[:, k] * f for k, (n, (u, f)) in enumerate(zip(arm.joint_names, units, strict=True))
    }
    lines = [",".join(columns)]
    lines += [",".join(f"{value:.6f}" for value in row) for row in np.column_stack(list(columns.values()))]
    plain, command_line = "\n".join(lines) + "\n", ("audit", "FILE", *judge)
    yield Case("foreign .csv", f"{arm.name}-log.csv", plain.encode(), command_line, True)
    comma = plain.replace(",", ";").replace(".", ",").encode()
    yield Case("foreign .csv", f"{arm.name}-comma.csv", comma, command_line, True)
    file = folder / f"{arm.name}-log.npz"
    np.savez_compressed(file, t=table.time, q=table.position, qd=table.velocity.astype("f4"))
    yield Case("foreign .npz", file.name, file.read_bytes(), (*command_line, "--unit", "rad, m, s"), False)
    file = folder / f"{arm.name}-log.parquet"
    pyarrow.parquet.write_table(pyarrow.table(columns), file)
    yield Case("foreign .parquet", file.name, file.read_bytes(), command_line, False)


def damaged(case: Case, others: list[Case], rng: np.random.Generator) -> bytes:
    """The content with one thing done to it, at times with several."""
    content = case.content
    for _ in range(int(rng.choice([1, 2, 4], p=[0.7, 0.2, 0.1]))):
        how = TEXTUAL if case.text else BINARY
        if case.name.endswith((".npz", ".parquet")) and rng.random() < 0.4:
            with contextlib.suppress(Exception):  # what is damaged already can't be built anew
                content = _rebuilt(case, content, rng)
                continue
        content = how[int(rng.integers(len(how)))](content, others, rng)
    return content


Damage = Callable[[bytes, list[Case], np.random.Generator], bytes]


def _place(content: bytes, rng: np.random.Generator) -> int:
    return int(rng.integers(0, len(content) + 1))


def _bytes_changed(content: bytes, others: list[Case], rng: np.random.Generator) -> bytes:
    """Some bytes lost, changed or put in."""
    at, lost = _place(content, rng), int(rng.integers(0, 4))
    return content[:at] + rng.bytes(int(rng.integers(0, 5))) + content[at + lost :]


def _cut(content: bytes, others: list[Case], rng: np.random.Generator) -> bytes:
    """The end, the beginning or a piece from the middle lost."""
    one, two = sorted((_place(content, rng), _place(content, rng)))
    return (content[:one], content[two:], content[:one] + content[two:])[int(rng.integers(3))]


def _doubled(content: bytes, others: list[Case], rng: np.random.Generator) -> bytes:
    """A piece there twice."""
    one, two = sorted((_place(content, rng), _place(content, rng)))
    return content[:two] + content[one:]


def _spliced(content: bytes, others: list[Case], rng: np.random.Generator) -> bytes:
    """The beginning of one file and the end of another."""
    other = others[int(rng.integers(len(others)))].content
    return content[: _place(content, rng)] + other[_place(other, rng) :]


def _token_replaced(content: bytes, others: list[Case], rng: np.random.Generator) -> bytes:
    """A word or number replaced by what is likely to hurt."""
    tokens = list(re.finditer(rb"-?[\w.+]+|\"[^\"\n]*\"|[=\[\]{},;]", content))
    if not tokens:
        return content
    token = tokens[int(rng.integers(len(tokens)))]
    return content[: token.start()] + PIECES[int(rng.integers(len(PIECES)))].encode() + content[token.end() :]


def _number_replaced(content: bytes, others: list[Case], rng: np.random.Generator) -> bytes:
    """A number replaced by another of any size."""
    numbers = list(re.finditer(rb"-?\d+\.?\d*", content))
    if not numbers:
        return content
    number = numbers[int(rng.integers(len(numbers)))]
    value = float(rng.normal()) * 10.0 ** float(rng.integers(-12, 12))
    text = repr(value) if rng.random() < 0.5 else str(int(value))
    return content[: number.start()] + text.encode() + content[number.end() :]


def _lines_moved(content: bytes, others: list[Case], rng: np.random.Generator) -> bytes:
    """A line lost, doubled or moved."""
    lines = content.split(b"\n")
    line = lines.pop(int(rng.integers(len(lines))))
    for _ in range(int(rng.integers(0, 3))):
        lines.insert(int(rng.integers(len(lines) + 1)), line)
    return b"\n".join(lines)


TEXTUAL: list[Damage] = [
    *[_token_replaced] * 6,
    *[_number_replaced] * 6,
    *[_lines_moved] * 3,
    *[_bytes_changed] * 3,
    *(_cut, _doubled, _spliced),
]
BINARY: list[Damage] = [*[_bytes_changed] * 6, _cut, _doubled, _spliced]
NUMBERS = (np.nan, np.inf, -np.inf, 0.0, -1.0, 1e300, -1e-300, 5e-324, 1e9, 1e-9)


def _rebuilt(case: Case, content: bytes, rng: np.random.Generator) -> bytes:
    """A whole file again, with the numbers, type, shape or name of one of its columns changed."""
    import pyarrow
    import pyarrow.parquet

    stream = io.BytesIO(content)
    if case.name.endswith(".npz"):
        with np.load(stream, allow_pickle=False) as file:
            arrays = dict(file)
    else:
        table = pyarrow.parquet.read_table(stream)
        arrays = {name: table[name].to_numpy() for name in table.column_names}
    name = list(arrays)[int(rng.integers(len(arrays)))]
    values = arrays.pop(name)
    if rng.random() < 0.15:
        name = list(PIECES)[int(rng.integers(len(PIECES)))].replace("\0", "") or "x"
    elif rng.random() > 0.1:  # else the column is lost
        arrays[name] = _changed(values, rng)
    out = io.BytesIO()
    if case.name.endswith(".npz"):
        (np.savez if rng.random() < 0.5 else np.savez_compressed)(out, **arrays)
    else:
        changed = pyarrow.table(arrays).replace_schema_metadata(table.schema.metadata)
        pyarrow.parquet.write_table(changed, out)
    return out.getvalue()


def _changed(values: np.ndarray, rng: np.random.Generator) -> np.ndarray:
    """An array with a number, its type or its shape changed."""
    how = int(rng.integers(6))
    if values.dtype.kind not in "fiu" or how == 5:
        return np.array([str(value) for value in np.ravel(values)[:50]])
    values = np.array(values, dtype=float)
    if how <= 1 and values.size:
        values.flat[int(rng.integers(values.size))] = NUMBERS[int(rng.integers(len(NUMBERS)))]
        return values
    with np.errstate(all="ignore"):
        if how == 2:
            return values.astype(str(rng.choice(["f4", "f2", "i8", "i1", "u4", "?", ">f8"])))
        return (
            values * 10.0 ** float(rng.integers(-300, 300))
            if how == 3
            else values[: int(rng.integers(len(values) + 1))]
        )


class _Loaded(pathplan.PathplanError):
    """Raised in place of planning: the task could be loaded."""


def judge(case: Case, content: bytes, folder: Path, *, planned: bool) -> str:
    """Run the command line on the damaged file, in `folder`, and say what became of it: 'taken' or the exit status.

    Raises AssertionError for a traceback, an error of our own, lines that are none, or a wrong exit status.
    """
    file = folder / f"damaged{Path(case.name).suffix}"
    file.write_bytes(content)
    argv = [file.name if word == "FILE" else word for word in case.argv]
    out, err = io.StringIO(), io.StringIO()
    real = pathplan.plan

    def loaded(*args: object, **options: object) -> None:
        raise _Loaded("loaded")

    if case.kind in ("task", "part") and not planned:
        pathplan.plan = loaded
    try:
        with contextlib.chdir(folder), contextlib.redirect_stdout(out), contextlib.redirect_stderr(err):
            status = command(argv)
    finally:
        pathplan.plan = real
    lines = err.getvalue().splitlines()
    if lines == ["pathplan: loaded"]:
        return "taken"
    told = f"{case.kind} {case.name}: status {status}, {lines[:3]}"
    assert out.getvalue() == "", told
    assert status in (0, 1, 2), told
    assert bool(lines) == (status != 0), told
    assert all(line.startswith("pathplan: ") and line.isprintable() and len(line) > 12 for line in lines), told
    assert not any("Traceback" in line or "internal error" in line for line in lines), told
    return "taken" if status == 0 else f"status {status}"


def main(count: int, seed: int = 0) -> None:
    """Judge `count` damaged files and print what became of them; a file that fails is kept."""
    from tempfile import TemporaryDirectory, gettempdir

    warnings.simplefilter("error")
    seen: Counter[str] = Counter()
    slowest = (0.0, "")
    with TemporaryDirectory() as name:
        folder = Path(name)
        known = cases(folder)
        for k in range(count):
            rng = np.random.default_rng([seed, k])
            case = known[k % len(known)]
            content = damaged(case, known, rng)
            started = time.monotonic()
            try:
                seen[f"{case.kind}: {judge(case, content, folder, planned=rng.random() < PLANNED)}"] += 1
            except AssertionError as error:
                seen["FAILED"] += 1
                kept = Path(gettempdir()) / f"damage-{seed}-{k}{Path(case.name).suffix}"
                kept.write_bytes(content)
                print(f"case {k}: {error}: kept as {kept}", flush=True)
            slowest = max(slowest, (time.monotonic() - started, f"case {k}, {case.kind} {case.name}"))
            if (k + 1) % 2000 == 0:
                print(k + 1, dict(sorted(seen.items())), f"slowest {slowest[0]:.1f} s ({slowest[1]})", flush=True)
    print(dict(sorted(seen.items())))


if __name__ == "__main__":
    main(int(sys.argv[1]), int(sys.argv[2]) if len(sys.argv) > 2 else 0)
