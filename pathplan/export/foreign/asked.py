"""What the user says of a table from elsewhere: its time, its columns, its units."""

from __future__ import annotations

import csv
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

from pathplan.errors import InputError
from pathplan.export.columns import JOINT_FIELDS
from pathplan.export.foreign.words import FIELD_WORDS, Unit, plain, unit_of
from pathplan.tomlfile import listed, nearest
from pathplan.units import parse_quantity, toml_text

__all__ = ["Asked"]

LONGEST = 10.0  # s from row to row


@dataclass(frozen=True)
class Asked:
    """How a table from elsewhere is to be read. Everything left out is recognised from the names of its columns.

    `time`: the name of the column of time; `cycle` (s): the time from row to row, in place of any column.
    `columns`: name of a column -> "JOINT" or "JOINT QUANTITY", such as "base velocity". `units`: dimension -> unit of
    the columns whose names tell none; rates are per second of it.
    """

    time: str | None = None
    cycle: float | None = None
    columns: Mapping[str, str] = field(default_factory=dict)
    units: Mapping[str, Unit] = field(default_factory=dict)

    @classmethod
    def parse(cls, time: str | None, columns: str | None, unit: str | None) -> Asked:
        """From texts as on the command line: "t" or "4 ms"; "A1=base, A2=shoulder"; "deg, mm, ms".

        Raises InputError naming the option.
        """
        cycle = _cycle(time)
        pairs = {} if columns is None else _pairs(columns)
        return cls(None if cycle is not None else time, cycle, pairs, {} if unit is None else _units(unit))

    def meaning(self, target: str, joints: Sequence[str]) -> tuple[int, str]:
        """Joint index and quantity ("" where left out) of a text such as "base velocity". Raises InputError."""
        names = {plain(joint): k for k, joint in enumerate(joints)}
        wanted = plain(target)
        if wanted in names:
            return names[wanted], ""
        for word, quantity in FIELD_WORDS.items():
            rest = wanted.removesuffix(f"_{word}")
            if rest != wanted and rest in names:
                return names[rest], quantity
        hint = nearest(target, joints)
        expected = f"expected {listed(list(joints))}, alone or with {listed(JOINT_FIELDS)} behind it"
        raise InputError.at("--columns", f"{expected}, got {toml_text(target)}{hint}")


def _cycle(time: str | None) -> float | None:
    """The time from row to row, where a time is given in place of a column's name."""
    if time is None or not re.fullmatch(r"\s*[+-]?[\d.]+([eE][+-]?\d+)?\s*[a-zµμ]+\s*", time):
        return None
    cycle = parse_quantity(time, "time", "--time")
    if not 1e-6 <= cycle <= LONGEST:
        raise InputError.at(
            "--time", f"expected a time from row to row of 1 us to {LONGEST:g} s, got {toml_text(time)}"
        )
    return cycle


def _pairs(text: str) -> dict[str, str]:
    """Name -> joint, from "A1=base, A2=shoulder"; a name with a comma stands in quotation marks with its pair."""
    found: dict[str, str] = {}
    try:
        items = next(csv.reader([text], skipinitialspace=True), [])
    except csv.Error:
        items = [text]
    for item in items:
        name, equals, joint = item.rpartition("=")
        name, joint = name.strip(), joint.strip()
        if not equals or not name or not joint:
            expected = 'expected pairs of a column and a joint such as "A1=base, A2=shoulder"'
            raise InputError.at("--columns", f"{expected}, got {toml_text(item)}")
        if name in found:
            raise InputError.at("--columns", f"column {toml_text(name)} is there twice")
        found[name] = joint
    return found


def _units(text: str) -> dict[str, Unit]:
    found: dict[str, Unit] = {}
    for word in text.replace(";", ",").split(","):
        unit = unit_of(word)
        if unit is None or unit.order or unit.dimension in found:
            expected = 'expected an angle, a length, a time and a torque at most, such as "deg, mm, ms"'
            raise InputError.at("--unit", f"{expected}, got {toml_text(text)}")
        found[unit.dimension] = unit
    return found
