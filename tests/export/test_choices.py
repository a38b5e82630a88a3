"""What may be chosen of a file: its units and its columns."""

import numpy as np
import pytest

from pathplan.errors import InputError
from pathplan.export import read_table, write_table

SUFFIXES = (".csv", ".jsonl", ".npz", ".parquet")


@pytest.mark.parametrize("suffix", SUFFIXES)
@pytest.mark.parametrize("columns", [[], ["velocity"], ["pose", "jerk"], ["time", "position", "step", "torque"]])
def test_only_the_columns_asked_for(full_table, tmp_path, suffix, columns):
    write_table(full_table.chunks(20), tmp_path / f"t{suffix}", columns=columns)
    again = read_table(tmp_path / f"t{suffix}")
    for name in ("velocity", "acceleration", "jerk", "torque", "pose", "tool_speed"):
        assert (getattr(again, name) is not None) == (name in columns), name
    assert np.array_equal(again.step, full_table.step) and again.meta == full_table.meta


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"units": "inch"}, 'units: expected deg or rad, and mm or m, such as "rad, m", got "inch"'),
        ({"units": "rad deg"}, 'units: expected deg or rad, and mm or m, such as "rad, m", got "rad deg"'),
        ({"units": " , "}, 'units: expected units such as "rad, m", got none'),
        (
            {"columns": ["velocty"]},
            'columns: expected "velocity", "acceleration", "jerk", "torque", "pose" or "tool_speed", '
            'got "velocty", did you mean "velocity"?',
        ),
        ({"columns": ["torque"]}, "FILE: the table has no torque to be written"),
    ],
)
@pytest.mark.parametrize("suffix", [".csv", ".parquet"])
def test_what_can_not_be_chosen(bare_table, tmp_path, suffix, options, message):
    with pytest.raises(InputError) as error:
        write_table(bare_table, tmp_path / f"t{suffix}", **options)
    assert str(error.value) == message.replace("FILE", str(tmp_path / f"t{suffix}"))
    assert list(tmp_path.iterdir()) == []


def test_npz_is_si_and_nothing_else(bare_table, tmp_path):
    file = tmp_path / "t.npz"
    with pytest.raises(InputError) as error:
        write_table(bare_table, file, units="rad, m")
    complaint = "holds SI (rad, m) and nothing else: units can be chosen for other kinds of file"
    assert str(error.value) == f"{file}: {complaint}"


def test_a_unit_changed_by_hand_is_told(bare_table, tmp_path):
    file = tmp_path / "t.csv"
    write_table(bare_table, file)
    file.write_text(file.read_text("utf-8").replace("lift_mm", "lift_m"), "utf-8")
    with pytest.raises(InputError) as error:
        read_table(file)
    assert str(error.value) == f"{file}: column 'lift_m': unknown for these joints"
    file.write_text(file.read_text("utf-8").replace("s, mm, deg", "s, inch, deg"), "utf-8")
    with pytest.raises(InputError) as error:
        read_table(file)
    expected = (
        "'s, mm, deg, N m (revolute), N (prismatic); tcp: pose of the tool centre point in the base frame' or the like"
    )
    assert str(error.value) == f"{file}: units: expected {expected}, got 's, inch, deg, N m (revolute), N (prismat'"
