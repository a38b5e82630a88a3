"""Branches at the targets on the screen and as data."""

from __future__ import annotations

import json
from pathlib import Path

import pytest

import pathplan
from pathplan.cli import main
from pathplan.path import target_branches
from pathplan.report.targets_screen import MOST_TARGETS, targets_as_dict, targets_screen

ROOT = Path(__file__).parents[2]


def far(folder: Path) -> Path:
    text = (ROOT / "examples" / "glazer6-pick-and-place.toml").read_text()
    text = text.replace("../robots", (ROOT / "robots").as_posix()).replace("[480, 0, 220]", "[1000, 0, 220]")
    (folder / "far.toml").write_text(text)
    return folder / "far.toml"


def test_audit_of_a_task_shows_them(capsys) -> None:
    assert main(["audit", str(ROOT / "examples" / "sorter4-spline-tray.toml")]) == 0
    out = capsys.readouterr().out.splitlines()
    assert all(len(line) <= 100 for line in out)
    start = next(i for i, line in enumerate(out) if line.startswith("targets: "))
    assert out[start + 2].split() == ["2", "onto", "the", "tile", *"2 of 2 right screw 41 mm 0.46".split()]


def test_a_refused_task_shows_every_branch_of_its_step(tmp_path, capsys) -> None:
    file = far(tmp_path)
    assert main(["audit", str(file)]) == 1
    out, err = capsys.readouterr()
    (line,) = err.splitlines()
    assert line.startswith("pathplan: far.toml: step[")
    assert "with most room" in out.splitlines()[1] and all(len(line) <= 100 for line in out.splitlines())
    assert main(["audit", str(file), "--json"]) == 1
    document = json.loads(capsys.readouterr().out)
    assert document["refused"]["message"] == line.removeprefix("pathplan: ")
    assert {target["step"] for target in document["targets"]} == {1, 2, 4, 5, 6, 7, 9}
    assert main(["audit", str(file), "--quiet"]) == 1
    assert capsys.readouterr().out == ""


def test_json_has_every_target_and_branch(capsys) -> None:
    task = pathplan.load_task(ROOT / "examples" / "sorter4-spline-tray.toml")
    plan = pathplan.plan(task)
    found = target_branches(task, plan.path)
    data = json.loads(json.dumps(targets_as_dict(task, found)))
    assert len(data) == len(found.step) > MOST_TARGETS
    for k, target in enumerate(data):
        assert sum(branch["used"] for branch in target["branches"]) == 1
        assert len(target["branches"]) == found.reached[k].sum()
    used = next(branch for branch in data[0]["branches"] if branch["used"])
    row = found.limit[0, found.used[0]]
    assert used["nearest_limit"] == task.arm.limits.names[row] and used["within_limits"] is True
    scale = 1e3 if used["margin_unit"] == "mm" else 57.29577951308232
    assert used["margin"] == pytest.approx(found.margin[0, found.used[0]] * scale)


def test_of_many_targets_the_tightest_are_shown() -> None:
    task = pathplan.load_task(ROOT / "examples" / "sorter4-spline-tray.toml")
    found = target_branches(task, pathplan.plan(task).path)
    lines = list(targets_screen(task, found))
    assert len(lines) == MOST_TARGETS + 3
    assert lines[-1] == (
        f"... and {len(found.step) - MOST_TARGETS} targets with more room; all of them, with every branch, in --json"
    )
