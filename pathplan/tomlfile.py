"""Reading TOML files so that every complaint names the file, the key and what was expected.

A `Table` is one table of a file while it is being read. Its getters raise `InputError` at once; inside
`with problems.gather():` the error is kept, reading goes on, and `problems.check()` raises all together.

    data, digest = read_toml(path)
    problems = Problems()
    table = Table(data, path.name, problems=problems)
    cycle = table.quantity("cycle", "time")
    for row in table.tables("step"):
        with problems.gather():
            ...
            row.finish()
    table.finish()
    problems.check()
"""

from __future__ import annotations

import difflib
import hashlib
import math
import re
import tomllib
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from pathplan.errors import InputError
from pathplan.units import DIMENSIONS, parse_quantity, toml_text

__all__ = [
    "FARTHEST",
    "MAX_BYTES",
    "Problems",
    "Table",
    "listed",
    "nearest",
    "read_only",
    "read_toml",
    "rotation_from_quaternion",
    "rotation_from_rpy",
]

Array = NDArray[np.float64]
MAX_BYTES = 20_000_000
"""A larger file is refused: long point lists belong into CSV."""

FARTHEST = 1000.0
"""Coordinates beyond this (m) are refused: they are a slip, and their squares spoil what comes after."""

QUATERNION_TOLERANCE = 1e-6
_REQUIRED: Any = object()
_BARE_KEY = re.compile(r"[A-Za-z0-9_-]+")


def read_toml(path: str | Path) -> tuple[dict[str, Any], str]:
    """Read a TOML file: (content, sha256 of its bytes in hex).

    Raises:
        InputError: no such file, a directory, unreadable, larger than `MAX_BYTES`, not UTF-8, or not TOML.
    """
    shown = _printable(str(path))
    try:
        with open(path, "rb") as file:
            raw = file.read(MAX_BYTES + 1)
    except FileNotFoundError:
        raise InputError.at(shown, "no such file") from None
    except IsADirectoryError:
        raise InputError.at(shown, "is a directory, expected a TOML file") from None
    except (OSError, ValueError) as error:  # ValueError: a NUL byte in the path
        reason = getattr(error, "strerror", None) or str(error)
        raise InputError.at(shown, f"can't be read: {_printable(reason)}") from None
    name = _printable(Path(path).name)
    if len(raw) > MAX_BYTES:
        raise InputError.at(name, f"larger than {MAX_BYTES // 1_000_000} MB, expected a TOML file of less")
    try:
        text = raw.decode("utf-8-sig")
    except UnicodeDecodeError as error:
        line = raw.count(b"\n", 0, error.start) + 1
        raise InputError.at(name, f"line {line}", "not UTF-8 text, expected a TOML file") from None
    return _parse(text, name), hashlib.sha256(raw).hexdigest()


def _parse(text: str, name: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except RecursionError:
        raise InputError.at(name, "not TOML that can be read: nested too deeply") from None
    except ValueError as error:  # TOMLDecodeError, and plain ValueError for integers of thousands of digits
        found = re.search(r"^(.*) \(at line (\d+), column \d+\)$", str(error), re.DOTALL)
        if found is not None:
            reason, line = found[1], int(found[2])
        else:
            reason = str(error).removesuffix(" (at end of document)")
            line = text.count("\n") + 1
            if reason == str(error):
                raise InputError.at(name, f"not TOML: {_printable(reason)}") from None
        raise InputError.at(name, f"line {line}", f"not TOML: {_printable(reason)}") from None


class Problems:
    """Input errors gathered while reading goes on, to be raised together."""

    def __init__(self) -> None:
        self.found: list[InputError] = []

    @contextmanager
    def gather(self) -> Iterator[None]:
        """Keep an `InputError` raised inside and go on after the block."""
        try:
            yield
        except InputError as error:
            self.found.append(error)

    def check(self) -> None:
        """Raise what was gathered as one `InputError`: the first problem in its line, all in `problems`."""
        if len(self.found) == 1:
            raise self.found[0]
        if self.found:
            lines = [line for error in self.found for line in error.problems]
            more = len(lines) - 1
            tail = f" (and {more} more problem{'s' if more > 1 else ''})"
            raise InputError(lines[0] + tail, problems=lines, data=self.found[0].data)


class Table:
    """One table of a TOML file while it is read: takes keys one by one and knows where they stand.

    Args:
        data: the table.
        file: file name for messages, without folder.
        path: where the table stands in the file, "" for the root, "step[4]" for the fourth step.
        problems: where `finish` puts unknown keys; without it `finish` raises.
    """

    def __init__(self, data: Mapping[str, Any], file: str, path: str = "", *, problems: Problems | None = None) -> None:
        self.data = data
        self.file = file
        self.path = path
        self.problems = problems
        self._known: dict[str, None] = {}  # in the order asked for

    @property
    def where(self) -> str:
        """'pick.toml: step[4]', or 'pick.toml' for the root."""
        return f"{self.file}: {self.path}" if self.path else self.file

    def at(self, key: str) -> str:
        """'pick.toml: step[4].blend' for messages."""
        return f"{self.file}: {self._key_path(key)}"

    def error(self, key: str, complaint: str) -> InputError:
        """An `InputError` about a key of this table, to be raised by the caller."""
        return InputError.at(self.at(key), complaint)

    def has(self, key: str) -> bool:
        """True if the key is there; marks it as known."""
        self._known[key] = None
        return key in self.data

    def take(self, key: str, default: Any = _REQUIRED) -> Any:
        """The raw value of a key; `default` where it is missing, an `InputError` if there is no default."""
        if self.has(key):
            return self.data[key]
        if default is not _REQUIRED:
            return default
        unread = [other for other in self.data if other not in self._known]
        near = difflib.get_close_matches(key, unread, n=1, cutoff=0.7)
        hint = f' (is "{_printable(near[0])}" meant for it?)' if near else ""
        raise InputError.at(self.where, f'missing key "{key}"{hint}')

    def quantity(
        self,
        key: str,
        dimension: str,
        default: Any = _REQUIRED,
        *,
        positive: bool = False,
        not_negative: bool = False,
    ) -> Any:
        """A quantity in SI (float), or `default` (returned as it is) where the key is missing."""
        value = self.take(key, default)
        if key not in self.data:
            return value
        result = parse_quantity(value, dimension, self.at(key))
        if (positive and result <= 0.0) or (not_negative and result < 0.0):
            known = DIMENSIONS[dimension]
            bound = "above zero" if positive else "of zero or more"
            raise self.error(key, f'expected {known.phrase} {bound} such as "{known.example}", got {toml_text(value)}')
        return result

    def text(self, key: str, default: Any = _REQUIRED) -> Any:
        """A string that isn't empty, on one line."""
        value = self.take(key, default)
        if key in self.data and (not isinstance(value, str) or not value.strip() or not value.isprintable()):
            raise self.error(key, f"expected a text on one line, got {toml_text(value)}")
        return value

    def flag(self, key: str, default: Any = _REQUIRED) -> Any:
        """true or false."""
        value = self.take(key, default)
        if key in self.data and not isinstance(value, bool):
            raise self.error(key, f"expected true or false, got {toml_text(value)}")
        return value

    def integer(self, key: str, default: Any = _REQUIRED, *, low: int = 0, high: int = 2**31 - 1) -> Any:
        """A whole number from low to high."""
        value = self.take(key, default)
        if key in self.data and (type(value) is not int or not low <= value <= high):
            raise self.error(key, f"expected a whole number from {low} to {high}, got {toml_text(value)}")
        return value

    def choice(self, key: str, options: Sequence[str], default: Any = _REQUIRED) -> Any:
        """One of the words of `options`; the nearest one is suggested."""
        value = self.take(key, default)
        if key in self.data and value not in options:
            raise self.error(key, f"expected {listed(options)}, got {toml_text(value)}{nearest(value, options)}")
        return value

    def vector(self, key: str, size: int, dimension: str, default: Any = _REQUIRED) -> Any:
        """A list of `size` quantities of one dimension: (size,) array, SI, read-only; or `default`."""
        value = self.take(key, default)
        if key not in self.data:
            return value
        return self._vector(key, value, [dimension] * size)

    def mixed_vector(
        self, key: str, dimensions: Sequence[str], default: Any = _REQUIRED, *, noun: str = "quantities"
    ) -> Any:
        """A list of quantities, one for each of `dimensions` (`noun` "joint positions"): like `vector`."""
        value = self.take(key, default)
        if key not in self.data:
            return value
        return self._vector(key, value, dimensions, noun)

    def position(self, key: str, default: Any = _REQUIRED) -> Any:
        """A list of three lengths within `FARTHEST`: (3,) array, m, read-only; or `default`."""
        value = self.vector(key, 3, "length", default)
        if key in self.data and np.max(np.abs(value)) > FARTHEST:
            raise self.error(key, f"expected coordinates within {FARTHEST:g} m, got {toml_text(self.data[key])}")
        return value

    def table(self, key: str, default: Any = _REQUIRED) -> Any:
        """The table under a key as a `Table`, or `default`."""
        value = self.take(key, default)
        if key not in self.data:
            return value
        if not isinstance(value, dict):
            raise self.error(key, f"expected a table, got {toml_text(value)}")
        return Table(value, self.file, self._key_path(key), problems=self.problems)

    def named_tables(self, key: str) -> dict[str, Table]:
        """A table of tables ([frames.NAME]) as name -> Table; empty where the key is missing."""
        outer = self.table(key, None)
        return {} if outer is None else {name: outer.table(name) for name in outer.data}

    def tables(self, key: str) -> list[Table]:
        """An array of tables ([[step]]), counted from 1 in messages; empty where the key is missing."""
        value = self.take(key, [])
        if not isinstance(value, list):
            raise self.error(key, f"expected a list of tables [[{self._key_path(key)}]], got {toml_text(value)}")
        rows = []
        for number, row in enumerate(value, start=1):
            path = f"{self._key_path(key)}[{number}]"
            if not isinstance(row, dict):
                raise InputError.at(self.file, path, f"expected a table, got {toml_text(row)}")
            rows.append(Table(row, self.file, path, problems=self.problems))
        return rows

    def rotation(self) -> Array | None:
        """(3, 3) from `rpy` (fixed axes x, then y, then z) or `quat` (w, x, y, z); None without either."""
        if self.has("rpy") and self.has("quat"):
            raise self.error("quat", "given together with rpy, expected one of the two")
        if self.has("quat"):
            quaternion = self.vector("quat", 4, "number")
            length = math.hypot(*quaternion)
            if not abs(length - 1.0) <= QUATERNION_TOLERANCE:
                raise self.error("quat", f"expected a quaternion [w, x, y, z] of length 1, got length {length:.9g}")
            return read_only(rotation_from_quaternion(quaternion / length))
        if self.has("rpy"):
            return read_only(rotation_from_rpy(self.vector("rpy", 3, "angle")))
        return None

    def pose(self, *, position: bool = True) -> Array:
        """(4, 4) from `xyz` with `rpy` or `quat`; without an orientation the axes are those of the parent.

        `position=False` lets `xyz` be left out (zero).
        """
        xyz = self.position("xyz", *(() if position else (np.zeros(3),)))
        rotation = self.rotation()
        pose = np.eye(4)
        pose[:3, 3] = xyz
        if rotation is not None:
            pose[:3, :3] = rotation
        return read_only(pose)

    def finish(self) -> None:
        """Refuse every key that was not asked for, suggesting the nearest of those that were."""
        unknown = Problems()
        known = list(self._known)
        for key in self.data:
            if key not in self._known:
                near = nearest(key, known) or (f", expected {listed(known)}" if known else "")
                unknown.found.append(self.error(key, f"unknown key{near}"))
        if self.problems is not None:
            self.problems.found.extend(unknown.found)
        else:
            unknown.check()

    def _vector(self, key: str, value: Any, dimensions: Sequence[str], noun: str = "quantities") -> Array:
        size = len(dimensions)
        if not isinstance(value, list) or len(value) != size:
            got = f"{len(value)} of them" if isinstance(value, list) else toml_text(value)
            raise self.error(key, f"expected a list of {size} {noun}, got {got}")
        where = self.at(key)
        entries = enumerate(zip(value, dimensions, strict=True), start=1)
        return read_only(np.array([parse_quantity(v, d, f"{where}[{number}]") for number, (v, d) in entries]))

    def _key_path(self, key: str) -> str:
        shown = key if _BARE_KEY.fullmatch(key) else toml_text(key)
        return f"{self.path}.{shown}" if self.path else shown


def rotation_from_rpy(rpy: Array) -> Array:
    """(3, 3) rotation about the fixed axes x, then y, then z: Rz(rpy[2]) @ Ry(rpy[1]) @ Rx(rpy[0]), rad."""
    (cr, cp, cy), (sr, sp, sy) = np.cos(rpy), np.sin(rpy)
    return np.array(
        [
            [cy * cp, cy * sp * sr - sy * cr, cy * sp * cr + sy * sr],
            [sy * cp, sy * sp * sr + cy * cr, sy * sp * cr - cy * sr],
            [-sp, cp * sr, cp * cr],
        ]
    )


def rotation_from_quaternion(quaternion: Array) -> Array:
    """(3, 3) rotation of a unit quaternion (w, x, y, z)."""
    w, x, y, z = quaternion
    return np.array(
        [
            [1 - 2 * (y * y + z * z), 2 * (x * y - w * z), 2 * (x * z + w * y)],
            [2 * (x * y + w * z), 1 - 2 * (x * x + z * z), 2 * (y * z - w * x)],
            [2 * (x * z - w * y), 2 * (y * z + w * x), 1 - 2 * (x * x + y * y)],
        ]
    )


def read_only(array: Array) -> Array:
    """The same array, no longer to be written to."""
    array.flags.writeable = False
    return array


def _printable(text: str) -> str:
    """On one line whatever a file name or key holds."""
    return "".join(char if char.isprintable() else "?" for char in text)


def listed(words: Sequence[str]) -> str:
    """'"up", "down" or "left"', for messages."""
    quoted = [f'"{word}"' for word in words]
    return quoted[0] if len(quoted) == 1 else ", ".join(quoted[:-1]) + " or " + quoted[-1]


def nearest(word: Any, words: Iterable[str]) -> str:
    """', did you mean "..."?' with the nearest of the words, "" where none is near: to end a message with."""
    near = difflib.get_close_matches(word, list(words), n=1) if isinstance(word, str) else []
    return f', did you mean "{near[0]}"?' if near else ""
