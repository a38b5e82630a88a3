"""JSON Lines: one object a row, the header in the first, every damage named."""

import json

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from pathplan.errors import InputError
from pathplan.export import read_table, write_table


def written(table, tmp_path, name="table.jsonl"):
    write_table(table, tmp_path / name, overwrite=True)
    return tmp_path / name


def test_pythons_json_module_reads_every_line_by_itself(full_table, tmp_path):
    rows = [json.loads(line) for line in written(full_table, tmp_path).read_text("utf-8").split("\n")[:-1]]
    assert len(rows) == 50
    assert rows[7]["time_s"] == 0.028 and rows[7]["step"] == 1 and rows[49]["step"] == 3
    assert [row['wrist, "left"_deg_s'] for row in rows] == np.degrees(full_table.velocity[:, 2]).tolist()
    header = json.loads(rows[0].pop("pathplan"))
    assert all(list(row) == list(rows[0]) for row in rows)
    assert (header["format"], header["rows"], header["cycle_s"]) == ("pathplan joint table 1", 50, 0.004)
    assert header["marks"][0] == {"name": "gripper closed", "time_s": 0.08, "row": 21, "step": 1}
    assert "BREAKS LIMITS" not in header


def edited(table, tmp_path, edit):
    file = written(table, tmp_path)
    lines = file.read_text("utf-8").split("\n")
    edit(lines)
    file.write_text("\n".join(lines), "utf-8")
    return file


def replaced(row, old, new):
    def edit(lines):
        assert old in lines[row]
        lines[row] = lines[row].replace(old, new)

    return edit


OTHER = "not a joint table written by pathplan: its first row has no pathplan"
DAMAGES = [
    (replaced(2, '"step": 1', '"step": 0'), "row 3, column step: expected the number of a step, 1 or above, got 0"),
    (replaced(2, '"step": 1', '"step": true'), "row 3, column step: expected a number, got 'True'"),
    (replaced(2, '"step": 1', '"step": "1"'), "row 3, column step: expected a number, got '1'"),
    (replaced(2, '"step": 1', '"stop": 1'), "row 3: its columns are not those of the first row"),
    (replaced(2, '"step": 1', '"step": 1, "step": 1'), "row 3: its columns are not those of the first row"),
    (replaced(1, "0.004", "NaN"), "row 2, column time_s: expected a finite number, got nan"),
    (replaced(1, "0.004", "1" + "0" * 400), "row 2, column time_s: expected a finite number, got inf"),
    (replaced(1, "0.004", "1" + "0" * 5000), "row 2: is not JSON"),
    (replaced(1, "}", ""), "row 2: is not JSON"),
    (lambda lines: lines.__setitem__(1, "[1, 2]"), "row 2: expected an object with the columns as keys"),
    (lambda lines: lines.__setitem__(1, "[" * 100_000), "row 2: is not JSON"),
    (lambda lines: lines.pop(20), "has 49 rows where its header says 50: cut short or edited"),
    (lambda lines: lines.pop(), "row 50: the file is cut short in the middle of this row"),
    (lambda lines: lines.pop(0), OTHER),
    (lambda lines: lines.__setitem__(0, "time;q1"), OTHER),
    (replaced(0, '"pathplan": ', '"pathplam": '), OTHER),
    (replaced(0, '"pathplan": "', '"pathplan": 1, "p": "'), OTHER),
    (replaced(0, "joint table 1", "joint table 7"), "format 7 of table: this pathplan reads 1"),
    (replaced(0, "lift_mm", "lift_m"), "column 'lift_m': unknown for these joints"),
]


@pytest.mark.parametrize(("edit", "message"), DAMAGES, ids=[message[:40] for _, message in DAMAGES])
def test_every_damage_is_one_clear_line(bare_table, tmp_path, edit, message):
    file = edited(bare_table, tmp_path, edit)
    with pytest.raises(InputError) as error:
        read_table(file)
    assert str(error.value) == f"{file}: {message}"


def test_what_is_no_text(tmp_path):
    file = tmp_path / "t.jsonl"
    for content, message in ((b"", OTHER), (b'{"pathplan": "\xff"}\n', "row 1: is not UTF-8 text")):
        file.write_bytes(content)
        with pytest.raises(InputError) as error:
            read_table(file)
        assert str(error.value) == f"{file}: {message}"


@settings(deadline=None, max_examples=100)
@given(data=st.data())
def test_bytes_changed_at_random_never_give_a_traceback(full_table, tmp_path_factory, data):
    file = tmp_path_factory.mktemp("t") / "t.jsonl"
    write_table(full_table.part(0, 3), file)
    content = bytearray(file.read_bytes())
    for _ in range(data.draw(st.integers(1, 4))):
        at = data.draw(st.integers(0, len(content) - 1))
        content[at : at + data.draw(st.integers(0, 3))] = data.draw(st.binary(max_size=4))
    file.write_bytes(content)
    try:
        table = read_table(file)
    except InputError as error:
        assert "\n" not in str(error) and str(error).startswith(f"{file}: ")
    else:
        assert len(table) == 3 and np.isfinite(table.position).all()
