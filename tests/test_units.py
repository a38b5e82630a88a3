"""Quantities: units in, SI out, and what is said of anything else."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from pathplan.errors import InputError
from pathplan.units import (
    DIMENSIONS,
    format_quantity,
    format_value,
    joint_dimension,
    parse_quantity,
    to_screen,
    toml_text,
)

WHERE = "pick.toml: step[4].blend"


@pytest.mark.parametrize(
    ("value", "dimension", "si"),
    [
        (20, "length", 0.02),
        ("20 mm", "length", 0.02),
        ("20mm", "length", 0.02),
        (" 2 cm ", "length", 0.02),
        ("-1.5e1 mm", "length", -0.015),
        ("20 µm", "length", 20e-6),
        ("20 μm", "length", 20e-6),  # the Greek letter, which looks the same
        (90, "angle", np.pi / 2),
        ("90 °", "angle", np.pi / 2),
        ("1 rev", "angle", 2 * np.pi),
        (0.2, "time", 0.2),
        ("4 ms", "time", 0.004),
        ("250 us", "time", 250e-6),
        ("250 mm/s", "speed", 0.25),
        ("1 m/s", "speed", 1.0),
        ("6 m/min", "speed", 0.1),
        ("30 rad/s", "angular_speed", 30.0),
        (180, "angular_speed", np.pi),
        ("1500 rev/min", "angular_speed", 50 * np.pi),
        ("2 m/s^2", "acceleration", 2.0),
        ("2 m/s²", "acceleration", 2.0),
        ("180 deg/s^2", "angular_acceleration", np.pi),
        (1000, "jerk", 1.0),
        ("180 deg/s^3", "angular_jerk", np.pi),
        ("1.2 kg", "mass", 1.2),
        ("300 g", "mass", 0.3),
        ("0.4 kN", "force", 400.0),
        ("50 N*m", "torque", 50.0),
        ("50 N·m", "torque", 50.0),
        ("9.81 m/s^2", "linear_acceleration", 9.81),
        (9.81, "linear_acceleration", 9.81),
        ("15 %", "ratio", 0.15),
        (0.15, "ratio", 0.15),
        (100, "number", 100.0),
    ],
)
def test_units_of_each_dimension(value, dimension, si):
    assert parse_quantity(value, dimension, WHERE) == pytest.approx(si, rel=1e-15)


@pytest.mark.parametrize(
    ("value", "dimension", "complaint"),
    [
        ("20 kg", "length", 'expected a length such as "20 mm", got "20 kg"'),
        ("20", "length", 'expected a length such as "20 mm", got "20"'),
        ("mm", "length", 'expected a length such as "20 mm", got "mm"'),
        ("", "length", 'expected a length such as "20 mm", got ""'),
        ("20 MM", "length", 'expected a length such as "20 mm", got "20 MM"'),
        ("٢ mm", "length", 'expected a length such as "20 mm", got "٢ mm"'),
        ("nan mm", "length", 'expected a length such as "20 mm", got "nan mm"'),
        ("1e999 mm", "length", 'expected a length such as "20 mm", got "1e999 mm"'),
        ("20\nmm kg", "length", 'expected a length such as "20 mm", got "20\\nmm kg"'),
        (math.nan, "length", 'expected a length such as "20 mm", got nan'),
        (-math.inf, "time", 'expected a time such as "0.2 s", got -inf'),
        (True, "length", 'expected a length such as "20 mm", got true'),
        (10**400, "length", 'expected a length such as "20 mm", got an integer of many digits'),
        ([1, "a"], "length", 'expected a length such as "20 mm", got [1, "a"]'),
        ({"a": 1}, "length", 'expected a length such as "20 mm", got a table'),
        ("1 rad/s", "speed", 'expected a speed such as "250 mm/s", got "1 rad/s"'),
        ("1 mm/s", "angular_speed", 'expected an angular speed such as "180 deg/s", got "1 mm/s"'),
        ("5 %", "number", 'expected a plain number such as "100", got "5 %"'),
        ("5 %", "mass", 'expected a mass such as "1.2 kg", got "5 %"'),
    ],
)
def test_what_is_no_quantity_of_the_dimension(value, dimension, complaint):
    with pytest.raises(InputError) as caught:
        parse_quantity(value, dimension, WHERE)
    assert str(caught.value) == f"{WHERE}: {complaint}"


@pytest.mark.parametrize("dimension", DIMENSIONS)
def test_a_bare_number_is_in_the_screen_unit_and_the_example_is_right(dimension):
    known = DIMENSIONS[dimension]
    if known.screen:
        assert parse_quantity(3, dimension, WHERE) == parse_quantity(f"3 {known.screen}", dimension, WHERE)
    if known.units:
        assert parse_quantity(known.example, dimension, WHERE) > 0.0


@given(st.floats(-1e9, 1e9), st.sampled_from([key for key in DIMENSIONS if key != "ratio"]))
def test_to_screen_undoes_reading(value, dimension):
    assert to_screen(parse_quantity(value, dimension, WHERE), dimension) == pytest.approx(value, rel=1e-14)


@given(st.one_of(st.text(), st.floats(), st.integers(), st.booleans(), st.lists(st.floats())))
def test_anything_is_a_finite_number_or_one_line_of_complaint(value):
    try:
        assert math.isfinite(parse_quantity(value, "length", WHERE))
    except InputError as error:
        assert str(error).startswith(f'{WHERE}: expected a length such as "20 mm", got ')
        assert str(error).isprintable()


@pytest.mark.parametrize(
    ("value", "dimension", "text"),
    [
        (0.02, "length", "20 mm"),
        (np.pi / 3, "angle", "60 deg"),
        (1.2345678, "angle", "70.74 deg"),
        (0.153, "ratio", "15.3 %"),
        (1234.5, "angular_jerk", "70732 deg/s^3"),
        (0.0, "time", "0 s"),
        (-0.0, "time", "0 s"),
        (2e-9, "length", "2e-06 mm"),
        (-0.25, "speed", "-250 mm/s"),
        (math.inf, "length", "inf mm"),
        (3.0, "number", "3"),
    ],
)
def test_quantities_as_people_read_them(value, dimension, text):
    assert format_quantity(value, dimension) == text


@given(st.floats(1e-4, 1e9))
def test_a_printed_value_keeps_its_digits(value):
    assert float(format_value(value, 5)) == pytest.approx(value, rel=0.51e-4)


@pytest.mark.parametrize(
    ("kind", "quantity", "dimension"),
    [
        ("revolute", "position", "angle"),
        ("revolute", "jerk", "angular_jerk"),
        ("revolute", "torque", "torque"),
        ("prismatic", "velocity", "speed"),
        ("prismatic", "torque", "force"),
    ],
)
def test_dimension_of_a_joint_quantity(kind, quantity, dimension):
    assert joint_dimension(kind, quantity) == dimension


def test_values_are_shown_as_in_the_file_and_cut_to_one_line():
    assert toml_text('a"b') == '"a\\"b"'
    assert toml_text("x" * 100) == '"' + "x" * 56 + "..."
    assert toml_text([[1, 2.5], True]) == "[[1, 2.5], true]"
    assert toml_text(list(range(20))) == "[0, 1, 2, 3, 4, 5, 6, 7, 8, ...]"
