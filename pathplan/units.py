"""Quantities as people write and read them: mm, deg and seconds in files and on screens, SI inside.

A quantity in a file is a number in the screen unit of its dimension (`20` is 20 mm where a length is asked
for) or a string with a unit of that dimension (`"0.02 m"`).
"""

from __future__ import annotations

import json
import math
import re
from dataclasses import dataclass
from typing import Any, Literal

from pathplan.errors import InputError

__all__ = [
    "DIMENSIONS",
    "Dimension",
    "format_quantity",
    "format_value",
    "joint_dimension",
    "parse_quantity",
    "to_screen",
    "toml_text",
]


@dataclass(frozen=True)
class Dimension:
    """One kind of quantity: what messages call it, the unit of bare numbers, every unit's size in SI."""

    phrase: str  # "a length"
    example: str  # "20 mm"
    screen: str  # the unit of a bare number
    units: dict[str, float]  # unit -> SI units in it

    @property
    def expected(self) -> str:
        return f'{self.phrase} such as "{self.example}"'


_DEG = math.pi / 180.0
_REV = 2.0 * math.pi
_MINUTE = 60.0
_LENGTH = {"mm": 1e-3, "m": 1.0, "cm": 1e-2, "um": 1e-6, "µm": 1e-6}
_ANGLE = {"deg": _DEG, "°": _DEG, "rad": 1.0, "mrad": 1e-3, "rev": _REV}


def _per(units: dict[str, float], power: int) -> dict[str, float]:
    """Units per second, per second squared, ...; and for speeds per minute as well."""
    tail = "/s" if power == 1 else f"/s^{power}"
    rates = {unit + tail: size for unit, size in units.items()}
    if power == 1:
        rates |= {unit + "/min": size / _MINUTE for unit, size in units.items()}
    return rates


DIMENSIONS: dict[str, Dimension] = {
    "length": Dimension("a length", "20 mm", "mm", _LENGTH),
    "angle": Dimension("an angle", "10 deg", "deg", _ANGLE),
    "time": Dimension("a time", "0.2 s", "s", {"s": 1.0, "ms": 1e-3, "us": 1e-6, "µs": 1e-6, "min": _MINUTE}),
    "speed": Dimension("a speed", "250 mm/s", "mm/s", _per(_LENGTH, 1)),
    "acceleration": Dimension("an acceleration", "2000 mm/s^2", "mm/s^2", _per(_LENGTH, 2)),
    "jerk": Dimension("a jerk", "20000 mm/s^3", "mm/s^3", _per(_LENGTH, 3)),
    "angular_speed": Dimension("an angular speed", "180 deg/s", "deg/s", _per(_ANGLE, 1)),
    "angular_acceleration": Dimension("an angular acceleration", "600 deg/s^2", "deg/s^2", _per(_ANGLE, 2)),
    "angular_jerk": Dimension("an angular jerk", "6000 deg/s^3", "deg/s^3", _per(_ANGLE, 3)),
    "mass": Dimension("a mass", "1.2 kg", "kg", {"kg": 1.0, "g": 1e-3}),
    "inertia": Dimension("a moment of inertia", "0.02 kg m^2", "kg m^2", {"kg m^2": 1.0, "kg mm^2": 1e-6}),
    "force": Dimension("a force", "400 N", "N", {"N": 1.0, "kN": 1e3}),
    "torque": Dimension("a torque", "50 N m", "N m", {"N m": 1.0, "Nm": 1.0, "N mm": 1e-3}),
    "linear_acceleration": Dimension("an acceleration", "9.81 m/s^2", "m/s^2", _per(_LENGTH, 2)),
    "linear_friction": Dimension("a viscous friction", "20 N s/m", "N s/m", {"N s/m": 1.0}),
    "angular_friction": Dimension(
        "a viscous friction", "2 N m s/rad", "N m s/rad", {"N m s/rad": 1.0, "Nm s/rad": 1.0}
    ),
    "ratio": Dimension("a share", "15 %", "", {"%": 1e-2}),
    "number": Dimension("a plain number", "100", "", {}),
}
"""Every dimension by its key. `linear_acceleration` is gravity's: its bare number is in m/s^2."""

Quantity = Literal["position", "velocity", "acceleration", "jerk", "torque"]
_JOINT_DIMENSIONS = {
    "revolute": ("angle", "angular_speed", "angular_acceleration", "angular_jerk", "torque"),
    "prismatic": ("length", "speed", "acceleration", "jerk", "force"),
}
_QUANTITIES = ("position", "velocity", "acceleration", "jerk", "torque")

_NUMBER = re.compile(r"\s*([+-]?(?:\d+\.?\d*|\.\d+)(?:[eE][+-]?\d+)?)\s*(.*?)\s*", re.ASCII | re.DOTALL)


def joint_dimension(kind: str, quantity: Quantity) -> str:
    """Dimension key of a joint's position, velocity, acceleration, jerk or torque, by the joint's kind."""
    return _JOINT_DIMENSIONS[kind][_QUANTITIES.index(quantity)]


def toml_text(value: Any, width: int = 60) -> str:
    """A value as it stands in a TOML file, on one line and shortened, for messages."""
    if isinstance(value, bool):
        text = "true" if value else "false"
    elif isinstance(value, str):
        text = json.dumps(value, ensure_ascii=False)
    elif isinstance(value, float):
        text = repr(value)
    elif isinstance(value, int):  # str() of an int refuses more than 4300 digits
        text = str(value) if value.bit_length() < 200 else "an integer of many digits"
    elif isinstance(value, dict):
        text = "a table"
    elif isinstance(value, list):
        items = [toml_text(item, width) for item in value[:9]] + ["..."] * (len(value) > 9)
        text = "[" + ", ".join(items) + "]"
    else:
        text = str(value)
    text = "".join(char if char.isprintable() else "?" for char in text)
    return text if len(text) <= width else text[: width - 3] + "..."


def parse_quantity(value: Any, dimension: str, where: str) -> float:
    """A quantity from a file in SI: a number in the screen unit, or a string with a unit of the dimension.

    Args:
        value: what TOML gave: int or float (bool is not a number), or str such as "250 mm/s".
        dimension: a key of `DIMENSIONS`.
        where: file and key for messages, 'pick.toml: step[4].blend'.

    Raises:
        InputError: not a number, not finite, or not a unit of the dimension; says what was expected.
    """
    known = DIMENSIONS[dimension]
    result = math.nan
    if isinstance(value, int | float) and not isinstance(value, bool):
        result = _as_float(value) * known.units.get(known.screen, 1.0)
    elif isinstance(value, str):
        match = _NUMBER.fullmatch(value)
        if match is not None:
            # People also write "N*m" and "N·m" for "N m", and "mm/s²" for "mm/s^2".
            unit = " ".join(match[2].replace("*", " ").replace("·", " ").split())
            unit = unit.replace("²", "^2").replace("³", "^3").replace("μ", "µ")
            result = _as_float(match[1]) * known.units.get(unit, math.nan)
    if not math.isfinite(result):
        raise InputError.at(where, f"expected {known.expected}, got {toml_text(value)}")
    return result


def _as_float(value: int | float | str) -> float:
    try:
        return float(value)
    except OverflowError:  # an integer beyond 1e308
        return math.inf


def to_screen(value: float, dimension: str) -> float:
    """An SI value in the screen unit of its dimension (m -> mm, rad -> deg); a ratio in percent."""
    known = DIMENSIONS[dimension]
    if dimension == "ratio":
        return value * 100.0
    return value / known.units.get(known.screen, 1.0)


def format_value(value: float, digits: int = 4) -> str:
    """A number with `digits` significant digits, trailing zeros cut, no exponent in the usual range."""
    if not math.isfinite(value):
        return str(value)
    if value == 0.0:
        return "0"
    magnitude = math.floor(math.log10(abs(value)))
    if magnitude < -5 or magnitude > 11:
        return f"{value:.{digits - 1}g}"
    decimals = max(0, digits - 1 - magnitude)
    text = f"{value:.{decimals}f}"
    return text.rstrip("0").rstrip(".") if "." in text else text


def format_quantity(value: float, dimension: str, digits: int = 4) -> str:
    """An SI value as people read it: 0.02 as "length" is "20 mm", 0.15 as "ratio" is "15 %"."""
    unit = "%" if dimension == "ratio" else DIMENSIONS[dimension].screen
    return f"{format_value(to_screen(value, dimension), digits)} {unit}".rstrip()
