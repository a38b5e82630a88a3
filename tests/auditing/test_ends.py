"""The first and last row of a table of positions alone must be at rest."""

from dataclasses import replace

import pytest

from pathplan.auditing import audit


def not_at_rest(table, arm):
    return [f for f in audit(table, arm).findings if "not at rest" in f.text]


def test_a_whole_motion_is_at_rest(arm, position_only):
    assert not_at_rest(position_only, arm) == []
    assert not_at_rest(position_only.part(0, 1), arm) == []


@pytest.mark.parametrize(("part", "place", "row"), [((300, 751), "first", 0), ((0, 300), "last", 299)])
@pytest.mark.parametrize("size", [1, 64, 1000])
def test_a_motion_cut_off_is_not(arm, position_only, part, place, row, size):
    cut = position_only.part(*part)
    found = [f for f in audit(cut.chunks(size), arm).findings if "not at rest" in f.text]
    assert [(f.joint, f.quantity, f.row) for f in found] == [(j, "velocity", row) for j in ("lift", "swing", "bend")]
    ways = cut.position[1] - cut.position[0] if place == "first" else cut.position[-1] - cut.position[-2]
    for finding, way in zip(found, ways, strict=True):
        assert finding.value == pytest.approx(way / 0.004, rel=1e-9) and finding.limit == 0.0
    assert found[1].text.startswith(f"swing: the {place} row is not at rest, velocity ")


def test_with_times_alone(arm, position_only):
    cut = replace(position_only, cycle=None).part(300, 751)
    assert {f.joint for f in not_at_rest(cut, arm)} == {"lift", "swing", "bend"}
