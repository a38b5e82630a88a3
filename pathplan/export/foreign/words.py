"""What names of columns say: time or quantity, which joint, which unit.

A name is a joint's own name, or joint, axis, j or q with its number (from 1, or from 0 where a 0 is among them), with
a quantity before or behind it unless the unit tells that: `base_deg`, `base velocity [deg/s]`, `q1`, `qd1 (rad/s)`,
`joint_3_acceleration_deg_s2`, `position[4]`. Time is `t`, `time` or `timestamp`.
"""

from __future__ import annotations

import math
import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from pathplan.export.columns import JOINT_FIELDS

__all__ = ["FIELD_WORDS", "Meaning", "Unit", "meaning_of", "plain", "unit_of", "unit_split"]

_ANGLES = {"deg": math.pi / 180, "degree": math.pi / 180, "degrees": math.pi / 180, "°": math.pi / 180}
_ANGLES |= {"rad": 1.0, "mrad": 1e-3}
_LENGTHS = {"mm": 1e-3, "cm": 1e-2, "m": 1.0, "um": 1e-6, "µm": 1e-6}
_TIMES = {"s": 1.0, "sec": 1.0, "ms": 1e-3, "us": 1e-6, "µs": 1e-6, "ns": 1e-9}
_FORCES = {"n": 1.0, "kn": 1e3}
_TORQUES = {"nm": 1.0, "n m": 1.0, "n*m": 1.0, "n·m": 1.0}
_RATE = re.compile(r"(?P<unit>[^\W\d_]+|°)(?:\s*/\s*|_)s(?:ec)?(?P<power>\^?[23]|\*\*[23]|[²³])?")
_POWERS = {"2": 2, "3": 3, "²": 2, "³": 3}

FIELD_WORDS: Mapping[str, str] = {
    **dict.fromkeys(("position", "positions", "pos", "angle", "joint_position", "joint_positions"), "position"),
    **dict.fromkeys(("velocity", "velocities", "vel", "speed", "joint_velocity", "joint_velocities"), "velocity"),
    **dict.fromkeys(("acceleration", "accelerations", "accel", "acc"), "acceleration"),
    **dict.fromkeys(("joint_acceleration", "joint_accelerations"), "acceleration"),
    **dict.fromkeys(("jerk", "jerks"), "jerk"),
    **dict.fromkeys(("torque", "torques", "joint_torque", "joint_torques", "tau", "force"), "torque"),
}
_TIME_WORDS = ("t", "time", "times", "timestamp", "time_stamp")
_BY_D = {"q": "position", "qd": "velocity", "qdd": "acceleration", "qddd": "jerk"}  # q with dots
_NUMBERED = re.compile(r"(?:joint|axis|j|q)_?(\d{1,3})")
_DOTTED = re.compile(r"(qd{0,3})_?(\d{1,3})")


@dataclass(frozen=True)
class Unit:
    """A unit of a column: what it measures, how many times per second, and its size in SI."""

    dimension: str  # "angle", "length", "time", "torque", "force"
    order: int
    size: float
    text: str


@dataclass(frozen=True)
class Meaning:
    """What a name says. `field` "" where neither it nor the unit tells; `joint` by index, or `number` as written."""

    field: str  # "time", "step", one of JOINT_FIELDS, or ""
    joint: int | None
    number: int | None
    unit: Unit | None


def unit_of(text: str) -> Unit | None:
    """The unit a text is, such as "deg", "mm/s^2", "rad_s3", "ms"; None for none."""
    word = text.strip().lower().replace("μ", "µ")
    for dimension, sizes in (("time", _TIMES), ("torque", _TORQUES), ("force", _FORCES)):
        if word in sizes:
            return Unit(dimension, 0, sizes[word], text.strip())
    match = _RATE.fullmatch(word)
    order = 0 if match is None else _POWERS[match["power"][-1]] if match["power"] else 1
    base = word if match is None else match["unit"]
    for dimension, sizes in (("angle", _ANGLES), ("length", _LENGTHS)):
        if base in sizes:
            return Unit(dimension, order, sizes[base], text.strip())
    return None


def plain(name: str) -> str:
    """A name for comparison: small letters, one _ for whatever stands between words."""
    return re.sub(r"[\s_\-.:]+", "_", name.strip().lower()).strip("_")


def unit_split(name: str) -> tuple[str, Unit | None]:
    """A name without the unit in it, and that unit: in brackets, behind a /, or as last words."""
    match = re.fullmatch(r"(.+?)\s*[\[(]([^\[\]()]+)[\])]", name.strip())
    if match and (unit := unit_of(match[2])):
        return match[1], unit
    for joiner in ("_", " ", "/"):
        # the longest unit counts: deg_s2, not s2
        at = -1
        while (at := name.find(joiner, at + 1)) > 0:
            if unit := unit_of(name[at + 1 :]):
                return name[:at], unit
    return name, None


def meaning_of(name: str, joints: Sequence[str]) -> Meaning | None:
    """What the name of a column says to an arm with these joints; None for nothing that counts."""
    own = {plain(joint): k for k, joint in enumerate(joints)}
    if plain(name) in own:
        return Meaning("", own[plain(name)], None, None)
    if plain(name) == "step":
        return Meaning("step", None, None, None)
    stem, unit = unit_split(name)
    if plain(stem) in _TIME_WORDS:
        return Meaning("time", None, None, unit) if unit is None or unit.dimension == "time" else None
    index = None
    match = re.fullmatch(r"(.+?)\s*[\[(]\s*(\d{1,3})\s*[\])]", stem.strip())
    if match:
        stem, index = match[1], int(match[2])
        stem, unit = unit_split(stem) if unit is None else (stem, unit)
    found = _joint_of(plain(stem), index, own)
    if found is None:
        return None
    field, joint, number = found
    if not field and unit is not None:
        by_unit = "torque" if unit.dimension in ("torque", "force") else JOINT_FIELDS[unit.order]
        field = "" if unit.dimension == "time" else by_unit
    return Meaning(field, joint, number, unit)


def _joint_of(stem: str, index: int | None, own: Mapping[str, int]) -> tuple[str, int | None, int | None] | None:
    """Quantity, joint and number in a name without its unit."""
    if index is not None:  # q[3], velocity[3]: the array by its name
        field = _BY_D.get(stem, FIELD_WORDS.get(stem))
        return None if field is None else (field, None, index)
    if stem in own:
        return "", own[stem], None
    if match := _DOTTED.fullmatch(stem):
        return _BY_D[match[1]] if match[1] != "q" else "", None, int(match[2])
    if match := _NUMBERED.fullmatch(stem):
        return "", None, int(match[1])
    for word, field in FIELD_WORDS.items():
        rest = stem.removeprefix(f"{word}_") if stem.startswith(f"{word}_") else None
        rest = stem.removesuffix(f"_{word}") if rest is None and stem.endswith(f"_{word}") else rest
        if rest is None:
            continue
        if rest in own:
            return field, own[rest], None
        if match := _NUMBERED.fullmatch(rest) or re.fullmatch(r"(\d{1,3})", rest):
            return field, None, int(match[1])
    return None
